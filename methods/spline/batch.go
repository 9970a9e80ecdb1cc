package spline

// Lanes is how many lambdas are worked on side by side.
const Lanes = 4

// CriteriaAt is Criteria at several lambdas, into out of the same length.
func (ws *Workspace) CriteriaAt(d *Data, lambda []float64, out []Criteria) {
	ws.at(d, lambda, out, true)
}

// ScoresAt is Scores at several lambdas, into out of the same length.
func (ws *Workspace) ScoresAt(d *Data, lambda []float64, out []Criteria) {
	ws.at(d, lambda, out, false)
}

func (ws *Workspace) at(d *Data, lambda []float64, out []Criteria, reml bool) {
	for lo := 0; lo < len(lambda); lo += Lanes {
		n := min(Lanes, len(lambda)-lo)
		if n == 1 {
			out[lo] = ws.evaluate(d, lambda[lo], reml)
			continue
		}
		var four [Lanes]float64 // the last stands in for those that lack
		for k := range four {
			four[k] = lambda[lo+min(k, n-1)]
		}
		var got [Lanes]Criteria
		ws.evaluate4(d, &four, &got, reml)
		copy(out[lo:lo+n], got[:n])
	}
}
