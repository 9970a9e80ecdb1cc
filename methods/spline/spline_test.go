package spline

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
	"runtime"
	"strconv"
	"testing"

	"batten/testdata/reference"
)

// TestNISTNorris compares the straight-line limit with certified values of the
// NIST Statistical Reference Datasets, linear regression, Norris.
func TestNISTNorris(t *testing.T) {
	s := reference.Load(t, "norris")[0]
	d, err := Collapse(s.X, s.Y, nil)
	if err != nil {
		t.Fatal(err)
	}
	var ws Workspace
	f := ws.Fit(d, math.Inf(1))
	b0, b1, _ := f.At(0)
	near(t, "B0", b0, -0.262323073774029, 1e-11, 0.262323073774029)
	near(t, "B1", b1, 1.00211681802045, 1e-12, 1)
	near(t, "residual standard deviation", f.Sigma(), 0.884796396144373, 1e-12, 0.884796396144373)
	// certified standard deviations of the two estimates, from the posterior
	m := f.Posterior(0)
	near(t, "sd of B0", f.Sigma()*math.Sqrt(m.VarValue), 0.232818234301152, 1e-11, 0.232818234301152)
	near(t, "sd of B1", f.Sigma()*math.Sqrt(m.VarSlope), 0.429796848199937e-3, 1e-11, 0.429796848199937e-3)
}

// TestIndependentFortran compares with the output of an independent Fortran
// smoother, shipped by scipy 1.10.1 as a test (interpolate/tests/data/
// gcvspl.npz, BSD-3): n = 100, lambda 0.3936875; its y is good to 2e-6.
func TestIndependentFortran(t *testing.T) {
	cols := readCSV(t, filepath.Join(reference.Dir(), "gcvspl.csv"))
	d, err := Collapse(cols[0], cols[1], nil)
	if err != nil {
		t.Fatal(err)
	}
	var ws Workspace
	f := ws.Fit(d, 0.3936875)
	near(t, "edf", f.EDF, 4.959423, 1e-6, 4.959423)
	near(t, "gcv", f.GCV(1), 0.24944926, 1e-7, 0.24944926)
	for i, x := range cols[0] {
		g, _, _ := f.At(x)
		near(t, "g", g, cols[2][i], 4e-6, 1)
	}
}

func readCSV(t *testing.T, file string) [3][]float64 {
	t.Helper()
	fh, err := os.Open(file)
	if err != nil {
		t.Fatal(err)
	}
	defer fh.Close()
	rows, err := csv.NewReader(fh).ReadAll()
	if err != nil {
		t.Fatal(err)
	}
	var out [3][]float64
	for _, r := range rows[1:] {
		for k := range out {
			v, err := strconv.ParseFloat(r[k], 64)
			if err != nil {
				t.Fatal(err)
			}
			out[k] = append(out[k], v)
		}
	}
	return out
}

// sample is a seeded group with ties and weights.
func sample(n int, seed uint64) (x, y, w []float64) {
	rng := rand.New(rand.NewPCG(seed, 11))
	for range n {
		v := math.Floor(float64(n)*rng.Float64()) / 4
		x = append(x, v)
		// no math.Sin: its bits differ between processors
		bend := v - float64(n)/8
		y = append(y, float64(bend*bend)/30+float64(2*rng.Float64()))
		w = append(w, 0.5+math.Floor(4*rng.Float64())/2)
	}
	return x, y, w
}

// TestOrderOfRows: results depend on the multiset of rows, bit for bit.
func TestOrderOfRows(t *testing.T) {
	x, y, w := sample(80, 3)
	d, err := Collapse(x, y, w)
	if err != nil {
		t.Fatal(err)
	}
	var ws Workspace
	want := fingerprint(ws.Fit(d, 2.5))
	rng := rand.New(rand.NewPCG(5, 6))
	for range 20 {
		rng.Shuffle(len(x), func(i, j int) {
			x[i], x[j], y[i], y[j], w[i], w[j] = x[j], x[i], y[j], y[i], w[j], w[i]
		})
		d, err := Collapse(x, y, w)
		if err != nil {
			t.Fatal(err)
		}
		if got := fingerprint(ws.Fit(d, 2.5)); got != want {
			t.Fatal("the order of the rows changed a bit of the fit")
		}
		for k, row := range d.Order {
			if d.RowX[k] != x[row] || d.RowY[k] != y[row] || d.RowW[k] != w[row] {
				t.Fatal("Order does not lead back to the caller's rows")
			}
		}
	}
}

