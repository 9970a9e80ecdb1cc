package reports

import (
	"fmt"
	"html"
	"regexp"
	"strings"
)

// HTML writes the report as one self-contained page: no script, no fetch.
func HTML(d *Document) []byte { return htmlPage(d.Title, build(d)) }

func htmlPage(title string, nodes []node) []byte {
	h := &page{}
	h.b.WriteString(`<!doctype html>
<html lang="en">
<head>
<meta charset="utf-8">
<meta http-equiv="Content-Security-Policy" content="default-src 'none'; style-src 'unsafe-inline'">
<meta name="viewport" content="width=device-width, initial-scale=1">
<meta name="color-scheme" content="light dark">
<title>` + text(title) + `</title>
<style>
` + style() + `</style>
</head>
<body>
<a class="skip" href="#main">Skip to the report</a>
`)
	h.contents(nodes)
	h.b.WriteString("<main id=\"main\">\n")
	h.nodes(nodes)
	h.b.WriteString("</main>\n</body>\n</html>\n")
	return []byte(h.b.String())
}

type page struct {
	b       strings.Builder
	section int
	tables  int
}

func text(s string) string { return html.EscapeString(printable(s)) }

// contents lists the sections.
func (h *page) contents(ns []node) {
	h.b.WriteString("<nav aria-label=\"Contents\"><ol>\n")
	n := 0
	for _, x := range ns {
		if t, ok := x.(heading); ok && t.level == 2 {
			n++
			fmt.Fprintf(&h.b, "<li><a href=\"#s%d\">%s</a></li>\n", n, text(t.text))
		}
	}
	h.b.WriteString("</ol></nav>\n")
}

func (h *page) nodes(ns []node) {
	for _, n := range ns {
		switch n := n.(type) {
		case heading:
			id := ""
			if n.level == 2 {
				h.section++
				id = fmt.Sprintf(` id="s%d"`, h.section)
			}
			fmt.Fprintf(&h.b, "<h%d%s>%s</h%d>\n", n.level, id, text(n.text), n.level)
		case para:
			fmt.Fprintf(&h.b, "<p>%s</p>\n", text(n.text))
		case list:
			h.b.WriteString("<ul>\n")
			for _, i := range n.items {
				fmt.Fprintf(&h.b, "<li>%s</li>\n", text(i))
			}
			h.b.WriteString("</ul>\n")
		case grid:
			h.grid(n)
		case gallery:
			h.gallery(n)
		case fold:
			fmt.Fprintf(&h.b, "<details><summary>%s</summary>\n", text(n.summary))
			h.nodes(n.body)
			h.b.WriteString("</details>\n")
		}
	}
}

func (h *page) gallery(g gallery) {
	class := "figures"
	switch {
	case g.small:
		class = "multiples"
	case g.even:
		class = "multiples even"
	}
	open := false
	for _, p := range g.pictures {
		svg := p.draw(inPage)
		if svg == nil {
			continue
		}
		if !open {
			fmt.Fprintf(&h.b, "<div class=%q>\n", class)
			open = true
		}
		fmt.Fprintf(&h.b, "<figure>%s<figcaption>%s</figcaption></figure>\n", tight(svg), text(p.caption))
	}
	if open {
		h.b.WriteString("</div>\n")
	}
}

var (
	longNumber = regexp.MustCompile(`(\d+\.\d\d)\d+`)
	breaks     = regexp.MustCompile(`\n\s*`)
)

// tight shortens a figure for the page: coordinates to a hundredth of a point.
func tight(svg []byte) string {
	s := breaks.ReplaceAllString(string(svg), "")
	return longNumber.ReplaceAllString(s, "$1")
}

func (h *page) grid(g grid) {
	if len(g.rows) == 0 {
		return
	}
	h.tables++
	h.b.WriteString("<div class=\"scroll\" tabindex=\"0\" role=\"group\" aria-label=\"Table\"><table>")
	if g.caption != "" {
		fmt.Fprintf(&h.b, "<caption>%s</caption>", text(g.caption))
	}
	h.b.WriteString("\n<thead><tr>")
	class := func(i int) string {
		if i < len(g.right) && g.right[i] {
			return ` class="n"`
		}
		return ""
	}
	for i, c := range g.header {
		fmt.Fprintf(&h.b, "<th scope=\"col\"%s>%s</th>", class(i), text(c))
	}
	h.b.WriteString("</tr></thead>\n<tbody>\n")
	for _, r := range g.rows {
		h.b.WriteString("<tr>")
		for i, c := range r {
			cell := text(c)
			if g.header[i] == "flags" && c != "" {
				cell = h.flagRefs(c)
			}
			if len(c) == 64 && strings.Trim(c, "0123456789abcdef") == "" {
				cell = "<code>" + cell + "</code>"
			}
			if i == 0 {
				fmt.Fprintf(&h.b, "<th scope=\"row\"%s>%s</th>", class(i), cell)
			} else {
				fmt.Fprintf(&h.b, "<td%s>%s</td>", class(i), cell)
			}
		}
		h.b.WriteString("</tr>\n")
	}
	h.b.WriteString("</tbody></table></div>\n")
	if len(g.notes) > 0 {
		h.b.WriteString("<ol class=\"notes\">\n")
		for i, n := range g.notes {
			fmt.Fprintf(&h.b, "<li id=\"t%dn%d\">%s</li>\n", h.tables, i+1, text(n))
		}
		h.b.WriteString("</ol>\n")
	}
}

