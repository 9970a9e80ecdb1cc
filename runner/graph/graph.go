// Package graph is a study's dependency graph: what is made from what.
//
// Steps: Of collects the named blocks of a checked spec as nodes with the
// nodes they are made from; Text, DOT and Mermaid write it. The graph is what
// the spec says; which nodes need work is for the runner to find out.
package graph

import (
	"fmt"
	"strings"

	"batten/spec"
)

// Node is one named block.
type Node struct {
	Name  string
	Kind  string // input, rows, curve, contrast, guard, export, report
	Note  string // a file, a rule: what the block is about
	Needs []string
}

// Graph lists nodes so that each stands after all it needs.
type Graph struct {
	Title string
	Nodes []Node
}

// Of builds the graph of a study.
func Of(s *spec.Study) *Graph {
	g := &Graph{Title: s.Title}
	for _, in := range s.Inputs {
		g.Nodes = append(g.Nodes, Node{in.Name.Text, "input", in.File, nil})
	}
	for _, r := range s.RowsInOrder() {
		add, drop := 0, 0
		for _, st := range r.Steps {
			if st.Add != nil {
				add++
			} else {
				drop++
			}
		}
		g.Nodes = append(g.Nodes, Node{r.Name.Text, "rows", fmt.Sprintf("%d added, %d drops", add, drop), []string{r.From}})
	}
	for _, c := range s.Curves {
		note := c.Response.Name.Text + " along " + c.Along.Name.Text
		if len(c.By) > 0 {
			by := make([]string, len(c.By))
			for i, b := range c.By {
				by[i] = b.Name.Text
			}
			note += " by " + strings.Join(by, ", ")
		}
		g.Nodes = append(g.Nodes, Node{c.Name.Text, "curve", note + "; " + c.Rule.Name, []string{c.From}})
	}
	for _, c := range s.Contrasts {
		g.Nodes = append(g.Nodes, Node{c.Name.Text, "contrast", c.Minus[0] + " minus " + c.Minus[1], []string{c.Of}})
	}
	for _, q := range s.Guards {
		on := []string{q.On}
		if q.Kind == spec.OnStudy {
			on = nil
			for _, c := range s.Curves {
				on = append(on, c.Name.Text)
			}
		}
		g.Nodes = append(g.Nodes, Node{q.Name.Text, "guard", q.Source + ", otherwise " + q.Otherwise, on})
	}
	for _, e := range s.Exports {
		g.Nodes = append(g.Nodes, Node{e.Name.Text, "export", e.What + " to " + e.File, []string{e.Of}})
	}
	for _, r := range s.Reports {
		g.Nodes = append(g.Nodes, Node{r.Name.Text, "report", strings.Join(r.Files, ", "), append([]string(nil), r.Show...)})
	}
	return g
}

// Text writes the graph for reading: one node a line, under the kind.
func (g *Graph) Text() string {
	var b strings.Builder
	kind, wide := "", 0
	for _, n := range g.Nodes {
		wide = max(wide, len(n.Name))
	}
	for _, n := range g.Nodes {
		if n.Kind != kind {
			if kind != "" {
				b.WriteByte('\n')
			}
			kind = n.Kind
			b.WriteString(kind + "\n")
		}
		from := ""
		if len(n.Needs) > 0 {
			from = "from " + strings.Join(n.Needs, ", ") + ": "
		}
		fmt.Fprintf(&b, "  %-*s  %s%s\n", wide, n.Name, from, n.Note)
	}
	return b.String()
}

// DOT writes the graph in the DOT language of Graphviz.
func (g *Graph) DOT() string {
	shape := map[string]string{"input": "cylinder", "rows": "box", "curve": "ellipse", "contrast": "ellipse",
		"guard": "diamond", "export": "note", "report": "note"}
	id := g.ids()
	var b strings.Builder
	b.WriteString("digraph study {\n  rankdir=LR;\n  node [fontname=\"sans-serif\", fontsize=11];\n")
	for i, n := range g.Nodes {
		fmt.Fprintf(&b, "  n%d [shape=%s, label=%s];\n", i, shape[n.Kind], dotText(n.Name+"\n"+n.Kind))
	}
	for i, n := range g.Nodes {
		for _, need := range n.Needs {
			fmt.Fprintf(&b, "  n%d -> n%d;\n", id[need], i)
		}
	}
	b.WriteString("}\n")
	return b.String()
}

func (g *Graph) ids() map[string]int {
	id := map[string]int{}
	for i, n := range g.Nodes {
		id[n.Name] = i
	}
	return id
}

func dotText(s string) string {
	return `"` + strings.NewReplacer(`\`, `\\`, `"`, `\"`, "\n", `\n`).Replace(s) + `"`
}

// Mermaid writes the graph as a Mermaid flowchart.
func (g *Graph) Mermaid() string {
	open := map[string][2]string{"input": {"[(", ")]"}, "rows": {"[", "]"}, "curve": {"([", "])"}, "contrast": {"([", "])"},
		"guard": {"{{", "}}"}, "export": {"[/", "/]"}, "report": {"[/", "/]"}}
	id := g.ids()
	var b strings.Builder
	b.WriteString("flowchart LR\n")
	for i, n := range g.Nodes {
		o := open[n.Kind]
		fmt.Fprintf(&b, "  n%d%s\"%s<br/>%s\"%s\n", i, o[0], mermaidText(n.Name), n.Kind, o[1])
	}
	for i, n := range g.Nodes {
		for _, need := range n.Needs {
			fmt.Fprintf(&b, "  n%d --> n%d\n", id[need], i)
		}
	}
	return b.String()
}

func mermaidText(s string) string {
	return strings.NewReplacer("&", "&amp;", `"`, "&quot;", "<", "&lt;", ">", "&gt;", "\n", " ").Replace(s)
}
