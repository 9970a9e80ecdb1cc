// Package ledger keeps a study's accepted results: the curves of record.
//
// The ledger is a folder of small text files kept in git: one CSV a curve with
// one row a fit, sorted by group, so that one changed fit is one changed line;
// and study.json, which says who accepted what, when and why, with every
// earlier acceptance. The package reads these files, writes them whole or not
// at all, and audits them; it fits nothing.
package ledger

import (
	"batten/runner/store"
	"bytes"
	"encoding/csv"
	"encoding/json"
	"errors"
	"fmt"
	"io"
	"io/fs"
	"math"
	"os"
	"path/filepath"
	"slices"
	"strconv"
	"strings"
)

// Format is raised when the files' layout changes.
const Format = 2 // 2: every line has its own check

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
	Fits    int      `json:"fits"`  // how many it took
	Moved   int      `json:"moved"` // of these, how many had moved against the ledger before

	// Of an acceptance of some fits and not others:
	Only    []string `json:"only,omitempty"`    // what was asked for
	Took    []string `json:"took,omitempty"`    // the fits it took; a bare curve's name stands for all its fits
	Gone    []string `json:"gone,omitempty"`    // the fits that it took out of the ledger
	Pending []string `json:"pending,omitempty"` // the fits that differed too and were left as they were

	Signer   string `json:"signer,omitempty"`   // fingerprint of the key that signed the ledger
	Previous string `json:"previous,omitempty"` // digest of the acceptance before this one

	raw json.RawMessage // as it was read: what is on record is written back as it was
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
	if fi, err := os.Lstat(dir); err == nil && fi.Mode()&fs.ModeSymlink != 0 {
		return nil, &store.LinkError{Dir: dir}
	}
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

// fixed columns between the by columns and the readings, and after them. check
// is the digest of the line's other cells.
var (
	front = []string{"n", "distinct", "rule", "exception", "lambda", "edf", "rss", "sigma", "gcv", "loocv", "reml", "score", "flags"}
	back  = []string{"from", "to", "curve", "half_width", "key", "check"}
)

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
	l, err := readLines(b)
	if err != nil {
		return nil, &CorruptError{path, err.Error()}
	}
	a := &Accepted{By: l.header[:l.by]}
	for i, row := range l.rows {
		e, err := decode(l.header, row, l.by, l.readings)
		if err != nil {
			return nil, &CorruptError{fmt.Sprintf("%s:%d", path, l.at[i]), err.Error()}
		}
		a.Entries = append(a.Entries, e)
	}
	return a, nil
}

// lines is a curve's file as it stands.
type lines struct {
	header       []string
	rows         [][]string
	at           []int // the line of each row in the file
	by, readings int   // how many columns
	checked      bool  // rows end in a check
}

func readLines(b []byte) (*lines, error) {
	l := &lines{}
	r := csv.NewReader(bytes.NewReader(b))
	for {
		row, err := r.Read()
		if err == io.EOF {
			break
		}
		if err != nil {
			return nil, err
		}
		if l.header == nil {
			l.header = row
			continue
		}
		at, _ := r.FieldPos(0)
		l.rows, l.at = append(l.rows, row), append(l.at, at)
	}
	if l.header == nil {
		return nil, errors.New("is empty")
	}
	// a by column may be called n: look for the whole run of fixed names
	for l.by+len(front) <= len(l.header) && !slices.Equal(l.header[l.by:l.by+len(front)], front) {
		l.by++
	}
	tail := back
	l.checked = l.header[len(l.header)-1] == "check"
	if !l.checked { // as format 1 had it
		tail = back[:len(back)-1]
	}
	extra := len(l.header) - l.by - len(front) - len(tail)
	if extra < 0 || extra%3 != 0 || !slices.Equal(l.header[len(l.header)-len(tail):], tail) {
		return nil, errors.New("has a header line that is not a ledger's")
	}
	l.readings = extra / 3
	return l, nil
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
