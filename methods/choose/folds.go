package choose

import (
	"crypto/sha256"
	"encoding/binary"
	"fmt"
	"math"
	"math/rand/v2"
	"sort"

	"batten/methods/spline"
)

// fold is one share of the rows: what is fitted without it, and its rows.
type fold struct {
	train spline.Data
	rows  []int32 // held out and scored, of Data
}

// DefaultFolds is used where a rule names neither folds nor a block.
const DefaultFolds = 10

// drawFolds shares the rows, or whole block values, among folds. The draw
// depends on seed and group's name alone, over rows in canonical order.
func (s *search) drawFolds() error {
	d, k := s.d, s.rule.Folds
	if s.rule.Stretches {
		return s.cutFolds()
	}
	unit := make([]int32, d.N) // what each row is drawn with
	units := d.N
	if s.rule.Block != nil {
		rank := map[int32]int32{}
		var seen []int32
		for _, row := range d.Order {
			if b := s.rule.Block[row]; rank[b] == 0 {
				rank[b] = 1
				seen = append(seen, b)
			}
		}
		sort.Slice(seen, func(i, j int) bool { return seen[i] < seen[j] })
		for i, b := range seen {
			rank[b] = int32(i)
		}
		for i, row := range d.Order {
			unit[i] = rank[s.rule.Block[row]]
		}
		units = len(seen)
		if k == 0 {
			k = units
		}
	} else {
		for i := range unit {
			unit[i] = int32(i)
		}
		if k == 0 {
			k = DefaultFolds
		}
	}
	what := "rows"
	if s.rule.Block != nil {
		what = "block values"
	}
	if k < 2 || k > units {
		return RangeError{fmt.Sprintf("%d folds cannot be made of %d %s", k, units, what)}
	}
	order := make([]int32, units)
	for i := range order {
		order[i] = int32(i)
	}
	if k < units { // with one unit a fold there is nothing to draw
		h := sha256.Sum256(fmt.Appendf(nil, "folds\n%d\n%s\n", s.rule.Seed, s.rule.Group))
		rng := rand.NewPCG(binary.LittleEndian.Uint64(h[:]), binary.LittleEndian.Uint64(h[8:]))
		for i := units - 1; i > 0; i-- {
			j := below(rng, uint64(i+1))
			order[i], order[j] = order[j], order[i]
		}
	}
	foldOfUnit := make([]int32, units)
	for i, u := range order {
		foldOfUnit[u] = int32(i % k)
	}
	s.foldOf = make([]int32, d.N)
	for i := range s.foldOf {
		s.foldOf[i] = foldOfUnit[unit[i]]
	}
	return s.makeFolds(k)
}

// below draws a number below n without bias.
func below(rng *rand.PCG, n uint64) uint64 {
	limit := math.MaxUint64 - math.MaxUint64%n
	for {
		if v := rng.Uint64(); v < limit {
			return v % n
		}
	}
}

// cutFolds makes each fold a stretch of neighbours in x, of nearly as many
// rows as the others; ties stay together.
func (s *search) cutFolds() error {
	d, k := s.d, s.rule.Folds
	if k == 0 {
		k = DefaultFolds
	}
	if k < 2 || k > len(d.X) {
		return RangeError{fmt.Sprintf("%d stretches cannot be cut from %d distinct x", k, len(d.X))}
	}
	s.foldOf = make([]int32, d.N)
	count := make([]int, k)
	for j := range d.X {
		first, end := d.First[j], d.First[j+1]
		f := int32(int64(first) * int64(k) / int64(d.N))
		count[f]++
		for i := first; i < end; i++ {
			s.foldOf[i] = f
		}
	}
	for f, n := range count {
		if n == 0 {
			return RangeError{fmt.Sprintf("ties leave stretch %d of %d without a row; take fewer folds", f+1, k)}
		}
	}
	return s.makeFolds(k)
}

