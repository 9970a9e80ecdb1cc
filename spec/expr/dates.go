package expr

import (
	"math"
	"strconv"
	"time"
)

// ParseDate reads an ISO 8601 date or date-time (2026-03-01, 2026-03-01T10:30,
// ...:15, with Z or an offset such as +02:00; without one it is UTC) and
// returns days since 1970-01-01 UTC.
func ParseDate(s string) (days float64, ok bool) {
	if len(s) < 10 || s[4] != '-' || s[7] != '-' {
		return 0, false
	}
	if len(s) == 10 {
		y, e1 := strconv.ParseUint(s[:4], 10, 16)
		m, e2 := strconv.ParseUint(s[5:7], 10, 8)
		d, e3 := strconv.ParseUint(s[8:], 10, 8)
		if e1 != nil || e2 != nil || e3 != nil || m < 1 || m > 12 || d < 1 || d > 31 {
			return 0, false
		}
		t := time.Date(int(y), time.Month(m), int(d), 0, 0, 0, 0, time.UTC)
		if t.Day() != int(d) {
			return 0, false // 30 February
		}
		return float64(t.Unix() / 86400), true
	}
	for _, layout := range []string{"2006-01-02T15:04", "2006-01-02T15:04:05", "2006-01-02T15:04Z07:00", "2006-01-02T15:04:05Z07:00",
		"2006-01-02 15:04", "2006-01-02 15:04:05"} {
		if t, err := time.Parse(layout, s); err == nil {
			return float64(t.Unix()) / 86400, true
		}
	}
	return 0, false
}

// FormatDate writes days since 1970-01-01 as an ISO date, or as a date-time to
// the second where they are not whole.
func FormatDate(days float64) string {
	if math.IsNaN(days) || math.IsInf(days, 0) {
		return ""
	}
	whole := math.Floor(days)
	sec := math.Round((days - whole) * 86400)
	t := time.Unix(int64(whole)*86400+int64(sec), 0).UTC()
	if t.Hour() == 0 && t.Minute() == 0 && t.Second() == 0 {
		return t.Format("2006-01-02")
	}
	return t.Format("2006-01-02T15:04:05")
}

func civil(days float64) (year, month int) {
	t := time.Unix(int64(math.Floor(days))*86400, 0).UTC()
	return t.Year(), int(t.Month())
}
