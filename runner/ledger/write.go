package ledger

import (
	"bytes"
	"encoding/csv"
	"encoding/json"
	"errors"
	"fmt"
	"io/fs"
	"math"
	"os"
	"path/filepath"
	"slices"
	"strconv"
	"strings"

	"batten/runner/store"
	"batten/runner/table"
)

// Encode writes a curve's CSV. The columns of readings are those of the first
// entry and then whatever others the rest have: an entry that was accepted
// before a reading was asked for leaves its cells empty.
func (a *Accepted) Encode() ([]byte, error) {
	var b bytes.Buffer
	w := csv.NewWriter(&b)
	names := a.readingNames()
	header := append(append([]string(nil), a.By...), front...)
	for _, n := range names {
		header = append(header, n, n+"_lower", n+"_upper")
	}
	if err := w.Write(append(header, back...)); err != nil {
		return nil, err
	}
	num := table.FormatNumber
	for _, e := range a.Entries {
		row := append([]string(nil), e.Group...)
		row = append(row, strconv.Itoa(e.N), strconv.Itoa(e.Distinct), e.Rule, e.Exception,
			num(e.Lambda), num(e.EDF), num(e.RSS), num(e.Sigma), num(e.GCV), num(e.LOOCV), num(e.REML), num(e.Score),
			strings.Join(e.Flags, ";"))
		for _, n := range names {
			v := Value{n, math.NaN(), math.NaN(), math.NaN()}
			if k := slices.IndexFunc(e.Readings, func(r Value) bool { return r.Name == n }); k >= 0 {
				v = e.Readings[k]
			}
			row = append(row, short(v.Value), short(v.Lower), short(v.Upper))
		}
		row = append(row, num(e.From), num(e.To), shortList(e.Curve), shortList(e.HalfWidth), e.Key)
		row = append(row, check(row))
		if err := w.Write(row); err != nil {
			return nil, err
		}
	}
	w.Flush()
	return b.Bytes(), w.Error()
}

// short writes a number to 9 significant digits: far finer than any interval
// about it, and stable where the last bits are not.
func short(v float64) string {
	if math.IsNaN(v) {
		return ""
	}
	r, _ := strconv.ParseFloat(strconv.FormatFloat(v, 'g', 9, 64), 64)
	return table.FormatNumber(r)
}

func shortList(v []float64) string {
	s := make([]string, len(v))
	for i, x := range v {
		if math.IsNaN(x) {
			s[i] = "NaN" // an empty place would be lost between the blanks
			continue
		}
		r, _ := strconv.ParseFloat(strconv.FormatFloat(x, 'g', 7, 64), 64)
		s[i] = table.FormatNumber(r)
	}
	return strings.Join(s, " ")
}

// readingNames are the names of all entries' readings, each once.
func (a *Accepted) readingNames() []string {
	var out []string
	seen := map[string]bool{}
	for i := range a.Entries {
		for _, r := range a.Entries[i].Readings {
			if !seen[r.Name] {
				seen[r.Name] = true
				out = append(out, r.Name)
			}
		}
	}
	return out
}

// check is a line's own digest: a line that was edited by hand says so itself,
// and which one it is can be told without the file as it was.
func check(cells []string) string {
	return table.SHA256([]byte(strings.Join(cells, "\x1f")))[:16]
}

// Change is one acceptance to be written.
type Change struct {
	State  *State               // its Curves are the ledger's from now on, in order
	Curves map[string]*Accepted // the files to be written; the other curves' stay as they are
	Sign   func(manifest []byte) (signature []byte, err error)
}

// file is one file to be written.
type file struct {
	path  string
	bytes []byte
}

