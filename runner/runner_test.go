package runner

import (
	"context"
	"errors"
	"fmt"
	"math"
	"math/rand/v2"
	"os"
	"path/filepath"
	"strings"
	"testing"

	"batten/runner/table"
	"batten/spec"
)

// rowsOf draws the rows of a small study: groups of unequal shape, ties,
// weights, a block column.
func rowsOf(groups, n int) []string {
	rng := rand.New(rand.NewPCG(uint64(groups), uint64(n)))
	var out []string
	for g := range groups {
		for i := range n {
			x := math.Floor(float64(i)*0.8) / 2
			y := 3 + math.Cos(x/2+float64(g))*2 + 0.3*rng.NormFloat64()
			out = append(out, fmt.Sprintf("g%02d,%s,%.3f,%d,lot%d", g, table.FormatNumber(x), y, 1+rng.IntN(4), i%5))
		}
	}
	return out
}

const studyText = `study {
  title = "A test (invented)"
  seed  = 7
}
let { level = 3.5 }
input "d" {
  file    = "d*.csv"
  columns = { g = text, x = number("h"), y = number("K"), w = number, lot = text }
}
rows "used" {
  from = d
  add "twice" { value = 2 * y }
  drop "high" {
    when   = y > 5.4
    reason = "beyond the gauge"
  }
}
curve "c" {
  from     = used
  response = y
  along    = x
  by       = [g]
  weight   = w
  smoothness {
    rule = RULE
  }
  smoothness "stiff one" {
    only   = g == "g01"
    rule   = fixed_df
    df     = 3
    reason = "agreed beforehand"
  }
  reading "top"   { maximum = true }
  reading "cross" { crosses = level }
  reading "mean"  { area = [0, 4] }
}
guard "wiggly" {
  on        = c
  require   = edf < 40
  otherwise = warn
}
export "grid" {
  of   = c
  what = grid
  file = "out/grid.csv"
}
export "fits" {
  of   = c
  what = fits
  file = "out/fits.csv"
}
export "readings" {
  of   = c
  what = readings
  file = "out/readings.csv"
}
export "evidence" {
  of   = c
  what = evidence
  file = "out/evidence.csv"
}
export "residuals" {
  of   = c
  what = residuals
  file = "out/residuals.csv"
}
report "page" {
  files = ["out/page.md", "out/page.html"]
}
`

// write makes a study in a folder of its own.
func write(t testing.TB, rule string, files map[string][]string) string {
	t.Helper()
	dir := t.TempDir()
	put(t, dir, "study.hcl", strings.Replace(studyText, "RULE", rule, 1))
	for name, rows := range files {
		put(t, dir, name, "g,x,y,w,lot\n"+strings.Join(rows, "\n")+"\n")
	}
	return dir
}

func put(t testing.TB, dir, name, text string) {
	t.Helper()
	if err := os.WriteFile(filepath.Join(dir, name), []byte(text), 0o666); err != nil {
		t.Fatal(err)
	}
}

func execute(t testing.TB, dir string, workers int) *Run {
	t.Helper()
	s, err := spec.Load(dir)
	if err != nil {
		t.Fatal(err)
	}
	r, err := Execute(context.Background(), s, Options{Workers: workers, Program: "batten test"})
	if err != nil {
		t.Fatal(err)
	}
	return r
}

// outputs reads every file under out/.
func outputs(t testing.TB, dir string) map[string]string {
	t.Helper()
	out := map[string]string{}
	root := filepath.Join(dir, "out")
	err := filepath.Walk(root, func(p string, fi os.FileInfo, err error) error {
		if err != nil || fi.IsDir() {
			return err
		}
		b, err := os.ReadFile(p)
		rel, _ := filepath.Rel(root, p)
		out[rel] = string(b)
		return err
	})
	if err != nil {
		t.Fatal(err)
	}
	return out
}

