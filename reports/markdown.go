package reports

import (
	"fmt"
	"regexp"
	"strings"
)

// Markdown writes the report as Markdown, with its figures as SVG files of
// their own, named under folder.
func Markdown(d *Document, folder string) (text []byte, figures map[string][]byte) {
	m := &markdown{folder: folder, figures: map[string][]byte{}}
	m.nodes(build(d))
	return []byte(strings.TrimRight(m.b.String(), "\n") + "\n"), m.figures
}

type markdown struct {
	b       strings.Builder
	folder  string
	figures map[string][]byte
}

func (m *markdown) nodes(ns []node) {
	for _, n := range ns {
		switch n := n.(type) {
		case heading:
			m.b.WriteString(strings.Repeat("#", n.level) + " " + escape(n.text) + "\n\n")
		case para:
			m.b.WriteString(escape(n.text) + "\n\n")
		case list:
			for _, i := range n.items {
				m.b.WriteString("- " + escape(i) + "\n")
			}
			m.b.WriteString("\n")
		case grid:
			m.grid(n)
		case gallery:
			m.gallery(n)
		case fold:
			m.b.WriteString("#### " + escape(n.summary) + "\n\n")
			m.nodes(n.body)
		}
	}
}

// gallery writes the figures' files and points at them; the small multiples
// stand several on a line.
func (m *markdown) gallery(g gallery) {
	for _, p := range g.pictures {
		svg := p.draw(inFile)
		if svg == nil {
			continue
		}
		name := m.folder + "/" + p.name
		m.figures[name] = svg
		m.b.WriteString(fmt.Sprintf("![%s](%s)", escape(p.caption), strings.ReplaceAll(name, " ", "%20")))
		if g.small {
			m.b.WriteString(" ")
		} else {
			m.b.WriteString("\n\n")
		}
	}
	if g.small {
		m.b.WriteString("\n\n")
	}
}

func (m *markdown) grid(g grid) {
	if len(g.rows) == 0 {
		return
	}
	if g.caption != "" {
		m.b.WriteString(escape(g.caption) + "\n\n")
	}
	row := func(cells []string) {
		m.b.WriteString("|")
		for _, c := range cells {
			m.b.WriteString(" " + escape(c) + " |")
		}
		m.b.WriteString("\n")
	}
	row(g.header)
	m.b.WriteString("|")
	for i := range g.header {
		if g.right[i] {
			m.b.WriteString(" ---: |")
		} else {
			m.b.WriteString(" :--- |")
		}
	}
	m.b.WriteString("\n")
	for _, r := range g.rows {
		row(r)
	}
	m.b.WriteString("\n")
	for i, n := range g.notes {
		m.b.WriteString(fmt.Sprintf("%d. %s\n", i+1, escape(n)))
	}
	if len(g.notes) > 0 {
		m.b.WriteString("\n")
	}
}

var special = regexp.MustCompile("[\\\\`*_{}\\[\\]<>()#+!|~&:]")

// escape makes any text stand for itself in Markdown: on one line, with every
// character that could be syntax escaped.
func escape(s string) string {
	s = strings.Join(strings.Fields(printable(s)), " ")
	s = special.ReplaceAllStringFunc(s, func(c string) string {
		switch c {
		case "<":
			return "&lt;"
		case ">":
			return "&gt;"
		case "&":
			return "&amp;"
		case "(", ")", ":", "_", "+", "#", "!":
			return c // harmless once [ and < are escaped; see below
		}
		return `\` + c
	})
	// at the start of a line these would begin a list, a heading or a rule
	if s != "" && strings.ContainsRune("-+#=", rune(s[0])) {
		s = `\` + s
	}
	if i := strings.IndexAny(s, ".)"); i > 0 && strings.Trim(s[:i], "0123456789") == "" && (i+1 == len(s) || s[i+1] == ' ') {
		s = s[:i] + `\` + s[i:]
	}
	return underscores(strings.ReplaceAll(s, "://", ":&#47;&#47;"))
}

// underscores escapes those that could begin or end emphasis: not inside a
// word.
func underscores(s string) string {
	var b strings.Builder
	r := []rune(s)
	word := func(i int) bool {
		return i >= 0 && i < len(r) && (r[i] >= '0' && r[i] <= '9' || r[i] >= 'a' && r[i] <= 'z' || r[i] >= 'A' && r[i] <= 'Z')
	}
	for i, c := range r {
		if c == '_' && !(word(i-1) && word(i+1)) {
			b.WriteByte('\\')
		}
		b.WriteRune(c)
	}
	return b.String()
}