// Write carries a change out: the curves' files first, then study.json, then
// the signature, each whole or not at all. Nothing is written where a file
// that would be replaced is not the one on record, or where the history would
// lose a word. A write that was cut short is made good by the same change.
func Write(dir string, c Change) error {
	old, err := ReadState(dir)
	if err != nil {
		return err
	}
	if err := c.State.continues(old); err != nil {
		return err
	}
	c.State.Format = Format
	var files []file
	kept := map[string]bool{}
	for i := range c.State.Curves {
		h := &c.State.Curves[i]
		kept[h.Name] = true
		a := c.Curves[h.Name]
		if a == nil {
			if err := old.onRecord(dir, h.Name, ""); err != nil {
				return err
			}
			continue
		}
		b, err := a.Encode()
		if err != nil {
			return err
		}
		h.SHA256, h.Fits = table.SHA256(b), len(a.Entries)
		if err := old.onRecord(dir, h.Name, h.SHA256); err != nil {
			return err
		}
		files = append(files, file{curvePath(dir, h.Name), b})
	}
	b, err := json.MarshalIndent(c.State, "", "  ")
	if err != nil {
		return err
	}
	b = append(b, '\n')
	files = append(files, file{filepath.Join(dir, "study.json"), b})
	if c.Sign != nil {
		sig, err := c.Sign(c.State.manifest(b))
		if err != nil {
			return err
		}
		files = append(files, file{SignaturePath(dir), sig})
	}
	// The digests are of these very bytes: git must not change line ends.
	attributes := filepath.Join(dir, ".gitattributes")
	if _, err := os.Lstat(attributes); errors.Is(err, fs.ErrNotExist) {
		files = append([]file{{attributes, []byte("* -text\n")}}, files...)
	}
	for _, f := range files {
		if err := store.WriteFile(f.path, f.bytes); err != nil {
			return err
		}
	}
	// What is no longer true goes last: a crash before leaves too much, not
	// too little, and an audit says so.
	var gone []string
	if c.Sign == nil {
		gone = append(gone, SignaturePath(dir))
	}
	if old != nil {
		for _, h := range old.Curves {
			if !kept[h.Name] {
				gone = append(gone, curvePath(dir, h.Name))
			}
		}
	}
	for _, path := range gone {
		if err := os.Remove(path); err != nil && !errors.Is(err, fs.ErrNotExist) {
			return &store.WriteError{Path: path, Err: err}
		}
	}
	return nil
}

func curvePath(dir, name string) string { return filepath.Join(dir, name+".csv") }

// SignaturePath is where the ledger's signature lies.
func SignaturePath(dir string) string { return filepath.Join(dir, "study.json.sig") }

// onRecord makes sure that a curve's file is the one that was accepted, or
// already the one with the digest next: what somebody edited is not written
// over.
func (s *State) onRecord(dir, name, next string) error {
	h := s.header(name)
	if h == nil {
		return nil
	}
	path := curvePath(dir, name)
	b, err := os.ReadFile(path)
	if errors.Is(err, fs.ErrNotExist) {
		return &CorruptError{path, "is missing, and study.json names it"}
	}
	if err != nil {
		return err
	}
	if sum := table.SHA256(b); sum != h.SHA256 && sum != next {
		return &CorruptError{path, fmt.Sprintf("is not the file that was accepted (SHA-256 %.12s, study.json records %.12s)", sum, h.SHA256)}
	}
	return nil
}

func (s *State) header(name string) *CurveHeader {
	if s == nil {
		return nil
	}
	for i := range s.Curves {
		if s.Curves[i].Name == name {
			return &s.Curves[i]
		}
	}
	return nil
}

// manifest is what a signature covers: the digests of study.json, whose bytes
// are given, and of every curve's file, one a line, as sha256sum prints them in
// the study's folder: study.json, then the others by the bytes of their names.
func (s *State) manifest(study []byte) []byte {
	var b bytes.Buffer
	fmt.Fprintf(&b, "%s  ledger/study.json\n", table.SHA256(study))
	heads := slices.Clone(s.Curves)
	slices.SortFunc(heads, func(x, y CurveHeader) int { return strings.Compare(x.Name+".csv", y.Name+".csv") })
	for _, h := range heads {
		fmt.Fprintf(&b, "%s  ledger/%s.csv\n", h.SHA256, h.Name)
	}
	return b.Bytes()
}
