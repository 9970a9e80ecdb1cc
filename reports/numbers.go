package reports

import (
	"math"
	"strconv"
	"strings"
	"time"
)

// minus is what people read for a negative number.
const minus = "−"

// Rounded writes a value and its interval to what the interval supports: its
// half-width to two significant digits, the value to the same decimal place.
// NaN is written "none", an infinite end "open".
func Rounded(v, lo, hi float64) (val, lower, upper string) {
	d := decimals(v, lo, hi)
	return fixed(v, d), fixed(lo, d), fixed(hi, d)
}

// decimals is the number of decimal places that an interval supports; negative
// for tens, hundreds.
func decimals(v, lo, hi float64) int {
	half := math.Inf(1)
	for _, e := range []float64{v - lo, hi - v} {
		if e > 0 && !math.IsInf(e, 0) {
			half = math.Min(half, e)
		}
	}
	if math.IsInf(half, 1) || half == 0 {
		// no interval: five significant digits
		if v == 0 || math.IsNaN(v) || math.IsInf(v, 0) {
			return 0
		}
		return min(12, 4-int(math.Floor(math.Log10(math.Abs(v)))))
	}
	return min(12, 1-int(math.Floor(math.Log10(half))))
}

// fixed writes v with d decimals, without a negative zero.
func fixed(v float64, d int) string {
	switch {
	case math.IsNaN(v):
		return "none"
	case math.IsInf(v, 0):
		return "open"
	}
	if d < 0 {
		p := math.Pow(10, float64(-d))
		v, d = math.Round(v/p)*p, 0
	}
	if a := math.Abs(v); a >= 1e15 || a > 0 && a < 1e-9 {
		return strings.Replace(strconv.FormatFloat(v, 'g', 4, 64), "-", minus, 1)
	}
	s := strconv.FormatFloat(v, 'f', d, 64)
	if strings.Trim(s, "-0.") == "" {
		s = strings.TrimPrefix(s, "-")
	}
	return strings.Replace(s, "-", minus, 1)
}

// Short writes v to n significant digits, as people read it.
func Short(v float64, n int) string { return short(v, n) }

// short writes v to n significant digits.
func short(v float64, n int) string {
	switch {
	case math.IsNaN(v):
		return "none"
	case math.IsInf(v, 1):
		return "∞"
	case math.IsInf(v, -1):
		return minus + "∞"
	case v == 0:
		return "0"
	}
	e := int(math.Floor(math.Log10(math.Abs(v))))
	if e >= 6 || e < -4 {
		m, x, _ := strings.Cut(strconv.FormatFloat(v, 'e', n-1, 64), "e")
		if x[0] == '+' {
			x = x[1:]
		}
		neg := ""
		if x[0] == '-' {
			neg, x = minus, x[1:]
		}
		return strings.Replace(m, "-", minus, 1) + "e" + neg + strings.TrimLeft(x, "0")
	}
	return fixed(v, max(0, n-1-e))
}

// isoDate writes days since 1970-01-01 as an ISO date.
func isoDate(days float64) string {
	if math.IsNaN(days) {
		return "none"
	}
	if math.IsInf(days, 0) {
		return "open"
	}
	return time.Unix(int64(math.Round(days))*86400, 0).UTC().Format("2006-01-02")
}

// place writes a place on an axis for people.
func place(a Axis, x float64) string {
	if a.Date {
		return isoDate(x)
	}
	return exact(round(x, 4))
}

// exact writes a number that was set or rounded, without trailing zeros.
func exact(v float64) string {
	if a := math.Abs(v); a >= 1e7 || a > 0 && a < 1e-4 {
		return short(v, 4)
	}
	return strings.Replace(strconv.FormatFloat(v, 'f', -1, 64), "-", minus, 1)
}

// round rounds to n significant digits.
func round(v float64, n int) float64 {
	r, err := strconv.ParseFloat(strconv.FormatFloat(v, 'g', n, 64), 64)
	if err != nil {
		return v
	}
	return r
}

// ReadingText writes a reading's value and interval as people read them.
func ReadingText(x Axis, r Reading) (val, lower, upper string) {
	if r.ValueIsX && x.Date {
		return isoDate(r.Value), isoDate(r.Lower), isoDate(r.Upper)
	}
	val, lower, upper = Rounded(r.Value, r.Lower, r.Upper)
	if math.IsNaN(r.Value) {
		lower, upper = "", ""
	} else if math.IsNaN(r.Lower) {
		lower, upper = "", ""
	}
	return val, lower, upper
}

// label writes an axis with its unit.
func (a Axis) label() string {
	if a.Unit == "" || a.Date {
		return a.Name
	}
	return a.Name + " (" + a.Unit + ")"
}

func plural(n int, one, many string) string {
	if n == 1 {
		return "1 " + one
	}
	return strconv.Itoa(n) + " " + many
}
