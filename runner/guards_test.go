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
	"time"

	"batten/methods/choose"
	"batten/methods/reading"
	"batten/runner/table"
	"batten/spec"
)

const guardedText = `study { title = "Guarded (invented)" }
input "d" {
  file    = "d.csv"
  missing = ["", "NA"]
  columns = { g = text, store = text, day = date, y = number("K"), note = text }
}
rows "used" {
  from = d
  drop "spoilt" {
    when   = note == "spoilt"
    reason = "spoilt"
  }
}
curve "c" {
  from     = used
  response = y
  along    = day
  by       = [g, store]
  smoothness { rule = reml }
  grid { points = 21 }
  reading "cross" {
    crosses   = 5
    direction = falling
  }
  reading "top"   { maximum = true }
  reading "falls" { surely = falling }
  reading "fifth" { value_at = "2026-01-05" }
}
contrast "gap" {
  of     = c
  across = store
  minus  = ["s", "t"]
}
export "fits" {
  of   = c
  what = fits
  file = "out/fits.csv"
}
report "page" { files = ["out/page.md"] }
`

// guarded writes a study with these guards. In group a store s crosses 5 about
// 11 January, store t about 13 January noon; both stores of b stay near 8.
// Of 90 rows 4 are spoilt and 2 lack y.
func guarded(t testing.TB, guards string) string {
	t.Helper()
	dir := t.TempDir()
	put(t, dir, "study.hcl", guardedText+guards)
	rng := rand.New(rand.NewPCG(3, 5))
	first := time.Date(2026, 1, 1, 0, 0, 0, 0, time.UTC)
	var rows []string
	add := func(g, store string, k int, y, note string) {
		rows = append(rows, fmt.Sprintf("%s,%s,%s,%s,%s", g, store, first.AddDate(0, 0, k).Format(time.DateOnly), y, note))
	}
	for _, x := range []struct {
		g, store string
		slope    float64
	}{{"a", "s", 0.5}, {"a", "t", 0.4}, {"b", "s", 0}, {"b", "t", 0}} {
		for k := range 21 {
			top := 10.0
			if x.g == "b" {
				top = 8
			}
			add(x.g, x.store, k, fmt.Sprintf("%.3f", top-x.slope*float64(k)+0.1*rng.NormFloat64()), "")
		}
		add(x.g, x.store, 3, "99", "spoilt")
	}
	add("a", "s", 4, "NA", "")
	add("b", "t", 4, "", "")
	put(t, dir, "d.csv", "g,store,day,y,note\n"+strings.Join(rows, "\n")+"\n")
	return dir
}

// guard writes a guard block.
func guard(on, require, otherwise string) string {
	return fmt.Sprintf("guard \"held\" {\n  on        = %s\n  require   = %s\n  otherwise = %s\n  reason    = \"the board asks\"\n}\n", on, require, otherwise)
}

