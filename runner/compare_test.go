package runner

import (
	"context"
	"fmt"
	"math"
	"strings"
	"testing"

	"batten/methods/choose"
	"batten/methods/spline"
	"batten/spec"
)

// change rewrites the study's files, runs it, and compares with the run before.
func change(t *testing.T, dir string, edit func()) *Comparison {
	t.Helper()
	s, err := spec.Load(dir)
	if err != nil {
		t.Fatal(err)
	}
	last, err := lastRecord(s.Dir)
	if err != nil {
		t.Fatal(err)
	}
	edit()
	execute(t, dir, 2)
	if s, err = spec.Load(dir); err != nil {
		t.Fatal(err)
	}
	c, err := Compare(context.Background(), s, last.Run, "", Options{})
	if err != nil {
		t.Fatal(err)
	}
	return c
}

func rowsText(rows []string) string { return "g,x,y,w,lot\n" + strings.Join(rows, "\n") + "\n" }

// parts checks that a movement's parts add up and that only those named differ
// from 0, and returns them by cause.
func parts(t *testing.T, m *Movement, causes ...string) map[string]float64 {
	t.Helper()
	out, sum := map[string]float64{}, 0.0
	for _, p := range m.Parts {
		out[p.Cause] = p.By
		sum += p.By
		named := false
		for _, c := range causes {
			named = named || c == p.Cause
		}
		if !named && math.Abs(p.By) > 1e-9*math.Abs(m.By) {
			t.Errorf("%s: %s moved it by %g", m.Fit, p.Cause, p.By)
		}
		if named && !(math.Abs(p.By) > 1e-6*math.Abs(m.By)) {
			t.Errorf("%s: %s did not move it: %+v", m.Fit, p.Cause, m.Parts)
		}
	}
	if len(m.Parts) != 4 || math.Abs(sum-m.By) > 1e-9*math.Abs(m.By) {
		t.Errorf("%s: parts %+v add up to %g, of %g", m.Fit, m.Parts, sum, m.By)
	}
	return out
}

func only(t *testing.T, c *Comparison, fits ...string) []Movement {
	t.Helper()
	var got []string
	for _, m := range c.Moves {
		got = append(got, m.Fit)
	}
	if len(got) != len(fits) {
		t.Fatalf("moved: %v, want %v (notes %v)", got, fits, c.Notes)
	}
	for _, f := range fits {
		if !strings.Contains(fmt.Sprint(got), f) {
			t.Fatalf("moved: %v, want %v", got, fits)
		}
	}
	return c.Moves
}

