package cli

import (
	"fmt"
	"strings"

	"github.com/spf13/cobra"

	"batten/reports"
	"batten/runner"
	"batten/runner/store"
	"batten/runner/table"
)

func (e *env) why() *cobra.Command {
	var run, trace string
	c := &cobra.Command{
		Use:   "why STUDY CURVE [col=value ...]",
		Short: "How this curve was chosen, from the record",
		Long: `Why tells how one curve came to be: the rows that went in, the rule, the
candidates and their scores, the choice and its runner-up, what other rules
would have taken, flags with what to do about each, and readings. It needs the
record and the store under .batten, not the data.`,
		Example: `  batten why study.hcl firmness cultivar=Aroma store=air`,
		Args:    cobra.MinimumNArgs(2),
		RunE: func(c *cobra.Command, args []string) error {
			rec, match, err := reopen(args, run)
			if err != nil {
				return err
			}
			a, err := rec.Why(c.Context(), args[1], match)
			if err != nil {
				return err
			}
			if len(a.Matches) > 0 {
				return severalGroups(args[1], a.Matches)
			}
			if trace != "" {
				if err := writeTrace(trace, a); err != nil {
					return err
				}
			}
			if e.json {
				return e.printWhyJSON(a)
			}
			e.printWhy(a)
			return nil
		},
	}
	c.Flags().StringVar(&trace, "trace", "", "write the candidates and their scores to this CSV file")
	c.Flags().StringVar(&run, "run", "", "a recorded run (default: the last)")
	return c
}

// severalGroups says which groups the conditions leave.
func severalGroups(curve string, groups []string) error {
	const most = 30
	list := groups
	more := ""
	if len(list) > most {
		more = fmt.Sprintf("\n  ... and %d more", len(list)-most)
		list = list[:most]
	}
	return linef("%d groups of %q match; name one of them by its columns:\n  %s%s", len(groups), curve, strings.Join(list, "\n  "), more)
}

// printWhy tells the story in the order a person would.
func (e *env) printWhy(a *runner.Answer) {
	w, wide := e.out, width(e.out)
	f, c := &a.Fit, &a.Curve
	para := func(format string, args ...any) {
		fmt.Fprintln(w, wrap(fmt.Sprintf(format, args...), wide))
	}
	fmt.Fprintf(w, "%s\n%s\n\n", f.Name, strings.Repeat("-", min(wide, len(f.Name))))

	weight := ""
	if c.Weight != "" {
		weight = ", weighted by " + c.Weight
	}
	para("Rows: %d rows at %d distinct values of %s went into this fit: %s along %s%s. Of the curve's %d rows read, %d were used in all its groups.",
		f.N, f.Distinct, c.X.Name, c.Y.Name, c.X.Name, weight, c.Rows.Read, c.Rows.Used)
	for _, d := range c.Rows.Dropped {
		para("  dropped %d (%s): %s", d.N, d.Label, d.Reason)
	}
	for _, d := range c.Rows.SetAside {
		para("  set aside %d: %s", d.N, d.Reason)
	}
	if c.Rows.ZeroWeight > 0 {
		para("  left out %d with weight 0", c.Rows.ZeroWeight)
	}
	lines := map[string]runner.FileLines{}
	for _, l := range a.Lines {
		lines[l.Path] = l
	}
	for _, in := range a.Record.Inputs {
		para("  from %s (SHA-256 %.16s...)", in.Path, in.SHA256)
		if l, ok := lines[in.Path]; ok {
			para("    %s, on lines %s", count(l.N, "row", "rows"), l.Lines)
		}
	}
	if a.LinesNote != "" {
		para("  (%s)", a.LinesNote)
	}
	fmt.Fprintln(w)

	rule := c.Rule
	if f.Exception != "" {
		for _, x := range c.Exceptions {
			if x.Name == f.Exception {
				rule = fmt.Sprintf("%s, by the exception %q (only = %s): %s", x.Rule, x.Name, x.Only, x.Reason)
			}
		}
	}
	para("Rule: %s", rule)
	para("  %s", historyText(&a.History))
	if a.Skipped != "" {
		para("\nThere is no curve: %s.", a.Skipped)
		return
	}
	para("Choice: %s", f.Evidence.Why)
	fmt.Fprintf(w, "  lambda %s, edf %.4f, sigma %.4g, score %.6g\n", table.FormatNumber(f.Lambda), f.EDF, f.Sigma, f.Score)
	if plot := reports.ScorePlot(f.Evidence, min(wide, 72), 12); plot != "" {
		fmt.Fprintf(w, "\n%s", plot)
	}
	if len(f.Evidence.Others) > 0 {
		fmt.Fprintln(w, "\nWhat the rules would take, each alone (shift: largest, in half-widths of the band):")
		var rows [][]string
		for _, o := range f.Evidence.Others {
			rows = append(rows, []string{o.Rule, fmt.Sprintf("%.3f", o.EDF), fmt.Sprintf("%.4g", o.Lambda), fmt.Sprintf("%.2f", o.Shift)})
		}
		reports.Table(w, []string{"rule", "edf", "lambda", "shift"}, rows, nil, wide)
	}
	if len(f.Flags) > 0 {
		fmt.Fprintln(w, "\nFlags:")
		for _, fl := range f.Flags {
			para("  %s: %s", fl.Name, fl.Text)
		}
	}
	e.printReadings(a, wide)
	switch {
	case a.Accepted != nil:
		para("\nLedger: edf %.2f, lambda %.4g, %d rows (%s).", a.Accepted.EDF, a.Accepted.Lambda, a.Accepted.N, a.Ledger)
		e.printAccepted(a, wide)
	case a.Ledger != "":
		para("\nLedger: this fit is not in it (%s).", a.Ledger)
	default:
		para("\nLedger: nothing has been accepted yet.")
	}
	para("Run %s, finished %s, %s; spec SHA-256 %.16s...", a.Run, a.Finished, a.Record.Program, a.Record.Spec.SHA256)
}

