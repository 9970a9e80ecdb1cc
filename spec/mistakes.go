package spec

import (
	"bytes"
	"fmt"
	"io"
	"sort"
	"strings"
	"unicode/utf8"

	"github.com/hashicorp/hcl/v2"
)

// Mistake is one thing wrong in a spec.
type Mistake struct {
	Range    hcl.Range
	Found    string // what stands there
	Expected string // what should, and what to do
}

// Mistakes are all that is wrong in a spec, in the order of the file.
type Mistakes struct {
	File string
	Text []byte
	List []Mistake
}

func (m *Mistakes) Error() string {
	var b bytes.Buffer
	m.Render(&b, false)
	return strings.TrimRight(b.String(), "\n")
}

// sorted puts the list in order and drops repeats.
func (m *Mistakes) sorted() {
	sort.SliceStable(m.List, func(i, j int) bool {
		a, b := m.List[i], m.List[j]
		switch {
		case a.Range.Start.Line != b.Range.Start.Line:
			return a.Range.Start.Line < b.Range.Start.Line
		case a.Range.Start.Column != b.Range.Start.Column:
			return a.Range.Start.Column < b.Range.Start.Column
		}
		return a.Found < b.Found
	})
	out := m.List[:0]
	for i, x := range m.List {
		if i > 0 && x.Range == m.List[i-1].Range && x.Found == m.List[i-1].Found {
			continue
		}
		out = append(out, x)
	}
	m.List = out
}

// shownMistakes is how many are printed; a spec with more has one cause.
const shownMistakes = 50

// Render writes every mistake with its place, its line and what to do.
func (m *Mistakes) Render(w io.Writer, color bool) {
	bold, red, plain := "", "", ""
	if color {
		bold, red, plain = "\x1b[1m", "\x1b[31m", "\x1b[0m"
	}
	lines := bytes.Split(m.Text, []byte("\n"))
	for i, x := range m.List {
		if i == shownMistakes {
			fmt.Fprintf(w, "... and %d more mistakes\n", len(m.List)-i)
			return
		}
		at := x.Range.Start
		fmt.Fprintf(w, "%s%s:%d:%d: %s%s\n", bold, m.File, at.Line, at.Column, x.Found, plain)
		if at.Line >= 1 && at.Line <= len(lines) && len(lines[at.Line-1]) > 0 {
			line, marks := excerpt(lines[at.Line-1], x.Range)
			n := fmt.Sprint(at.Line)
			fmt.Fprintf(w, "    %s | %s\n", n, line)
			fmt.Fprintf(w, "    %s | %s%s%s\n", strings.Repeat(" ", len(n)), red, marks, plain)
		}
		if x.Expected != "" {
			fmt.Fprintf(w, "  %s\n", x.Expected)
		}
	}
}

// excerpt returns a source line fit for a terminal and the marks below it.
func excerpt(raw []byte, r hcl.Range) (line, marks string) {
	const most = 100
	raw = bytes.TrimRight(raw, "\r")
	var l, k strings.Builder
	end := r.End.Column
	if r.End.Line > r.Start.Line {
		end = utf8.RuneCount(raw) + 1
	}
	if end <= r.Start.Column {
		end = r.Start.Column + 1
	}
	first := 1
	if r.Start.Column > most-20 {
		first = r.Start.Column - 20
		l.WriteString("...")
		k.WriteString("   ")
	}
	col := 0
	for len(raw) > 0 {
		c, n := utf8.DecodeRune(raw)
		raw = raw[n:]
		if col++; col < first {
			continue
		}
		if col-first >= most {
			l.WriteString("...")
			break
		}
		if c < ' ' || c == utf8.RuneError || c == 0x7f {
			c = ' '
		}
		l.WriteRune(c)
		switch {
		case col < r.Start.Column:
			k.WriteByte(' ')
		case col < end:
			k.WriteByte('^')
		}
	}
	if !strings.Contains(k.String(), "^") {
		k.WriteByte('^')
	}
	return l.String(), k.String()
}
