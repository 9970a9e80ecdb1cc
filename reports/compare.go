package reports

import (
	"fmt"
	"io"
	"math"
	"strings"
)

// Comparison is what differs between two runs, or the ledger and a run.
type Comparison struct {
	Study, From, To string
	Moves           []Moved // what matters most first
	Within, Same    int
	Notes           []string
}

// Moved is one fit that differs. NaN stands for what is not known.
type Moved struct {
	Fit, What, Why   string
	Shift            float64 // in half-widths of the old band
	By               float64 // new less old where the shift is largest
	AtText, Unit     string
	Parts            []Cause // nil where the causes cannot be told apart
	OldEDF, NewEDF   float64
	OldRule, NewRule string
	Rows             string // "2 added, 13 edited of 28"
	Readings         []ReadingPair
}

// Cause is the share of one cause, in the response's unit and in half-widths.
type Cause struct {
	Name           string
	By, HalfWidths float64
}

// ReadingPair is a reading before and after, as text.
type ReadingPair struct {
	Name, Old, New string
	Moved          bool
}

// causeNames are the columns of the split.
var causeNames = []string{"data", "smoothness", "spec", "program"}

func (c *Comparison) summary() string {
	if len(c.Moves) == 0 {
		s := "No fit moved"
		if c.Within > 0 {
			s += fmt.Sprintf("; %s by less than the tolerance", differBy(c.Within))
		}
		return s + fmt.Sprintf(", %s the same.", isAre(c.Same))
	}
	s := fmt.Sprintf("%s moved or came or went", plural(len(c.Moves), "fit", "fits"))
	if c.Within > 0 {
		s += fmt.Sprintf("; %s by less than the tolerance", differBy(c.Within))
	}
	return s + fmt.Sprintf("; %s the same.", isAre(c.Same))
}

func differBy(n int) string {
	if n == 1 {
		return "1 differs"
	}
	return fmt.Sprintf("%d differ", n)
}

func isAre(n int) string {
	if n == 1 {
		return "1 is"
	}
	return fmt.Sprintf("%d are", n)
}

// signed writes a number with its sign; nothing for one that is not known, and
// 0 for what is none.
func signed(v float64, n int) string {
	switch {
	case math.IsNaN(v):
		return ""
	case math.Abs(v) < 5e-4:
		return "0"
	case v > 0:
		return "+" + short(v, n)
	}
	return short(v, n)
}

// halves writes half-widths: two decimals are enough to judge by.
func halves(v float64) string {
	switch {
	case math.IsNaN(v):
		return ""
	case math.Abs(v) < 0.005:
		return "0"
	case math.Abs(v) >= 99.95:
		return signed(v, 3)
	case v > 0:
		return "+" + fixed(v, 2)
	}
	return fixed(v, 2)
}

// movesTable has a row for each movement, the causes in half-widths.
func (c *Comparison) movesTable() grid {
	g := grid{caption: "What moved, in half-widths of the old band, and how much of it is due to what. The causes add up to the shift.",
		header: append([]string{"fit", "what", "shift", "at"}, causeNames...),
		right:  []bool{false, false, true, false, true, true, true, true}}
	for i := range c.Moves {
		m := &c.Moves[i]
		shift := m.Shift
		if m.By < 0 {
			shift = -shift
		}
		row := []string{m.Fit, m.What, halves(shift), m.AtText}
		for _, name := range causeNames {
			v := math.NaN()
			for _, p := range m.Parts {
				if p.Name == name {
					v = p.HalfWidths
				}
			}
			row = append(row, halves(v))
		}
		g.rows = append(g.rows, row)
	}
	return g
}

