package choose

import (
	"crypto/sha256"
	"encoding/binary"
	"encoding/csv"
	"encoding/hex"
	"errors"
	"fmt"
	"math"
	"math/rand/v2"
	"os"
	"path/filepath"
	"slices"
	"strconv"
	"testing"

	"batten/methods/elementary"
	"batten/methods/spline"
	"batten/testdata/reference"
)

func near(t *testing.T, what string, got, want, tol float64) {
	t.Helper()
	if !(math.Abs(got-want) <= tol*math.Abs(want)) {
		t.Errorf("%s = %.12g, want %.12g", what, got, want)
	}
}

func load(t testing.TB, name string) *spline.Data {
	t.Helper()
	s := reference.Load(t, name)[0]
	d, err := spline.Collapse(s.X, s.Y, s.W)
	if err != nil {
		t.Fatal(err)
	}
	return d
}

func mustChoose(t testing.TB, d *spline.Data, r Rule) *Evidence {
	t.Helper()
	var ws spline.Workspace
	e, err := Lambda(&ws, d, r)
	if err != nil {
		t.Fatal(err)
	}
	return e
}

// TestPublishedChoices: rules beside the plain ones, against values computed
// with R 4.2.2 data sets in other arithmetic (printed digits are the check's).
func TestPublishedChoices(t *testing.T) {
	cars := load(t, "cars")
	e := mustChoose(t, cars, Rule{Name: GCV, Inflate: 1.4})
	near(t, "cars, inflate 1.4, lambda", e.Chosen.Lambda, 3698.2, 2e-5)
	near(t, "edf", e.Chosen.EDF, 2.24427, 3e-6)
	near(t, "score", e.Chosen.Score, 254.37709, 3e-8)
	e = mustChoose(t, cars, Rule{Name: FixedDF, DF: 4})
	near(t, "cars, df 4, lambda", e.Chosen.Lambda, 92.87129, 1e-7)
	near(t, "edf", e.Chosen.EDF, 4, 1e-13)
	e = mustChoose(t, cars, Rule{Name: AICc})
	near(t, "cars, aicc, lambda", e.Chosen.Lambda, 1457.3, 4e-5)
	near(t, "edf", e.Chosen.EDF, 2.50323, 3e-6)
	e = mustChoose(t, cars, Rule{Name: KnownSigma, Sigma: 15})
	near(t, "cars, sigma 15, lambda", e.Chosen.Lambda, 953.23, 1e-5)
	near(t, "edf", e.Chosen.EDF, 2.66725, 3e-6)
	e = mustChoose(t, cars, Rule{Name: ResidualTarget, Sigma: 15})
	near(t, "cars, RSS = 50 x 225, lambda", e.Chosen.Lambda, 7473.078, 1e-7)
	near(t, "edf", e.Chosen.EDF, 2.131474, 3e-7)
	near(t, "RSS", e.Chosen.RSS, 50*225, 1e-12)
	e = mustChoose(t, load(t, "nhtemp"), Rule{Name: AICc})
	var low []float64
	for _, m := range e.Minima {
		low = append(low, m.EDF)
	}
	slices.Sort(low)
	if len(low) != 2 {
		t.Fatalf("nhtemp has minima of AICc at edf %v, want two", low)
	}
	near(t, "nhtemp, smoother minimum of AICc", low[0], 2.916, 2e-4)
	near(t, "nhtemp, rougher minimum of AICc", low[1], 7.071, 1.3e-3) // read off a grid; the minimum is flat
	e = mustChoose(t, load(t, "nhtemp"), Rule{Name: GCV, Inflate: 1.4})
	var edfs []float64
	for _, m := range e.Minima {
		if m.End == "" {
			edfs = append(edfs, m.EDF)
		}
	}
	slices.Sort(edfs)
	if len(edfs) != 2 {
		t.Fatalf("nhtemp at inflate 1.4 has minima at %v, want two", edfs)
	}
	near(t, "nhtemp, smoother minimum", edfs[0], 2.261, 1e-3)
	near(t, "nhtemp, rougher minimum", edfs[1], 5.996, 3e-4)
}