// TestGuards: for each thing that a guard may stand on and each consequence,
// what it fails for, what is said, and that the record and the report tell.
func TestGuards(t *testing.T) {
	const as, at, bs, bt = "c[g=a, store=s]", "c[g=a, store=t]", "c[g=b, store=s]", "c[g=b, store=t]"
	all := []string{as, at, bs, bt}
	for _, c := range []struct {
		name, on, require string
		judged            int
		failed            []string
		found             string // of the first that fails
		missing           bool   // the last that fails
	}{
		{"reading", "c", `cross < "2026-01-12"`, 4, []string{at, bs, bt}, "cross = 2026-01-13T", true},
		{"reading or none", "c", `!present(cross) || cross < "2026-01-12"`, 4, []string{at}, "cross = 2026-01-13T", false},
		{"upper end", "c", `!present(cross) || cross_upper < "2026-01-12"`, 4, []string{at}, "cross_upper = 2026-01-13T", false},
		{"lower end", "c", `!present(cross) || cross_lower > "2026-01-12"`, 4, []string{as}, "cross_lower = 2026-01-10T", false},
		{"width", "c", `!present(cross) || cross_upper - cross_lower < 3`, 4, nil, "", false},
		{"height", "c", `top > 9`, 4, []string{bs, bt}, "top = 8.", false},
		{"place", "c", `g == "b" || top_at <= "2026-01-02"`, 4, nil, "", false},
		{"place fails", "c", `g == "b" || top_at > "2026-01-02"`, 4, []string{as, at}, "top_at = 2026-01-01", false},
		{"stretch", "c", `falls_lower < "2026-01-03"`, 4, []string{bs, bt}, "falls_lower is missing", true},
		{"value", "c", `fifth > 8.2`, 4, []string{as, bs, bt}, "fifth = 7.97", false},
		{"aicc", "c", `aicc < -1000`, 4, all, "aicc = -", false},
		{"flag and by column", "c", `g == "a" || !straight_line || distinct > 30`, 4, []string{bs, bt}, "distinct = 21, straight_line = true", false},
		{"contrast", "gap", `p_none_holm < 0.01`, 2, []string{"gap[g=b]"}, "p_none_holm = ", false},
		{"contrast, largest", "gap", `g == "b" || largest > 1000`, 2, []string{"gap[g=a]"}, "largest = ", false},
		{"contrast, parallel", "gap", `p_parallel > 0.05 && p_parallel_holm >= p_parallel && p_none <= p_none_holm`, 2, []string{"gap[g=a]"}, "p_none = ", false},
		{"study", "study", `rows_read == 90 && rows_used == 84 && fits == 4 && skipped == 0`, 1, nil, "", false},
		{"study, dropped", "study", `share_dropped < 0.04`, 1, []string{"study"}, "share_dropped = 0.0444444", false},
		{"study, set aside", "study", `share_set_aside < 0.02`, 1, []string{"study"}, "share_set_aside = 0.0222222", false},
		{"input", "d", `rows_read == 90 && files == 1`, 1, nil, "", false},
		{"input fails", "d", `rows_read >= 1000`, 1, []string{"input d"}, "rows_read = 90", false},
		{"no value", "d", `rows_read / (files - 1) > 3`, 1, []string{"input d"}, "files = 1, rows_read = 90", true},
	} {
		onFits := c.on == "c"
		for _, otherwise := range []string{spec.Warn, spec.Skip, spec.Refuse} {
			if otherwise == spec.Skip && !onFits {
				continue
			}
			t.Run(c.name+" "+otherwise, func(t *testing.T) {
				t.Parallel()
				dir := guarded(t, guard(c.on, c.require, otherwise))
				s, err := spec.Load(dir)
				if err != nil {
					t.Fatal(err)
				}
				r, err := Execute(context.Background(), s, Options{Workers: 2})
				var refused *RefusedError
				if want := otherwise == spec.Refuse && len(c.failed) > 0; errors.As(err, &refused) != want || err != nil && !want {
					t.Fatalf("%v", err)
				}
				rec, err := lastRecord(dir)
				if err != nil || len(rec.Guards) != 1 {
					t.Fatalf("%v: %+v", err, rec)
				}
				g := rec.Guards[0]
				var got []string
				for _, f := range g.Failed {
					got = append(got, f.Of)
				}
				if strings.Join(got, "; ") != strings.Join(c.failed, "; ") || g.Judged != c.judged || g.Otherwise != otherwise || (g.Outcome == Held) != (len(c.failed) == 0) || g.Outcome != Held && g.Outcome != otherwise || g.Require != c.require {
					t.Fatalf("recorded: %+v", g)
				}
				if len(c.failed) > 0 {
					if !strings.Contains(g.Failed[0].Found, c.found) || g.Failed[len(g.Failed)-1].Missing != c.missing {
						t.Errorf("recorded: %+v, want found %q", g.Failed, c.found)
					}
				}
				if refused != nil {
					if len(refused.Refused) != len(c.failed) || !strings.HasPrefix(refused.Refused[0], c.failed[0]+`: guard "held": `+c.require) || !strings.HasSuffix(refused.Refused[0], ": the board asks") {
						t.Errorf("refused: %q", refused.Refused)
					}
					if last := refused.Refused[len(refused.Refused)-1]; strings.Contains(last, "has no value, which counts as not holding") != c.missing {
						t.Errorf("refused: %q", last)
					}
					if _, err := os.Stat(filepath.Join(dir, "out")); !os.IsNotExist(err) {
						t.Errorf("a refused run wrote outputs: %v", err)
					}
					if _, err := Accept(context.Background(), s, "no", Options{}); !errors.As(err, &refused) {
						t.Errorf("a refused run was accepted: %v", err)
					}
					return
				}
				n := r.Record.Counts
				if want := map[bool]int{true: len(c.failed)}[otherwise == spec.Skip]; n.Skipped != want || n.Refused != 0 || n.Total != 4 {
					t.Errorf("counts %+v, want %d skipped", n, want)
				}
				report := outputs(t, dir)["page.md"]
				if len(c.failed) > 0 && !strings.Contains(report, c.found) || !strings.Contains(report, "| held |") {
					t.Errorf("the report does not say %q", c.found)
				}
				warns := strings.Contains(outputs(t, dir)["fits.csv"], "guard held")
				if warns != (otherwise == spec.Warn && onFits && len(c.failed) > 0) {
					t.Errorf("the fits' flags: warned %v", warns)
				}
			})
		}
	}
}