// details says of one movement what its row has no room for.
func (m *Moved) details() []string {
	var out []string
	if m.Why != "" {
		out = append(out, m.Why)
	}
	if m.Rows != "" {
		out = append(out, "rows: "+m.Rows)
	}
	if !math.IsNaN(m.OldEDF) && !math.IsNaN(m.NewEDF) {
		out = append(out, fmt.Sprintf("edf: %s, was %s", short(m.NewEDF, 4), short(m.OldEDF, 4)))
	}
	if m.OldRule != "" && m.OldRule != m.NewRule {
		out = append(out, fmt.Sprintf("rule: %s, was %s", m.NewRule, m.OldRule))
	}
	if !math.IsNaN(m.By) && m.Shift > 0 {
		s := fmt.Sprintf("largest at %s: %s", m.AtText, strings.TrimSpace(signed(m.By, 3)+" "+m.Unit))
		var parts []string
		for _, p := range m.Parts {
			if math.Abs(p.HalfWidths) >= 5e-4 {
				parts = append(parts, p.Name+" "+signed(p.By, 3))
			}
		}
		if len(parts) > 0 {
			s += ", of which " + strings.Join(parts, ", ")
		}
		out = append(out, s)
	}
	for _, r := range m.Readings {
		s := fmt.Sprintf("%s: %s, was %s", r.Name, r.New, r.Old)
		if r.Moved {
			s += " (beyond its limit)"
		}
		out = append(out, s)
	}
	return out
}

// compareNodes builds the comparison once, for Markdown and HTML.
func compareNodes(c *Comparison) []node {
	out := []node{heading{1, "What moved: " + c.Study}, para{fmt.Sprintf("From %s to %s. %s", c.From, c.To, c.summary())}}
	if len(c.Moves) > 0 {
		out = append(out, c.movesTable())
	}
	if len(c.Notes) > 0 {
		out = append(out, list{c.Notes})
	}
	if len(c.Moves) > 0 {
		out = append(out, heading{2, "One by one"})
	}
	for i := range c.Moves {
		if i == maxFigures {
			out = append(out, para{fmt.Sprintf("%d more fits are in the table above.", len(c.Moves)-i)})
			break
		}
		m := &c.Moves[i]
		out = append(out, heading{3, m.Fit}, list{append([]string{m.What}, m.details()...)})
	}
	return append(out, heading{2, "How to read this"}, list{[]string{
		"The shift is the largest distance between the old and the new curve over the old range of x, in half-widths of the old band; its sign is that of new less old.",
		"Causes are let in one after another: the new files' rows at the old lambda (data); lambda chosen anew by the rule as it was (smoothness); drops, weights, order and rule of the new spec (spec). " +
			"Before them stands what the old rows at the old lambda give under this version of the program (program).",
	}})
}

// CompareMarkdown writes a comparison for a merge request.
func CompareMarkdown(c *Comparison) []byte {
	m := &markdown{figures: map[string][]byte{}}
	m.nodes(compareNodes(c))
	return []byte(strings.TrimRight(m.b.String(), "\n") + "\n")
}

// CompareHTML writes a comparison as one self-contained page.
func CompareHTML(c *Comparison) []byte { return htmlPage("What moved: "+c.Study, compareNodes(c)) }

// CompareTerminal prints a comparison for a person: the table, and what lies
// behind its first rows.
func CompareTerminal(w io.Writer, c *Comparison, width, most int) {
	fmt.Fprintln(w, wrapText(fmt.Sprintf("From %s to %s.", c.From, c.To), width, "  "))
	fmt.Fprintln(w, wrapText(c.summary(), width, "  "))
	if len(c.Moves) > 0 {
		fmt.Fprintln(w)
		g := c.movesTable()
		for i := range g.header { // the table is wide enough without
			switch g.header[i] {
			case "smoothness":
				g.header[i] = "smooth"
			case "program":
				g.header[i] = "prog"
			}
		}
		for i, r := range g.rows { // the curve's name once is enough, where there is one
			r[0] = strings.TrimSuffix(strings.Replace(r[0], "[", " ", 1), "]")
			g.rows[i] = r
		}
		rows := g.rows
		if len(rows) > most {
			rows = rows[:most]
		}
		Table(w, g.header, rows, []string{"shift and its causes in half-widths of the old band; the causes add up to it"}, width)
		if n := len(c.Moves) - len(rows); n > 0 {
			fmt.Fprintf(w, "... and %d more\n", n)
		}
		for i := range c.Moves {
			if i == most/2 {
				break
			}
			m := &c.Moves[i]
			d := m.details()
			if len(d) == 0 {
				continue
			}
			fmt.Fprintf(w, "\n%s\n", oneLine(m.Fit, width))
			for _, l := range d {
				fmt.Fprintln(w, wrapText("  "+l, width, "    "))
			}
		}
	}
	for _, n := range c.Notes {
		fmt.Fprintln(w, "\n"+wrapText(n, width, "  "))
	}
}
