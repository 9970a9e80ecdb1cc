package reports

import (
	"fmt"
	"io"
	"math"
	"sort"
	"strings"

	"github.com/olekukonko/tablewriter"
	"github.com/olekukonko/tablewriter/renderer"
	"github.com/olekukonko/tablewriter/tw"
)

// TerminalOptions say how a terminal is written to.
type TerminalOptions struct {
	Width int
	Color bool
}

// mostLines is how many fits a terminal's table shows.
const mostLines = 40

// Terminal writes the summary of a run: counts, a table of fits a curve,
// flags as footnotes, what moved.
func Terminal(w io.Writer, d *Document, opt TerminalOptions) {
	if opt.Width <= 0 {
		opt.Width = 80
	}
	bold, alarm, plain := "", "", ""
	if opt.Color {
		bold, alarm, plain = "\x1b[1m", "\x1b[33m", "\x1b[0m"
	}
	moved := map[string]bool{}
	for _, m := range d.Summary.Moved {
		moved[m.Fit] = true
	}
	for i := range d.Curves {
		c := &d.Curves[i]
		if i > 0 {
			fmt.Fprintln(w)
		}
		fmt.Fprintf(w, "%s%s%s\n", bold, oneLine(c.Name, opt.Width), plain)
		fmt.Fprintln(w, wrapText(fmt.Sprintf("%s along %s; %s; %s", c.Y.label(), c.X.label(), c.Rule, strings.ToLower(rowsText(&c.Rows)[:1])+rowsText(&c.Rows)[1:]), opt.Width, "  "))
		for _, l := range lost(&c.Rows) {
			fmt.Fprintln(w, wrapText("  "+l, opt.Width, "    "))
		}
		fits := make([]*Fit, len(c.Fits))
		for k := range fits {
			fits[k] = &c.Fits[k]
		}
		left := 0
		if len(fits) > mostLines {
			sort.SliceStable(fits, func(a, b int) bool { return weight(fits[a], moved) > weight(fits[b], moved) })
			left = len(fits) - mostLines
			fits = fits[:mostLines]
		}
		terminalFits(w, c, fits, opt, alarm, plain)
		if left > 0 {
			fmt.Fprintf(w, "%d more fits; moved and flagged ones are shown first\n", left)
		}
		for k, s := range c.Skipped {
			if k == 10 {
				fmt.Fprintf(w, "... and %d more groups without a curve\n", len(c.Skipped)-k)
				break
			}
			word, on, off := "skipped", "", ""
			if s.Refused {
				word, on, off = "refused", alarm, plain
			}
			fmt.Fprintln(w, on+wrapText(fmt.Sprintf("%s %s: %s", word, s.Group, s.Why), opt.Width, "    ")+off)
		}
	}
	for i := range d.Guards {
		if g := &d.Guards[i]; len(g.Failed) > 0 {
			fmt.Fprintln(w, alarm+wrapText(guardLine(g), opt.Width, "    ")+plain)
		}
	}
	fmt.Fprintln(w)
	switch {
	case d.Summary.Ledger == "":
		fmt.Fprintln(w, wrapText("No ledger yet: look at the curves, then accept them (batten accept).", opt.Width, "  "))
	case len(d.Summary.Moved) == 0:
		fmt.Fprintln(w, wrapText("Nothing moved against the ledger ("+d.Summary.Ledger+").", opt.Width, "  "))
	default:
		text := fmt.Sprintf("%s from the ledger (%s)", differ(len(d.Summary.Moved)), d.Summary.Ledger)
		if left := pending(d.Summary.Moved); left != "" {
			text += "." + left
		} else {
			text += ":"
		}
		fmt.Fprintln(w, alarm+wrapText(text, opt.Width, "  ")+plain)
		g := movedTable(d.Summary.Moved)
		rows := g.rows
		if len(rows) > mostLines {
			rows = rows[:mostLines]
		}
		Table(w, g.header, rows, nil, opt.Width)
		if n := len(d.Summary.Moved) - len(rows); n > 0 {
			fmt.Fprintf(w, "... and %d more\n", n)
		}
	}
}

func weight(f *Fit, moved map[string]bool) int {
	n := 0
	if moved[f.Name] {
		n += 2
	}
	if len(f.Flags) > 0 {
		n++
	}
	return n
}

