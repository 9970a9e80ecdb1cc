package provenance

import (
	"bytes"
	"crypto/sha256"
	"encoding/hex"
	"encoding/json"
	"errors"
	"fmt"
	"strings"
	"testing"
)

func sum(s string) string {
	h := sha256.Sum256([]byte(s))
	return hex.EncodeToString(h[:])
}

func file(path string) File { return File{Path: path, SHA256: sum(path), Bytes: int64(len(path))} }

// sample is a run with everything a run may have, and names that need care.
func sample() *Run {
	shared := file("data/äpfel & birnen, 2026.csv")
	return &Run{
		ID: "000007-3f9ac2d10b44", Results: sum("results"), Started: "2026-03-01T10:30:00Z", Finished: "2026-03-01T10:30:05Z",
		Title: `Pears <"cold" & stored>`, Owner: "Cold-store trials", Licence: "https://creativecommons.org/licenses/by/4.0/",
		Seed: 1 << 52, Dated: "2026-03-01", Person: "Ann Example <ann@example.org>",
		Program: Program{Name: "batten", Version: "0.1.0 (0123456789ab, modified)", Go: "go1.26.0", Methods: []string{"spline 1", "choose 1"},
			Modules: []Module{
				{"github.com/BurntSushi/graphics-go", "v1.0.0+incompatible", "h1:Khu2En+0gcYPZ2kuIihfswbzxv/mIHXgzPZ018Oty48="},
				{"example.org/local", "", ""},
			}},
		Spec:    file("study.hcl"),
		Inputs:  []Input{{Name: "readings", Pattern: "data/*.csv", Files: []File{shared, file("data/b.csv.gz")}}, {Name: "again", Pattern: "../x/*.csv", Outside: true, Files: []File{shared, file("../x/far.csv"), file("C:/far.tsv")}}},
		Against: []File{file("ledger/firmness.csv")},
		Curves:  []Curve{{"firmness", 12, sum("f"), []string{"readings"}}, {"sugar", 3, sum("s"), []string{"again", "readings"}}},
		Outputs: []Output{
			{File: file("out/grid 1.csv"), What: `export "grid"`, Curves: []string{"firmness"}, Wrote: true},
			{File: file("out/weekly.html"), What: "report", Curves: []string{"firmness", "sugar"}, Moved: true},
			{File: file("out/.hidden."), What: "output"},
		},
		Acceptance: &Acceptance{Who: "B. Board", When: "2026-03-02T08:00:00+01:00", Why: "checked & found good",
			Ledger: []LedgerFile{{file("ledger/firmness.csv"), "firmness"}, {File{"ledger/study.json", sum("j"), -1}, ""}}},
	}
}

// variants are runs that lack one thing or another.
func variants() map[string]*Run {
	out := map[string]*Run{"all": sample()}
	change := func(name string, f func(*Run)) {
		r := sample()
		f(r)
		out[name] = r
	}
	change("nobody known", func(r *Run) { r.Person, r.Owner, r.Licence, r.Dated, r.Acceptance = "", "", "", "", nil })
	change("refused", func(r *Run) { r.Refused, r.Outputs, r.Acceptance = []string{"firmness[a=b]: too few"}, nil, nil })
	change("ledger moved on", func(r *Run) { r.Acceptance.Ledger = nil })
	change("clock backwards", func(r *Run) { r.Finished = "2026-02-01T00:00:00Z" })
	change("no modules", func(r *Run) { r.Program.Modules, r.Program.Methods = nil, nil })
	change("licence by name", func(r *Run) { r.Licence = "house licence: ask us" })
	change("no inputs", func(r *Run) { r.Inputs, r.Against = nil, nil })
	change("spec is input", func(r *Run) { r.Inputs[0].Files[0] = r.Spec })
	return out
}

var writers = map[string]func(*Run) ([]byte, error){"prov": PROV, "ro-crate": ROCrate, "in-toto": InToto}

func TestSameRunSameBytes(t *testing.T) {
	for name, w := range writers {
		first, err := w(sample())
		if err != nil {
			t.Fatal(err)
		}
		if !json.Valid(first) || !bytes.HasSuffix(first, []byte("\n")) {
			t.Errorf("%s: no JSON with a final newline", name)
		}
		r := sample()
		for range 20 {
			again, err := w(r)
			if err != nil || !bytes.Equal(first, again) {
				t.Fatalf("%s: other bytes, %v", name, err)
			}
		}
	}
}