// TestSplitOfCauses: constructed changes move fits by the cause that was
// changed, and parts of several causes add up to the whole.
func TestSplitOfCauses(t *testing.T) {
	rows := rowsOf(4, 30)
	shift := func(rows []string, group string, by float64) []string { // of every second row
		out := append([]string(nil), rows...)
		for i, r := range out {
			if f := strings.Split(r, ","); f[0] == group && i%2 == 0 {
				var y float64
				if _, err := fmt.Sscan(f[2], &y); err != nil {
					t.Fatal(err)
				}
				f[2] = fmt.Sprintf("%.3f", y+by)
				out[i] = strings.Join(f, ",")
			}
		}
		return out
	}
	spec := func(rule string) string { return strings.Replace(studyText, "RULE", rule, 1) }

	// data alone: lambda is fixed
	dir := write(t, "fixed_lambda\n    lambda = 2", map[string][]string{"d.csv": rows})
	execute(t, dir, 2)
	c := change(t, dir, func() { put(t, dir, "d.csv", rowsText(shift(rows, "g02", -0.8))) })
	m := only(t, c, "c[g=g02]")[0]
	parts(t, &m, Data)
	// two of the fifteen had been dropped as beyond the gauge
	if m.Rows != (RowChange{Old: 28, New: 30, Added: 2, Edited: 13}) {
		t.Errorf("rows %+v", m.Rows)
	}

	// data and the choice they bring with them, against both by hand
	dir = write(t, "gcv", map[string][]string{"d.csv": rows})
	before := execute(t, dir, 2)
	c = change(t, dir, func() { put(t, dir, "d.csv", rowsText(shift(rows, "g03", -0.9))) })
	m = only(t, c, "c[g=g03]")[0]
	got := parts(t, &m, Data, Smoothness)
	old := before.curves["c"].fits[3]
	s2, err := Reopen(before.Study, "")
	if err != nil {
		t.Fatal(err)
	}
	cf, err := s2.curve("c")
	if err != nil {
		t.Fatal(err)
	}
	now := cf.fits[3]
	var ws spline.Workspace
	value := func(f *storedFit, lambda float64) float64 {
		d, err := spline.Collapse(f.X, f.Y, f.W)
		if err != nil {
			t.Fatal(err)
		}
		v, _, _ := ws.Fit(d, lambda).At(m.At)
		return v
	}
	if want := value(now, old.Lambda) - value(old, old.Lambda); math.Abs(got[Data]-want) > 1e-12 {
		t.Errorf("data moved it by %g, by hand %g", got[Data], want)
	}
	if want := value(now, now.Lambda) - value(now, old.Lambda); math.Abs(got[Smoothness]-want) > 1e-12 {
		t.Errorf("smoothness moved it by %g, by hand %g", got[Smoothness], want)
	}

	// the rule alone
	c = change(t, dir, func() { put(t, dir, "study.hcl", spec("fixed_df\n    df = 4")) })
	for i := range c.Moves {
		parts(t, &c.Moves[i], Spec)
	}
	if len(c.Moves) != 3 {
		t.Errorf("%d fits moved by the rule, want 3: the exception keeps its own", len(c.Moves))
	}

	// a drop alone: rows go by the spec, at a fixed lambda
	dir = write(t, "fixed_lambda\n    lambda = 2", map[string][]string{"d.csv": rows})
	execute(t, dir, 2)
	text := strings.Replace(spec("fixed_lambda\n    lambda = 2"), "y > 5.4", "y > 4.6", 1)
	c = change(t, dir, func() { put(t, dir, "study.hcl", text) })
	if len(c.Moves) == 0 {
		t.Fatal("no fit moved by a drop")
	}
	for i := range c.Moves {
		if !strings.Contains(c.Moves[i].Fit, "g01") { // fixed df: lambda follows the rows
			parts(t, &c.Moves[i], Spec)
		}
		if c.Moves[i].Rows.Removed == 0 || c.Moves[i].Rows.Added != 0 {
			t.Errorf("rows %+v", c.Moves[i].Rows)
		}
	}

	// data, drop and rule at once: they add up, and the data part is that of the
	// old drop and lambda
	dir = write(t, "gcv", map[string][]string{"d.csv": rows})
	before = execute(t, dir, 2)
	text = strings.Replace(spec("reml"), "y > 5.4", "y > 4.6", 1)
	after := shift(rows, "g02", -0.7)
	c = change(t, dir, func() {
		put(t, dir, "study.hcl", text)
		put(t, dir, "d.csv", rowsText(after))
	})
	for i := range c.Moves {
		if !strings.Contains(c.Moves[i].Fit, "g02") {
			continue
		}
		m = c.Moves[i]
		got := parts(t, &m, Data, Smoothness, Spec)
		old := before.curves["c"].fits[2]
		between := write(t, "gcv", map[string][]string{"d.csv": after}) // the new data, the old spec
		r := execute(t, between, 1)
		f := r.curves["c"].fits[2]
		if want := value(f, old.Lambda) - value(old, old.Lambda); math.Abs(got[Data]-want) > 1e-12 {
			t.Errorf("data moved it by %g, by hand %g", got[Data], want)
		}
		e, err := choose.Lambda(&ws, mustCollapse(t, f), choose.Rule{Name: "gcv"})
		if err != nil {
			t.Fatal(err)
		}
		if want := value(f, e.Chosen.Lambda) - value(f, old.Lambda); math.Abs(got[Smoothness]-want) > 1e-9 {
			t.Errorf("smoothness moved it by %g, by hand %g", got[Smoothness], want)
		}
	}
	if m.Fit != "c[g=g02]" {
		t.Errorf("g02 did not move: %+v", c.Moves)
	}
}

func mustCollapse(t *testing.T, f *storedFit) *spline.Data {
	t.Helper()
	d, err := spline.Collapse(f.X, f.Y, f.W)
	if err != nil {
		t.Fatal(err)
	}
	return d
}