// historyText says when the rule got its text, and whether that was after the
// data arrived.
func historyText(h *runner.History) string {
	if h.Unknown != "" {
		return "When it was last changed is not known: " + h.Unknown + "."
	}
	if h.Changed == nil {
		return "As it was run it has not been committed."
	}
	s := fmt.Sprintf("Last changed %s by %s (commit %.10s: %s)", h.Changed.When[:min(10, len(h.Changed.When))], h.Changed.Who, h.Changed.ID, h.Changed.Subject)
	if h.Unchanged {
		s = strings.Replace(s, "Last changed", "Unchanged since the spec was first committed,", 1)
	}
	switch {
	case len(h.Data) == 0:
		return s + "; when the data arrived is not known: they are not in git."
	case h.After:
		return s + "; that was AFTER data that it chose from were committed."
	}
	return s + "; before the data were last committed."
}

// printAccepted sets readings beside those that were accepted.
func (e *env) printAccepted(a *runner.Answer, wide int) {
	var rows [][]string
	seen := map[string]bool{}
	for _, r := range a.Fit.Readings {
		name := r.Name
		if strings.HasSuffix(r.Kind, "_at") {
			name += "_at"
		}
		if seen[name] {
			continue
		}
		seen[name] = true
		for _, old := range a.Accepted.Readings {
			if old.Name != name {
				continue
			}
			val, _, _ := reports.ReadingText(a.Curve.X, r)
			was := r
			was.Value, was.Lower, was.Upper = old.Value, old.Lower, old.Upper
			before, lo, hi := reports.ReadingText(a.Curve.X, was)
			rows = append(rows, []string{name, val, before, lo, hi, r.Unit})
		}
	}
	if len(rows) > 0 {
		reports.Table(e.out, []string{"reading", "now", "accepted", "lower", "upper", "unit"}, rows, nil, wide)
	}
}

// writeTrace writes the evidence table whole or not at all.
func writeTrace(path string, a *runner.Answer) error {
	f, err := store.Create(path)
	if err != nil {
		return err
	}
	if err := a.Trace(f); err != nil {
		f.Abort()
		return err
	}
	return f.Commit()
}

func (e *env) printReadings(a *runner.Answer, wide int) {
	if len(a.Fit.Readings) == 0 {
		return
	}
	fmt.Fprintln(e.out, "\nReadings:")
	var rows [][]string
	notes := []string{fmt.Sprintf("%g%% intervals.", 100*a.Curve.Level)}
	for _, r := range a.Fit.Readings {
		val, lo, hi := reports.ReadingText(a.Curve.X, r)
		mark := ""
		if r.Note != "" {
			mark = fmt.Sprintf("(%d)", len(notes))
			notes = append(notes, mark+" "+r.Note)
		}
		rows = append(rows, []string{r.Name, r.Kind, val, lo, hi, r.Unit, mark})
	}
	reports.Table(e.out, []string{"reading", "kind", "value", "lower", "upper", "unit", ""}, rows, notes, wide)
}

// wrap breaks text at words so that no line is wider than width; lines after
// the first are indented as the first is, and two more.
func wrap(text string, width int) string {
	var out strings.Builder
	for i, line := range strings.Split(text, "\n") {
		if i > 0 {
			out.WriteByte('\n')
		}
		indent := line[:len(line)-len(strings.TrimLeft(line, " "))]
		col := len(indent)
		out.WriteString(indent)
		for k, word := range strings.Fields(line) {
			n := len([]rune(word))
			if k > 0 && col+1+n > width {
				out.WriteString("\n" + indent + "  ")
				col = len(indent) + 2
			} else if k > 0 {
				out.WriteByte(' ')
				col++
			}
			out.WriteString(word)
			col += n
		}
	}
	return out.String()
}