// TestSameBytes: what a run writes does not depend on workers, on what the
// store holds, or (but for lines and digests of files) on the order of rows
// and files.
func TestSameBytes(t *testing.T) {
	rows := rowsOf(5, 30)
	for _, rule := range []string{"gcv", "reml", "aicc", "kfold\n    folds = 5", "kfold\n    block = lot",
		"kfold\n    folds = 6\n    stretches = true\n    gap = 0.5", "loocv\n    one_se = true", "known_sigma\n    sigma = 0.4",
		"residual_target\n    sigma = 0.5", "gcv\n  }\n  order = 1\n  band {\n    kind = simultaneous", "reml\n  }\n  order = 3\n  reading \"bend\" { curvature_at = 2 }\n  band {\n    level = 0.9", "gcv\n    shared = true", "reml\n    shared = edf"} {
		dir := write(t, rule, map[string][]string{"d.csv": rows})
		execute(t, dir, 1)
		want := outputs(t, dir)
		if len(want) < 8 {
			t.Fatalf("only %d outputs", len(want))
		}
		// the same again, from the store alone
		if err := os.RemoveAll(filepath.Join(dir, "out")); err != nil {
			t.Fatal(err)
		}
		if r := execute(t, dir, 2); r.Record.Counts.Computed != 0 {
			t.Errorf("%s: %d fits were computed again", rule, r.Record.Counts.Computed)
		}
		same(t, rule+", from the store", outputs(t, dir), want)
		// without the store, with more workers
		for _, sub := range []string{"out", ".batten"} {
			if err := os.RemoveAll(filepath.Join(dir, sub)); err != nil {
				t.Fatal(err)
			}
		}
		execute(t, dir, 5)
		same(t, rule+", 5 workers", outputs(t, dir), want)
		// rows shuffled and split in two files
		shuffled := append([]string(nil), rows...)
		rng := rand.New(rand.NewPCG(3, 4))
		rng.Shuffle(len(shuffled), func(i, j int) { shuffled[i], shuffled[j] = shuffled[j], shuffled[i] })
		other := write(t, rule, map[string][]string{"d2.csv": shuffled[:100], "d1.csv": shuffled[100:]})
		execute(t, other, 2)
		got := outputs(t, other)
		for _, f := range []string{"grid.csv", "fits.csv", "readings.csv", "evidence.csv"} {
			if got[f] != want[f] {
				t.Errorf("%s: the order of rows changed %s", rule, f)
			}
		}
	}
}

func same(t *testing.T, what string, got, want map[string]string) {
	t.Helper()
	if len(got) != len(want) {
		t.Errorf("%s: %d outputs, want %d", what, len(got), len(want))
	}
	for f := range want {
		if got[f] != want[f] {
			t.Errorf("%s: %s differs", what, f)
		}
	}
}

// TestCostOfChanges: each change refits what it must and nothing else.
func TestCostOfChanges(t *testing.T) {
	rows := rowsOf(9, 40)
	dir := write(t, "gcv", map[string][]string{"d.csv": rows})
	execute(t, dir, 2)
	computed := func(what string, want int) {
		t.Helper()
		if got := execute(t, dir, 2).Record.Counts; got.Computed != want || got.Total != 9 {
			t.Errorf("%s: %+v, want %d computed", what, got, want)
		}
	}
	edit := func(from, to string) {
		t.Helper()
		b, err := os.ReadFile(filepath.Join(dir, "study.hcl"))
		if err != nil || !strings.Contains(string(b), from) {
			t.Fatalf("%v: no %q", err, from)
		}
		put(t, dir, "study.hcl", strings.Replace(string(b), from, to, 1))
	}
	edit("A test (invented)", "Another title (invented)")
	edit("let {", "# a comment\nlet {")
	computed("title and comment", 0)
	edit("level = 3.5", "level = 3.6")
	computed("a reading's level", 0)
	edit(`reading "top"   { maximum = true }`, "band { level = 0.9 }")
	computed("band and readings", 0)
	edit("edf < 40", "edf < 30")
	computed("a guard", 0)
	edit("y > 5.4", "y > 5.41")
	computed("a drop that drops the same rows", 0)
	edit("seed  = 7", "seed  = 8")
	computed("a seed that gcv does not use", 0)
	edit("df     = 3", "df     = 4")
	computed("the exception's df", 1)
	edit("rule = gcv", "rule = reml")
	computed("the rule of all but the exception", 8)
	edit("rule = reml", "rule = gcv")
	computed("and back", 0)

	changed := append([]string(nil), rows...)
	changed[45] = strings.Replace(changed[45], ",", ",0", 1) // x 2.0 -> 02.0: the same number
	put(t, dir, "d.csv", "g,x,y,w,lot\n"+strings.Join(changed, "\n")+"\n")
	computed("the same number written otherwise", 0)
	f := strings.Split(changed[85], ",")
	f[2] = "4.321"
	changed[85] = strings.Join(f, ",")
	put(t, dir, "d.csv", "g,x,y,w,lot\n"+strings.Join(changed, "\n")+"\n")
	computed("one row", 1)
}

