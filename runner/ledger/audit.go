package ledger

import (
	"bytes"
	"encoding/csv"
	"errors"
	"fmt"
	"io/fs"
	"os"
	"path/filepath"
	"slices"
	"strings"

	"batten/runner/table"
)

// Finding is one thing that is not as it was accepted.
type Finding struct {
	File      string // in the ledger's folder
	Line      int    // 0: the file as a whole
	Curve     string // of the line's fit
	By, Group []string
	Text      string
}

// Audit is what a look at the ledger's files found.
type Audit struct {
	State    *State
	Fits     int
	Manifest []byte // what a signature must cover: the files as they stand
	Findings []Finding
}

// Examine holds the ledger's files to the digests that study.json records, and
// its history to itself. It reads nothing else; nil where nothing has been
// accepted.
func Examine(dir string) (*Audit, error) {
	a := &Audit{}
	study, err := os.ReadFile(filepath.Join(dir, "study.json"))
	if errors.Is(err, fs.ErrNotExist) {
		found, _ := filepath.Glob(filepath.Join(dir, "*.csv"))
		if len(found) == 0 {
			return nil, nil
		}
		a.find("study.json", "is missing, and there are curves of a ledger beside it; restore it from git")
		return a, nil
	}
	if err != nil {
		return nil, err
	}
	if a.State, err = ReadState(dir); err != nil {
		var c *CorruptError
		if !errors.As(err, &c) {
			return nil, err
		}
		a.find("study.json", c.Found)
		return a, nil
	}
	broken, err := a.State.broken()
	if err != nil {
		return nil, err
	}
	for _, i := range broken {
		e := &a.State.Accepted[i]
		a.find("study.json", fmt.Sprintf("the acceptance of %s by %s (the %s of %d) is not as it was when the next one was written", e.When, e.Who, ordinal(i+1), len(a.State.Accepted)))
	}
	// what stands, for the signature
	now := &State{Curves: slices.Clone(a.State.Curves)}
	named := map[string]bool{}
	for i := range now.Curves {
		h := &now.Curves[i]
		named[h.Name+".csv"] = true
		if h.SHA256, err = a.curve(dir, a.State.Curves[i]); err != nil {
			return nil, err
		}
	}
	a.Manifest = now.manifest(study)
	entries, err := os.ReadDir(dir)
	if err != nil {
		return nil, err
	}
	for _, e := range entries {
		if strings.HasSuffix(e.Name(), ".csv") && !named[e.Name()] {
			a.find(e.Name(), "is not of the ledger: study.json does not name it")
		}
	}
	return a, nil
}

func (a *Audit) find(file, text string) {
	a.Findings = append(a.Findings, Finding{File: file, Text: text})
}

// curve looks at one curve's file and returns its digest.
func (a *Audit) curve(dir string, h CurveHeader) (string, error) {
	name := h.Name + ".csv"
	b, err := os.ReadFile(filepath.Join(dir, name))
	if errors.Is(err, fs.ErrNotExist) {
		a.find(name, "is missing, and study.json names it; restore it from git")
		return "", nil
	}
	if err != nil {
		return "", err
	}
	sum := table.SHA256(b)
	if sum == h.SHA256 {
		a.Fits += h.Fits
		return sum, nil
	}
	if table.SHA256(bytes.ReplaceAll(b, []byte("\r\n"), []byte("\n"))) == h.SHA256 {
		a.find(name, "has CRLF at its line ends and is otherwise as accepted; keep git from changing them (ledger/.gitattributes: * -text) and check it out again")
		return sum, nil
	}
	a.find(name, fmt.Sprintf("is not the file that was accepted: its SHA-256 is %.12s..., study.json records %.12s...", sum, h.SHA256))
	l, err := readLines(b)
	if err != nil {
		f := Finding{File: name, Text: err.Error()}
		var p *csv.ParseError
		if errors.As(err, &p) {
			f.Line, f.Text = p.Line, p.Err.Error()
		}
		a.Findings = append(a.Findings, f)
		return sum, nil
	}
	before := len(a.Findings)
	seen := map[string]int{}
	for i, row := range l.rows {
		f := Finding{File: name, Line: l.at[i], Curve: h.Name, By: l.header[:l.by], Group: row[:l.by]}
		group := strings.Join(f.Group, "\x1f")
		n := len(row) - 1
		switch {
		case seen[group] > 0:
			f.Text = fmt.Sprintf("this fit stands on line %d already", seen[group])
		case l.checked && check(row[:n]) != row[n]:
			f.Text = "this line was edited: its cells do not give its check"
		}
		seen[group] = l.at[i]
		if f.Text != "" {
			a.Findings = append(a.Findings, f)
		}
	}
	if len(l.rows) != h.Fits {
		a.find(name, fmt.Sprintf("holds %d fits, study.json records %d", len(l.rows), h.Fits))
	}
	if len(a.Findings) == before && l.checked {
		a.find(name, "every line agrees with its own check: the header or the order of lines was changed, or a line together with its check (git diff tells which)")
	}
	return sum, nil
}

func ordinal(n int) string {
	switch {
	case n%100 >= 11 && n%100 <= 13:
	case n%10 == 1:
		return fmt.Sprintf("%dst", n)
	case n%10 == 2:
		return fmt.Sprintf("%dnd", n)
	case n%10 == 3:
		return fmt.Sprintf("%drd", n)
	}
	return fmt.Sprintf("%dth", n)
}
