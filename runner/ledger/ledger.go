// Package ledger keeps a study's accepted results: the curves of record.
//
// The ledger is a folder of small text files kept in git: one CSV a curve with
// one row a fit, sorted by group, so that one changed fit is one changed line;
// and study.json, which says who accepted what, when and why, with every
// earlier acceptance. The package reads and writes these files and compares
// rows; it fits nothing.
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

// Format is raised when the files' layout changes.
const Format = 1

// Entry is one accepted fit.
type Entry struct {
	Group                                            []string // values of the by columns as text
	N, Distinct                                      int
	Rule                                             string
	Exception                                        string
	Lambda, EDF, RSS, Sigma, GCV, LOOCV, REML, Score float64
	Flags                                            []string
	Readings                                         []Value
	From, To                                         float64   // the observed range of x
	Curve                                            []float64 // at evenly spaced places of it, ends included
	HalfWidth                                        []float64 // of the pointwise band, at the same places
	Key                                              string    // what the fit depended on, as a digest
}

// Value is a reading with its interval.
type Value struct {
	Name                string
	Value, Lower, Upper float64
}

// Accepted is the ledger of one curve.
type Accepted struct {
	By      []string
	Entries []Entry
}

// State is study.json.
type State struct {
	Format   int           `json:"format"`
	Study    string        `json:"study"`
	Accepted []Acceptance  `json:"accepted"` // the newest last
	Curves   []CurveHeader `json:"curves"`
}

// CurveHeader says how to read a curve's file.
type CurveHeader struct {
	Name     string   `json:"name"`
	Along    string   `json:"along"`
	Unit     string   `json:"along_unit,omitempty"`
	Response string   `json:"response"`
	RespUnit string   `json:"response_unit,omitempty"`
	By       []string `json:"by"`
	Fits     int      `json:"fits"`
	SHA256   string   `json:"sha256"` // of the CSV
}

// Acceptance is one act of accepting a run.
type Acceptance struct {
	Who     string   `json:"who"`
	When    string   `json:"when"`
	Why     string   `json:"why"`
	Run     string   `json:"run"`
	Spec    Input    `json:"spec"`
	Inputs  []Input  `json:"inputs"`
	Program string   `json:"program"`
	Methods []string `json:"methods"`
	Fits    int      `json:"fits"`
	Moved   int      `json:"moved"`
}

// Input is a file with its digest.
type Input struct {
	Path   string `json:"path"`
	SHA256 string `json:"sha256"`
}

// Last returns the acceptance in force.
func (s *State) Last() *Acceptance {
	if s == nil || len(s.Accepted) == 0 {
		return nil
	}
	return &s.Accepted[len(s.Accepted)-1]
}

// CorruptError says that a ledger file cannot be read. It is never repaired
// or overwritten silently: it is the record.
type CorruptError struct{ Path, Found string }

func (e *CorruptError) Error() string {
	return fmt.Sprintf("%s: %s; the ledger is the record, so nothing was changed: restore the file from git", e.Path, e.Found)
}

// ReadState reads study.json; nil where nothing has been accepted.
func ReadState(dir string) (*State, error) {
	path := filepath.Join(dir, "study.json")
	b, err := os.ReadFile(path)
	if errors.Is(err, fs.ErrNotExist) {
		return nil, nil
	}
	if err != nil {
		return nil, err
	}
	var s State
	if err := json.Unmarshal(b, &s); err != nil {
		return nil, &CorruptError{path, err.Error()}
	}
	if s.Format > Format {
		return nil, &CorruptError{path, fmt.Sprintf("is of format %d, this program reads up to %d; use a newer program", s.Format, Format)}
	}
	return &s, nil
}

// fixed columns between the by columns and the readings, and after them.
var (
	front = []string{"n", "distinct", "rule", "exception", "lambda", "edf", "rss", "sigma", "gcv", "loocv", "reml", "score", "flags"}
	back  = []string{"from", "to", "curve", "half_width", "key"}
)

