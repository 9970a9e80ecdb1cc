package runner

import (
	"fmt"
	"math"

	"github.com/fxamacker/cbor/v2"
)

// readPart reads a stored part and makes sure that its fits are what a fit can
// be: a store may have been written by anybody.
func readPart(b []byte, by int, into *storedPart) error {
	if err := cbor.Unmarshal(b, into); err != nil {
		return err
	}
	for _, f := range into.Fits {
		if f == nil {
			return fmt.Errorf("a stored part holds no fit where one should be")
		}
		if err := f.sound(by); err != nil {
			return fmt.Errorf("a stored fit is not sound: %w", err)
		}
	}
	return nil
}

// sound tells whether a stored fit can be opened and shown.
func (f *storedFit) sound(by int) error {
	m := len(f.Knots)
	switch {
	case len(f.Group) != by:
		return fmt.Errorf("%d values of a group, the curve has %d by columns", len(f.Group), by)
	case len(f.X) != len(f.Y) || len(f.W) != 0 && len(f.W) != len(f.X):
		return fmt.Errorf("%d x, %d y, %d weights", len(f.X), len(f.Y), len(f.W))
	case f.Order < 0 || f.Order > 3:
		return fmt.Errorf("order %d", f.Order)
	case len(f.Candidates)%candidateFields != 0:
		return fmt.Errorf("%d numbers are no candidates", len(f.Candidates))
	case f.Failed != "":
		return nil
	case len(f.X) == 0 || m < 2 || len(f.Value) != m:
		return fmt.Errorf("%d rows, %d knots, %d values", len(f.X), m, len(f.Value))
	case f.Order != 1 && len(f.Curvature) != m || f.Order == 3 && len(f.Slope) != m:
		return fmt.Errorf("%d curvatures at %d knots", len(f.Curvature), m)
	case !(f.Lambda > 0):
		return fmt.Errorf("lambda %g", f.Lambda)
	}
	for _, v := range []floats{f.X, f.Y, f.W, f.Knots, f.Value} {
		for _, q := range v {
			if math.IsNaN(q) || math.IsInf(q, 0) {
				return fmt.Errorf("a number that is not finite")
			}
		}
	}
	return nil
}
