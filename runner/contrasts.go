package runner

import (
	"fmt"

	"batten/methods/reading"
	"batten/spec"
)

// pair is two groups that differ only in the contrast's column.
type pair struct {
	label        string  // of the columns that remain
	values       []value // of the columns that remain
	text         []string
	first, minus int // fits
}

// pairs finds a contrast's pairs in the order of the groups, and says which
// could not be formed.
func (cf *curveFits) pairs(c *spec.Contrast) (out []pair, missing []string) {
	at := -1
	var rest []string
	for k, b := range cf.by {
		if b == c.Across {
			at = k
		} else {
			rest = append(rest, b)
		}
	}
	type half struct{ first, minus int }
	seen := map[string]*half{}
	var order []string
	texts := map[string]pair{}
	for i, f := range cf.fits {
		side := f.Group[at]
		if side != c.Minus[0] && side != c.Minus[1] {
			continue
		}
		var p pair
		for k := range cf.by {
			if k != at {
				p.text = append(p.text, f.Group[k])
				p.values = append(p.values, cf.values[i][k])
			}
		}
		p.label = label(rest, p.text)
		h := seen[p.label]
		if h == nil {
			h = &half{-1, -1}
			seen[p.label] = h
			order = append(order, p.label)
			texts[p.label] = p
		}
		if !cf.verdict[i].fits() {
			continue
		}
		if side == c.Minus[0] {
			h.first = i
		} else {
			h.minus = i
		}
	}
	for _, l := range order {
		h, p := seen[l], texts[l]
		lacks := ""
		switch {
		case h.first < 0:
			lacks = c.Minus[0]
		case h.minus < 0:
			lacks = c.Minus[1]
		default:
			p.first, p.minus = h.first, h.minus
			out = append(out, p)
			continue
		}
		name := l
		if name == "" {
			name = c.Of
		}
		missing = append(missing, fmt.Sprintf("%s: there is no fit for %s=%s", name, c.Across, lacks))
	}
	return out, missing
}

// difference tabulates a pair's difference over the stretch of x that both
// groups' data cover, on the curve's own grid.
func (cf *curveFits) difference(p pair) ([]reading.Point, error) {
	a, b := &fitter{}, &fitter{}
	fa, err := a.open(cf.fits[p.first])
	if err != nil {
		return nil, err
	}
	fb, err := b.open(cf.fits[p.minus])
	if err != nil {
		return nil, err
	}
	lo := max(fa.Knots[0], fb.Knots[0])
	hi := min(fa.Knots[len(fa.Knots)-1], fb.Knots[len(fb.Knots)-1])
	if hi <= lo {
		return nil, nil
	}
	grid := cf.def.Grid
	if len(grid.At) == 0 {
		grid.From, grid.To = nil, nil
	}
	xs, err := gridOf(&grid, lo, hi)
	if err != nil {
		return nil, err
	}
	inside := xs[:0:0]
	for _, x := range xs {
		if x >= lo && x <= hi {
			inside = append(inside, x)
		}
	}
	return reading.Difference(fa, fb, cf.def.Band.Level, inside), nil
}

// surely lists the stretches of the grid where the pointwise band excludes 0.
func surely(grid []reading.Point) [][2]float64 {
	var out [][2]float64
	open, sign := false, 0
	for _, p := range grid {
		s := 0
		if p.Lower > 0 {
			s = 1
		} else if p.Upper < 0 {
			s = -1
		}
		switch {
		case s == 0:
			open = false
		case open && s == sign:
			out[len(out)-1][1] = p.X
		default:
			out = append(out, [2]float64{p.X, p.X})
			open = true
		}
		sign = s
	}
	return out
}
