package reports

import (
	"fmt"
	"math"
	"sort"
	"strconv"
	"strings"
)

// A report is built once as blocks of plain text, tables and figures, and then
// written as Markdown or HTML: the same content in the same order.
type (
	node    interface{}
	heading struct {
		level int
		text  string
	}
	para struct{ text string }
	list struct{ items []string }
	grid struct {
		caption string
		header  []string
		right   []bool // columns of numbers
		rows    [][]string
		notes   []string // numbered footnotes
	}
	picture struct {
		name    string // of its file
		caption string
		draw    func(t theme) []byte // nil bytes: there is nothing to show
	}
	gallery struct {
		pictures []picture
		small    bool
		even     bool // all of one size
	}
	fold struct {
		summary string
		body    []node
	}
)

// Limits of a report. What is beyond them is in the exports, and the report
// says so.
const (
	maxFigures = 200  // fits shown in full
	maxRows    = 2000 // of a table
	maxTiny    = 60   // small multiples
	foldFrom   = 5    // fits from which details are folded
)

// build makes the whole report.
func build(d *Document) []node {
	var out []node
	out = append(out, heading{1, d.Title})
	var who []string
	if d.Study != "" && d.Study != d.Title {
		who = append(who, d.Study)
	}
	if d.Owner != "" {
		who = append(who, d.Owner)
	}
	if d.Dated != "" {
		who = append(who, d.Dated)
	}
	if len(who) > 0 {
		out = append(out, para{strings.Join(who, " · ")})
	}
	out = append(out, summary(d)...)
	rules := map[string]bool{}
	pointwise := len(d.Curves) == 0
	orders := map[int]bool{}
	for i := range d.Curves {
		orders[d.Curves[i].Order] = true
		pointwise = pointwise || d.Curves[i].BandKind != "simultaneous"
		out = append(out, curveSection(&d.Curves[i], i, rules)...)
	}
	for i := range d.Contrasts {
		out = append(out, contrastSection(&d.Contrasts[i], i)...)
	}
	out = append(out, wholeGuards(d.Guards)...)
	out = append(out, howToRead(rules, orders, pointwise, len(d.Contrasts) > 0)...)
	return append(out, record(&d.Record)...)
}

func summary(d *Document) []node {
	s := d.Summary
	text := fmt.Sprintf("%s fitted", plural(s.Fitted, "curve", "curves"))
	if s.Skipped > 0 {
		text += fmt.Sprintf(", %s skipped", plural(s.Skipped, "group", "groups"))
	}
	if s.Refused > 0 {
		text += fmt.Sprintf(", %s refused by a guard", plural(s.Refused, "group", "groups"))
	}
	flagged := 0
	for _, c := range d.Curves {
		for i := range c.Fits {
			if len(c.Fits[i].Flags) > 0 {
				flagged++
			}
		}
	}
	if flagged > 0 {
		text += fmt.Sprintf("; %d of those shown here bear flags", flagged)
	}
	text += ". "
	text += notHolding(d.Guards)
	switch {
	case s.Ledger == "":
		return []node{para{text + "Nothing has been accepted yet, so there is no ledger to compare with."}}
	case len(s.Moved) == 0:
		return []node{para{text + "Nothing moved against the ledger (" + s.Ledger + ")."}}
	}
	out := []node{para{text + differ(len(s.Moved)) + " from the ledger (" + s.Ledger + ")." + pending(s.Moved)}}
	return append(out, movedTable(s.Moved))
}

func differ(n int) string {
	if n == 1 {
		return "1 fit differs"
	}
	return fmt.Sprintf("%d fits differ", n)
}

// pending says how many of the fits that differ were left out of the last
// acceptance.
func pending(moved []Move) string {
	n := 0
	for _, m := range moved {
		if m.Pending {
			n++
		}
	}
	switch n {
	case 0:
		return ""
	case 1:
		return " 1 of them is pending: that acceptance left it as it was."
	}
	return fmt.Sprintf(" %d of them are pending: that acceptance left them as they were.", n)
}