// Encode writes a curve's CSV. Every entry must have the same readings.
func (a *Accepted) Encode() ([]byte, error) {
	var b bytes.Buffer
	w := csv.NewWriter(&b)
	header := append(append([]string(nil), a.By...), front...)
	if len(a.Entries) > 0 {
		for _, r := range a.Entries[0].Readings {
			header = append(header, r.Name, r.Name+"_lower", r.Name+"_upper")
		}
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
		for _, r := range e.Readings {
			row = append(row, short(r.Value), short(r.Lower), short(r.Upper))
		}
		row = append(row, num(e.From), num(e.To), shortList(e.Curve), shortList(e.HalfWidth), e.Key)
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
		r, _ := strconv.ParseFloat(strconv.FormatFloat(x, 'g', 7, 64), 64)
		s[i] = table.FormatNumber(r)
	}
	return strings.Join(s, " ")
}

// ReadCurve reads ledger/NAME.csv; nil where there is none.
func ReadCurve(dir, name string) (*Accepted, error) {
	path := filepath.Join(dir, name+".csv")
	b, err := os.ReadFile(path)
	if errors.Is(err, fs.ErrNotExist) {
		return nil, nil
	}
	if err != nil {
		return nil, err
	}
	rows, err := csv.NewReader(bytes.NewReader(b)).ReadAll()
	if err != nil {
		return nil, &CorruptError{path, err.Error()}
	}
	if len(rows) == 0 {
		return nil, &CorruptError{path, "is empty"}
	}
	header := rows[0]
	k := 0 // a by column may be called n: look for the whole run of fixed names
	for k+len(front) <= len(header) && !slices.Equal(header[k:k+len(front)], front) {
		k++
	}
	extra := len(header) - k - len(front) - len(back)
	if extra < 0 || extra%3 != 0 {
		return nil, &CorruptError{path, "has a header line that is not a ledger's"}
	}
	a := &Accepted{By: header[:k]}
	for i, row := range rows[1:] {
		e, err := decode(header, row, k, extra/3)
		if err != nil {
			return nil, &CorruptError{fmt.Sprintf("%s:%d", path, i+2), err.Error()}
		}
		a.Entries = append(a.Entries, e)
	}
	return a, nil
}

func decode(header, row []string, k, readings int) (e Entry, err error) {
	num := func(s string) float64 {
		if s == "" {
			return math.NaN()
		}
		v, perr := strconv.ParseFloat(s, 64)
		if perr != nil && err == nil {
			err = fmt.Errorf("%q is no number", s)
		}
		return v
	}
	list := func(s string) (out []float64) {
		for _, f := range strings.Fields(s) {
			out = append(out, num(f))
		}
		return out
	}
	e.Group = row[:k]
	c := row[k:]
	e.N, e.Distinct = int(num(c[0])), int(num(c[1]))
	e.Rule, e.Exception = c[2], c[3]
	for i, p := range []*float64{&e.Lambda, &e.EDF, &e.RSS, &e.Sigma, &e.GCV, &e.LOOCV, &e.REML, &e.Score} {
		*p = num(c[4+i])
	}
	if c[12] != "" {
		e.Flags = strings.Split(c[12], ";")
	}
	c = c[len(front):]
	for r := range readings {
		e.Readings = append(e.Readings, Value{header[k+len(front)+3*r], num(c[3*r]), num(c[3*r+1]), num(c[3*r+2])})
	}
	c = c[3*readings:]
	e.From, e.To, e.Curve, e.HalfWidth, e.Key = num(c[0]), num(c[1]), list(c[2]), list(c[3]), c[4]
	if err == nil && len(e.Curve) != len(e.HalfWidth) {
		err = fmt.Errorf("curve has %d values, half_width %d", len(e.Curve), len(e.HalfWidth))
	}
	return e, err
}

// Write replaces the ledger: the curves' files first and study.json last, each
// whole or not at all.
func Write(dir string, s *State, curves map[string]*Accepted) error {
	for i := range s.Curves {
		h := &s.Curves[i]
		b, err := curves[h.Name].Encode()
		if err != nil {
			return err
		}
		h.SHA256 = table.SHA256(b)
		h.Fits = len(curves[h.Name].Entries)
		if err := store.WriteFile(filepath.Join(dir, h.Name+".csv"), b); err != nil {
			return err
		}
	}
	b, err := json.MarshalIndent(s, "", "  ")
	if err != nil {
		return err
	}
	return store.WriteFile(filepath.Join(dir, "study.json"), append(b, '\n'))
}
