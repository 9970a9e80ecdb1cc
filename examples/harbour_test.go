package examples

import (
	"bytes"
	"os"
	"os/exec"
	"path/filepath"
	"strings"
	"testing"

	"batten/spec"
)

var harbourFiles = []string{"data/2025.csv", "later/2025.csv", "later/2026.csv"}

// harbourLines reads a file's lines, header first.
func harbourLines(t *testing.T, name string) []string {
	t.Helper()
	b, err := os.ReadFile(filepath.Join("harbour", filepath.FromSlash(name)))
	if err != nil {
		t.Fatal(err)
	}
	return strings.Split(strings.TrimRight(string(b), "\n"), "\n")
}

// TestHarbourDataComeFromTheirGenerator runs the generator and compares bytes.
func TestHarbourDataComeFromTheirGenerator(t *testing.T) {
	dir := t.TempDir()
	if out, err := exec.Command("go", "run", "./harbour/make", dir).CombinedOutput(); err != nil {
		t.Fatalf("%v\n%s", err, out)
	}
	kept, _ := filepath.Glob("harbour/*/*.csv")
	if len(kept) != len(harbourFiles) {
		t.Errorf("kept are %v, want %v", kept, harbourFiles)
	}
	for _, name := range harbourFiles {
		a, err := os.ReadFile(filepath.Join(dir, filepath.FromSlash(name)))
		if err != nil {
			t.Fatal(err)
		}
		b, err := os.ReadFile(filepath.Join("harbour", filepath.FromSlash(name)))
		if err != nil {
			t.Fatal(err)
		}
		if !bytes.Equal(a, b) {
			t.Errorf("%s is not what the generator writes; see its first comment", name)
		}
	}
}

// TestHarbourDataHoldWhatThePageSays counts what README.md states.
func TestHarbourDataHoldWhatThePageSays(t *testing.T) {
	year, put, next := harbourLines(t, "data/2025.csv"), harbourLines(t, "later/2025.csv"), harbourLines(t, "later/2026.csv")
	count := map[string]int{}
	for _, l := range year[1:] {
		f := strings.Split(l, ",")
		count[f[6]]++
		if f[5] == "NA" {
			count["missing"]++
		}
	}
	edited := 0
	if len(put) != len(year) {
		t.Fatalf("%d lines later, %d before", len(put), len(year))
	}
	for i := range year {
		if year[i] == put[i] {
			continue
		}
		edited++
		a, b := strings.Split(year[i], ","), strings.Split(put[i], ",")
		a[5], b[5] = "", "" // the turbidity
		if strings.Join(a, ",") != strings.Join(b, ",") || a[3] != "T2" || a[1] < "2025-10-13" {
			t.Errorf("line %d: %q became %q", i+1, year[i], put[i])
		}
	}
	for _, l := range next[1:] {
		if d := strings.Split(l, ",")[1]; d < "2026-01-01" || d > "2026-01-14" {
			t.Errorf("a sample of %s in the first two weeks of 2026", d)
		}
	}
	for what, c := range map[string][2]int{
		"rows": {len(year) - 1, 1144}, "in a ship's wash": {count["ship passing"], 29}, "fouled": {count["fouled"], 2},
		"without turbidity": {count["missing"], 18}, "put right": {edited, 40},
	} {
		if c[0] != c[1] {
			t.Errorf("%s: %d, the page says %d", what, c[0], c[1])
		}
	}
}

// TestHarbourGuardsAllThings holds the example to its purpose.
func TestHarbourGuardsAllThings(t *testing.T) {
	s, err := spec.Load("harbour")
	if err != nil {
		t.Fatal(err)
	}
	on := map[string]bool{}
	for _, g := range s.Guards {
		on[g.Kind] = true
	}
	for _, k := range []string{spec.OnCurve, spec.OnContrast, spec.OnInput, spec.OnStudy} {
		if !on[k] {
			t.Errorf("no guard on a %s", k)
		}
	}
	if !strings.Contains(s.Title, "invented") {
		t.Error("the title does not say that the data are invented")
	}
}