// TestIndependentFortran: the choice of an independent Fortran smoother on 100
// points, shipped by scipy 1.10.1 (interpolate/tests/data/gcvspl.npz, BSD-3).
func TestIndependentFortran(t *testing.T) {
	var x, y []float64
	for _, r := range rows(t, "gcvspl.csv") {
		x, y = append(x, number(t, r[0])), append(y, number(t, r[1]))
	}
	d, err := spline.Collapse(x, y, nil)
	if err != nil {
		t.Fatal(err)
	}
	e := mustChoose(t, d, Rule{Name: GCV})
	near(t, "lambda", e.Chosen.Lambda, 0.3936875, 1e-4) // its search stops there
	near(t, "edf", e.Chosen.EDF, 4.959423, 1e-5)
	near(t, "gcv", e.Chosen.Score, 0.24944926, 1e-7)
}

// TestFirstGroups: exact optima of five simulated groups of 50 (seeded
// generator). Their lambdas were searched on values of GCV alone, which settles
// a flat minimum to about the root of a double's precision; the GCV itself is
// good to all digits printed. (Lambdas to 1e-9: TestReferenceOptima.)
func TestFirstGroups(t *testing.T) {
	want := [][3]float64{{0.02526875867, 14.19944749, 0.02863962183}, {0.06309712964, 11.41599928, 0.3141691556},
		{0.00640147666, 19.39956795, 0.03171585151}, {0.0190264437, 15.05329473, 0.04373779919}, {0.03598484211, 13.06445575, 0.3238961776}}
	all := rows(t, "first_groups.csv")
	for g, w := range want {
		var x, y []float64
		for _, r := range all[50*g : 50*g+50] {
			x, y = append(x, number(t, r[2])), append(y, number(t, r[3]))
		}
		d, err := spline.Collapse(x, y, nil)
		if err != nil {
			t.Fatal(err)
		}
		e := mustChoose(t, d, Rule{Name: GCV})
		near(t, "lambda", e.Chosen.Lambda, w[0], 2e-7)
		near(t, "edf", e.Chosen.EDF, w[1], 5e-8)
		near(t, "gcv", e.Chosen.Score, w[2], 1e-9)
	}
}

func rows(t *testing.T, name string) [][]string {
	t.Helper()
	f, err := os.Open(filepath.Join(reference.Dir(), name))
	if err != nil {
		t.Fatal(err)
	}
	defer f.Close()
	r, err := csv.NewReader(f).ReadAll()
	if err != nil {
		t.Fatal(err)
	}
	return r[1:]
}

func number(t *testing.T, s string) float64 {
	t.Helper()
	v, err := strconv.ParseFloat(s, 64)
	if err != nil {
		t.Fatal(err)
	}
	return v
}

// TestKFoldScores compares scores on listed folds with 96-digit values.
func TestKFoldScores(t *testing.T) {
	n := 0
	for _, name := range reference.Names {
		for _, s := range reference.Load(t, name) {
			if s.KFold == nil {
				continue
			}
			d, err := spline.Collapse(s.X, s.Y, s.W)
			if err != nil {
				t.Fatal(err)
			}
			var ws spline.Workspace
			se := newSearch(&ws, d, Rule{Name: KFold, Folds: s.KFold.K})
			se.foldOf = make([]int32, d.N)
			for k, row := range d.Order {
				se.foldOf[k] = int32(s.KFold.Fold[row] - 1)
			}
			if err := se.makeFolds(s.KFold.K); err != nil {
				t.Fatal(err)
			}
			for _, c := range s.KFold.Cases {
				n++
				score, sse := se.crossValidate(c.Lambda)
				near(t, s.Name+" cv", score, c.CV, 1e-11)
				for f := range sse {
					near(t, s.Name+" fold", sse[f], c.FoldSSE[f], 1e-11)
				}
			}
		}
	}
	if n < 9 {
		t.Errorf("only %d cases", n)
	}
}

