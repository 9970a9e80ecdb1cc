package runner

import (
	"math"

	"batten/spec"
)

// shiftBeyond tells whether a shift counts: shift in half-widths of the old
// band, by in the response's unit.
func shiftBeyond(t *spec.Tolerance, shift, by float64) bool {
	return t.HalfWidths > 0 && shift > t.HalfWidths || t.Response > 0 && math.Abs(by) > t.Response
}

// readingBeyond tells whether a reading's change counts. One that comes or goes
// does where the reading has a limit.
func readingBeyond(t *spec.Tolerance, name string, old, now float64) bool {
	for _, r := range t.Readings {
		if r.Name == name {
			if math.IsNaN(old) || math.IsNaN(now) {
				return math.IsNaN(old) != math.IsNaN(now)
			}
			return math.Abs(now-old) > r.Limit
		}
	}
	return false
}
