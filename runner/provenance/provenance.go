// Package provenance writes what a run did in open standards: W3C PROV as
// PROV-JSON, RO-Crate 1.1, and an in-toto Statement v1 with a SLSA provenance
// v1 predicate.
//
// It is given a Run, its own plain struct, and returns bytes; the same Run
// gives the same bytes. It reads no files, asks no clock, and knows neither
// specs nor records. Identifiers of our own begin with https://batten.invalid/,
// a name that RFC 2606 keeps from ever resolving: they identify and lead
// nowhere.
package provenance

import (
	"bytes"
	"encoding/base64"
	"encoding/hex"
	"encoding/json"
	"fmt"
	"path"
	"strings"
	"time"
)

// Base begins every identifier of our own.
const Base = "https://batten.invalid/"

// Run is one run and what is known of it.
type Run struct {
	ID       string // unique in the study
	Results  string // digest of what the run arrived at
	Started  string // RFC 3339
	Finished string
	Title    string
	Owner    string
	Licence  string // a URL or a name; "" where none is given
	Seed     int64
	Dated    string // the date that reports bear; "" for none
	Person   string // who ran it, "Name" or "Name <address>"; "" where not known
	Program  Program
	Spec     File
	Inputs   []Input
	Curves   []Curve
	Outputs  []Output
	Refused  []string // what guards refused, so that no output was written
	Against  []File   // the ledger that the run was compared with; reports show what moved

	Acceptance *Acceptance // nil: the run was not accepted
}

// Program is the program that made the run.
type Program struct {
	Name, Version string
	Go            string   // the toolchain, such as go1.26.0
	Methods       []string // with their versions
	Modules       []Module
}

// Module is a Go module that the program was built of.
type Module struct {
	Path    string `json:"path"`
	Version string `json:"version"`
	Sum     string `json:"sum,omitempty"` // h1:...; "" where the build had none
}

// File is a file with its digest.
type File struct {
	Path   string // from the study's folder, forward slashes
	SHA256 string // hexadecimal
	Bytes  int64  // -1: not known
}

// Input is a named source of rows.
type Input struct {
	Name    string
	Pattern string // as the spec has it
	Outside bool   // may lie outside the study's folder
	Files   []File
}

// Curve is a curve's fits.
type Curve struct {
	Name   string
	Fits   int
	Object string   // SHA-256 of the stored object that names all fits
	Inputs []string // names of the inputs its rows came from
}

// Output is a file that the run made or found up to date.
type Output struct {
	File
	What   string   // what it is, in a few words
	Curves []string // the curves it shows
	Moved  bool     // it shows what moved against the ledger
	Wrote  bool
}

// Acceptance is the act that made the run the ledger.
type Acceptance struct {
	Who, When, Why string
	Ledger         []LedgerFile // empty where a later acceptance has replaced it
}

// LedgerFile is one file of the ledger. Curve is "" for the one about the
// whole study.
type LedgerFile struct {
	File
	Curve string
}

// check refuses a Run that would make a document that says less than it seems
// to: without an id, with a digest that is none, or with a time that is none.
func (r *Run) check() error {
	if r.ID == "" || r.Program.Name == "" {
		return fmt.Errorf("the record names no run or no program")
	}
	times := []string{r.Started, r.Finished}
	files := append([]File{r.Spec}, r.Against...)
	for _, in := range r.Inputs {
		files = append(files, in.Files...)
	}
	for _, o := range r.Outputs {
		files = append(files, o.File)
	}
	for _, c := range r.Curves {
		files = append(files, File{Path: "the fits of " + c.Name, SHA256: c.Object})
	}
	if a := r.Acceptance; a != nil {
		times = append(times, a.When)
		for _, f := range a.Ledger {
			files = append(files, f.File)
		}
	}
	for _, t := range times {
		if _, err := time.Parse(time.RFC3339, t); err != nil {
			return fmt.Errorf("the time %q in the record of run %s: expected RFC 3339, such as 2026-03-01T10:30:00Z", t, r.ID)
		}
	}
	for _, f := range files {
		if b, err := hex.DecodeString(f.SHA256); err != nil || len(b) != 32 || f.SHA256 != strings.ToLower(f.SHA256) {
			return fmt.Errorf("the digest %q of %s in the record of run %s: expected 64 hexadecimal digits", f.SHA256, f.Path, r.ID)
		}
		if f.Path == "" {
			return fmt.Errorf("a file without a path in the record of run %s", r.ID)
		}
	}
	return nil
}

// backwards tells whether the clock ran backwards during the run.
func (r *Run) backwards() bool {
	a, _ := time.Parse(time.RFC3339, r.Started)
	b, _ := time.Parse(time.RFC3339, r.Finished)
	return b.Before(a)
}

// encode writes a document as indented JSON with a final newline.
func encode(v any) ([]byte, error) {
	var b bytes.Buffer
	enc := json.NewEncoder(&b)
	enc.SetEscapeHTML(false)
	enc.SetIndent("", "  ")
	if err := enc.Encode(v); err != nil {
		return nil, err
	}
	return b.Bytes(), nil
}

// escape writes a path or name with what RFC 3986 calls unreserved characters
// and slashes; all else is percent-encoded, byte by byte.
func escape(s string) string {
	var b strings.Builder
	for i := range len(s) {
		switch c := s[i]; {
		case c >= 'a' && c <= 'z', c >= 'A' && c <= 'Z', c >= '0' && c <= '9', strings.IndexByte("-._~/", c) >= 0:
			b.WriteByte(c)
		default:
			fmt.Fprintf(&b, "%%%02X", c)
		}
	}
	return b.String()
}

// outside tells whether a path leads out of the study's folder.
func outside(p string) bool {
	return p == ".." || strings.HasPrefix(p, "../") || path.IsAbs(p) || len(p) > 1 && p[1] == ':'
}

// named is the ni URI of a digest (RFC 6920), for files that have no place
// under the study's folder.
func named(sha256 string) string {
	b, _ := hex.DecodeString(sha256)
	return "ni:///sha-256;" + base64.RawURLEncoding.EncodeToString(b)
}

// mediaType is a file's media type, by its ending.
func mediaType(p string) string {
	switch strings.ToLower(path.Ext(p)) {
	case ".csv":
		return "text/csv"
	case ".tsv":
		return "text/tab-separated-values"
	case ".gz":
		return "application/gzip"
	case ".json":
		return "application/json"
	case ".md":
		return "text/markdown"
	case ".html":
		return "text/html"
	case ".svg":
		return "image/svg+xml"
	case ".hcl":
		return "text/plain"
	}
	return "application/octet-stream"
}

// person splits "Name <address>".
func person(s string) (name, mail string) {
	name, rest, ok := strings.Cut(s, "<")
	if mail, closed := strings.CutSuffix(strings.TrimSpace(rest), ">"); ok && closed && strings.Contains(mail, "@") && strings.TrimSpace(name) != "" {
		return strings.TrimSpace(name), mail
	}
	return strings.TrimSpace(s), ""
}

// packageURL is a module's package URL (purl, type golang: the name in lower
// case).
func packageURL(m Module) string {
	u := "pkg:golang/" + escape(strings.ToLower(m.Path))
	if m.Version != "" {
		u += "@" + escape(m.Version)
	}
	return u
}