// terminalFits writes a curve's table: groups, edf, sigma, as many readings
// as the width holds, flags as numbers.
func terminalFits(w io.Writer, c *Curve, fits []*Fit, opt TerminalOptions, alarm, plain string) {
	if len(fits) == 0 {
		return
	}
	header := append(append([]string(nil), c.By...), "n", "edf", "sigma")
	exception := false
	var notes []string
	number := map[string]int{}
	rows := make([][]string, len(fits))
	for i, f := range fits {
		edf := fixed(f.EDF, 2)
		if f.Exception != "" {
			edf = "*" + edf
			exception = true
		}
		for _, g := range f.Group {
			rows[i] = append(rows[i], oneLine(g, 20))
		}
		rows[i] = append(rows[i], fmt.Sprint(f.N), edf, short(f.Sigma, 3))
	}
	flags := make([]string, len(fits))
	for i, f := range fits {
		var marks []string
		for _, x := range f.Flags {
			n, ok := number[x.Name]
			if !ok {
				n = len(notes) + 1
				number[x.Name] = n
				notes = append(notes, fmt.Sprintf("%d\u00a0%s", n, strings.ReplaceAll(strings.ReplaceAll(x.Name, "_", " "), " ", "\u00a0")))
			}
			marks = append(marks, fmt.Sprint(n))
		}
		flags[i] = strings.Join(marks, " ")
	}
	flagWidth := 0
	if len(notes) > 0 {
		flagWidth = 7
		for _, f := range flags {
			flagWidth = max(flagWidth, len(f)+2)
		}
	}
	var omitted []string
	for _, name := range c.Readings {
		cells := make([]string, len(fits))
		most := len([]rune(oneLine(name, 24)))
		for i, f := range fits {
			cells[i] = readingCell(c, f, name)
			most = max(most, len([]rune(cells[i])))
		}
		if naturalWidth(header, rows)+most+2+flagWidth > opt.Width {
			omitted = append(omitted, name)
			continue
		}
		header = append(header, oneLine(name, 24))
		for i := range rows {
			rows[i] = append(rows[i], cells[i])
		}
	}
	if len(notes) > 0 {
		header = append(header, "flags")
		for i := range rows {
			rows[i] = append(rows[i], flags[i])
		}
	}
	Table(w, header, rows, nil, opt.Width)
	if exception {
		fmt.Fprintln(w, "* by an exception to the rule")
	}
	if len(notes) > 0 {
		fmt.Fprintln(w, alarm+wrapText("flags: "+strings.Join(notes, ", "), opt.Width, "  ")+plain)
	}
	if len(omitted) > 0 {
		fmt.Fprintln(w, wrapText("readings too wide for this table (see the report): "+strings.Join(omitted, ", "), opt.Width, "  "))
	}
}

// Table writes a table for people, at most width columns wide: numbers to the
// right, rules only below the header.
func Table(w io.Writer, header []string, rows [][]string, notes []string, width int) {
	if len(rows) > 0 {
		right := make([]tw.Align, len(header))
		for k := range header {
			right[k] = tw.AlignLeft
			for _, r := range rows {
				if k < len(r) && numeric(r[k]) {
					right[k] = tw.AlignRight
				} else if k < len(r) && r[k] != "" && r[k] != "none" && r[k] != "open" {
					right[k] = tw.AlignLeft
					break
				}
			}
		}
		wrapMode, most := tw.WrapNone, 0
		if naturalWidth(header, rows) > width {
			wrapMode, most = tw.WrapNormal, max(width, 20)
		}
		var buf strings.Builder
		t := tablewriter.NewTable(&buf,
			tablewriter.WithRenderer(renderer.NewBlueprint(tw.Rendition{
				Borders:  tw.BorderNone,
				Symbols:  tw.NewSymbols(tw.StyleLight),
				Settings: tw.Settings{Separators: tw.Separators{BetweenColumns: tw.Off, ShowHeader: tw.On}, Lines: tw.Lines{ShowHeaderLine: tw.On}},
			})),
			tablewriter.WithConfig(tablewriter.Config{
				MaxWidth: most,
				Header: tw.CellConfig{Formatting: tw.CellFormatting{AutoFormat: tw.Off, AutoWrap: wrapMode},
					Alignment: tw.CellAlignment{PerColumn: right}, Padding: tw.CellPadding{Global: tw.Padding{Left: "", Right: "  ", Overwrite: true}}},
				Row: tw.CellConfig{Formatting: tw.CellFormatting{AutoWrap: wrapMode},
					Alignment: tw.CellAlignment{PerColumn: right}, Padding: tw.CellPadding{Global: tw.Padding{Left: "", Right: "  ", Overwrite: true}}},
			}))
		clean := func(in []string) []string {
			out := make([]string, len(in))
			for i, c := range in {
				out[i] = oneLine(c, 400)
			}
			return out
		}
		t.Header(clean(header))
		for _, r := range rows {
			_ = t.Append(clean(r))
		}
		_ = t.Render()
		for l := range strings.Lines(buf.String()) {
			fmt.Fprintln(w, strings.TrimRight(l, " \n"))
		}
	}
	for _, n := range notes {
		fmt.Fprintln(w, wrapText(n, width, "  "))
	}
}

