package runner

import (
	"errors"
	"math"
	"slices"
	"strings"

	"batten/methods/choose"
	"batten/methods/spline"
	"batten/runner/ledger"
	"batten/runner/table"
	"batten/spec"
	"batten/spec/expr"
)

// fit compares one fit with its old self.
func (k *comparer) fit(ft *fitter, cf *curveFits, i int, b *before, m *Movement) error {
	c, f := cf.def, cf.fits[i]
	m.OldEDF, m.OldLambda, m.Rows.Old = b.numbers()
	m.Rows.New = f.N
	m.NewRule = ruleOf(c, f.Exception)
	from, to, curve, half, readings, err := b.shape(ft)
	if err != nil {
		return err
	}
	if b.fit != nil {
		m.OldRule = ruleOf(b.cf.def, b.fit.Exception)
		m.Rows = countRows(b.fit, f)
	} else {
		m.OldRule = b.entry.Rule
		m.NewRule = f.Rule
	}
	d, err := ft.derive(cf, i, wants{readings: true})
	if err != nil {
		return err
	}
	m.Shift = 0
	for p, x := range places(from, to) {
		if p >= len(curve) {
			break
		}
		v, _, _ := d.fit.At(x)
		by := v - curve[p]
		if math.Abs(by) <= 1e-6*math.Abs(curve[p]) && b.fit == nil { // the ledger keeps seven digits
			continue
		}
		if s := math.Abs(by) / half[p]; s > m.Shift {
			m.Shift, m.By, m.At = s, by, x
		}
	}
	if m.Shift > 0 {
		m.AtText = placeText(&c.Along, m.At)
	}
	now := readingValues(d.readings)
	for _, r := range readings {
		for _, n := range now {
			if n.Name != r.Name || sameValue(n, r) {
				continue
			}
			m.Readings = append(m.Readings, ReadingChange{Name: r.Name, Old: r, New: n})
		}
	}
	k.judgeMovement(c, d, m)
	if m.Shift > 0 && b.fit != nil {
		return k.split(ft, cf, i, b, m)
	}
	return nil
}

func ruleOf(c *spec.Curve, exception string) string {
	for i := range c.Exceptions {
		if exception != "" && c.Exceptions[i].Name.Text == exception {
			return ruleText(&c.Exceptions[i].Rule)
		}
	}
	return ruleText(&c.Rule)
}

// sameValue tells whether two readings agree in the ledger's digits.
func sameValue(a, b ledger.Value) bool {
	same := func(x, y float64) bool {
		return x == y || math.IsNaN(x) && math.IsNaN(y) || math.Abs(x-y) <= 1e-6*math.Abs(y)
	}
	return same(a.Value, b.Value) && same(a.Lower, b.Lower) && same(a.Upper, b.Upper)
}

// judgeMovement says what moved beyond the curve's tolerance.
func (k *comparer) judgeMovement(c *spec.Curve, d *derived, m *Movement) {
	t := &c.Tolerance
	if shiftBeyond(t, m.Shift, m.By) {
		m.What = append(m.What, "shifted")
	}
	if !t.Given && math.Abs(m.NewEDF-m.OldEDF) >= edfTolerance {
		m.What = append(m.What, "edf changed")
	}
	if !t.Given && m.OldRule != m.NewRule {
		m.What = append(m.What, "rule changed")
	}
	for i := range m.Readings {
		q := &m.Readings[i]
		for _, r := range d.readings {
			if readingName(r) == q.Name {
				q.Unit, q.IsDate = unitOf(c, r.Kind), isPlace(r.Kind) && c.Along.Kind == expr.Date
			}
		}
		if readingBeyond(t, q.Name, q.Old.Value, q.New.Value) {
			q.Moved = true
			m.What = append(m.What, q.Name+" moved")
		}
	}
	m.Beyond = len(m.What) > 0
}