func fingerprint(f *Fit) string {
	h := sha256.New()
	put := func(v ...float64) {
		for _, x := range v {
			_ = binary.Write(h, binary.LittleEndian, x)
		}
	}
	put(f.Value...)
	put(f.Curvature...)
	put(f.Leverage...)
	put(f.EDF, f.NEDF, f.RSS, f.LOOCV, f.Roughness, f.REML, f.DREML)
	for k := range f.Data.RowX {
		put(f.RowLeverage(k), f.RowLeftOut(k), f.RowResidual(k))
	}
	lo, hi := f.Knots[0], f.Knots[len(f.Knots)-1]
	for i := -2; i < 13; i++ {
		m := f.Posterior(lo + (hi-lo)*float64(i)/10)
		put(m.Value, m.Slope, m.VarValue, m.VarSlope, m.Cov)
	}
	a, v := f.Area(lo-1, hi-0.7)
	put(a, v)
	return hex.EncodeToString(h.Sum(nil))
}

// TestKnownBytes holds a set of fits to known bits. It runs on other
// processors too.
func TestKnownBytes(t *testing.T) {
	var ws Workspace
	h := sha256.New()
	for _, order := range []int{2, 1, 3} {
		for i, n := range []int{7, 17, 50, 200, 700} {
			x, y, w := sample(n, uint64(i))
			d := &Data{Penalty: order}
			if err := d.Reset(x, y, w); err != nil {
				t.Fatal(err)
			}
			for _, lambda := range []float64{1e-6, 0.03, 1, 4000, math.Inf(1)} {
				f := ws.Fit(d, lambda)
				fmt.Fprintln(h, fingerprint(f))
				a, v := f.Area(x[0]-1, x[n-1])
				c, u := f.Change(x[0], x[n/2]+0.1)
				_ = binary.Write(h, binary.LittleEndian, []float64{a, v, c, u, f.REML, f.DREML})
			}
		}
	}
	const want, version = "2959356e801dfc6ded4bb438a4f4a2a0", 1
	got := hex.EncodeToString(h.Sum(nil))[:32]
	switch {
	case got != want && Version == version:
		t.Errorf("the bits of fits changed (%s, expected %s): raise Version, and then this test's", got, want)
	case Version != version:
		t.Errorf("Version is %d, this test knows %d: set both, and want to %s", Version, version, got)
	}
}

// TestInvariants: leverages lie in [0, 1] and sum to edf; lambda near 0
// interpolates; large lambda gives the line; DREML is REML's derivative;
// Scores and Criteria agree bit for bit; nothing is allocated in a search.
func TestInvariants(t *testing.T) {
	var ws Workspace
	for seed := range uint64(30) {
		x, y, w := sample(6+int(seed)*3, seed)
		d, err := Collapse(x, y, w)
		if err != nil {
			t.Fatal(err)
		}
		for _, lambda := range []float64{1e-14, 1e-3, 1, 1e4, 1e14} {
			f := ws.Fit(d, lambda)
			sum := 0.0
			for k := range d.RowX {
				h := f.RowLeverage(k)
				if h < 0 || h > 1 {
					t.Fatalf("leverage %g", h)
				}
				sum += h
			}
			near(t, "sum of leverages", sum, f.EDF, 1e-13, f.EDF)
			near(t, "edf and n - edf", f.EDF+f.NEDF, float64(d.N), 1e-13, float64(d.N))
			s := ws.Scores(d, lambda)
			if s.EDF != f.EDF || s.RSS != f.RSS || s.LOOCV != f.LOOCV || s.NEDF != f.NEDF {
				t.Fatal("Scores and Fit differ")
			}
			const e = 1e-4
			num := (ws.Criteria(d, lambda*(1+e)).REML - ws.Criteria(d, lambda/(1+e)).REML) / (2 * math.Log1p(e))
			near(t, "DREML", f.DREML, num, 1e-4, math.Abs(f.DREML)+1e-3)
		}
		f := ws.Fit(d, 1e-14)
		for j := range d.X {
			near(t, "interpolation", f.Value[j], d.Y[j], 1e-6, 1)
		}
		a, b := ws.Fit(d, 1e15), ws.Fit(d, math.Inf(1))
		for j := range d.X {
			near(t, "the line", a.Value[j], b.Value[j], 1e-9, 1)
		}
		if n := testing.AllocsPerRun(10, func() { ws.Criteria(d, 3) }); n != 0 {
			t.Fatalf("%g allocations a criterion", n)
		}
	}
}

