package reading

import (
	"fmt"
	"math"
	"strings"

	"batten/methods/spline"
)

// Kinds of readings.
const (
	Value    = "value"
	Slope    = "slope"
	Bend     = "curvature"
	Crossing = "crossing"
	Maximum  = "maximum"
	Minimum  = "minimum"
	Steepest = "steepest"
	Area     = "area"
	Mean     = "mean"
	Change   = "change"
	Surely   = "surely"
)

// Ask is what to take from a curve.
type Ask struct {
	Kind      string
	At        float64 // Value, Slope: x; Crossing: the level
	Direction string  // "", "rising", "falling": Crossing, Steepest; one of the two: Surely
	All       bool    // Crossing: every one, not the first alone
	From, To  float64 // Area, Mean, Change

	Grid  []float64 // Surely, Steepest; of order 1 Maximum, Minimum: where draws are compared
	Seed  int64     // of draws from the posterior
	Group string    // the fit's name, which draws depend on
}

// Result is one number with its interval. NaN stands for none. The end of an
// interval that is open is infinite, and Note says why.
//
//	value, slope, area,    At: x (of a stretch: its start); Value in their own
//	mean, change           units. change is g(To) - g(From)
//	crossing               At: the level; Value: the place
//	maximum, minimum,      At: the place; Value: height or slope there
//	steepest
//	maximum_at, ...        At: height or slope; Value: the place
//	surely_rising, ...     Lower, Upper: the ends of the stretch
type Result struct {
	Kind                    string
	At, Value, Lower, Upper float64
	Note                    string
	Extrapolated            bool
}

// None is the note of a reading that the observed range does not hold.
const None = "none in the observed range"

// AtEnd is the note of an extreme that lies at an end of the data.
const AtEnd = "at the end of the observed range"

const noInterval = "no interval is given for this place"

const beyondData = "beyond the data"

// Take takes one reading at the given level of confidence.
func Take(f *spline.Fit, level float64, a Ask) []Result {
	r := newRuler(f, level)
	switch a.Kind {
	case Value:
		m := f.Posterior(a.At)
		return []Result{r.number(Value, a.At, m.Value, m.VarValue)}
	case Slope:
		m := f.Posterior(a.At)
		return []Result{r.number(Slope, a.At, m.Slope, m.VarSlope)}
	case Bend:
		m := f.Posterior(a.At)
		return []Result{r.number(Bend, a.At, m.Curvature, m.VarCurvature)}
	case Area, Mean, Change:
		return []Result{r.over(a)}
	case Surely:
		return r.surely(a)
	case Crossing:
		return r.crossings(a)
	case Maximum, Minimum:
		return r.extreme(a)
	case Steepest:
		return r.steepest(a)
	}
	panic(fmt.Sprintf("reading: unknown kind %q", a.Kind))
}

// over reads a stretch: the area under it, its mean, or the change along it.
func (r *ruler) over(a Ask) Result {
	var v, variance float64
	switch a.Kind {
	case Change:
		v, variance = r.f.Change(a.From, a.To)
	default:
		v, variance = r.f.Area(a.From, a.To)
		if l := a.To - a.From; a.Kind == Mean {
			v, variance = v/l, variance/float64(l*l)
		}
	}
	h := r.half(variance)
	out := Result{Kind: a.Kind, At: a.From, Value: v, Lower: v - h, Upper: v + h}
	if r.beyond(a.From) || r.beyond(a.To) {
		out.Extrapolated, out.Note = true, "partly beyond the data"
	}
	return out
}

func (r *ruler) number(kind string, x, v, variance float64) Result {
	h := r.half(variance)
	out := Result{Kind: kind, At: x, Value: v, Lower: v - h, Upper: v + h}
	if r.beyond(x) {
		out.Extrapolated, out.Note = true, beyondData
	}
	return out
}