func movedTable(moved []Move) grid {
	g := grid{caption: "What moved against the ledger. The shift is the largest distance between the curves, in half-widths of the accepted band.",
		header: []string{"fit", "what", "shift", "at", "edf before", "edf now"}, right: []bool{false, false, true, false, true, true}}
	for i, m := range moved {
		if i == maxRows {
			break
		}
		g.rows = append(g.rows, []string{m.Fit, m.What, dash(m.Shift, 2), m.AtText, dash(m.OldEDF, -2), dash(m.NewEDF, -2)})
	}
	return g
}

// dash writes a number, or nothing for NaN; n < 0 means decimals.
func dash(v float64, n int) string {
	if math.IsNaN(v) {
		return ""
	}
	if n < 0 {
		return fixed(v, -n)
	}
	return short(v, n)
}

func curveSection(c *Curve, index int, rules map[string]bool) []node {
	out := []node{heading{2, c.Name}, para{definition(c)}}
	out = append(out, para{rowsText(&c.Rows)})
	if items := lost(&c.Rows); len(items) > 0 {
		out = append(out, list{items})
	}
	shown, left := choose(c.Fits)
	out = append(out, overview(c))
	if len(shown) > 1 {
		g := gallery{small: true}
		lo, hi := extent(shown)
		for k, f := range shown {
			if k == maxTiny {
				break
			}
			g.pictures = append(g.pictures, picture{fmt.Sprintf("%s_all_%03d.svg", fileName(c.Name, index), k+1), groupText(c, f),
				func(t theme) []byte { return tinyFigure(c, f, lo, hi, t) }})
		}
		text := "Every curve on the same scales."
		if len(shown) > maxTiny || left > 0 {
			text = fmt.Sprintf("The first %d curves on the same scales, flagged ones first where there are more.", min(len(shown), maxTiny))
		}
		out = append(out, heading{3, "All together"}, para{text}, g)
	}
	out = append(out, heading{3, "One by one"})
	if left > 0 {
		out = append(out, para{fmt.Sprintf("%d more fits are not shown in full here; the exports hold all of them.", left)})
	}
	for k, f := range shown {
		rules[f.Rule] = true
		body := fitBody(c, f, fmt.Sprintf("%s_%03d", fileName(c.Name, index), k+1))
		if len(shown) >= foldFrom {
			flags := ""
			if len(f.Flags) > 0 {
				flags = " · " + flagNames(f)
			}
			out = append(out, fold{fmt.Sprintf("%s · edf %s%s", f.Name, fixed(f.EDF, 2), flags), body})
		} else {
			out = append(append(out, heading{4, f.Name}), body...)
		}
	}
	for _, f := range c.Fits {
		rules[f.Rule] = true
	}
	return append(out, exceptions(c)...)
}

// percent writes a level as a percentage.
func percent(level float64) string {
	return strconv.FormatFloat(math.Round(1e6*level)/1e4, 'f', -1, 64)
}

// fileName is a curve's name as part of a file's.
func fileName(name string, index int) string {
	s := strings.Map(func(r rune) rune {
		if r >= 'a' && r <= 'z' || r >= 'A' && r <= 'Z' || r >= '0' && r <= '9' || r == '_' {
			return r
		}
		return -1
	}, name)
	if len(s) > 40 {
		s = s[:40]
	}
	return fmt.Sprintf("%d_%s", index+1, s)
}

func flagNames(f *Fit) string {
	var s []string
	for _, x := range f.Flags {
		s = append(s, strings.ReplaceAll(x.Name, "_", " "))
	}
	return strings.Join(s, ", ")
}

// choose picks the fits shown in full: those that carry points, flagged first
// where not all can be.
func choose(fits []Fit) (shown []*Fit, left int) {
	for i := range fits {
		if len(fits[i].Points) > 0 {
			shown = append(shown, &fits[i])
		}
	}
	if len(shown) > maxFigures {
		sort.SliceStable(shown, func(a, b int) bool { return len(shown[a].Flags) > 0 && len(shown[b].Flags) == 0 })
		shown = shown[:maxFigures]
	}
	return shown, len(fits) - len(shown)
}

