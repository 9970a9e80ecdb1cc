package spline

import (
	"fmt"
	"math"
	"sort"
)

// Data is one group's rows with weight > 0 in canonical order, collapsed to
// distinct x. Equal multisets of rows give equal Data, bit for bit.
type Data struct {
	Penalty    int // order of the penalty: 1, 2 or 3; 0 stands for 2. Set it before Reset
	N          int // rows with weight > 0
	ZeroWeight int // rows with weight 0: they take no part

	RowX, RowY, RowW []float64 // rows by x, then y, then w
	Order            []int32   // RowX[k] is the caller's row Order[k]
	Knot             []int32   // RowX[k] == X[Knot[k]]

	X, Y, W   []float64 // per distinct x: place, weighted mean response, total weight
	First     []int32   // rows First[j] to First[j+1]-1 stand at X[j]; len(X)+1 entries
	PureError float64   // sum w (y - mean at its x)^2: the spread within ties
	SumW      float64

	shift    float64   // with pivot and tilt the line that is taken off y while fitting
	pivot    float64   // x of the shift
	tilt     float64   // slope; 0 for order 1
	yc       []float64 // Y less the line
	tied     bool
	reml     float64 // lambda-free part of -2 log restricted likelihood
	haveREML bool
}

// NotFiniteError names a row (of the caller's) with a value that is not finite.
type NotFiniteError struct{ Row int }

func (e NotFiniteError) Error() string {
	return fmt.Sprintf("row %d holds a value that is not a finite number", e.Row)
}

// NegativeWeightError names a row (of the caller's) with a weight below zero.
type NegativeWeightError struct {
	Row    int
	Weight float64
}

func (e NegativeWeightError) Error() string {
	return fmt.Sprintf("row %d has the negative weight %g", e.Row, e.Weight)
}

// TooFewPointsError says that there are fewer distinct x than a curve needs.
// The Data it comes with holds the rows all the same.
type TooFewPointsError struct{ Need, Got int }

func (e TooFewPointsError) Error() string {
	return fmt.Sprintf("%d distinct x, a curve needs %d", e.Got, e.Need)
}

// MinDistinct is the fewest distinct x that a curve of the given order can be
// fitted to.
func MinDistinct(order int) int { return order + 1 }

// Collapse makes Data from rows; w nil means that every row weighs 1. The
// slices are copied. Panics when lengths differ.
func Collapse(x, y, w []float64) (*Data, error) {
	d := &Data{}
	return d, d.Reset(x, y, w)
}

// Reset is Collapse into the memory of d.
func (d *Data) Reset(x, y, w []float64) error {
	if len(x) != len(y) || w != nil && len(w) != len(x) {
		panic("spline: x, y and w differ in length")
	}
	d.N, d.ZeroWeight, d.PureError, d.SumW, d.haveREML = 0, 0, 0, 0, false
	d.Order = d.Order[:0]
	d.X, d.Y, d.W, d.First, d.Knot = d.X[:0], d.Y[:0], d.W[:0], d.First[:0], d.Knot[:0]
	d.RowX, d.RowY, d.RowW = d.RowX[:0], d.RowY[:0], d.RowW[:0]
	sorted := true
	last := math.Inf(-1)
	for i := range x {
		wi := 1.0
		if w != nil {
			wi = w[i]
		}
		if v := x[i] - x[i] + y[i] - y[i] + wi - wi; v != 0 {
			return NotFiniteError{i}
		}
		if wi < 0 {
			return NegativeWeightError{i, wi}
		}
		if wi == 0 {
			d.ZeroWeight++
			continue
		}
		if !(x[i] > last) {
			sorted = false
		}
		last = x[i]
		d.Order = append(d.Order, int32(i))
		d.RowX = append(d.RowX, x[i]+0) // -0 and 0 are one place
		d.RowY = append(d.RowY, y[i])
		d.RowW = append(d.RowW, wi)
	}
	d.N = len(d.RowX)
	if !sorted {
		sort.Stable((*rows)(d))
	}
	d.collapse()
	if need := MinDistinct(d.Null()); len(d.X) < need {
		return TooFewPointsError{need, len(d.X)}
	}
	return nil
}

// rows sorts Data's rows by x, then y, then w.
type rows Data

func (d *rows) Len() int { return len(d.RowX) }

func (d *rows) Less(i, j int) bool {
	switch {
	case d.RowX[i] != d.RowX[j]:
		return d.RowX[i] < d.RowX[j]
	case d.RowY[i] != d.RowY[j]:
		return d.RowY[i] < d.RowY[j]
	}
	return d.RowW[i] < d.RowW[j]
}

func (d *rows) Swap(i, j int) {
	d.RowX[i], d.RowX[j] = d.RowX[j], d.RowX[i]
	d.RowY[i], d.RowY[j] = d.RowY[j], d.RowY[i]
	d.RowW[i], d.RowW[j] = d.RowW[j], d.RowW[i]
	d.Order[i], d.Order[j] = d.Order[j], d.Order[i]
}

// collapse forms the distinct x from the sorted rows: weights add, responses
// average, the spread within ties goes to PureError. The mean is formed about
// the first response, so that an offset common to all costs no digits.
func (d *Data) collapse() {
	d.tied = false
	for k := 0; k < d.N; {
		j := k + 1
		for j < d.N && d.RowX[j] == d.RowX[k] {
			j++
		}
		base := d.RowY[k]
		sw, sy := 0.0, 0.0
		for i := k; i < j; i++ {
			sw += d.RowW[i]
			sy += float64(d.RowW[i] * (d.RowY[i] - base))
			d.Knot = append(d.Knot, int32(len(d.X)))
		}
		mean := base + sy/sw
		if j > k+1 {
			d.tied = true
			for i := k; i < j; i++ {
				e := d.RowY[i] - mean
				d.PureError += float64(float64(d.RowW[i]*e) * e)
			}
		}
		d.First = append(d.First, int32(k))
		d.X = append(d.X, d.RowX[k])
		d.Y = append(d.Y, mean)
		d.W = append(d.W, sw)
		d.SumW += sw
		k = j
	}
	d.First = append(d.First, int32(d.N))
	d.yc = d.yc[:0]
	if len(d.Y) == 0 {
		return
	}
	// An offset of 1e6 would cost 5 digits of the scores, and a trend as many of
	// g” where there is little bend in it. Neither is penalised: a line comes
	// off y, with one rounding, and goes onto g again.
	m := len(d.Y)
	d.shift, d.pivot, d.tilt = d.Y[m/2], d.X[m/2], 0
	if d.Null() > 1 && m > 1 {
		if s := (d.Y[m-1] - d.Y[0]) / (d.X[m-1] - d.X[0]); !math.IsNaN(s) && !math.IsInf(s, 0) {
			d.tilt = s
		}
	}
	for i, y := range d.Y {
		d.yc = append(d.yc, d.level(y, i))
	}
}

// level is a response at knot i less the line.
func (d *Data) level(y float64, i int) float64 {
	return math.FMA(-d.tilt, d.X[i]-d.pivot, y-d.shift)
}

// line is the line at knot i.
func (d *Data) line(i int) float64 { return d.shift + float64(d.tilt*(d.X[i]-d.pivot)) }

// Null is the number of parameters that the penalty leaves free, which is its
// order: those of a constant, a straight line or a parabola.
func (d *Data) Null() int {
	if d.Penalty == 0 {
		return 2
	}
	return d.Penalty
}
