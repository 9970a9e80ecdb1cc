// Package diagnose looks at a fit's residuals and leverages for signs that
// the band or the rule cannot be trusted as it stands.
//
// It works on what methods/spline gives, chooses nothing and repairs nothing:
// it returns numbers and flags.
package diagnose

import (
	"math"

	"batten/methods/spline"
)

// Version is raised when a report's bytes change.
const Version = 1

// Flags.
const (
	Autocorrelated = "autocorrelated" // neighbouring residuals resemble each other
	HighLeverage   = "high_leverage"  // some rows all but fix the curve
	FewDistinct    = "few_distinct"   // fewer distinct x than FewX
)

const (
	// OneInHundred is the one-sided 1% point of the standard normal.
	OneInHundred = 2.3263478740408408
	// FewX is the number of distinct x below which a choice from the data
	// alone says little (our own convention, from simulated small groups: the
	// minimum of GCV is then nearly flat).
	FewX = 8
	// fewest knots that the tests of residuals are made for
	testable = 10
)

// Report is what was found.
type Report struct {
	LagOne      float64 // autocorrelation of neighbouring standardised residuals
	LagOneZ     float64 // times the root of their number: standard normal if independent
	RunsZ       float64 // standardised number of runs of signs; low where residuals cluster
	MaxLeverage float64 // largest S_ii of a row
	Flags       []string
}

// Residuals examines a fit.
//
// Residuals are taken at the distinct x (means of ties), in x order, times the
// root of the weight. LagOne is sum e_j e_(j+1) / sum e_j^2; its standard
// error under independence is about 1/sqrt(m) (Bartlett 1946, JRSS Suppl.
// 8:27). Runs of signs: Wald and Wolfowitz (1940), Ann. Math. Stat. 11:147.
// Autocorrelated is flagged where either test, one-sided, gives less than 1%.
// HighLeverage is flagged where a row has S_ii > 0.5, beyond which Huber (1981),
// Robust Statistics, section 7.2, would avoid it (from memory), and also more
// than three times the mean, a common practice.
func Residuals(f *spline.Fit) Report {
	var r Report
	d, m := f.Data, len(f.Knots)
	for k := range d.RowX {
		r.MaxLeverage = max(r.MaxLeverage, f.RowLeverage(k))
	}
	if r.MaxLeverage > 0.5 && r.MaxLeverage > 3*f.EDF/float64(d.N) {
		r.Flags = append(r.Flags, HighLeverage)
	}
	if m < FewX {
		r.Flags = append(r.Flags, FewDistinct)
	}
	if m < testable || f.RSS == 0 {
		return r
	}
	ss, cross := 0.0, 0.0
	pos, neg, runs, last := 0, 0, 0, 0
	before := 0.0
	for j := range f.Gap {
		e := float64(math.Sqrt(d.W[j]) * f.Gap[j])
		ss += float64(e * e)
		cross += float64(e * before)
		before = e
		s := 1
		switch {
		case e == 0:
			continue
		case e < 0:
			s = -1
			neg++
		default:
			pos++
		}
		if s != last {
			runs++
			last = s
		}
	}
	if ss > 0 {
		r.LagOne = cross / ss
		r.LagOneZ = float64(r.LagOne * math.Sqrt(float64(m)))
	}
	if n := float64(pos + neg); pos > 0 && neg > 0 && n > 2 {
		pn := float64(2 * float64(float64(pos)*float64(neg)))
		mean := pn/n + 1
		variance := float64(pn*(pn-n)) / float64(float64(n*n)*(n-1))
		if variance > 0 {
			r.RunsZ = (float64(runs) - mean) / math.Sqrt(variance)
		}
	}
	if r.LagOneZ > OneInHundred || r.RunsZ < -OneInHundred {
		r.Flags = append([]string{Autocorrelated}, r.Flags...)
	}
	return r
}