// noisy is a seeded group.
func noisy(n int, seed uint64) (x, y []float64) {
	rng := rand.New(rand.NewPCG(seed, 3))
	for i := range n {
		x = append(x, (float64(i)+0.8*rng.Float64())/float64(n)*10)
		y = append(y, math.Sin(x[i]*(0.3+float64(seed%5)))+(0.1+0.3*float64(seed%3))*rng.NormFloat64())
	}
	return x, y
}

// TestNoBetterOnAFineGrid: the choice is never worse than the best of 500
// candidates spread over the same range.
func TestNoBetterOnAFineGrid(t *testing.T) {
	var ws spline.Workspace
	several := 0
	for seed := range uint64(400) {
		x, y := noisy(12+int(seed%70), seed)
		d := &spline.Data{Penalty: 2}
		if seed >= 200 {
			d.Penalty = 1 + 2*int(seed%2) // 1 and 3
		}
		if err := d.Reset(x, y, nil); err != nil {
			t.Fatal(err)
		}
		for _, name := range []string{GCV, LOOCV, REML, AICc, KnownSigma} {
			rule := Rule{Name: name, Sigma: 0.3}
			e, err := Lambda(&ws, d, rule)
			if err != nil {
				t.Fatal(err)
			}
			if len(e.Minima) > 1 {
				several++
			}
			lo, hi := elementary.Log(e.Candidates[len(e.Candidates)-1].Lambda), elementary.Log(e.Candidates[0].Lambda)
			s := newSearch(&ws, d, rule)
			for k := range 501 {
				c := s.at(lo + (hi-lo)*float64(k)/500)
				if c.Score < e.Chosen.Score-1e-9*math.Abs(e.Chosen.Score) {
					t.Errorf("%s, seed %d: score %.12g at edf %.4f, chosen %.12g at edf %.4f", name, seed, c.Score, c.EDF, e.Chosen.Score, e.Chosen.EDF)
					break
				}
			}
			if !slices.IsSortedFunc(e.Candidates, func(a, b Candidate) int { return int(math.Copysign(1, a.EDF-b.EDF)) }) {
				t.Errorf("%s, seed %d: candidates are not in order of edf", name, seed)
			}
		}
	}
	if several < 50 {
		t.Errorf("only %d choices had several minima: the test is too easy", several)
	}
}

// TestOddData: what small or degenerate groups must do.
func TestOddData(t *testing.T) {
	fit := func(x, y []float64, r Rule) (*Evidence, error) {
		d, err := spline.Collapse(x, y, nil)
		if err != nil {
			t.Fatal(err)
		}
		var ws spline.Workspace
		return Lambda(&ws, d, r)
	}
	x := []float64{1, 2, 3, 4, 5, 6, 7, 8, 9, 10}
	for _, name := range []string{GCV, LOOCV, REML, KFold} {
		r := Rule{Name: name, Folds: 5}
		flat := slices.Repeat([]float64{7.3}, 10)
		line := make([]float64, 10)
		for i := range line {
			line[i] = 3.1 - 0.7*x[i]
		}
		for _, y := range [][]float64{flat, line} {
			e, err := fit(x, y, r)
			if err != nil {
				t.Fatalf("%s: %v", name, err)
			}
			if e.Chosen.EDF > 2.02 || !slices.Contains(e.Flags, StraightLine) || math.IsNaN(e.Chosen.Score) {
				t.Errorf("%s on a line: edf %g, flags %v", name, e.Chosen.EDF, e.Flags)
			}
		}
		if e, err := fit(x[:3], []float64{1, 3, 2}, Rule{Name: name, Folds: 3}); name != KFold && (err != nil || math.IsNaN(e.Chosen.Lambda)) {
			t.Errorf("%s on 3 points: %v, %v", name, e, err)
		}
	}
	var re RangeError
	for _, r := range []Rule{{Name: FixedDF, DF: 10}, {Name: FixedDF, DF: 12}, {Name: KFold, Folds: 11}, {Name: GCV, DFAtLeast: 9.5}} {
		if _, err := fit(x, x, r); !errors.As(err, &re) {
			t.Errorf("%+v: %v, want a RangeError", r, err)
		}
	}
	e, err := fit(x, []float64{1, 2, 1, 2, 3, 1, 2, 3, 4, 4}, Rule{Name: FixedDF, DF: 2})
	if err != nil || !math.IsInf(e.Chosen.Lambda, 1) || math.Abs(e.Chosen.EDF-2) > 1e-12 {
		t.Errorf("df = 2: %+v, %v", e, err)
	}
	// zigzag: GCV wants to interpolate, and is stopped at the bound with a flag
	zig := []float64{1, -1, 1, -1, 1, -1, 1, -1, 1, -1}
	e, err = fit(x, zig, Rule{Name: GCV, DFAtMost: 5})
	if err != nil || e.Chosen.EDF > 5.0001 {
		t.Errorf("df_at_most = 5: edf %g, %v", e.Chosen.EDF, err)
	}
}