// TestDamage: objects that are gone or damaged are made again, to the same
// bytes.
func TestDamage(t *testing.T) {
	dir := write(t, "gcv", map[string][]string{"d.csv": rowsOf(9, 40)})
	execute(t, dir, 2)
	want := outputs(t, dir)
	rng := rand.New(rand.NewPCG(6, 6))
	var all []string
	for _, sub := range []string{"objects", "keys", "slots"} {
		_ = filepath.Walk(filepath.Join(dir, ".batten", sub), func(p string, fi os.FileInfo, err error) error {
			if err == nil && !fi.IsDir() {
				all = append(all, p)
			}
			return nil
		})
	}
	for range 25 {
		for range 5 {
			p := all[rng.IntN(len(all))]
			switch rng.IntN(3) {
			case 0:
				_ = os.Remove(p)
			case 1:
				_ = os.WriteFile(p, nil, 0o666)
			default:
				if b, err := os.ReadFile(p); err == nil && len(b) > 0 {
					b[rng.IntN(len(b))] ^= 1 << rng.IntN(8)
					_ = os.WriteFile(p, b, 0o666)
				}
			}
		}
		if err := os.RemoveAll(filepath.Join(dir, "out")); err != nil {
			t.Fatal(err)
		}
		execute(t, dir, 2)
		same(t, "after damage", outputs(t, dir), want)
	}
}

// TestMoved: the ledger, and what moved against it.
func TestMoved(t *testing.T) {
	t.Setenv("BATTEN_WHO", "A. Tester")
	rows := rowsOf(4, 30)
	dir := write(t, "gcv", map[string][]string{"d.csv": rows})
	execute(t, dir, 2)
	s, err := spec.Load(dir)
	if err != nil {
		t.Fatal(err)
	}
	a, err := Accept(context.Background(), s, "first", Options{})
	if err != nil || a.Who != "A. Tester" || a.Fits != 4 {
		t.Fatalf("%+v, %v", a, err)
	}
	first, err := os.ReadFile(filepath.Join(dir, "ledger", "c.csv"))
	if err != nil {
		t.Fatal(err)
	}
	if r := execute(t, dir, 2); len(r.Record.Moved) != 0 {
		t.Errorf("nothing changed, moved: %+v", r.Record.Moved)
	}
	// the ledger alone is enough
	if err := os.RemoveAll(filepath.Join(dir, ".batten")); err != nil {
		t.Fatal(err)
	}
	if r := execute(t, dir, 2); len(r.Record.Moved) != 0 {
		t.Errorf("after sweeping the store, moved: %+v", r.Record.Moved)
	}
	var changed []string
	for _, r := range rows {
		switch {
		case strings.HasPrefix(r, "g00"): // gone
			continue
		case strings.HasPrefix(r, "g02"): // lifted
			f := strings.Split(r, ",")
			f[2] = strings.Replace(f[2], ".", ".5", 1)
			r = strings.Join(f, ",")
		}
		changed = append(changed, r)
	}
	for i := range 12 {
		changed = append(changed, fmt.Sprintf("g77,%d,%d,1,lot1", i, i%3+1))
	}
	put(t, dir, "d.csv", "g,x,y,w,lot\n"+strings.Join(changed, "\n")+"\n")
	if _, err := Accept(context.Background(), s, "stale", Options{}); err == nil || !strings.Contains(err.Error(), "have changed since run") {
		t.Errorf("stale data were accepted: %v", err)
	}
	r := execute(t, dir, 2)
	got := map[string]string{}
	for _, m := range r.Record.Moved {
		got[m.Fit] = strings.Join(m.What, "+")
	}
	if got["c[g=g00]"] != "gone" || got["c[g=g77]"] != "new" || !strings.Contains(got["c[g=g02]"], "shifted") && !strings.Contains(got["c[g=g02]"], "edf") || got["c[g=g03]"] != "" {
		t.Errorf("moved: %v", got)
	}
	if _, err := Accept(context.Background(), s, "second", Options{}); err != nil {
		t.Fatal(err)
	}
	second, err := os.ReadFile(filepath.Join(dir, "ledger", "c.csv"))
	if err != nil {
		t.Fatal(err)
	}
	// one changed group is one changed line
	old := map[string]bool{}
	for _, l := range strings.Split(string(first), "\n") {
		old[l] = true
	}
	fresh := 0
	for _, l := range strings.Split(string(second), "\n") {
		if !old[l] {
			fresh++
		}
	}
	if fresh != 2 {
		t.Errorf("%d lines of the ledger are new, want 2 (g02 and g77)", fresh)
	}
	if r := execute(t, dir, 2); len(r.Record.Moved) != 0 {
		t.Errorf("after accepting, moved: %+v", r.Record.Moved)
	}
}