// naturalWidth is how wide a table is when no cell is wrapped.
func naturalWidth(header []string, rows [][]string) int {
	sum := 0
	for k := range header {
		most := len([]rune(header[k]))
		for _, r := range rows {
			if k < len(r) {
				most = max(most, len([]rune(r[k])))
			}
		}
		sum += most + 2
	}
	return sum
}

// numeric tells whether a cell reads as a number, with or without an interval.
func numeric(s string) bool {
	s = strings.TrimLeft(s, "*"+minus+"-+")
	return s != "" && (s[0] >= '0' && s[0] <= '9' || s[0] == '.') || strings.HasPrefix(s, "∞")
}

// oneLine makes text safe for a terminal: one line, no control characters.
func oneLine(s string, most int) string {
	return clip(strings.Join(strings.Fields(printable(s)), " "), most)
}

// wrapText breaks text at words; lines after the first begin with indent. What
// a terminal would obey is taken out.
func wrapText(s string, width int, indent string) string {
	s = printable(s)
	lead := s[:len(s)-len(strings.TrimLeft(s, " "))]
	var b strings.Builder
	b.WriteString(lead)
	col := len(lead)
	for i, word := range strings.FieldsFunc(s, func(r rune) bool { return r == ' ' }) {
		n := len([]rune(word))
		if i > 0 && col+1+n > width {
			b.WriteString("\n" + indent)
			col = len(indent)
		} else if i > 0 {
			b.WriteByte(' ')
			col++
		}
		b.WriteString(word)
		col += n
	}
	return b.String()
}

// ScorePlot draws score against edf in characters: o the choice, x other
// minima, . candidates; "" where there is nothing to draw.
func ScorePlot(e Evidence, width, height int) string {
	type pt struct{ x, y float64 }
	var pts []pt
	for _, c := range e.Candidates {
		if c.EDF > 0 && !math.IsNaN(c.Score) && !math.IsInf(c.Score, 0) {
			pts = append(pts, pt{math.Log(c.EDF), c.Score})
		}
	}
	if len(pts) < 3 || width < 30 || height < 4 {
		return ""
	}
	ys := make([]float64, len(pts))
	lo, hi := math.Inf(1), math.Inf(-1)
	x0, x1 := math.Inf(1), math.Inf(-1)
	for i, p := range pts {
		ys[i] = p.y
		lo, hi = math.Min(lo, p.y), math.Max(hi, p.y)
		x0, x1 = math.Min(x0, p.x), math.Max(x1, p.x)
	}
	insertion(ys)
	if top := lo + 4*(ys[len(ys)*6/10]-lo); top > lo {
		hi = math.Min(hi, top)
	}
	if !(hi > lo) || !(x1 > x0) {
		return ""
	}
	labels := []string{short(hi, 4), short(lo, 4)}
	left := max(len([]rune(labels[0])), len([]rune(labels[1]))) + 1
	cols := width - left - 2
	cells := make([][]rune, height)
	for i := range cells {
		cells[i] = []rune(strings.Repeat(" ", cols+1))
	}
	put := func(x, y float64, r rune) {
		if y > hi {
			return
		}
		c := int(math.Round((x - x0) / (x1 - x0) * float64(cols)))
		l := int(math.Round((hi - y) / (hi - lo) * float64(height-1)))
		cells[max(0, min(height-1, l))][max(0, min(cols, c))] = r
	}
	for _, p := range pts {
		put(p.x, p.y, '.')
	}
	for k := len(e.Minima) - 1; k >= 0; k-- {
		m := e.Minima[k]
		r := 'x'
		if m.Chosen {
			r = 'o'
		}
		put(math.Log(m.EDF), m.Score, r)
	}
	var b strings.Builder
	fmt.Fprintf(&b, "%s against edf (o the choice, x other minima)\n", e.Criterion)
	for i, row := range cells {
		l := ""
		switch i {
		case 0:
			l = labels[0]
		case height - 1:
			l = labels[1]
		}
		fmt.Fprintf(&b, "%*s|%s\n", left, l, strings.TrimRight(string(row), " "))
	}
	first, last := fixed(math.Exp(x0), 1), fixed(math.Exp(x1), 1)
	fmt.Fprintf(&b, "%*s+%s\n", left, "", strings.Repeat("-", cols))
	fmt.Fprintf(&b, "%*s %s%*s\n", left, "", first, max(1, cols-len(first)), last)
	return b.String()
}