// TestRowsInAnyOrder: choices depend on the multiset of rows, folds included.
func TestRowsInAnyOrder(t *testing.T) {
	x, y := noisy(40, 4)
	x[7], x[8], x[9] = x[6], x[6], x[6]
	block := make([]int32, len(x))
	for i := range block {
		block[i] = int32(i % 7)
	}
	rng := rand.New(rand.NewPCG(8, 9))
	var ws spline.Workspace
	for _, r := range []Rule{{Name: GCV}, {Name: REML}, {Name: KFold, Folds: 6, Seed: 5, Group: "a"}, {Name: KFold, Block: block}, {Name: KFold, Folds: 5, OneSE: true}} {
		var want *Evidence
		for range 6 {
			d, err := spline.Collapse(x, y, nil)
			if err != nil {
				t.Fatal(err)
			}
			r.Block = nil
			e, err := Lambda(&ws, d, r)
			if err != nil {
				t.Fatal(err)
			}
			if want == nil {
				want = e
			} else if fmt.Sprint(*e) != fmt.Sprint(*want) {
				t.Fatalf("%s: the order of rows changed the choice", r.Name)
			}
			rng.Shuffle(len(x), func(i, j int) { x[i], x[j], y[i], y[j] = x[j], x[i], y[j], y[i] })
		}
	}
}

// TestFolds: whole blocks stay together; one fold a block value where folds
// are not given; another seed or group draws otherwise; shares are even.
func TestFolds(t *testing.T) {
	x, y := noisy(42, 1)
	d, err := spline.Collapse(x, y, nil)
	if err != nil {
		t.Fatal(err)
	}
	block := make([]int32, len(x))
	for i := range block {
		block[i] = int32(i / 6 * 10)
	}
	var ws spline.Workspace
	draw := func(r Rule) []int32 {
		r.Name = KFold
		s := newSearch(&ws, d, r)
		if err := s.drawFolds(); err != nil {
			t.Fatal(err)
		}
		return s.foldOf
	}
	byBlock := draw(Rule{Block: block})
	of := map[int32]int32{}
	for i, row := range d.Order {
		b := block[row]
		if f, ok := of[b]; ok && f != byBlock[i] {
			t.Fatal("a block was split")
		}
		of[b] = byBlock[i]
	}
	if len(of) != 7 || slices.Max(byBlock) != 6 {
		t.Errorf("7 block values made %d folds", slices.Max(byBlock)+1)
	}
	a := draw(Rule{Folds: 10, Seed: 1, Group: "g"})
	count := map[int32]int{}
	for _, f := range a {
		count[f]++
	}
	for f, n := range count {
		if n < 4 || n > 5 {
			t.Errorf("fold %d has %d of 42 rows", f, n)
		}
	}
	if slices.Equal(a, draw(Rule{Folds: 10, Seed: 2, Group: "g"})) || slices.Equal(a, draw(Rule{Folds: 10, Seed: 1, Group: "h"})) {
		t.Error("seed or group do not enter the draw")
	}
	if !slices.Equal(a, draw(Rule{Folds: 10, Seed: 1, Group: "g"})) {
		t.Error("the same draw came out otherwise")
	}
}