func definition(c *Curve) string {
	s := fmt.Sprintf("%s along %s", c.Y.label(), c.X.label())
	if len(c.By) > 0 {
		s += ", one curve for each " + strings.Join(c.By, " and ")
	}
	if c.Weight != "" {
		s += fmt.Sprintf(", rows weighted by %s", c.Weight)
	}
	if c.Order == 1 || c.Order == 3 {
		s += fmt.Sprintf(", with a penalty of order %d", c.Order)
	}
	return s + fmt.Sprintf(". Smoothness by the rule %s. The band holds %s %s with %s%%.", c.Rule, c.BandFor, held(c.BandKind), percent(c.Level))
}

func rowsText(r *RowCount) string {
	return fmt.Sprintf("Of %s read, %d were used.", plural(r.Read, "row", "rows"), r.Used)
}

func lost(r *RowCount) []string {
	var out []string
	for _, d := range r.Dropped {
		out = append(out, fmt.Sprintf("%d dropped (%s): %s", d.N, d.Label, d.Reason))
	}
	for _, s := range r.SetAside {
		out = append(out, fmt.Sprintf("%d set aside: %s", s.N, s.Reason))
	}
	if r.ZeroWeight > 0 {
		out = append(out, fmt.Sprintf("%d left out: their weight is 0", r.ZeroWeight))
	}
	return out
}

func groupText(c *Curve, f *Fit) string {
	if len(c.By) == 0 {
		return c.Name
	}
	return strings.Join(f.Group, ", ")
}

// overview is the table of groups; flags are numbered footnotes.
func overview(c *Curve) grid {
	g := grid{caption: fmt.Sprintf("%s: the fits. Intervals hold with %s%%.", c.Name, percent(c.Level))}
	g.header = append(append(g.header, c.By...), "n", "distinct", "rule", "edf", "lambda", "sigma")
	g.right = make([]bool, len(c.By))
	g.right = append(g.right, true, true, false, true, true, true)
	g.header, g.right = append(g.header, "flags"), append(g.right, false)
	for _, r := range c.Readings {
		g.header, g.right = append(g.header, r), append(g.right, true)
	}
	number := map[string]int{}
	for i := range c.Fits {
		if i == maxRows {
			g.notes = append(g.notes, fmt.Sprintf("%d more fits are in the exports.", len(c.Fits)-i))
			break
		}
		f := &c.Fits[i]
		rule := f.Rule
		if f.Exception != "" {
			rule += "\u00a0*"
		}
		row := append(append([]string(nil), f.Group...), fmt.Sprint(f.N), fmt.Sprint(f.Distinct), rule, fixed(f.EDF, 2), short(f.Lambda, 4), short(f.Sigma, 4))
		var marks []string
		for _, x := range f.Flags {
			n, ok := number[x.Name+"\x00"+x.Text]
			if !ok {
				n = len(g.notes) + 1
				number[x.Name+"\x00"+x.Text] = n
				g.notes = append(g.notes, strings.ReplaceAll(x.Name, "_", " ")+": "+x.Text)
			}
			marks = append(marks, fmt.Sprint(n))
		}
		row = append(row, strings.Join(marks, " "))
		for _, name := range c.Readings {
			row = append(row, readingCell(c, f, name))
		}
		g.rows = append(g.rows, row)
	}
	return g
}

// readingCell writes the first result of a reading: value and interval.
func readingCell(c *Curve, f *Fit, name string) string {
	for _, r := range f.Readings {
		if r.Name != name {
			continue
		}
		v, lo, hi := ReadingText(c.X, r)
		if v == "none" || lo == "" {
			return v
		}
		return fmt.Sprintf("%s [%s, %s]", v, lo, hi)
	}
	return ""
}