// shape is the old curve at the ledger's places, with its band's half-widths
// and readings.
func (b *before) shape(ft *fitter) (from, to float64, curve, half []float64, readings []ledger.Value, err error) {
	if e := b.entry; b.fit == nil {
		return e.From, e.To, e.Curve, e.HalfWidth, e.Readings, nil
	}
	at := slices.Index(b.cf.fits, b.fit)
	d, err := ft.derive(b.cf, at, wants{readings: true})
	if err != nil {
		return 0, 0, nil, nil, nil, err
	}
	from, to = d.fit.Knots[0], d.fit.Knots[len(d.fit.Knots)-1]
	for _, p := range tabulate(d.fit, b.cf.def, places(from, to)) {
		curve = append(curve, p.Value)
		half = append(half, halfWidth(p))
	}
	return from, to, curve, half, readingValues(d.readings), nil
}

// countRows compares two fits' rows.
func countRows(old, now *storedFit) RowChange {
	out := RowChange{Old: old.N, New: now.N}
	type row struct{ x, y, w float64 }
	rows := func(f *storedFit) map[row]int {
		n := map[row]int{}
		for i := range f.X {
			w := 1.0
			if len(f.W) > 0 {
				w = f.W[i]
			}
			n[row{f.X[i], f.Y[i], w}]++
		}
		return n
	}
	a, b := rows(old), rows(now)
	gone, come := map[float64]int{}, map[float64]int{}
	for r, n := range a {
		if more := n - b[r]; more > 0 {
			gone[r.x] += more
		}
	}
	for r, n := range b {
		if more := n - a[r]; more > 0 {
			come[r.x] += more
		}
	}
	for x, n := range gone {
		e := min(n, come[x])
		out.Edited += e
		out.Removed += n - e
		come[x] -= e
	}
	for _, n := range come {
		out.Added += n
	}
	return out
}

// split tells the causes of a movement apart, at its place. The curve goes from
// the old one to the new one in steps that let in one cause after another, so
// that the parts add up to the whole.
func (k *comparer) split(ft *fitter, cf *curveFits, i int, b *before, m *Movement) error {
	at := func(order int, x, y, w []float64, lambda float64) (float64, error) {
		ft.data.Penalty = order
		if err := ft.data.Reset(x, y, w); err != nil {
			return 0, err
		}
		v, _, _ := ft.ws.Fit(&ft.data, lambda).At(m.At)
		return v, nil
	}
	weights := func(f *storedFit) []float64 {
		if len(f.W) == 0 {
			return nil
		}
		return f.W
	}
	old, now := b.fit, cf.fits[i]
	oldDef, newDef := b.cf.def, cf.def
	g0 := (&spline.Curve{Order: oldDef.Order, Knots: old.Knots, Value: old.Value, Curvature: old.Curvature, Slope: old.Slope})
	start := 0.0
	if oldDef.Order == 3 { // its higher derivatives are not stored
		v, err := at(old.Order, old.X, old.Y, weights(old), old.Lambda)
		if err != nil {
			return err
		}
		start = v
	} else {
		start, _, _ = g0.At(m.At)
	}
	program, err := at(old.Order, old.X, old.Y, weights(old), old.Lambda)
	if err != nil {
		return err
	}
	if slices.Equal(b.run.Record.Methods, k.now.Record.Methods) {
		start = program // the same methods: what differs is the rounding of stored pieces
	}
	end, err := at(now.Order, now.X, now.Y, weights(now), now.Lambda)
	if err != nil {
		return err
	}
	// the new files' rows under the spec as it was
	x, y, w := []float64(now.X), []float64(now.Y), weights(now)
	if !slices.Equal(rowsMeaning(b.run.Study, oldDef), rowsMeaning(k.now.Study, newDef)) {
		r, err := k.rowsThen(b, old.Group)
		switch {
		case err != nil:
			return err
		case r != nil:
			x, y, w = r.x, r.y, r.w
		default:
			k.note("the spec's rows changed and the files are not those of %s now: what the data and what the spec did to them is told together, as data", k.out.To)
		}
	}
	data, err := at(old.Order, x, y, w, old.Lambda)
	var few spline.TooFewPointsError
	if errors.As(err, &few) {
		return nil // under the old spec the new files leave too little for a curve
	}
	if err != nil {
		return err
	}
	chosen := data
	switch {
	case old.Order != now.Order:
	case sameRule(k.now.Study, oldDef, newDef, old.Exception, now.Exception):
		chosen, err = at(old.Order, x, y, w, now.Lambda)
	default:
		var lambda float64
		if lambda, err = k.chooseAgain(ft, b, x, y, w); err == nil && lambda > 0 {
			chosen, err = at(old.Order, x, y, w, lambda)
		}
	}
	if err != nil {
		return err
	}
	steps := []struct {
		cause    string
		from, to float64
	}{{Data, program, data}, {Smoothness, data, chosen}, {Spec, chosen, end}, {Program, start, program}}
	half := math.Abs(m.By) / m.Shift
	for _, s := range steps {
		by := s.to - s.from
		m.Parts = append(m.Parts, Part{s.cause, by, by / half})
	}
	m.By = end - start
	return nil
}