// TestOneSE: the choice is the smoothest candidate within the limit.
func TestOneSE(t *testing.T) {
	x, y := noisy(60, 6)
	d, err := spline.Collapse(x, y, nil)
	if err != nil {
		t.Fatal(err)
	}
	best := mustChoose(t, d, Rule{Name: KFold, Folds: 6})
	one := mustChoose(t, d, Rule{Name: KFold, Folds: 6, OneSE: true})
	if !(one.Chosen.EDF <= best.Chosen.EDF) || !(one.Chosen.Score >= best.Chosen.Score) {
		t.Errorf("one_se took edf %g (score %g), the best is edf %g (score %g)", one.Chosen.EDF, one.Chosen.Score, best.Chosen.EDF, best.Chosen.Score)
	}

	// loocv: the limit from a refit without each row
	best = mustChoose(t, d, Rule{Name: LOOCV})
	one = mustChoose(t, d, Rule{Name: LOOCV, OneSE: true})
	var ws spline.Workspace
	var loss []float64
	for i := range x {
		rest, err := spline.Collapse(append(slices.Clone(x[:i]), x[i+1:]...), append(slices.Clone(y[:i]), y[i+1:]...), nil)
		if err != nil {
			t.Fatal(err)
		}
		g, _, _ := ws.Fit(rest, best.Chosen.Lambda).At(x[i])
		loss = append(loss, (y[i]-g)*(y[i]-g))
	}
	n, mean, ss := float64(len(loss)), 0.0, 0.0
	for _, v := range loss {
		mean += v / n
	}
	for _, v := range loss {
		ss += (v - mean) * (v - mean)
	}
	limit := mean + math.Sqrt(ss/(n-1)/n)
	if one.Chosen.Score > limit || one.Chosen.EDF >= best.Chosen.EDF {
		t.Errorf("loocv, one_se: score %g at edf %g, limit %g, best edf %g", one.Chosen.Score, one.Chosen.EDF, limit, best.Chosen.EDF)
	}
	for _, c := range one.Candidates {
		if c.EDF < one.Chosen.EDF && c.Score <= limit {
			t.Errorf("loocv, one_se: edf %g is smoother and within the limit", c.EDF)
		}
	}
}