// printWhyJSON prints the whole answer for programs; what JSON cannot carry
// (NaN, an open interval's end) is null.
func (e *env) printWhyJSON(a *runner.Answer) error {
	f := &a.Fit
	group := map[string]string{}
	for k, b := range a.Curve.By {
		group[b] = f.Group[k]
	}
	type candidate struct {
		Lambda number `json:"lambda"`
		EDF    number `json:"edf"`
		RSS    number `json:"rss"`
		GCV    number `json:"gcv"`
		LOOCV  number `json:"loocv"`
		REML   number `json:"reml"`
		Score  number `json:"score"`
	}
	type minimum struct {
		Lambda number `json:"lambda"`
		EDF    number `json:"edf"`
		Score  number `json:"score"`
		AtEnd  bool   `json:"at_end"`
		Chosen bool   `json:"chosen"`
	}
	type other struct {
		Rule   string `json:"rule"`
		Lambda number `json:"lambda"`
		EDF    number `json:"edf"`
		Shift  number `json:"shift"`
	}
	type reading struct {
		Name  string `json:"reading"`
		Kind  string `json:"kind"`
		At    number `json:"at"`
		Value number `json:"value"`
		Lower number `json:"lower"`
		Upper number `json:"upper"`
		Unit  string `json:"unit"`
		Note  string `json:"note,omitempty"`
	}
	candidates, minima, others, readings := []candidate{}, []minimum{}, []other{}, []reading{}
	for _, c := range f.Evidence.Candidates {
		candidates = append(candidates, candidate{number(c.Lambda), number(c.EDF), number(c.RSS), number(c.GCV), number(c.LOOCV), number(c.REML), number(c.Score)})
	}
	for _, m := range f.Evidence.Minima {
		minima = append(minima, minimum{number(m.Lambda), number(m.EDF), number(m.Score), m.AtEnd, m.Chosen})
	}
	for _, o := range f.Evidence.Others {
		others = append(others, other{o.Rule, number(o.Lambda), number(o.EDF), number(o.Shift)})
	}
	for _, r := range f.Readings {
		readings = append(readings, reading{r.Name, r.Kind, number(r.At), number(r.Value), number(r.Lower), number(r.Upper), r.Unit, r.Note})
	}
	flags := map[string]string{}
	for _, fl := range f.Flags {
		flags[fl.Name] = fl.Text
	}
	chosen := map[string]any{"lambda": number(f.Lambda), "edf": number(f.EDF), "rss": number(f.RSS), "sigma": number(f.Sigma),
		"gcv": number(f.GCV), "loocv": number(f.LOOCV), "reml": number(f.REML), "score": number(f.Score)}
	out := map[string]any{
		"fit": f.Name, "group": group, "run": a.Run, "finished": a.Finished, "n": f.N, "distinct": f.Distinct,
		"rule": f.Rule, "exception": f.Exception, "chosen": chosen, "why": f.Evidence.Why, "candidates": candidates,
		"minima": minima, "others": others, "flags": flags, "readings": readings, "record": a.Record,
		"order": a.Order, "rule_history": historyJSON(&a.History), "lines": linesJSON(a),
	}
	if a.Skipped != "" {
		out["skipped"] = a.Skipped
		delete(out, "chosen")
	}
	if a.Accepted != nil {
		out["accepted"] = map[string]any{"edf": number(a.Accepted.EDF), "lambda": number(a.Accepted.Lambda), "n": a.Accepted.N, "ledger": a.Ledger}
	}
	return e.printJSON(out)
}

// isFigure tells whether an output is a figure of a report: there may be
// hundreds, so their names are not printed.
func isFigure(path string) bool { return strings.HasSuffix(path, ".svg") }

func historyJSON(h *runner.History) any {
	type commit struct {
		ID      string `json:"commit"`
		When    string `json:"when"`
		Who     string `json:"who"`
		Subject string `json:"subject"`
		Path    string `json:"path,omitempty"`
	}
	out := map[string]any{"unchanged_since_first": h.Unchanged, "after_data": h.After}
	if h.Unknown != "" {
		return map[string]any{"unknown": h.Unknown}
	}
	if h.Changed != nil {
		out["changed"] = commit(*h.Changed)
	}
	data := []commit{}
	for _, d := range h.Data {
		data = append(data, commit(d))
	}
	out["data"] = data
	return out
}

func linesJSON(a *runner.Answer) any {
	type lines struct {
		Path  string `json:"path"`
		Rows  int    `json:"rows"`
		Lines string `json:"lines"`
	}
	if a.LinesNote != "" {
		return map[string]any{"unknown": a.LinesNote}
	}
	out := []lines{}
	for _, l := range a.Lines {
		out = append(out, lines{l.Path, l.N, l.Lines})
	}
	return out
}
