package main

import (
	"math"
	"slices"
	"sort"
	"strconv"
	"time"
)

// curve is a mean turbidity over the days since the first.
type curve func(day float64) float64

// swell is a rise of that height about a day.
type swell struct{ height, mid, width float64 }

// over adds swells to a base.
func over(base float64, swells ...swell) curve {
	return func(day float64) float64 {
		v := base
		for _, s := range swells {
			t := (day - s.mid) / s.width
			v += s.height / (1 + float64(t*t))
		}
		return v
	}
}

// station is what the generator believes of one station.
type station struct {
	name, meter string
	days        []time.Weekday
	mean        curve
}

var (
	often  = []time.Weekday{time.Monday, time.Tuesday, time.Thursday, time.Saturday}
	seldom = []time.Weekday{time.Monday, time.Thursday}
)

// stations lists the harbour: winter storms stir the open stations, the fish
// quay is dredged in May, the basin is muddy in summer, when ferries run.
func stations() []station {
	return []station{
		{"Breakwater", "T1", often, over(4, swell{9, 20, 26}, swell{13, 330, 30})},
		{"Ferry Steps", "T1", often, over(7, swell{8, 195, 40}, swell{5, 345, 20})},
		{"Fish Quay", "T2", often, over(8, swell{24, 138, 11}, swell{7, 318, 32})},
		{"Inner Basin", "T2", often, over(10, swell{9, 205, 48}, swell{3, 60, 20})},
		{"Lock Gate", "T3", seldom, over(9, swell{3, 100, 60})},
		{"Mud Berth", "T3", often, over(18, swell{10, 30, 40}, swell{14, 325, 40})},
	}
}

// samples draws every visit, in the order of days and stations.
func samples() []sample {
	first := time.Date(2025, time.January, 1, 0, 0, 0, 0, time.UTC)
	last := time.Date(2026, time.January, 14, 0, 0, 0, 0, time.UTC)
	var out []sample
	for k, s := range stations() {
		d := &draw{state: 20250101 + uint64(k)*1_000_003} // a station's data do not depend on the others
		for n := 0; ; n++ {
			day := first.AddDate(0, 0, n)
			if day.After(last) {
				break
			}
			if slices.Contains(s.days, day.Weekday()) {
				out = append(out, s.sample(d, day, float64(n)))
			}
		}
	}
	sort.SliceStable(out, func(i, j int) bool { return out[i].day.Before(out[j].day) })
	return out
}

func (s station) sample(d *draw, day time.Time, n float64) sample {
	out := sample{station: s.name, day: day, meter: s.meter, bottles: 3 + d.below(4)}
	out.tide = []string{"ebb", "flood"}[d.below(2)]
	mean := s.mean(n)
	spread := 1.5 + float64(0.25*mean) // of one bottle
	out.turbidity = max(0.3, mean+float64(spread/math.Sqrt(float64(out.bottles))*d.normal()))
	switch u := d.uniform(); { // what spoils a sample
	case u < 0.020:
		out.note = "ship passing"
		out.turbidity += 30 + float64(60*d.uniform())
	case u < 0.028:
		out.note = "fouled"
		out.turbidity = float64(out.turbidity * (2 + d.uniform()))
	case u < 0.040:
		out.missing, out.note = true, "bottles broken"
	case u < 0.050:
		out.note = "rain"
	}
	return out
}

// tenths writes v to 0.1, as the meters show it.
func tenths(v float64) string {
	return strconv.FormatFloat(math.Round(float64(v*10))/10, 'f', 1, 64)
}
