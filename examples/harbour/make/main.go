// Command make writes the samples of examples/harbour.
//
// The data are invented: there is no such harbour, the stations were made up,
// and every number comes from the seeded generator below. Nothing here says
// anything about a real water.
//
// Steps: lay out the visits, draw each sample about its station's curve, spoil
// some as samples are spoilt, let one turbidimeter read too high for five
// weeks, and write the year as it was first delivered; then write what comes
// later: the year with that meter's samples put right, and two weeks of the
// next year. Only + - * / and the square root are used, whose results every
// processor rounds alike, so that the files are the same bytes everywhere.
//
// From the top of the repository:
//
//	go run ./examples/harbour/make examples/harbour
package main

import (
	"bytes"
	"fmt"
	"os"
	"path/filepath"
	"time"
)

func main() {
	if len(os.Args) != 2 {
		fmt.Fprintln(os.Stderr, "usage: make FOLDER")
		os.Exit(2)
	}
	for name, text := range files() {
		path := filepath.Join(os.Args[1], filepath.FromSlash(name))
		err := os.MkdirAll(filepath.Dir(path), 0o755)
		if err == nil {
			err = os.WriteFile(path, text, 0o644)
		}
		if err != nil {
			fmt.Fprintln(os.Stderr, err)
			os.Exit(1)
		}
	}
}

// header names the columns of every file.
const header = "station,sampled,tide,meter,bottles,turbidity,note\n"

// sample is one visit to one station.
type sample struct {
	station, tide, meter string
	day                  time.Time
	bottles              int
	turbidity            float64 // NTU, their mean; as the meter should read
	missing              bool
	note                 string
}

// text is the sample's row; high is how far the meter reads too high.
func (s sample) text(high float64) string {
	value := "NA"
	if !s.missing {
		value = tenths(float64(s.turbidity * high))
	}
	return fmt.Sprintf("%s,%s,%s,%s,%d,%s,%s\n", s.station, s.day.Format(time.DateOnly), s.tide, s.meter, s.bottles, value, s.note)
}

// The meter T2 read 22% too high from its service on until that was found.
const (
	highMeter = "T2"
	high      = 1.22
	corrected = 40 // samples
)

var serviced = time.Date(2025, time.October, 13, 0, 0, 0, 0, time.UTC)

// files returns the files by name: the year, and what comes later.
func files() map[string][]byte {
	first, put, next := bytes.NewBufferString(header), bytes.NewBufferString(header), bytes.NewBufferString(header)
	wrong := 0
	for _, s := range samples() {
		if s.day.Year() > 2025 {
			next.WriteString(s.text(1))
			continue
		}
		factor := 1.0
		if s.meter == highMeter && !s.day.Before(serviced) && !s.missing && wrong < corrected {
			factor = high
			wrong++
		}
		first.WriteString(s.text(factor))
		put.WriteString(s.text(1))
	}
	return map[string][]byte{"data/2025.csv": first.Bytes(), "later/2025.csv": put.Bytes(), "later/2026.csv": next.Bytes()}
}