// makeFolds collapses the training rows of every fold. Rows within the gap of
// a held-out row do not train. Of stretches those held-out rows are scored that
// lie between training rows: the others would score extrapolation.
// Source of the gap: Burman, Chow and Nolan (1994), Biometrika 81:351.
func (s *search) makeFolds(k int) error {
	d := s.d
	s.folds = make([]fold, k)
	s.scored = 0
	var x, y, w []float64
	near := make([]float64, d.N) // distance to the nearest held-out row
	for f := range s.folds {
		x, y, w = x[:0], y[:0], w[:0]
		if s.rule.Gap > 0 {
			last := math.Inf(-1)
			for i := range near {
				if int(s.foldOf[i]) == f {
					last = d.RowX[i]
				}
				near[i] = d.RowX[i] - last
			}
			last = math.Inf(1)
			for i := d.N - 1; i >= 0; i-- {
				if int(s.foldOf[i]) == f {
					last = d.RowX[i]
				}
				near[i] = min(near[i], last-d.RowX[i])
			}
		}
		fo := &s.folds[f]
		for i, of := range s.foldOf {
			if int(of) == f {
				fo.rows = append(fo.rows, int32(i))
			} else if !(s.rule.Gap > 0 && near[i] <= s.rule.Gap) {
				x, y, w = append(x, d.RowX[i]), append(y, d.RowY[i]), append(w, d.RowW[i])
			}
		}
		fo.train.Penalty = d.Penalty
		if err := fo.train.Reset(x, y, w); err != nil {
			return RangeError{fmt.Sprintf("without fold %d of %d too little is left: %v", f+1, k, err)}
		}
		if s.rule.Stretches {
			lo, hi := fo.train.X[0], fo.train.X[len(fo.train.X)-1]
			inside := fo.rows[:0]
			for _, i := range fo.rows {
				if d.RowX[i] > lo && d.RowX[i] < hi {
					inside = append(inside, i)
				}
			}
			fo.rows = inside
		}
		s.scored += len(fo.rows)
	}
	if s.scored == 0 {
		return RangeError{"no held-out row lies between rows that are left to fit; take more folds or a smaller gap"}
	}
	return nil
}

// crossValidate returns the mean over all held-out rows of w (y - ghat)^2,
// lambda as it is (not rescaled for the smaller training set), and the sums of
// the folds.
func (s *search) crossValidate(lambda float64) (score float64, sse []float64) {
	sse = make([]float64, len(s.folds))
	d, total := s.d, 0.0
	for f := range s.folds {
		if len(s.folds[f].rows) == 0 {
			continue
		}
		s.ws.FitInto(&s.fit, &s.folds[f].train, lambda)
		for _, i := range s.folds[f].rows {
			g, _, _ := s.fit.At(d.RowX[i])
			e := d.RowY[i] - g
			sse[f] += float64(float64(d.RowW[i]*e) * e)
		}
		total += sse[f]
	}
	return total / float64(s.scored), sse
}

// oneSE returns the smoothest candidate whose score lies within one standard
// error of the best. The standard error of kfold is that of the mean of the
// folds' mean losses: their standard deviation over the root of their number;
// that of loocv comes from the rows' losses.
// Source: Breiman, Friedman, Olshen and Stone (1984), Classification and
// Regression Trees, section 3.4.3.
func (s *search) oneSE(best Candidate, all []Candidate) (Candidate, bool) {
	var loss []float64
	if s.rule.Name == KFold {
		_, sse := s.crossValidate(best.Lambda)
		for f := range sse {
			if n := len(s.folds[f].rows); n > 0 {
				loss = append(loss, sse[f]/float64(n))
			}
		}
	} else {
		s.ws.FitInto(&s.fit, s.d, best.Lambda)
		for k, y := range s.d.RowY {
			e := y - s.fit.RowLeftOut(k)
			loss = append(loss, float64(float64(s.d.RowW[k]*e)*e))
		}
	}
	k, mean, ss := float64(len(loss)), 0.0, 0.0
	for _, v := range loss {
		mean += v
	}
	mean /= k
	for _, v := range loss {
		ss += float64((v - mean) * (v - mean))
	}
	limit := best.Score + math.Sqrt(ss/(k-1)/k)
	for _, c := range all { // in order of edf: the first is the smoothest
		if c.Score <= limit {
			return c, true
		}
	}
	return best, false
}
