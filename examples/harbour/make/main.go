// Command make writes the samples of examples/harbour.
//
// The data are invented: there is no such harbour, the stations were made up,
// and every number comes from the seeded generator below. Nothing here says
// anything about a real place.
//
// Steps: draw each station's year about its own curve, spoil some samples as
// probes are spoilt; write the year as it was first delivered (data/2025.csv),
// the year after the recalibration of one instrument (later/2025.csv), and the
// first two weeks of the next year (later/2026.csv). Only + - * / and the
// square root are used, whose results every processor rounds alike, so that the
// files are the same bytes everywhere.
//
// From the top of the repository:
//
//	go run ./examples/harbour/make examples/harbour
package main

import (
	"bytes"
	"fmt"
	"math"
	"math/rand/v2"
	"os"
	"path/filepath"
	"sort"
	"time"
)

func main() {
	if len(os.Args) != 2 {
		fmt.Fprintln(os.Stderr, "usage: make FOLDER")
		os.Exit(2)
	}
	for name, text := range files() {
		path := filepath.Join(os.Args[1], filepath.FromSlash(name))
		if err := os.MkdirAll(filepath.Dir(path), 0o777); err != nil {
			fmt.Fprintln(os.Stderr, err)
			os.Exit(1)
		}
		if err := os.WriteFile(path, text, 0o644); err != nil {
			fmt.Fprintln(os.Stderr, err)
			os.Exit(1)
		}
	}
}

// station is a place with its year: a level, a spring bloom, an autumn of
// storms, and how much single samples scatter.
type station struct {
	name                 string
	instrument           string
	level, spring, storm float64 // NTU
	scatter              float64 // of a sample, as a share of the level there
}

var stations = []station{
	{"basin", "A", 5, 4, 3, 0.12},
	{"ferry pier", "C", 8, 6, 9, 0.15},
	{"north mole", "A", 6, 3, 12, 0.18},
	{"outer buoy", "B", 3, 2, 10, 0.20},
	{"sluice", "B", 9, 8, 6, 0.22},
	{"south mole", "C", 6, 4, 8, 0.15},
}

// The recalibration: instrument C read a ninth too low at the ferry pier for
// the samples from this day on, forty of them.
var (
	drift  = time.Date(2025, 9, 2, 0, 0, 0, 0, time.UTC)
	drifts = 40
)

type sample struct {
	station, instrument string
	day                 time.Time
	turbidity           float64
	tide, note          string
}

// hump is 1 at the middle, 0 from half a width away, smooth.
func hump(x, middle, width float64) float64 {
	u := (x - middle) / (width / 2)
	if u <= -1 || u >= 1 {
		return 0
	}
	v := 1 - float64(u*u)
	return float64(v * v)
}

func (s *station) at(day float64) float64 {
	return s.level + float64(s.spring*hump(day, 120, 150)) + float64(s.storm*hump(day, 310, 130)) + float64(0.15*s.level*hump(day, 205, 90))
}

// year draws the samples from one day to another.
func year(rng *rand.Rand, from, to time.Time) []sample {
	var out []sample
	normal := func() float64 { // a sum of uniforms will do
		v := 0.0
		for range 12 {
			v += rng.Float64()
		}
		return v - 6
	}
	begin := time.Date(2025, 1, 1, 0, 0, 0, 0, time.UTC)
	for i := range stations {
		s := &stations[i]
		for day := from; day.Before(to); day = day.AddDate(0, 0, 1) {
			if rng.Float64() > 0.55 {
				continue // not every station is reached every day
			}
			level := s.at(day.Sub(begin).Hours() / 24)
			tide := []string{"ebb", "flood", "slack"}[rng.IntN(3)]
			v := level * (1 + s.scatter*normal())
			note := ""
			switch u := rng.Float64(); {
			case u < 0.015:
				note, v = "dredging", v*(2+2*rng.Float64())
			case u < 0.02:
				v = 400 // the probe's end of scale
			}
			out = append(out, sample{s.name, s.instrument, day, math.Max(0.2, v), tide, note})
		}
	}
	sort.SliceStable(out, func(i, j int) bool { return out[i].day.Before(out[j].day) })
	return out
}

// corrected applies the recalibration to the samples that it concerns.
func corrected(in []sample) []sample {
	out := append([]sample(nil), in...)
	n := 0
	for i := range out {
		if s := &out[i]; s.station == "ferry pier" && !s.day.Before(drift) && s.turbidity < 400 && n < drifts {
			s.turbidity = s.turbidity * 9 / 8
			n++
		}
	}
	return out
}

func write(samples []sample) []byte {
	var b bytes.Buffer
	b.WriteString("station,sampled,instrument,turbidity,tide,note\n")
	for k, s := range samples {
		v := fmt.Sprintf("%.1f", s.turbidity)
		if k%97 == 41 {
			v = "" // the sheet was left blank
		}
		fmt.Fprintf(&b, "%s,%s,%s,%s,%s,%s\n", s.station, s.day.Format("2006-01-02"), s.instrument, v, s.tide, s.note)
	}
	return b.Bytes()
}

func files() map[string][]byte {
	rng := rand.New(rand.NewPCG(2025, 11))
	first := year(rng, time.Date(2025, 1, 1, 0, 0, 0, 0, time.UTC), time.Date(2026, 1, 1, 0, 0, 0, 0, time.UTC))
	next := year(rng, time.Date(2026, 1, 1, 0, 0, 0, 0, time.UTC), time.Date(2026, 1, 15, 0, 0, 0, 0, time.UTC))
	return map[string][]byte{
		"data/2025.csv":  write(first),
		"later/2025.csv": write(corrected(first)),
		"later/2026.csv": write(next),
	}
}