// TestStretches: folds of neighbours, with a gap, score what a fit to the rest
// predicts between the rows that are left.
func TestStretches(t *testing.T) {
	x, y := noisy(60, 7)
	for i := 20; i < 23; i++ {
		x[i] = x[19] // ties stay together
	}
	d, err := spline.Collapse(x, y, nil)
	if err != nil {
		t.Fatal(err)
	}
	var ws spline.Workspace
	const gap, lambda = 0.35, 0.2
	s := newSearch(&ws, d, Rule{Name: KFold, Folds: 6, Stretches: true, Gap: gap})
	if err := s.drawFolds(); err != nil {
		t.Fatal(err)
	}
	for i := 1; i < d.N; i++ {
		if s.foldOf[i] < s.foldOf[i-1] || d.RowX[i] == d.RowX[i-1] && s.foldOf[i] != s.foldOf[i-1] {
			t.Fatalf("rows %d and %d are in folds %d and %d", i-1, i, s.foldOf[i-1], s.foldOf[i])
		}
	}
	sum, n := 0.0, 0
	for f := range int32(6) {
		var tx, ty []float64
		lo, hi := math.Inf(1), math.Inf(-1)
		for i, of := range s.foldOf {
			if of == f {
				lo, hi = min(lo, d.RowX[i]), max(hi, d.RowX[i])
			}
		}
		for i := range d.RowX {
			if d.RowX[i] < lo-gap || d.RowX[i] > hi+gap {
				tx, ty = append(tx, d.RowX[i]), append(ty, d.RowY[i])
			}
		}
		train, err := spline.Collapse(tx, ty, nil)
		if err != nil {
			t.Fatal(err)
		}
		fit := (&spline.Workspace{}).Fit(train, lambda)
		for i, of := range s.foldOf {
			if of == f && d.RowX[i] > tx[0] && d.RowX[i] < tx[len(tx)-1] {
				g, _, _ := fit.At(d.RowX[i])
				sum += (d.RowY[i] - g) * (d.RowY[i] - g)
				n++
			}
		}
	}
	score, _ := s.crossValidate(lambda)
	near(t, "score", score, sum/float64(n), 1e-13)
	if n >= d.N {
		t.Error("extrapolated rows were scored")
	}
}

// TestResidualTarget: RSS never exceeds the target, the smoothest such curve is
// taken, and it is said where there is none.
func TestResidualTarget(t *testing.T) {
	x, y := noisy(50, 8)
	d, err := spline.Collapse(x, y, nil)
	if err != nil {
		t.Fatal(err)
	}
	var ws spline.Workspace
	for _, sigma := range []float64{0.2, 0.3, 0.4, 0.5, 0.6, 0.68} {
		e := mustChoose(t, d, Rule{Name: ResidualTarget, Sigma: sigma})
		goal := 50 * sigma * sigma
		if e.Chosen.RSS > goal {
			t.Errorf("sigma %g: RSS %g exceeds %g", sigma, e.Chosen.RSS, goal)
		}
		if c := ws.Scores(d, e.Chosen.Lambda*(1+1e-9)); c.RSS <= goal {
			t.Errorf("sigma %g: a smoother curve will do", sigma)
		}
	}
	line := ws.Scores(d, math.Inf(1))
	e := mustChoose(t, d, Rule{Name: ResidualTarget, Sigma: 1.01 * math.Sqrt(line.RSS/50)})
	if !math.IsInf(e.Chosen.Lambda, 1) || !slices.Equal(e.Flags, []string{StraightLine}) {
		t.Errorf("the line is near enough, but lambda is %g, flags %v", e.Chosen.Lambda, e.Flags)
	}
	e = mustChoose(t, d, Rule{Name: ResidualTarget, Sigma: 1e-3})
	if !slices.Equal(e.Flags, []string{TargetUnreached, AtBound}) {
		t.Errorf("flags %v where the target is out of reach", e.Flags)
	}
}

// TestOthers: what other rules would have taken is what they take.
func TestOthers(t *testing.T) {
	for _, name := range []string{"cars", "mcycle", "nhtemp", "LakeHuron", "synth_w"} {
		d := load(t, name)
		var ws spline.Workspace
		for _, r := range []Rule{{Name: GCV}, {Name: REML}, {Name: FixedDF, DF: 4}, {Name: GCV, Inflate: 1.4}} {
			e, err := Lambda(&ws, d, r)
			if err != nil {
				t.Fatal(err)
			}
			for _, o := range Others(&ws, d, r, e) {
				want := mustChoose(t, d, Rule{Name: o.Rule})
				near(t, fmt.Sprintf("%s: %s beside %s", name, o.Rule, r.Name), o.Lambda, want.Chosen.Lambda, 1e-6)
			}
		}
	}
}

