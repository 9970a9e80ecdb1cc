package cli

import (
	"fmt"
	"math"
	"strings"

	"github.com/spf13/cobra"

	"batten/reports"
	"batten/runner"
	"batten/runner/ledger"
	"batten/spec/expr"
)

func (e *env) compare() *cobra.Command {
	var as string
	var hold bool
	c := &cobra.Command{
		Use:   "compare STUDY [RUN] [RUN]",
		Short: "Which curves moved between two runs, or the ledger and a run; how far; why",
		Long: `Compare says of every fit that differs how far it moved, in half-widths of the
old band, and how much of that is due to the data, to lambda chosen anew, to the
spec and to the program. Without a run it compares the ledger with the last run;
with one, that run with the last; with two, the first with the second.`,
		Example: `  batten compare study.hcl
  batten compare study.hcl 12 15
  batten compare study.hcl --as markdown > moved.md`,
		Args: cobra.RangeArgs(1, 3),
		RunE: func(c *cobra.Command, args []string) error {
			if as != "text" && as != "markdown" && as != "html" {
				return linef("--as %s: expected text, markdown or html", as)
			}
			s, err := load(args[0])
			if err != nil {
				return err
			}
			from, to := "", ""
			if len(args) > 1 {
				from = args[1]
			}
			if len(args) > 2 {
				to = args[2]
			}
			cmp, err := runner.Compare(c.Context(), s, from, to, runner.Options{})
			if err != nil {
				return err
			}
			if err := e.printComparison(s.Title, cmp, as); err != nil {
				return err
			}
			if n := len(cmp.Moves); hold && n > 0 {
				return &runner.MovedError{N: n}
			}
			return nil
		},
	}
	c.Flags().StringVar(&as, "as", "text", "text, markdown or html")
	c.Flags().BoolVar(&hold, "hold", false, "exit with status 4 when any fit moved")
	return c
}

func (e *env) printComparison(title string, c *runner.Comparison, as string) error {
	if e.json {
		return e.printJSON(comparisonJSON(c))
	}
	d := comparisonDocument(title, c)
	switch as {
	case "markdown":
		_, err := e.out.Write(reports.CompareMarkdown(d))
		return err
	case "html":
		_, err := e.out.Write(reports.CompareHTML(d))
		return err
	}
	if !e.quiet {
		reports.CompareTerminal(e.out, d, width(e.out), 40)
	}
	return nil
}

// comparisonDocument writes a comparison in the reports' terms.
func comparisonDocument(title string, c *runner.Comparison) *reports.Comparison {
	out := &reports.Comparison{Study: title, From: c.From, To: c.To, Within: c.Within, Same: c.Same, Notes: c.Notes}
	for i := range c.Moves {
		m := &c.Moves[i]
		r := reports.Moved{Fit: m.Fit, What: strings.Join(m.What, ", "), Why: m.Why, Shift: m.Shift, By: m.By, AtText: m.AtText, Unit: m.Unit,
			OldEDF: m.OldEDF, NewEDF: m.NewEDF, OldRule: m.OldRule, NewRule: m.NewRule, Rows: rowsChanged(&m.Rows)}
		for _, p := range m.Parts {
			r.Parts = append(r.Parts, reports.Cause{Name: p.Cause, By: p.By, HalfWidths: p.HalfWidths})
		}
		for _, q := range m.Readings {
			old, now := valueText(q.Old, &q), valueText(q.New, &q)
			if old != now || q.Moved {
				r.Readings = append(r.Readings, reports.ReadingPair{Name: q.Name, Old: old, New: now, Moved: q.Moved})
			}
		}
		out.Moves = append(out.Moves, r)
	}
	return out
}

func rowsChanged(r *runner.RowChange) string {
	var s []string
	for _, p := range []struct {
		n    int
		what string
	}{{r.Added, "added"}, {r.Removed, "removed"}, {r.Edited, "edited"}} {
		if p.n > 0 {
			s = append(s, fmt.Sprintf("%d %s", p.n, p.what))
		}
	}
	if len(s) == 0 {
		return ""
	}
	return strings.Join(s, ", ") + fmt.Sprintf(" (%d, were %d)", r.New, r.Old)
}

func valueText(v ledger.Value, q *runner.ReadingChange) string {
	if q.IsDate {
		day := func(v float64) string {
			switch {
			case math.IsNaN(v):
				return "none"
			case math.IsInf(v, 0):
				return "open"
			}
			return expr.FormatDate(math.Round(v))
		}
		if math.IsNaN(v.Value) {
			return "none"
		}
		return fmt.Sprintf("%s [%s, %s]", day(v.Value), day(v.Lower), day(v.Upper))
	}
	val, lo, hi := reports.Rounded(v.Value, v.Lower, v.Upper)
	s := val
	if q.Unit != "" && val != "none" {
		s += " " + q.Unit
	}
	if val != "none" && lo != "none" {
		s += fmt.Sprintf(" [%s, %s]", lo, hi)
	}
	return s
}

func comparisonJSON(c *runner.Comparison) any {
	type part struct {
		Cause      string `json:"cause"`
		By         number `json:"by"`
		HalfWidths number `json:"half_widths"`
	}
	type pair struct {
		Name string    `json:"name"`
		Unit string    `json:"unit,omitempty"`
		Old  [3]number `json:"old"` // value, lower, upper
		New  [3]number `json:"new"`
		Beyo bool      `json:"beyond_limit"`
	}
	type move struct {
		Fit      string         `json:"fit"`
		Curve    string         `json:"curve"`
		Group    []string       `json:"group"`
		What     []string       `json:"what"`
		Why      string         `json:"why,omitempty"`
		Shift    number         `json:"shift_half_widths"`
		By       number         `json:"by"`
		Unit     string         `json:"unit,omitempty"`
		At       number         `json:"at"`
		Parts    []part         `json:"parts"`
		EDF      [2]number      `json:"edf"` // old, new
		Lambda   [2]number      `json:"lambda"`
		Rule     [2]string      `json:"rule"`
		Rows     map[string]int `json:"rows"`
		Readings []pair         `json:"readings"`
	}
	moves := []move{}
	for i := range c.Moves {
		m := &c.Moves[i]
		j := move{Fit: m.Fit, Curve: m.Curve, Group: m.Group, What: m.What, Why: m.Why, Shift: number(m.Shift), By: number(m.By), Unit: m.Unit, At: number(m.At),
			Parts: []part{}, EDF: [2]number{number(m.OldEDF), number(m.NewEDF)}, Lambda: [2]number{number(m.OldLambda), number(m.NewLambda)},
			Rule: [2]string{m.OldRule, m.NewRule}, Readings: []pair{},
			Rows: map[string]int{"old": m.Rows.Old, "new": m.Rows.New, "added": m.Rows.Added, "removed": m.Rows.Removed, "edited": m.Rows.Edited}}
		for _, p := range m.Parts {
			j.Parts = append(j.Parts, part{p.Cause, number(p.By), number(p.HalfWidths)})
		}
		three := func(v ledger.Value) [3]number { return [3]number{number(v.Value), number(v.Lower), number(v.Upper)} }
		for _, q := range m.Readings {
			j.Readings = append(j.Readings, pair{q.Name, q.Unit, three(q.Old), three(q.New), q.Moved})
		}
		moves = append(moves, j)
	}
	notes := c.Notes
	if notes == nil {
		notes = []string{}
	}
	return map[string]any{"from": c.From, "to": c.To, "moves": moves, "within_tolerance": c.Within, "same": c.Same, "notes": notes}
}
