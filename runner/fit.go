package runner

import (
	"errors"
	"fmt"
	"math"
	"sort"

	"github.com/fxamacker/cbor/v2"

	"batten/methods/choose"
	"batten/methods/diagnose"
	"batten/methods/spline"
	"batten/spec"
)

// storedFit is one group's fit as the store keeps it: the rows that went in,
// the choice with its evidence, and the curve. Bands and readings are taken
// from it when they are asked for.
type storedFit struct {
	Group     []string `cbor:"g"` // the by columns' values as text
	Key       string   `cbor:"k"` // digest of all it depends on
	N         int      `cbor:"n"`
	Distinct  int      `cbor:"m"`
	ZeroW     int      `cbor:"z,omitempty"`
	X         floats   `cbor:"x"` // rows in canonical order
	Y         floats   `cbor:"y"`
	W         floats   `cbor:"w,omitempty"` // absent: every row weighs 1
	Rule      string   `cbor:"r"`
	Exception string   `cbor:"e,omitempty"`

	Order       int     `cbor:"od,omitempty"` // of the penalty, where it is not 2
	Shared      string  `cbor:"sh,omitempty"` // what the groups have in common: lambda or edf
	SharedValue float64 `cbor:"sv,omitempty"` // log lambda, or edf
	SharedBy    int     `cbor:"sn,omitempty"` // by how many groups

	Lambda, EDF, NEDF, RSS, Sigma, GCV, LOOCV, REML, Score float64

	Candidates floats           `cbor:"c,omitempty"`
	Minima     []choose.Minimum `cbor:"mi,omitempty"`
	Others     []choose.Other   `cbor:"o,omitempty"`
	Flags      []string         `cbor:"f,omitempty"`
	Residuals  diagnose.Report  `cbor:"d"`

	Knots     floats `cbor:"kx,omitempty"`
	Value     floats `cbor:"kv,omitempty"`
	Slope     floats `cbor:"ks,omitempty"` // order 3
	Curvature floats `cbor:"kc,omitempty"`

	Failed string `cbor:"no,omitempty"` // why there is no fit
}

// storedPart is one part: some of a curve's groups.
type storedPart struct {
	Fits []*storedFit
}

// codec writes the same bytes for the same value.
var codec = func() cbor.EncMode {
	m, err := cbor.EncOptions{Sort: cbor.SortCanonical}.EncMode()
	if err != nil {
		panic(err) // a programmer's mistake in the options
	}
	return m
}()

// fitter is one worker's memory.
type fitter struct {
	ws      spline.Workspace
	data    spline.Data
	x, y, w []float64
	block   []int32
}

// rule returns the method's form of a spec's rule.
func chooseRule(s *spec.Study, r *spec.Rule, group string, block []int32, shared float64) choose.Rule {
	return choose.Rule{
		Follow: r.Shared, Shared: shared,
		Name: r.Name, DF: r.DF, Lambda: r.Lambda, Inflate: r.Inflate,
		Folds: r.Folds, Block: block, Stretches: r.Stretches, Gap: r.Gap, OneSE: r.OneSE, Sigma: r.Sigma,
		DFAtLeast: r.DFAtLeast, DFAtMost: r.DFAtMost, Seed: s.Seed, Group: group,
	}
}

