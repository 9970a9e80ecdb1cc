package runner

import (
	"context"
	"errors"
	"fmt"
	"slices"
	"strings"
	"testing"

	"batten/spec"
)

// guarded runs the test study with more guards; a refusal comes back too.
func guarded(t *testing.T, guards string) (*Run, error) {
	t.Helper()
	dir := write(t, "gcv", map[string][]string{"d.csv": rowsOf(4, 30)})
	text := strings.Replace(studyText, "RULE", "gcv", 1)
	text = strings.Replace(text, "guard \"wiggly\"", `contrast "pair" {
  of     = c
  across = g
  minus  = ["g00", "g02"]
}
`+guards+"\nguard \"wiggly\"", 1)
	put(t, dir, "study.hcl", text)
	s, err := spec.Load(dir)
	if err != nil {
		t.Fatal(err)
	}
	r, err := Execute(context.Background(), s, Options{Workers: 2})
	var refused *RefusedError
	if err != nil && !errors.As(err, &refused) {
		t.Fatal(err)
	}
	return r, err
}

func guard(on, require, otherwise string) string {
	return fmt.Sprintf("guard \"it\" {\n  on = %s\n  require = %s\n  otherwise = %s\n  reason = \"to be seen\"\n}\n", on, require, otherwise)
}

// TestGuardsOnReadings: a reading's value, its interval and its place may be
// held to something; what is missing does not hold.
func TestGuardsOnReadings(t *testing.T) {
	for _, c := range []struct {
		require string
		fails   int // of the four fits
	}{
		{"top > 0", 0}, {"top > 1000", 4}, {"top_lower <= top && top <= top_upper", 0},
		{"top_at >= 0", 0}, {"cross > -1e9", -1}, {"mean > 1e9", 4}, {"aicc < 1e9", 0}, {"present(cross) || top < 1e9", 0},
	} {
		r, err := guarded(t, guard("c", c.require, "skip"))
		if err != nil {
			t.Fatal(err)
		}
		skipped := r.Record.Counts.Skipped
		want := c.fails
		if want < 0 { // as many as have no crossing
			want = 0
			for i := range r.curves["c"].fits {
				v := r.curves["c"].taken["cross"].Num[i]
				if v != v {
					want++
				}
			}
		}
		if skipped != want {
			t.Errorf("%s: %d fits were skipped, want %d", c.require, skipped, want)
		}
	}
	if r, err := guarded(t, guard("c", "top > 1000", "refuse")); err == nil || len(r.Record.Refused) != 4 || len(r.Record.Outputs) != 0 {
		t.Errorf("refused: %v", err)
	}
	r, err := guarded(t, guard("c", "top > 1000", "warn"))
	if err != nil || len(r.Record.Curves[0].Verdicts) != 4 {
		t.Errorf("warned: %v", err)
	}
}

// TestGuardsOnTheWhole: contrasts, inputs and the study are held to theirs; each
// result is recorded and reported, and a refusal writes no outputs.
func TestGuardsOnTheWhole(t *testing.T) {
	for _, c := range []struct{ on, require, outcome string }{
		{"pair", "p_none < 0.5", Held}, {"pair", "p_none > 0.99", "warn"}, {"pair", "largest > 1e9", "warn"}, {"pair", "p_none_holm <= 1 && p_parallel <= 1 && p_parallel_holm <= 1", Held},
		{"d", "rows_read == 120 && files == 1", Held}, {"d", "rows_read > 500", "warn"},
		{"study", "share_dropped < 0.5 && fits == 4 && skipped == 0", Held}, {"study", "rows_used == rows_read", "warn"}, {"study", "share_set_aside > 0", "warn"},
	} {
		r, err := guarded(t, guard(c.on, c.require, "warn"))
		if err != nil {
			t.Fatal(err)
		}
		if len(r.Record.Guards) != 1 || r.Record.Guards[0].Outcome != c.outcome {
			t.Errorf("%s: %s: %+v", c.on, c.require, r.Record.Guards)
			continue
		}
		page := outputs(t, r.Study.Dir)["page.md"]
		if !strings.Contains(page, "Guards on contrasts, inputs and the study") || !strings.Contains(page, "to be seen") {
			t.Error("the report does not tell of the guard")
		}
	}
	for _, on := range []string{"pair", "d", "study"} {
		require := map[string]string{"pair": "largest > 1e9", "d": "files > 9", "study": "fits > 99"}[on]
		r, err := guarded(t, guard(on, require, "refuse"))
		if err == nil || len(r.Record.Refused) != 1 || len(r.Record.Outputs) != 0 || !strings.Contains(err.Error(), "to be seen") {
			t.Errorf("%s was not refused: %v", on, err)
		}
		if runs, _ := listRuns(r.Study.Dir); !slices.Contains(runs, r.Record.Run) {
			t.Error("a refused run was not recorded")
		}
	}
}