// crossings finds where the curve passes the level, in x order. Its interval
// is the stretch about it on which the band still holds the level:
// {x: |g(x) - c| <= t se(x)}.
func (r *ruler) crossings(a Ask) []Result {
	var out []Result
	for _, c := range Crossings(&r.f.Curve, a.At) {
		if a.Direction == "rising" && !c.Rising || a.Direction == "falling" && c.Rising {
			continue
		}
		res := Result{Kind: Crossing, At: a.At, Value: c.X}
		holds := func(x float64) bool {
			m := r.f.Posterior(x)
			return math.Abs(m.Value-a.At) <= r.half(m.VarValue)
		}
		res.Lower, res.Upper, res.Note = r.stretch(c.X, holds, fmt.Sprintf("the band still holds %g", a.At))
		out = append(out, res)
		if !a.All {
			break
		}
	}
	r.elsewhere(a.At, out)
	if out == nil {
		nan := math.NaN()
		out = []Result{{Kind: Crossing, At: a.At, Value: nan, Lower: nan, Upper: nan, Note: None}}
	}
	return out
}

// elsewhere notes at the first crossing where else the band holds the level:
// the set of places where the curve may cross is then in several pieces.
func (r *ruler) elsewhere(level float64, found []Result) {
	if len(found) == 0 || r.width == 0 {
		return
	}
	holds := func(x float64) bool {
		m := r.f.Posterior(x)
		return math.Abs(m.Value-level) <= r.half(m.VarValue)
	}
	others := 0
	lower, open := 0.0, false
	close := func(upper float64) {
		open = false
		for _, f := range found {
			if f.Value >= lower && f.Value <= upper {
				return
			}
		}
		others++
	}
	k := r.f.Knots
	for j := 0; j+1 < len(k); j++ {
		for q := 0; q < 4; q++ {
			x := k[j] + float64(0.25*float64(q)*(k[j+1]-k[j]))
			switch in := holds(x); {
			case in && !open:
				lower, open = x, true
			case !in && open:
				close(x)
			}
		}
	}
	if open {
		close(r.hi)
	}
	if others == 0 {
		return
	}
	note := fmt.Sprintf("the band holds %g over another stretch too", level)
	if others > 1 {
		note = fmt.Sprintf("the band holds %g over %d other stretches too", level, others)
	}
	found[0].Note = strings.TrimPrefix(found[0].Note+"; "+note, "; ")
}

// stretch finds the connected stretch about x on which a condition holds,
// within the observed range. An end that the range cuts off is open.
func (r *ruler) stretch(x float64, holds func(float64) bool, why string) (lower, upper float64, note string) {
	if r.width == 0 {
		return x, x, ""
	}
	lower, openLow := r.walk(x, r.lo, holds)
	upper, openHigh := r.walk(x, r.hi, holds)
	switch {
	case openLow && openHigh:
		note = "open at both ends: " + why + " over the whole observed range"
	case openLow:
		note = "open below: " + why + " at the first x"
	case openHigh:
		note = "open above: " + why + " at the last x"
	}
	return lower, upper, note
}

// walk goes from x towards an end of the range until the condition fails, in
// steps of a quarter of a knot interval, and settles the place by bisection.
func (r *ruler) walk(x, end float64, holds func(float64) bool) (place float64, open bool) {
	k := r.f.Knots
	j := r.f.Interval(x)
	last := x
	step := func(p float64) bool { // true: settled
		if holds(p) {
			last = p
			return false
		}
		in, out := last, p
		for range 80 {
			mid := 0.5 * (in + out)
			if mid == in || mid == out {
				break
			}
			if holds(mid) {
				in = mid
			} else {
				out = mid
			}
		}
		place = in
		return true
	}
	if end > x {
		for ; j < len(k)-1; j++ {
			for q := 1; q <= 4; q++ {
				p := k[j+1]
				if q < 4 {
					p = k[j] + float64(0.25*float64(q)*(k[j+1]-k[j]))
				}
				if p > x && step(p) {
					return place, false
				}
			}
		}
		return math.Inf(1), true
	}
	for ; j >= 0; j-- {
		for q := 3; q >= 0; q-- {
			p := k[j]
			if q > 0 {
				p = k[j] + float64(0.25*float64(q)*(k[j+1]-k[j]))
			}
			if p < x && step(p) {
				return place, false
			}
		}
	}
	return math.Inf(-1), true
}

