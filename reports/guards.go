package reports

import (
	"fmt"
	"strings"
)

// wholeGuards shows how the guards went that stand on no curve.
func wholeGuards(guards []Guard) []node {
	if len(guards) == 0 {
		return nil
	}
	t := grid{caption: "Guards on contrasts, inputs and the study", header: []string{"guard", "on", "requires", "otherwise", "reason", "result"}, right: make([]bool, 6)}
	for i := range guards {
		g := &guards[i]
		t.rows = append(t.rows, []string{g.Name, g.On, g.Require, g.Otherwise, g.Reason, resultText(g)})
	}
	return []node{heading{2, "Guards"}, t}
}

func resultText(g *Guard) string {
	switch {
	case g.Judged == 0:
		return "nothing to judge"
	case len(g.Failed) == 0:
		return "holds"
	}
	return "does not hold: " + some(g.Failed)
}

// guardLine says on one line that a guard's condition does not hold.
func guardLine(g *Guard) string {
	act := "warning"
	if g.Otherwise == "refuse" {
		act = "refused"
	}
	s := fmt.Sprintf("%s: guard %q on %s: %s does not hold: %s", act, g.Name, g.On, g.Require, some(g.Failed))
	if g.Reason != "" {
		s += ": " + g.Reason
	}
	return strings.ReplaceAll(s, "\n", " ")
}

// notHolding counts, in a sentence, the guards that stand on no curve and do
// not hold.
func notHolding(guards []Guard) string {
	n := 0
	for i := range guards {
		if len(guards[i].Failed) > 0 {
			n++
		}
	}
	switch n {
	case 0:
		return ""
	case 1:
		return "1 guard on a contrast, an input or the study does not hold (see Guards). "
	}
	return fmt.Sprintf("%d guards on contrasts, inputs or the study do not hold (see Guards). ", n)
}
