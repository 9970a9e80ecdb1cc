// Package examples holds whole studies with invented data, each with a page
// that says what it shows. Its tests hold the committed files to their
// generator and the specs to the language.
package examples

import (
	"bytes"
	"encoding/csv"
	"os"
	"os/exec"
	"path/filepath"
	"strconv"
	"testing"

	"batten/spec"
)

func TestSpecsLoad(t *testing.T) {
	specs, err := filepath.Glob("*/study.hcl")
	if err != nil || len(specs) < 2 {
		t.Fatalf("found %d specs, want 2 or more (%v)", len(specs), err)
	}
	for _, s := range specs {
		if _, err := spec.Load(s); err != nil {
			t.Errorf("%v", err)
		}
		if _, err := os.Stat(filepath.Join(filepath.Dir(s), "README.md")); err != nil {
			t.Errorf("an example without its page: %v", err)
		}
	}
}

// TestPearsUsesTheWholeLanguage holds the large example to its purpose.
func TestPearsUsesTheWholeLanguage(t *testing.T) {
	s, err := spec.Load("pears")
	if err != nil {
		t.Fatal(err)
	}
	kinds, rules, reads, acts := map[string]bool{}, map[string]bool{}, map[string]bool{}, map[string]bool{}
	for _, e := range s.Exports {
		kinds[e.What] = true
	}
	for _, c := range s.Curves {
		rules[c.Rule.Name] = true
		for _, e := range c.Exceptions {
			rules[e.Rule.Name] = true
		}
		for _, r := range c.Readings {
			reads[r.Kind] = true
		}
	}
	for _, g := range s.Guards {
		acts[g.Otherwise] = true
	}
	for what, c := range map[string]struct {
		got  map[string]bool
		want []string
	}{
		"export": {kinds, []string{spec.ExportGrid, spec.ExportFits, spec.ExportReadings, spec.ExportEvidence, spec.ExportResiduals, spec.ExportCoefficients}},
		"rule":   {rules, []string{spec.GCV, spec.FixedDF, spec.KFold, spec.REML}},
		"read":   {reads, []string{spec.ValueAt, spec.SlopeAt, spec.Crossing, spec.Maximum, spec.Minimum, spec.Steepest, spec.Area}},
		"guard":  {acts, []string{spec.Warn, spec.Skip, spec.Refuse}},
	} {
		for _, w := range c.want {
			if !c.got[w] {
				t.Errorf("no %s of the kind %q in the example", what, w)
			}
		}
	}
}

// TestPearsDataComeFromTheirGenerator runs the generator and compares bytes.
func TestPearsDataComeFromTheirGenerator(t *testing.T) {
	dir := t.TempDir()
	if out, err := exec.Command("go", "run", "./pears/make", dir).CombinedOutput(); err != nil {
		t.Fatalf("%v\n%s", err, out)
	}
	made, _ := filepath.Glob(filepath.Join(dir, "*.csv"))
	kept, _ := filepath.Glob("pears/data/*.csv")
	if len(made) != 2 || len(kept) != 2 {
		t.Fatalf("%d files made, %d kept, want 2 and 2", len(made), len(kept))
	}
	for i := range made {
		a, err := os.ReadFile(made[i])
		if err != nil {
			t.Fatal(err)
		}
		b, err := os.ReadFile(kept[i])
		if err != nil {
			t.Fatal(err)
		}
		if filepath.Base(made[i]) != filepath.Base(kept[i]) || !bytes.Equal(a, b) {
			t.Errorf("%s is not what the generator writes; see its first comment", kept[i])
		}
	}
}

// TestPearsDataHoldWhatThePageSays counts what README.md states.
func TestPearsDataHoldWhatThePageSays(t *testing.T) {
	rows, bruised, slips, missing := 0, 0, 0, 0
	groups, visits := map[string]int{}, map[string]map[string]bool{}
	files, _ := filepath.Glob("pears/data/*.csv")
	for _, name := range files {
		f, err := os.Open(name)
		if err != nil {
			t.Fatal(err)
		}
		all, err := csv.NewReader(f).ReadAll()
		f.Close()
		if err != nil {
			t.Fatal(err)
		}
		for _, r := range all[1:] {
			rows++
			g := r[1] + " " + r[2]
			groups[g]++
			if visits[g] == nil {
				visits[g] = map[string]bool{}
			}
			visits[g][r[5]] = true
			firmness, err := strconv.ParseFloat(r[7], 64)
			switch {
			case r[9] == "bruised":
				bruised++
			case err != nil:
				missing++
			case firmness > 100:
				slips++
			}
		}
	}
	for what, c := range map[string][2]int{
		"rows": {rows, 2926}, "groups": {len(groups), 24}, "bruised": {bruised, 55}, "slips": {slips, 2},
		"without firmness": {missing, 31}, "visits of Pilot": {len(visits["Pilot air"]), 4}, "rows of Hartley": {groups["Hartley air"], 5},
	} {
		if c[0] != c[1] {
			t.Errorf("%s: %d, the page says %d", what, c[0], c[1])
		}
	}
}