// TestDamagedRecords: what a damaged record says is refused, not passed on.
func TestDamagedRecords(t *testing.T) {
	cases := map[string]func(*Run){
		`the digest "xyz" of data/b.csv.gz`: func(r *Run) { r.Inputs[0].Files[1].SHA256 = "xyz" },
		"of the fits of sugar":              func(r *Run) { r.Curves[1].Object = "" },
		"of out/weekly.html":                func(r *Run) { r.Outputs[1].SHA256 = strings.ToUpper(r.Outputs[1].SHA256) },
		"a file without a path":             func(r *Run) { r.Spec.Path = "" },
		`the time "yesterday"`:              func(r *Run) { r.Started = "yesterday" },
		`the time ""`:                       func(r *Run) { r.Acceptance.When = "" },
		"names no run":                      func(r *Run) { r.ID = "" },
		"of ledger/firmness.csv":            func(r *Run) { r.Against[0].SHA256 = "00" },
	}
	for want, damage := range cases {
		for name, w := range writers {
			r := sample()
			damage(r)
			if b, err := w(r); err == nil || !strings.Contains(err.Error(), want) || b != nil {
				t.Errorf("%s: %d bytes, error %v, expected %q", name, len(b), err, want)
			}
		}
	}
}

func TestNothingMade(t *testing.T) {
	r := sample()
	r.Outputs = nil
	if _, err := InToto(r); !errors.Is(err, ErrNothingMade) {
		t.Errorf("a statement about nothing: %v", err)
	}
}

// TestNames checks what files and modules are called. The ni URI is of RFC
// 6920, section 8.1: the digest of "Hello World!".
func TestNames(t *testing.T) {
	if got, want := named(sum("Hello World!")), "ni:///sha-256;f4OxZX_x_FO5LcGBSKHWXfwtSx-j1ncoSt3SABJtkGk"; got != want {
		t.Errorf("named: %s, expected %s", got, want)
	}
	// the rule for golang: https://github.com/package-url/purl-spec, from memory
	for m, want := range map[Module]string{
		{"github.com/BurntSushi/x", "v1.0.0", ""}: "pkg:golang/github.com/burntsushi/x@v1.0.0",
		{"a.org/b", "v2.0.0+incompatible", ""}:    "pkg:golang/a.org/b@v2.0.0%2Bincompatible",
		{"a.org/b", "", ""}:                       "pkg:golang/a.org/b",
	} {
		if got := packageURL(m); got != want {
			t.Errorf("packageURL(%v) = %s, expected %s", m, got, want)
		}
	}
	for in, want := range map[string][2]string{
		"Ann Example <ann@example.org>": {"Ann Example", "ann@example.org"},
		"Ann":                           {"Ann", ""},
		"<ann@example.org>":             {"<ann@example.org>", ""},
		"A <b> c":                       {"A <b> c", ""},
	} {
		name, mail := person(in)
		if name != want[0] || mail != want[1] {
			t.Errorf("person(%q) = %q, %q", in, name, mail)
		}
	}
	for p, want := range map[string]bool{"a/b.csv": false, "../b.csv": true, "..": true, "/b": true, "C:/b": true, "..b/c": false, "a": false} {
		if outside(p) != want {
			t.Errorf("outside(%q) = %v", p, !want)
		}
	}
}

// object reads one object of a document.
func object(t *testing.T, v any, what string) map[string]any {
	t.Helper()
	m, ok := v.(map[string]any)
	if !ok {
		t.Fatalf("%s is %T, expected an object", what, v)
	}
	return m
}

// without returns b with the value at a path of keys left out, to see that a
// check notices.
func without(t *testing.T, b []byte, path ...any) []byte {
	t.Helper()
	var doc any
	if err := json.Unmarshal(b, &doc); err != nil {
		t.Fatal(err)
	}
	at := doc
	for _, k := range path[:len(path)-1] {
		switch k := k.(type) {
		case string:
			at = at.(map[string]any)[k]
		case int:
			at = at.([]any)[k]
		}
	}
	m, last := at.(map[string]any), path[len(path)-1].(string)
	if _, ok := m[last]; !ok {
		t.Fatalf("there is no %s to leave out", fmt.Sprint(path...))
	}
	delete(m, last)
	out, err := json.Marshal(doc)
	if err != nil {
		t.Fatal(err)
	}
	return out
}