// extreme finds the highest or lowest point on the observed range. The
// interval of its place is the stretch about it on which the slope's band
// holds 0: {x: |g'(x)| <= t se(g'(x))}.
func (r *ruler) extreme(a Ask) []Result {
	kind, sign := a.Kind, 1.0
	if kind == Minimum {
		sign = -1
	}
	best, at := math.Inf(-1), r.lo
	for _, x := range turning(&r.f.Curve) {
		if v, _, _ := r.f.At(x); float64(sign*v) > best {
			best, at = float64(sign*v), x
		}
	}
	m := r.f.Posterior(at)
	height := r.number(kind, at, m.Value, m.VarValue)
	place := Result{Kind: kind + "_at", At: m.Value, Value: at}
	if r.f.Order == 1 { // a path of a Wiener process has no slope
		place.Lower, place.Upper, place.Note = math.NaN(), math.NaN(), noInterval
		if lower, upper, ok := r.placeByDraws(a, "extreme", func(value, _ float64) float64 { return float64(sign * value) }); ok {
			place.Lower, place.Upper, place.Note = min(lower, at), max(upper, at), ""
		}
		if at == r.lo || at == r.hi {
			height.Note = AtEnd
		}
		return []Result{height, place}
	}
	flat := func(x float64) bool {
		m := r.f.Posterior(x)
		return math.Abs(m.Slope) <= r.half(m.VarSlope)
	}
	if at == r.lo || at == r.hi {
		height.Note = AtEnd
		place.Lower, place.Upper, place.Note = at, at, AtEnd+"; it may lie beyond"
		inward, outward, inf := &place.Upper, &place.Lower, math.Inf(-1)
		end := r.hi
		if at == r.hi {
			inward, outward, inf, end = &place.Lower, &place.Upper, math.Inf(1), r.lo
		}
		*outward = inf
		if r.width > 0 && flat(at) {
			*inward, _ = r.walk(at, end, flat)
		}
		return []Result{height, place}
	}
	place.Lower, place.Upper, place.Note = r.stretch(at, flat, "the slope's band still holds 0")
	return []Result{height, place}
}

// steepest finds the largest slope: by size, or the largest rise or fall.
func (r *ruler) steepest(a Ask) []Result {
	direction := a.Direction
	best, at := math.Inf(-1), r.lo
	for _, x := range inflections(&r.f.Curve) {
		_, s, _ := r.f.At(x)
		v := math.Abs(s)
		switch direction {
		case "rising":
			v = s
		case "falling":
			v = -s
		}
		if v > best {
			best, at = v, x
		}
	}
	m := r.f.Posterior(at)
	if direction == "rising" && m.Slope <= 0 || direction == "falling" && m.Slope >= 0 {
		nan := math.NaN()
		return []Result{{Kind: Steepest, At: nan, Value: nan, Lower: nan, Upper: nan, Note: None},
			{Kind: Steepest + "_at", At: nan, Value: nan, Lower: nan, Upper: nan, Note: None}}
	}
	slope := r.number(Steepest, at, m.Slope, m.VarSlope)
	place := Result{Kind: Steepest + "_at", At: m.Slope, Value: at, Lower: math.NaN(), Upper: math.NaN(), Note: noInterval}
	if lower, upper, ok := r.placeByDraws(a, "steepest", func(_, slope float64) float64 {
		switch direction {
		case "falling":
			return -slope
		case "rising":
			return slope
		}
		return math.Abs(slope)
	}); ok {
		place.Lower, place.Upper, place.Note = min(lower, at), max(upper, at), ""
	}
	if at == r.lo || at == r.hi {
		slope.Note = AtEnd
		place.Note = strings.TrimPrefix(place.Note+"; "+AtEnd, "; ")
	}
	return []Result{slope, place}
}