// TestKnownBytes holds choices to known bits. It runs on other processors too.
func TestKnownBytes(t *testing.T) {
	h := sha256.New()
	put := func(v ...float64) {
		for _, x := range v {
			_ = binary.Write(h, binary.LittleEndian, x)
		}
	}
	var ws spline.Workspace
	for seed := range uint64(12) {
		// not noisy: math.Sin differs between processors
		rng := rand.New(rand.NewPCG(seed, 17))
		var x, y []float64
		for i := range 14 + 9*int(seed) {
			v := float64(i) + rng.Float64()
			x, y = append(x, v), append(y, float64(v*v)/40+float64(3*rng.Float64()))
		}
		d, err := spline.Collapse(x, y, nil)
		if err != nil {
			t.Fatal(err)
		}
		for _, r := range []Rule{{Name: GCV}, {Name: GCV, Inflate: 1.4}, {Name: LOOCV}, {Name: REML}, {Name: FixedDF, DF: 4.5},
			{Name: KFold, Folds: 5, Seed: 3, Group: "g"}, {Name: KFold, Folds: 4, OneSE: true}} {
			e, err := Lambda(&ws, d, r)
			if err != nil {
				t.Fatal(err)
			}
			for _, c := range append(e.Candidates, e.Chosen) {
				put(c.Lambda, c.EDF, c.RSS, c.GCV, c.LOOCV, c.REML, c.Score)
			}
			fmt.Fprintln(h, e.Flags)
			for _, o := range Others(&ws, d, r, e) {
				put(o.Lambda, o.EDF, o.Score)
			}
		}
	}
	const want, version = "884cba95192ea03412ec8e322efeca7b", 1
	got := hex.EncodeToString(h.Sum(nil))[:32]
	switch {
	case got != want && Version == version:
		t.Errorf("the bits of choices changed (%s, expected %s): raise Version, and then this test's", got, want)
	case Version != version:
		t.Errorf("Version is %d, this test knows %d: set both, and want to %s", Version, version, got)
	}
}

func BenchmarkChoose(b *testing.B) {
	for _, r := range []Rule{{Name: GCV}, {Name: LOOCV}, {Name: REML}, {Name: FixedDF, DF: 8}, {Name: KFold, Folds: 10}} {
		for _, n := range []int{50, 200} {
			b.Run(fmt.Sprintf("rule=%s/n=%d", r.Name, n), func(b *testing.B) {
				var ws spline.Workspace
				var ds []*spline.Data
				for seed := range uint64(40) {
					x, y := noisy(n, seed)
					d, err := spline.Collapse(x, y, nil)
					if err != nil {
						b.Fatal(err)
					}
					ds = append(ds, d)
				}
				i := 0
				for b.Loop() {
					if _, err := Lambda(&ws, ds[i%len(ds)], r); err != nil {
						b.Fatal(err)
					}
					i++
				}
				b.ReportMetric(float64(b.N)/b.Elapsed().Seconds(), "fits/s")
			})
		}
	}
}

// BenchmarkLong times the choice by gcv and the fit for one long curve.
func BenchmarkLong(b *testing.B) {
	for _, n := range []int{10_000, 100_000, 1_000_000} {
		b.Run(fmt.Sprintf("n=%d", n), func(b *testing.B) {
			rng := rand.New(rand.NewPCG(1, uint64(n)))
			x, y := make([]float64, n), make([]float64, n)
			for i := range x {
				x[i] = (float64(i) + 0.8*rng.Float64()) / float64(n)
				y[i] = math.Sin(20*x[i]) + 0.3*rng.NormFloat64()
			}
			d, err := spline.Collapse(x, y, nil)
			if err != nil {
				b.Fatal(err)
			}
			var ws spline.Workspace
			var f spline.Fit
			for b.Loop() {
				e, err := Lambda(&ws, d, Rule{Name: GCV})
				if err != nil {
					b.Fatal(err)
				}
				ws.FitInto(&f, d, e.Chosen.Lambda)
			}
			b.ReportMetric(b.Elapsed().Seconds()/float64(b.N)/float64(n)*1e9, "ns/point")
		})
	}
}