// TestErrors: each thing wrong with the rows has its own error.
func TestErrors(t *testing.T) {
	var few TooFewPointsError
	if d, err := Collapse([]float64{1, 1, 2}, []float64{1, 2, 3}, nil); !errors.As(err, &few) || few.Got != 2 || d.N != 3 {
		t.Errorf("two distinct x: %v", err)
	}
	var neg NegativeWeightError
	if _, err := Collapse([]float64{1, 2, 3}, []float64{1, 2, 3}, []float64{1, -1, 1}); !errors.As(err, &neg) || neg.Row != 1 {
		t.Errorf("negative weight: %v", err)
	}
	var nf NotFiniteError
	for _, bad := range []float64{math.NaN(), math.Inf(1), math.Inf(-1)} {
		if _, err := Collapse([]float64{1, 2, 3}, []float64{1, 2, bad}, nil); !errors.As(err, &nf) || nf.Row != 2 {
			t.Errorf("%g: %v", bad, err)
		}
	}
	d, err := Collapse([]float64{3, 1, 2, 9}, []float64{1, 2, 4, 5}, []float64{1, 1, 1, 0})
	if err != nil || d.ZeroWeight != 1 || d.N != 3 {
		t.Errorf("weight 0: %v, %+v", err, d)
	}
	d, err = Collapse([]float64{0, math.Copysign(0, -1), 1, 2}, []float64{1, 2, 4, 5}, nil)
	if err != nil || len(d.X) != 3 {
		t.Errorf("0 and -0 are %d places: %v", len(d.X), err)
	}
}

func benchData(b *testing.B, n int) *Data {
	rng := rand.New(rand.NewPCG(1, 2))
	x, y := make([]float64, n), make([]float64, n)
	for i := range x {
		x[i] = (float64(i) + 0.8*rng.Float64()) / float64(n) * 10
		y[i] = math.Sin(x[i]) + 0.3*rng.NormFloat64()
	}
	d, err := Collapse(x, y, nil)
	if err != nil {
		b.Fatal(err)
	}
	return d
}

var sizes = []int{50, 200, 2000, 100_000, 1_000_000}

func BenchmarkScores(b *testing.B) {
	for _, n := range sizes {
		b.Run(fmt.Sprintf("n=%d", n), func(b *testing.B) {
			d := benchData(b, n)
			var ws Workspace
			ws.Scores(d, 0.01)
			b.ReportAllocs()
			for b.Loop() {
				ws.Scores(d, 0.01)
			}
			b.ReportMetric(float64(b.Elapsed().Nanoseconds())/float64(b.N)/float64(n), "ns/point")
		})
	}
}

func BenchmarkCriteria(b *testing.B) {
	for _, n := range sizes {
		b.Run(fmt.Sprintf("n=%d", n), func(b *testing.B) {
			d := benchData(b, n)
			var ws Workspace
			ws.Criteria(d, 0.01)
			for b.Loop() {
				ws.Criteria(d, 0.01)
			}
			b.ReportMetric(float64(b.Elapsed().Nanoseconds())/float64(b.N)/float64(n), "ns/point")
		})
	}
}

func BenchmarkFit(b *testing.B) {
	for _, n := range sizes {
		b.Run(fmt.Sprintf("n=%d", n), func(b *testing.B) {
			d := benchData(b, n)
			var ws Workspace
			var f Fit
			ws.FitInto(&f, d, 0.01)
			b.ReportAllocs()
			for b.Loop() {
				ws.FitInto(&f, d, 0.01)
			}
			b.ReportMetric(float64(b.Elapsed().Nanoseconds())/float64(b.N)/float64(n), "ns/point")
		})
	}
}

// TestMemory: a long curve, its lambda searched, takes less than 250 bytes a
// point in all.
func TestMemory(t *testing.T) {
	const n = 400_000
	x, y, w := sample(n, 8)
	for i := range x {
		x[i] = float64(i) // no ties
	}
	heap := func() float64 {
		var m runtime.MemStats
		runtime.GC()
		runtime.GC()
		runtime.ReadMemStats(&m)
		return float64(m.HeapAlloc)
	}
	before := heap()
	d, err := Collapse(x, y, w)
	if err != nil {
		t.Fatal(err)
	}
	var ws Workspace
	var out [2]Criteria
	ws.CriteriaAt(d, []float64{1e3, 1e5}, out[:])
	f := ws.Fit(d, 1e4)
	got := (heap() - before) / n
	t.Logf("%.0f bytes a point", got)
	if got > 250 {
		t.Errorf("%.0f bytes a point", got)
	}
	runtime.KeepAlive(f)
	runtime.KeepAlive(d)
	runtime.KeepAlive(x)
}
