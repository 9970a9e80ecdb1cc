package reports

import (
	"fmt"
	"math"
	"strings"
)

// held says how a band holds.
func held(kind string) string {
	if kind == "simultaneous" {
		return "over its whole grid at once"
	}
	return "pointwise"
}

func contrastSection(c *Contrast, index int) []node {
	out := []node{heading{2, c.Name}, para{fmt.Sprintf("The difference of the %s curves, %s less %s by %s, with a %s band of %s%%. "+
		"Groups are taken as independent. The figure's axis is marked where the simultaneous band excludes zero: there the curves surely differ.",
		c.Of, c.Minus[0], c.Minus[1], c.Across, c.BandKind, percent(c.Level))}}
	g := grid{caption: "Do the curves differ, and do they run parallel? P by Holm's method over the pairs in brackets.",
		header: []string{"group", "no difference", "parallel", "surely apart over " + c.X.label()}, right: []bool{false, true, true, false}}
	pics := gallery{even: true}
	for i := range c.Pairs {
		p := &c.Pairs[i]
		var s []string
		for _, x := range p.SurelyNot {
			s = append(s, place(c.X, x[0])+" to "+place(c.X, x[1]))
		}
		name := p.Group
		if name == "" {
			name = c.Of
		}
		if len(s) == 0 {
			s = []string{"nowhere"}
		}
		g.rows = append(g.rows, []string{name, pText(p.None), pText(p.Same), strings.Join(s, "; ")})
		if i < maxTiny {
			pics.pictures = append(pics.pictures, picture{fmt.Sprintf("contrast_%s_%03d.svg", fileName(c.Name, index), i+1), name,
				func(t theme) []byte { return contrastFigure(c, p, t) }})
		}
	}
	out = append(out, g, pics)
	if len(c.Missing) > 0 {
		out = append(out, para{"Pairs that could not be formed:"}, list{c.Missing})
	}
	return out
}

// pText writes a p-value with the adjusted one.
func pText(t Test) string {
	one := func(p float64) string {
		switch {
		case math.IsNaN(p):
			return "none"
		case p < 0.0001:
			return "< 0.0001"
		}
		return short(p, 2)
	}
	return one(t.P) + " [" + one(t.Adjusted) + "]"
}

func record(r *Record) []node {
	g := grid{caption: "Files", header: []string{"file", "rows", "bytes", "SHA-256"}, right: []bool{false, true, true, false}}
	g.rows = append(g.rows, []string{r.Spec.Path, "", fmt.Sprint(r.Spec.Bytes), r.Spec.SHA256})
	for _, f := range r.Inputs {
		g.rows = append(g.rows, []string{f.Path, fmt.Sprint(f.Rows), fmt.Sprint(f.Bytes), f.SHA256})
	}
	return []node{heading{2, "Record"}, list{[]string{
		"program: " + r.Program + ", " + r.Go,
		"methods and their versions: " + strings.Join(r.Methods, ", "),
		fmt.Sprintf("seed: %d", r.Seed),
		"run: " + r.Run,
	}}, g}
}
