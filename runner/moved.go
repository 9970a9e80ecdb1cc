package runner

import (
	"context"
	"math"
	"path/filepath"
	"slices"

	"batten/runner/ledger"
	"batten/spec"
)

// Move is one fit that differs from the ledger.
type Move struct {
	Fit    string   `json:"fit"`
	What   []string `json:"what"`            // "new", "gone", "shifted", "edf changed", "rule changed"
	Shift  *float64 `json:"shift,omitempty"` // largest |new - old|, in half-widths of the old band
	At     *float64 `json:"at,omitempty"`    // where
	AtText string   `json:"at_text,omitempty"`
	OldEDF *float64 `json:"old_edf,omitempty"`
	NewEDF *float64 `json:"new_edf,omitempty"`

	Pending bool `json:"pending,omitempty"` // left as it was by the last acceptance, which took others
}

const (
	// edfTolerance is the change of edf that counts: what two printed
	// decimals show.
	edfTolerance = 0.005
)

// ledgerDir is where a study's ledger lies.
func ledgerDir(s *spec.Study) string { return filepath.Join(s.Dir, "ledger") }

// entries makes the ledger's rows of a curve's standing fits, or of those that
// want names.
func entries(ctx context.Context, cf *curveFits, want func(fit string) bool, workers int) ([]ledger.Entry, error) {
	out := make([]ledger.Entry, len(cf.fits))
	wanted := make([]bool, len(cf.fits))
	err := eachFit(ctx, cf, workers, func(ft *fitter, i int) error {
		f := cf.fits[i]
		if wanted[i] = want == nil || want(fitName(cf.def.Name.Text, label(cf.by, f.Group))); !wanted[i] {
			return nil
		}
		d, err := ft.derive(cf, i, wants{readings: true})
		if err != nil {
			return err
		}
		e := ledger.Entry{
			Group: f.Group, N: f.N, Distinct: f.Distinct, Rule: f.Rule, Exception: f.Exception,
			Lambda: f.Lambda, EDF: f.EDF, RSS: f.RSS, Sigma: f.Sigma, GCV: f.GCV, LOOCV: f.LOOCV, REML: f.REML, Score: f.Score,
			Flags: d.flags, From: f.Knots[0], To: f.Knots[len(f.Knots)-1], Key: f.Key[:16],
		}
		for _, p := range tabulate(d.fit, cf.def, places(e.From, e.To)) {
			e.Curve = append(e.Curve, p.Value)
			e.HalfWidth = append(e.HalfWidth, halfWidth(p))
		}
		e.Readings = readingValues(d.readings)
		out[i] = e
		return nil
	})
	if err != nil {
		return nil, err
	}
	standing := out[:0]
	for i := range out {
		if wanted[i] {
			standing = append(standing, out[i])
		}
	}
	return standing, nil
}

// moved compares a curve's fits with the ledger's, in the order of groups;
// fits that are gone come last.
func moved(ctx context.Context, cf *curveFits, old *ledger.Accepted, workers int) ([]Move, error) {
	name := cf.def.Name.Text
	if old == nil {
		old = &ledger.Accepted{By: cf.by}
	}
	before := map[string]*ledger.Entry{}
	if slices.Equal(old.By, cf.by) {
		for i := range old.Entries {
			before[label(old.By, old.Entries[i].Group)] = &old.Entries[i]
		}
	}
	moves := make([]*Move, len(cf.fits))
	err := eachFit(ctx, cf, workers, func(ft *fitter, i int) error {
		f := cf.fits[i]
		g := label(cf.by, f.Group)
		m := &Move{Fit: fitName(name, g)}
		o := before[g]
		if o == nil {
			m.What, m.NewEDF = []string{"new"}, ptr(f.EDF)
			moves[i] = m
			return nil
		}
		if o.Key == f.Key[:16] {
			return nil // the same rows, rule and methods: the same fit
		}
		t := &cf.def.Tolerance
		d, err := ft.derive(cf, i, wants{readings: len(t.Readings) > 0})
		if err != nil {
			return err
		}
		shift, by, where := 0.0, 0.0, math.NaN()
		for k, x := range places(o.From, o.To) {
			if k >= len(o.Curve) {
				break
			}
			v, _, _ := d.fit.At(x)
			// The ledger keeps seven digits; less than that is no movement.
			if math.Abs(v-o.Curve[k]) <= 1e-6*math.Abs(o.Curve[k]) {
				continue
			}
			if s := math.Abs(v-o.Curve[k]) / o.HalfWidth[k]; s > shift {
				shift, by, where = s, v-o.Curve[k], x
			}
		}
		if shiftBeyond(t, shift, by) {
			m.What = append(m.What, "shifted")
		}
		if !t.Given && math.Abs(f.EDF-o.EDF) >= edfTolerance {
			m.What = append(m.What, "edf changed")
		}
		if !t.Given && (f.Rule != o.Rule || f.Exception != o.Exception) {
			m.What = append(m.What, "rule changed")
		}
		for _, now := range readingValues(d.readings) {
			for _, was := range o.Readings {
				if was.Name == now.Name && readingBeyond(t, now.Name, was.Value, now.Value) {
					m.What = append(m.What, now.Name+" moved")
				}
			}
		}
		if len(m.What) == 0 {
			return nil
		}
		m.OldEDF, m.NewEDF = ptr(o.EDF), ptr(f.EDF)
		if finite(shift) && finite(where) {
			m.Shift, m.At = ptr(shift), ptr(where)
			m.AtText = placeText(&cf.def.Along, where)
		}
		moves[i] = m
		return nil
	})
	if err != nil {
		return nil, err
	}
	var out []Move
	have := map[string]bool{}
	for i, m := range moves {
		if cf.verdict[i].fits() {
			have[label(cf.by, cf.fits[i].Group)] = true
		}
		if m != nil {
			out = append(out, *m)
		}
	}
	for _, e := range old.Entries {
		if g := label(old.By, e.Group); !have[g] || !slices.Equal(old.By, cf.by) {
			out = append(out, Move{Fit: fitName(name, g), What: []string{"gone"}, OldEDF: ptr(e.EDF)})
		}
	}
	return out, nil
}

func ptr(v float64) *float64 {
	if !finite(v) {
		return nil
	}
	return &v
}