// fitBody is one fit in full.
func fitBody(c *Curve, f *Fit, file string) []node {
	out := []node{gallery{pictures: []picture{
		{file + ".svg", fmt.Sprintf("%d rows, the curve with edf %s, and its band.", f.N, fixed(f.EDF, 2)), func(t theme) []byte { return fitFigure(c, f, t) }},
		{file + "_choice.svg", "Score against edf: where the rule found its minimum.", func(t theme) []byte { return choiceFigure(f, t) }},
		{file + "_residuals.svg", "Residuals.", func(t theme) []byte { return residualFigure(c, f, t) }},
	}}}
	out = append(out, para{f.Evidence.Why})
	if f.Exception != "" {
		out = append(out, para{fmt.Sprintf("This fit follows the exception %q.", f.Exception)})
	}
	for _, x := range f.Flags {
		out = append(out, para{"Flag " + strings.ReplaceAll(x.Name, "_", " ") + ": " + x.Text})
	}
	if len(f.Readings) > 0 {
		g := grid{caption: "Readings", header: []string{"reading", "kind", "value", "lower", "upper", "unit", "note"},
			right: []bool{false, false, true, true, true, false, false}}
		for _, r := range f.Readings {
			v, lo, hi := ReadingText(c.X, r)
			at := ""
			if r.AtIsX && !math.IsNaN(r.At) {
				at = " at " + place(c.X, r.At)
			} else if r.Kind == "crossing" {
				at = " of " + exact(r.At)
			}
			if r.Kind == "value" || r.Kind == "slope" {
				if at = " at " + exact(r.At); c.X.Date {
					at = " at " + isoDate(r.At)
				}
			}
			g.rows = append(g.rows, []string{r.Name, strings.ReplaceAll(strings.ReplaceAll(r.Kind, "_at", ", place"), "_", " ") + at, v, lo, hi, unitText(r, c.X), r.Note})
		}
		out = append(out, g)
	}
	if len(f.Evidence.Others) > 0 {
		g := grid{caption: "What the rules would take, each alone, and how far the curve would move, in half-widths of its band.",
			header: []string{"rule", "edf", "lambda", "largest shift"}, right: []bool{false, true, true, true}}
		for _, o := range f.Evidence.Others {
			g.rows = append(g.rows, []string{o.Rule, fixed(o.EDF, 2), short(o.Lambda, 4), dash(o.Shift, -2)})
		}
		out = append(out, g)
	}
	return out
}

// unitText is a reading's unit; a date needs none.
func unitText(r Reading, x Axis) string {
	if r.ValueIsX && x.Date {
		return ""
	}
	return r.Unit
}

func exceptions(c *Curve) []node {
	var out []node
	if len(c.Exceptions) > 0 {
		g := grid{caption: "Exceptions to the rule, with their reasons", header: []string{"exception", "for", "rule", "reason", "fits"},
			right: make([]bool, 5)}
		for _, e := range c.Exceptions {
			g.rows = append(g.rows, []string{e.Name, e.Only, e.Rule, e.Reason, some(e.Fits)})
		}
		out = append(out, g)
	}
	if len(c.Guards) > 0 {
		g := grid{caption: "Guards", header: []string{"guard", "requires", "otherwise", "reason", "does not hold for"}, right: make([]bool, 5)}
		for _, e := range c.Guards {
			g.rows = append(g.rows, []string{e.Name, e.Require, e.Otherwise, e.Reason, some(e.Failed)})
		}
		out = append(out, g)
	}
	if len(c.Skipped) > 0 {
		g := grid{caption: "Groups without a curve", header: []string{"group", "n", "distinct", "why"}, right: []bool{false, true, true, false}}
		for i, s := range c.Skipped {
			if i == maxRows {
				break
			}
			g.rows = append(g.rows, []string{s.Group, fmt.Sprint(s.N), fmt.Sprint(s.Distinct), s.Why})
		}
		out = append(out, g)
	}
	if len(out) > 0 {
		out = append([]node{heading{3, "Exceptions, guards and groups left out"}}, out...)
	}
	return out
}

func some(names []string) string {
	if len(names) == 0 {
		return "none"
	}
	if len(names) > 12 {
		return strings.Join(names[:12], "; ") + fmt.Sprintf("; and %d more", len(names)-12)
	}
	return strings.Join(names, "; ")
}