// flagRefs links the numbers of footnotes to them.
func (h *page) flagRefs(cell string) string {
	var out []string
	for _, n := range strings.Fields(cell) {
		out = append(out, fmt.Sprintf("<a href=\"#t%dn%s\">%s</a>", h.tables, text(n), text(n)))
	}
	return strings.Join(out, " ")
}

// style is the page's sheet: the palette as variables, light and dark.
func style() string {
	var light, dark strings.Builder
	for _, i := range inks {
		fmt.Fprintf(&light, "--%s:%s;", i.name, i.light)
		fmt.Fprintf(&dark, "--%s:%s;", i.name, i.dark)
	}
	return ":root{" + light.String() + "--ground:" + lightGround + ";--panel:#f3f4f2;color-scheme:light dark}\n" +
		"@media (prefers-color-scheme:dark){:root{" + dark.String() + "--ground:" + darkGround + ";--panel:#1e2227}}\n" + sheet
}

const sheet = `*{box-sizing:border-box}
html{-webkit-text-size-adjust:100%}
body{margin:0;background:var(--ground);color:var(--ink);font:16px/1.55 system-ui,"Segoe UI","Liberation Sans",Arial,sans-serif}
main,nav{max-width:76rem;margin:0 auto;padding:0 1.25rem}
main{padding-bottom:4rem}
p,ul,.notes{max-width:46rem}
h1{font-size:1.9rem;line-height:1.2;margin:1.2rem 0 .2rem;letter-spacing:-.01em}
h1+p{color:var(--soft);margin-top:0}
h2{font-size:1.35rem;margin:3rem 0 .5rem;padding-top:.6rem;border-top:2px solid var(--ink)}
h3{font-size:1.05rem;margin:2rem 0 .3rem}
h4{font-size:1rem;margin:1.6rem 0 .3rem}
a{color:var(--curve)}
a:focus-visible,summary:focus-visible,.scroll:focus-visible{outline:2px solid var(--mark);outline-offset:2px}
.skip{position:absolute;left:-99rem}
.skip:focus{left:1rem;top:.5rem;background:var(--ground);padding:.3rem .6rem}
nav ol{list-style:none;display:flex;flex-wrap:wrap;gap:.2rem 1.2rem;margin:0;padding:.9rem 0 0;font-size:.88rem}
.scroll{overflow-x:auto;margin:1rem 0}
table{border-collapse:collapse;font-size:.86rem;font-variant-numeric:tabular-nums lining-nums}
caption{text-align:left;color:var(--soft);padding:0 0 .35rem;caption-side:top;width:max-content;max-width:min(46rem,88vw)}
th,td{text-align:left;padding:.28rem .9rem .28rem 0;vertical-align:baseline;font-weight:400}
thead th{color:var(--soft);border-bottom:1px solid var(--soft);vertical-align:bottom;white-space:nowrap}
tbody tr{border-bottom:1px solid var(--rule)}
td.n,th.n{text-align:right;white-space:nowrap}
code{font:.8em/1.3 ui-monospace,"Liberation Mono",Consolas,monospace;overflow-wrap:anywhere}
.notes{font-size:.84rem;color:var(--soft);padding-left:1.4rem}
figure{margin:0;min-width:0}
figure svg{display:block;width:100%;height:auto}
figcaption{font-size:.8rem;color:var(--soft);line-height:1.35;margin-top:.15rem}
.figures{display:grid;grid-template-columns:minmax(0,2fr) minmax(0,1fr);gap:.8rem 1.6rem;margin:1rem 0;align-items:start;max-width:64rem}
.figures figure:first-child{grid-row:span 2}
.multiples{display:grid;grid-template-columns:repeat(auto-fill,minmax(11.5rem,1fr));gap:1rem .9rem;margin:1rem 0}
.multiples.even{grid-template-columns:repeat(auto-fill,minmax(17rem,1fr))}
.multiples figcaption{order:-1;color:var(--ink)}
.multiples figure{display:flex;flex-direction:column}
details{border-top:1px solid var(--rule);padding:.1rem 0}
details[open]{padding-bottom:1.4rem}
summary{cursor:pointer;padding:.45rem 0;font-variant-numeric:tabular-nums}
summary::marker{color:var(--soft)}
@media (max-width:48rem){.figures{grid-template-columns:minmax(0,1fr)}.figures figure:first-child{grid-row:auto}h1{font-size:1.5rem}}
@media print{body{font-size:10pt}nav,.skip{display:none}details{break-inside:avoid}details>*{display:block}h2{break-before:page}.scroll{overflow:visible}}
`