// compute fits one group. What the data cause becomes a fit that says why it
// is none; errors are the program's own.
func (ft *fitter) compute(s *spec.Study, r *spec.Rule, out *storedFit, group string, block []int32) error {
	d := &ft.data
	out.X = append(floats(nil), d.RowX...)
	out.Y = append(floats(nil), d.RowY...)
	for _, w := range d.RowW {
		if w != 1 {
			out.W = append(floats(nil), d.RowW...)
			break
		}
	}
	rule := chooseRule(s, r, group, block, out.SharedValue)
	ev, err := choose.Lambda(&ft.ws, d, rule)
	if err != nil {
		if why, ok := dataCause(err); ok {
			out.Failed = why
			return nil
		}
		return err
	}
	f := ft.ws.Fit(d, ev.Chosen.Lambda)
	out.Lambda, out.EDF, out.NEDF, out.RSS, out.Sigma = f.Lambda, f.EDF, f.NEDF, f.RSS, f.Sigma()
	out.GCV, out.LOOCV, out.REML, out.Score = f.GCV(1), f.LOOCV, f.REML, ev.Chosen.Score
	out.Candidates, out.Minima = packCandidates(ev.Candidates), ev.Minima
	out.Others = choose.Others(&ft.ws, d, rule, ev)
	out.Residuals = diagnose.Residuals(f)
	out.Flags = append(append([]string(nil), ev.Flags...), out.Residuals.Flags...)
	out.Knots = append(floats(nil), f.Knots...)
	out.Value = append(floats(nil), f.Value...)
	out.Curvature = append(floats(nil), f.Curvature...)
	out.Slope = append(floats(nil), f.Slope...)
	if bad := notFinite(out); bad != "" {
		out.Failed = fmt.Sprintf("the fit's %s is not a finite number: the data's scale is beyond what can be fitted; rescale x, y or the weights", bad)
	}
	return nil
}

func notFinite(f *storedFit) string {
	for _, q := range []struct {
		name string
		v    float64
	}{{"edf", f.EDF}, {"rss", f.RSS}} {
		if math.IsNaN(q.v) || math.IsInf(q.v, 0) {
			return q.name
		}
	}
	for _, v := range f.Value {
		if math.IsNaN(v) || math.IsInf(v, 0) {
			return "curve"
		}
	}
	return ""
}

// dataCause tells whether an error of the methods is caused by the group's
// data, and says it in the study's words.
func dataCause(err error) (string, bool) {
	var few spline.TooFewPointsError
	if errors.As(err, &few) {
		return fmt.Sprintf("%s, a curve needs %d", plural(few.Got, "distinct x", "distinct x"), few.Need), true
	}
	var fewp *spline.TooFewPointsError
	if errors.As(err, &fewp) {
		return fmt.Sprintf("%d distinct x, a curve needs %d", fewp.Got, fewp.Need), true
	}
	if choose.CausedByData(err) {
		return err.Error(), true
	}
	return "", false
}

// open makes the method's fit of a stored one again: the same rows at the
// same lambda give the same bits.
func (ft *fitter) open(f *storedFit) (*spline.Fit, error) {
	var w []float64 // nil: every row weighs 1
	if len(f.W) > 0 {
		w = f.W
	}
	ft.data.Penalty = f.Order
	if err := ft.data.Reset(f.X, f.Y, w); err != nil {
		return nil, err
	}
	return ft.ws.Fit(&ft.data, f.Lambda), nil
}

// gather copies a group's rows into the worker's memory.
func (ft *fitter) gather(x, y, w []float64, block []int32, rows []int32) {
	ft.x, ft.y, ft.w, ft.block = ft.x[:0], ft.y[:0], ft.w[:0], ft.block[:0]
	for _, i := range rows {
		ft.x = append(ft.x, x[i])
		ft.y = append(ft.y, y[i])
	}
	if w != nil {
		for _, i := range rows {
			ft.w = append(ft.w, w[i])
		}
	}
	if block != nil {
		for _, i := range rows {
			ft.block = append(ft.block, block[i])
		}
		// Rows alike in x, y and w may differ in block: settle their order,
		// so that folds do not depend on the order of the file.
		idx := make([]int, len(rows))
		for i := range idx {
			idx[i] = i
		}
		sort.SliceStable(idx, func(a, b int) bool { return ft.block[idx[a]] < ft.block[idx[b]] })
		ft.x, ft.y, ft.block = permute(ft.x, idx), permute(ft.y, idx), permute(ft.block, idx)
		if w != nil {
			ft.w = permute(ft.w, idx)
		}
	}
}

func permute[T any](v []T, idx []int) []T {
	out := make([]T, len(v))
	for i, j := range idx {
		out[i] = v[j]
	}
	return out
}

// weights returns the gathered weights, nil where every row weighs 1.
func (ft *fitter) weights() []float64 {
	if len(ft.w) == 0 {
		return nil
	}
	return ft.w
}