// TestGuardsAgain: results of guards are the same from the store, with other
// workers, and from the record alone.
func TestGuardsAgain(t *testing.T) {
	dir := guarded(t, guard("c", `cross < "2026-01-12"`, "skip")+strings.Replace(guard("gap", "p_none < 0.01", "warn"), "held", "apart", 1)+
		strings.Replace(guard("study", "skipped < 2", "warn"), "held", "whole", 1))
	first := execute(t, dir, 1)
	want := fmt.Sprint(first.Record.Guards)
	again := execute(t, dir, 3)
	if got := fmt.Sprint(again.Record.Guards); got != want || again.Record.Results != first.Record.Results || again.Record.Counts.Computed != 0 {
		t.Errorf("again %s\nfirst %s", got, want)
	}
	if !strings.Contains(want, "skipped = 3") {
		t.Errorf("the study's guard saw %s", want)
	}
	// g=a lacks store t now, g=b both: no pair is left to judge
	if g := first.Record.Guards[1]; g.Judged != 0 || len(g.Failed) != 0 {
		t.Errorf("pairs that could not be formed were judged: %+v", g)
	}
	rec, err := Reopen(first.Study, "")
	if err != nil {
		t.Fatal(err)
	}
	if err := os.Remove(filepath.Join(dir, "d.csv")); err != nil {
		t.Fatal(err)
	}
	a, err := rec.Why(context.Background(), "c", []Match{{"g", "b"}, {"store", "s"}})
	if err != nil || !strings.Contains(a.Skipped, `guard "held": cross < "2026-01-12" has no value, which counts as not holding (cross is missing)`) {
		t.Errorf("%v: %+v", err, a)
	}
	if len(a.Curve.Guards) != 1 || len(a.Curve.Guards[0].Failed) != 1 {
		t.Errorf("guards of one fit: %+v", a.Curve.Guards)
	}
}

// TestAICc: the quantity is what the rule of that name makes small.
func TestAICc(t *testing.T) {
	dir := guarded(t, "")
	r := execute(t, dir, 2)
	cf := r.curves["c"]
	q := cf.quantities(nil)("aicc")
	for i, f := range cf.fits {
		if want := choose.AICC(f.N, f.RSS, f.EDF); q.Num[i] != want || math.IsNaN(want) {
			t.Errorf("%v: %g, want %g", f.Group, q.Num[i], want)
		}
	}
}

// TestReadingNumber: the first of several results; an open end is missing.
func TestReadingNumber(t *testing.T) {
	crossing := []reading.Result{{Kind: "crossing", Value: 3, Lower: math.Inf(-1), Upper: 4}, {Kind: "crossing", Value: 9, Lower: 8, Upper: 10}}
	peak := []reading.Result{{Kind: "maximum", Value: 60, Lower: 58, Upper: 62}, {Kind: "maximum_at", Value: 7, Lower: 6, Upper: math.Inf(1)}}
	for _, c := range []struct {
		taken []reading.Result
		place bool
		end   spec.End
		want  float64
	}{
		{crossing, false, spec.Itself, 3}, {crossing, false, spec.LowerEnd, math.NaN()}, {crossing, false, spec.UpperEnd, 4},
		{peak, false, spec.Itself, 60}, {peak, false, spec.UpperEnd, 62}, {peak, true, spec.Itself, 7}, {peak, true, spec.LowerEnd, 6}, {peak, true, spec.UpperEnd, math.NaN()},
		{nil, false, spec.Itself, math.NaN()},
	} {
		got := readingNumber(c.taken, spec.ReadingQuantity{Place: c.place, End: c.end})
		if got != c.want && !(math.IsNaN(got) && math.IsNaN(c.want)) {
			t.Errorf("%+v %v %v: %s, want %s", c.taken, c.place, c.end, table.FormatNumber(got), table.FormatNumber(c.want))
		}
	}
}
