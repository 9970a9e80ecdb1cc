package spline

// Scores4 is Scores at four lambdas at once: out[k] holds the bits of
// Scores(d, lambda[k]). Lambdas may repeat. Where the processor has vectors of
// four numbers, one pass serves all four.
func (ws *Workspace) Scores4(d *Data, lambda [4]float64, out *[4]Criteria) {
	ws.evaluate4(d, &lambda, out, false)
}

// Criteria4 is Criteria at four lambdas at once: out[k] holds the bits of
// Criteria(d, lambda[k]).
func (ws *Workspace) Criteria4(d *Data, lambda [4]float64, out *[4]Criteria) {
	ws.evaluate4(d, &lambda, out, true)
}

// useLanes is for tests, which compare both ways.
var useLanes = true

func (ws *Workspace) evaluate4(d *Data, lambda *[4]float64, out *[4]Criteria, reml bool) {
	if useLanes && d.Null() == 2 && ws.evaluateLanes(d, lambda, out, reml) {
		return
	}
	for k, l := range lambda {
		out[k] = ws.evaluate(d, l, reml)
	}
}
