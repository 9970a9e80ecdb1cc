package main

import (
	"fmt"
	"math"
	"strconv"
	"time"
)

// group is what the generator believes of one cultivar in one store.
type group struct {
	cultivar, code string
	store          string
	picked         string // of the first lot; the others follow two days apart
	lots, visits   int
	every          int // days between visits
	firm           curve
	drift          float64 // 0..1: how much of a visit's common error lasts to the next
	common         float64 // size of that error, N
	stream         uint64  // another draw than the usual one, where a chance one hides what the group is there to show
}

// curve is a mean firmness over the days.
type curve func(day float64) float64

// fall goes from top to bottom along t/sqrt(1+t*t), half way at day mid;
// width is the number of days over which it happens.
func fall(top, bottom, mid, width float64) curve {
	return func(day float64) float64 {
		t := (day - mid) / width
		s := t / math.Sqrt(1+float64(t*t))
		return (top+bottom)/2 - float64((top-bottom)/2*s)
	}
}

// line is the straight one.
func line(start, aDay float64) curve {
	return func(day float64) float64 { return start + float64(aDay*day) }
}

// with adds a hump of that height about a day: fruit that firms before it
// softens.
func (c curve) with(height, mid, width float64) curve {
	return func(day float64) float64 {
		t := (day - mid) / width
		return c(day) + height/(1+float64(t*t))
	}
}

// groups lists the season: seven cultivars in three stores, Pilot with four
// visits in two of them, and Hartley, a single lot that was withdrawn.
func groups() []group {
	var out []group
	add := func(cultivar, code, picked string, air, liner, low group) {
		for _, g := range []group{air, liner, low} {
			g.cultivar, g.code, g.picked = cultivar, code, picked
			out = append(out, g)
		}
	}
	in := func(store string, visits int, firm curve) group {
		return group{store: store, lots: 5, visits: visits, every: 7, firm: firm}
	}
	const air, liner, low = "air", "liner", "low_oxygen"
	add("Aroma", "AR", "2025-08-28",
		in(air, 22, fall(64, 5, 70, 32)),
		in(liner, 28, fall(64, 6, 98, 45)),
		in(low, 33, fall(65, 8, 132, 50)))
	add("Bellamy", "BE", "2025-09-02",
		in(air, 22, fall(74, 7, 58, 20)),
		in(liner, 28, fall(73, 8, 80, 30)),
		in(low, 33, fall(75, 9, 118, 38)))
	dovecote := in(liner, 28, fall(59, 6, 102, 48))
	dovecote.drift, dovecote.common, dovecote.stream = 0.8, 3.2, 7
	add("Candlemas", "CA", "2025-09-16",
		in(air, 22, fall(82, 4, 76, 42).with(6, 18, 12)),
		in(liner, 28, fall(82, 5, 105, 52).with(5, 24, 15)),
		in(low, 33, fall(83, 8, 138, 60).with(5, 30, 18)))
	add("Dovecote", "DO", "2025-09-08",
		in(air, 22, fall(58, 6, 66, 30)),
		dovecote,
		in(low, 33, line(57.5, -0.192)))
	add("Elmstead", "EL", "2025-09-11",
		in(air, 22, fall(69, 10, 45, 14)),
		in(liner, 28, fall(68, 10, 74, 24)),
		in(low, 33, fall(70, 12, 128, 22)))
	add("Fairlight", "FA", "2025-09-22",
		in(air, 22, fall(90, 2, 36, 40)),
		in(liner, 28, fall(90, 3, 52, 56)),
		in(low, 33, fall(88, 4, 90, 70)))
	add("Greycote", "GR", "2025-10-01",
		in(air, 22, fall(71, 8, 92, 30)),
		in(liner, 28, fall(71, 9, 124, 36)),
		in(low, 33, fall(72, 34, 150, 55))) // stays above 18 N
	for _, g := range []group{
		{store: air, firm: fall(66, 6, 72, 34)},
		{store: low, firm: fall(66, 7, 104, 40)},
	} {
		g.cultivar, g.code, g.picked, g.lots, g.visits, g.every = "Pilot", "PI", "2025-09-04", 2, 4, 50
		out = append(out, g)
	}
	out = append(out, group{cultivar: "Hartley", code: "HA", store: air, picked: "2025-09-25",
		lots: 1, visits: 5, every: 7, firm: fall(61, 9, 60, 30)})
	return out
}

// season draws every lot's visits.
func season() []row {
	var rows []row
	for k, g := range groups() {
		d := &draw{state: 20250828 + uint64(k)*1_000_003 + g.stream*77} // a group's data do not depend on the others
		rows = append(rows, g.rows(d)...)
	}
	return rows
}

func (g group) rows(d *draw) []row {
	first, err := time.Parse(time.DateOnly, g.picked)
	if err != nil {
		panic(err)
	}
	// one common error a day: what a store's week or a gauge's zero does to
	// every lot that is pressed that day
	last := g.every*g.visits + 4
	common := make([]float64, last)
	for day := 1; day < last; day++ {
		common[day] = float64(g.drift*common[day-1]) + float64(g.common*math.Sqrt(1-float64(g.drift*g.drift))*d.normal())
	}
	var rows []row
	for lot := range g.lots {
		name := fmt.Sprintf("%s-%s-%d", g.code, map[string]string{"air": "A", "liner": "L", "low_oxygen": "O"}[g.store], lot+1)
		sweet := 12.4 + float64(0.2*d.normal()) // the lot's own sugar at harvest
		early := 0
		if lot >= 3 {
			early = 3 // these lots are pressed on Thursdays, not on Mondays
		}
		for v := range g.visits {
			day := g.every * v
			if v > 0 {
				day += early
			}
			fruit := 5 + d.below(8)
			mean := g.firm(float64(day)) + common[day]
			spread := 1.2 + float64(0.16*mean) // of one fruit: firm ones differ more
			firmness := mean + float64(spread/math.Sqrt(float64(fruit))*d.normal())
			x := float64(day) / 100
			sugar := sweet + float64(2.1*x)/(0.4+x) - float64(0.45*float64(x*x)) + float64(0.3*d.normal())
			r := row{lot: name, cultivar: g.cultivar, store: g.store, picked: first.AddDate(0, 0, 2*lot), day: day,
				fruit: strconv.Itoa(fruit), firmness: tenths(max(firmness, 1)), sugar: tenths(sugar)}
			if g.lots > 2 {
				r.spoil(d)
			}
			rows = append(rows, r)
		}
	}
	return rows
}

// spoil does what happens to some rows: bruised fruit, a gauge that was not
// read, a slip of the decimal point, fruit that were not counted.
func (r *row) spoil(d *draw) {
	switch u := d.uniform(); {
	case u < 0.018:
		r.note = "bruised"
		r.firmness = tenths(2 + float64(9*d.uniform()))
	case u < 0.024:
		r.firmness, r.note = "", "gauge not zeroed"
	case u < 0.030:
		r.firmness = "NA"
	case u < 0.0325 && len(r.firmness) == 4 && r.firmness[0] > '1':
		r.firmness = r.firmness[:2] + r.firmness[3:] // 63.6 as 636
	case u < 0.037:
		r.fruit = "NA"
	case u < 0.057:
		r.sugar = "NA"
	case u < 0.072:
		r.sugar, r.note = "", "no juice"
	case u < 0.080:
		r.note = "first of the bin"
	}
}

// tenths writes v to 0.1, as gauges show it.
func tenths(v float64) string {
	return strconv.FormatFloat(math.Round(float64(v*10))/10, 'f', 1, 64)
}
