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
// groups' data cover, on the curve's own grid, and tests it.
func (cf *curveFits) difference(s *spec.Study, c *spec.Contrast, p pair) (out reading.Contrast, err error) {
	a, b := &fitter{}, &fitter{}
	fa, err := a.open(cf.fits[p.first])
	if err != nil {
		return out, err
	}
	fb, err := b.open(cf.fits[p.minus])
	if err != nil {
		return out, err
	}
	lo := max(fa.Knots[0], fb.Knots[0])
	hi := min(fa.Knots[len(fa.Knots)-1], fb.Knots[len(fb.Knots)-1])
	if hi <= lo {
		return out, nil
	}
	grid := cf.def.Grid
	if len(grid.At) == 0 {
		grid.From, grid.To = nil, nil
	}
	xs, err := gridOf(&grid, lo, hi)
	if err != nil {
		return out, err
	}
	inside := xs[:0:0]
	for _, x := range xs {
		if x >= lo && x <= hi {
			inside = append(inside, x)
		}
	}
	band := reading.Band{Level: cf.def.Band.Level, Simultaneous: cf.def.Band.Simultaneous,
		Seed: s.Seed, Group: fitName(c.Name.Text, p.label)}
	return reading.Difference(fa, fb, band, inside), nil
}

// tested is a contrast's pair with its tests, adjusted for the number of pairs.
type tested struct {
	pair
	reading.Contrast
	holmNone, holmSame float64
}

// testedPairs are a contrast's pairs, and those without a stretch in common.
type testedPairs struct {
	pairs []tested
	apart []string
}

// test tabulates and tests all pairs of a contrast, once.
func (cf *curveFits) test(s *spec.Study, c *spec.Contrast) (out []tested, missing []string, err error) {
	if done, ok := cf.tests[c.Name.Text]; ok {
		_, missing = cf.pairs(c)
		return done.pairs, append(missing, done.apart...), nil
	}
	pairs, missing := cf.pairs(c)
	var apart []string
	var none, same []float64
	for _, p := range pairs {
		d, err := cf.difference(s, c, p)
		if err != nil {
			return nil, nil, err
		}
		if len(d.Grid) == 0 {
			name := p.label
			if name == "" {
				name = c.Of
			}
			apart = append(apart, name+": the two groups' data have no stretch of x in common")
			continue
		}
		out = append(out, tested{pair: p, Contrast: d})
		none, same = append(none, d.None.P), append(same, d.Same.P)
	}
	none, same = reading.Holm(none), reading.Holm(same)
	for i := range out {
		out[i].holmNone, out[i].holmSame = none[i], same[i]
	}
	if cf.tests == nil {
		cf.tests = map[string]testedPairs{}
	}
	cf.tests[c.Name.Text] = testedPairs{out, apart}
	return out, append(missing, apart...), nil
}