// rowsMeaning describes how a curve's rows come from the files, without them.
func rowsMeaning(s *spec.Study, c *spec.Curve) []string {
	k := newKey("rows", objectVersion)
	rowsKey(k, s, c.From, map[string][]table.File{})
	k.add("response", c.Response.Name.Text)
	k.add("along", c.Along.Name.Text)
	if c.Weight != nil {
		k.add("weight", c.Weight.Name.Text)
	}
	if c.Sigma != nil {
		k.add("sigma", c.Sigma.Name.Text)
	}
	return strings.Split(k.String(), "\n")
}

// sameRule tells whether two fits were chosen by one and the same rule.
func sameRule(s *spec.Study, a, b *spec.Curve, ea, eb string) bool {
	lines := func(c *spec.Curve, e string) string {
		r := &c.Rule
		for i := range c.Exceptions {
			if e != "" && c.Exceptions[i].Name.Text == e {
				r = &c.Exceptions[i].Rule
			}
		}
		k := newKey("rule", objectVersion)
		ruleLines(k, s, r)
		return k.String()
	}
	return lines(a, ea) == lines(b, eb)
}

// chooseAgain chooses lambda for rows by the old fit's rule. 0 means that it
// cannot be done for this group alone: the groups shared it, or folds came from
// a column.
func (k *comparer) chooseAgain(ft *fitter, b *before, x, y, w []float64) (float64, error) {
	c := b.cf.def
	r := &c.Rule
	for i := range c.Exceptions {
		if c.Exceptions[i].Name.Text == b.fit.Exception && b.fit.Exception != "" {
			r = &c.Exceptions[i].Rule
		}
	}
	if r.Shared != "" || r.Block != nil {
		return 0, nil
	}
	ft.data.Penalty = c.Order
	if err := ft.data.Reset(x, y, w); err != nil {
		return 0, err
	}
	e, err := choose.Lambda(&ft.ws, &ft.data, chooseRule(b.run.Study, r, label(b.cf.by, b.fit.Group), nil, 0))
	if err != nil {
		if _, ok := dataCause(err); ok {
			return 0, nil
		}
		return 0, err
	}
	return e.Chosen.Lambda, nil
}

// readingName is a reading's name in the ledger.
func readingName(r namedReading) string {
	if strings.HasSuffix(r.Kind, "_at") {
		return r.def.Name.Text + "_at"
	}
	return r.def.Name.Text
}

// readingValues are the readings as the ledger keeps them: of several under one
// name the first.
func readingValues(rs []namedReading) []ledger.Value {
	var out []ledger.Value
	seen := map[string]bool{}
	for _, r := range rs {
		if n := readingName(r); !seen[n] {
			seen[n] = true
			out = append(out, ledger.Value{Name: n, Value: r.Value, Lower: r.Lower, Upper: r.Upper})
		}
	}
	return out
}