// TestRefused: a refusal leaves outputs as they were, is recorded, and cannot
// be accepted.
func TestRefused(t *testing.T) {
	dir := write(t, "gcv", map[string][]string{"d.csv": rowsOf(3, 30)})
	execute(t, dir, 2)
	want := outputs(t, dir)
	b, _ := os.ReadFile(filepath.Join(dir, "study.hcl"))
	put(t, dir, "study.hcl", strings.Replace(strings.Replace(string(b), "edf < 40", "n > 1000", 1), "otherwise = warn", "otherwise = refuse", 1))
	s, err := spec.Load(dir)
	if err != nil {
		t.Fatal(err)
	}
	r, err := Execute(context.Background(), s, Options{})
	var refused *RefusedError
	if !errors.As(err, &refused) || len(refused.Refused) != 3 || r.Record.Counts.Refused != 3 || refused.Run == "" {
		t.Fatalf("%v, %+v", err, r)
	}
	same(t, "after a refusal", outputs(t, dir), want)
	if _, err := Accept(context.Background(), s, "no", Options{}); !errors.As(err, &refused) {
		t.Errorf("a refused run was accepted: %v", err)
	}
}

// TestStopped: an interrupted run keeps what is done and leaves no outputs.
func TestStopped(t *testing.T) {
	dir := write(t, "gcv", map[string][]string{"d.csv": rowsOf(60, 40)})
	s, err := spec.Load(dir)
	if err != nil {
		t.Fatal(err)
	}
	ctx, cancel := context.WithCancel(context.Background())
	_, err = Execute(ctx, s, Options{Workers: 1, Progress: &stopAfter{n: 20, stop: cancel}})
	var stopped *StoppedError
	if !errors.As(err, &stopped) || stopped.Done < 1 || stopped.Done >= stopped.Total {
		t.Fatalf("%v", err)
	}
	if _, err := os.Stat(filepath.Join(dir, "out")); err == nil {
		t.Error("an interrupted run wrote outputs")
	}
	r := execute(t, dir, 2)
	if c := r.Record.Counts; c.Reused < 15 || c.Reused >= 60 || c.Computed+c.Reused != 60 {
		t.Errorf("after an interruption: %+v", c)
	}
}

type stopAfter struct {
	quiet
	n    int
	stop func()
}

func (s *stopAfter) Add(n int) {
	if s.n -= n; s.n < 0 {
		s.stop()
	}
}

// TestRowCounts: rows are followed from file to fit.
func TestRowCounts(t *testing.T) {
	rows := append(rowsOf(2, 20), "g00,,1,1,lot1", "g00,3,,1,lot1", ",3,1,1,lot1", "g01,3,9.9,1,lot1", "g01,3,1,0,lot1", "g01,4,1,,lot1")
	dir := write(t, "gcv", map[string][]string{"d.csv": rows})
	c := execute(t, dir, 1).Record.Curves[0]
	high := 0
	for _, d := range c.Dropped {
		high += d.N
	}
	aside := map[string]int{}
	for _, a := range c.SetAside {
		aside[a.Column] = a.N
	}
	if c.Read != 46 || high < 1 || aside["x"] != 1 || aside["y"] != 1 || aside["g"] != 1 || aside["w"] != 1 || c.ZeroWeight != 1 {
		t.Errorf("%+v", c)
	}
	// the same from the store
	again := execute(t, dir, 1).Record
	if fmt.Sprint(again.Curves[0].SetAside, again.Curves[0].ZeroWeight) != fmt.Sprint(c.SetAside, c.ZeroWeight) {
		t.Errorf("from the store: %+v", again.Curves[0])
	}
	if again.Inputs[0].Rows != 46 {
		t.Errorf("the record of an unchanged run says %d rows were read, want 46", again.Inputs[0].Rows)
	}
}
