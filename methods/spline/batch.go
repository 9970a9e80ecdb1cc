package spline

// Lanes is how many lambdas are worked on side by side.
const Lanes = 4

// CriteriaAt is Criteria at several lambdas, into out of the same length.
func (ws *Workspace) CriteriaAt(d *Data, lambda []float64, out []Criteria) {
	for i, l := range lambda {
		out[i] = ws.Criteria(d, l)
	}
}

// ScoresAt is Scores at several lambdas, into out of the same length.
func (ws *Workspace) ScoresAt(d *Data, lambda []float64, out []Criteria) {
	for i, l := range lambda {
		out[i] = ws.Scores(d, l)
	}
}