// TestNewAndGone: groups that come and go are said to; what is the same is
// counted; the ledger serves as the other side, without its rows too.
func TestNewAndGone(t *testing.T) {
	rows := rowsOf(4, 30)
	dir := write(t, "gcv", map[string][]string{"d.csv": rows[:90]})
	r := execute(t, dir, 2)
	if _, err := Accept(context.Background(), r.Study, "a start", Options{}); err != nil {
		t.Fatal(err)
	}
	c := change(t, dir, func() { put(t, dir, "d.csv", rowsText(rows[30:])) })
	only(t, c, "c[g=g00]", "c[g=g03]")
	if c.Moves[0].What[0] != "gone" || c.Moves[1].What[0] != "new" || c.Same != 2 {
		t.Errorf("%+v, %d the same", c.Moves, c.Same)
	}
	s, err := spec.Load(dir)
	if err != nil {
		t.Fatal(err)
	}
	l, err := Compare(context.Background(), s, "", "", Options{})
	if err != nil {
		t.Fatal(err)
	}
	only(t, l, "c[g=g00]", "c[g=g03]")
	if !strings.Contains(l.From, "a start") {
		t.Errorf("from %q", l.From)
	}
}

// TestTolerance: what counts as moved is the study's to say, in half-widths, in
// the response's unit, or by a reading.
func TestTolerance(t *testing.T) {
	tol := &spec.Tolerance{Given: true, HalfWidths: 2}
	for _, c := range []struct {
		t         spec.Tolerance
		shift, by float64
		want      bool
	}{
		{*tol, 1.9, 100, false}, {*tol, 2.1, 0, true},
		{spec.Tolerance{Response: 0.5}, 9, 0.4, false}, {spec.Tolerance{Response: 0.5}, 0, -0.6, true},
		{spec.Tolerance{HalfWidths: 2, Response: 0.5}, 1, 0.6, true},
	} {
		if got := shiftBeyond(&c.t, c.shift, c.by); got != c.want {
			t.Errorf("%+v: shift %g, by %g: %v", c.t, c.shift, c.by, got)
		}
	}
	r := &spec.Tolerance{Readings: []spec.ReadingTolerance{{Name: "peak", Limit: 2}}}
	nan := math.NaN()
	for _, c := range []struct {
		name     string
		old, now float64
		want     bool
	}{{"peak", 5, 7, false}, {"peak", 5, 7.1, true}, {"peak", nan, 7, true}, {"peak", nan, nan, false}, {"other", 1, 99, false}} {
		if got := readingBeyond(r, c.name, c.old, c.now); got != c.want {
			t.Errorf("%s from %g to %g: %v", c.name, c.old, c.now, got)
		}
	}
}

// TestToleranceInRuns: a run counts as moved what the spec's tolerance says.
func TestToleranceInRuns(t *testing.T) {
	rows := rowsOf(3, 30)
	moved := func(tolerance string) []Move {
		t.Helper()
		dir := write(t, "gcv", map[string][]string{"d.csv": rows})
		text := strings.Replace(studyText, "RULE", "gcv", 1)
		if tolerance != "" {
			text = strings.Replace(text, "  reading \"top\"", "  tolerance {\n    "+tolerance+"\n  }\n  reading \"top\"", 1)
		}
		put(t, dir, "study.hcl", text)
		r := execute(t, dir, 2)
		if _, err := Accept(context.Background(), r.Study, "a start", Options{}); err != nil {
			t.Fatal(err)
		}
		other := append([]string(nil), rows...)
		f := strings.Split(other[75], ",") // of g02
		f[2] = "4.9"
		other[75] = strings.Join(f, ",")
		put(t, dir, "d.csv", rowsText(other))
		return execute(t, dir, 2).Record.Moved
	}
	if m := moved(""); len(m) != 1 || m[0].Fit != "c[g=g02]" {
		t.Fatalf("without a tolerance: %+v", m)
	}
	if m := moved("half_widths = 50"); len(m) != 0 {
		t.Errorf("a wide tolerance: %+v", m)
	}
	if m := moved("response = 1e-3"); len(m) != 1 || m[0].What[0] != "shifted" {
		t.Errorf("a narrow one in the response's unit: %+v", m)
	}
	if m := moved("readings = { mean = 1e-9 }"); len(m) != 1 || m[0].What[0] != "mean moved" {
		t.Errorf("one of a reading: %+v", m)
	}
}
