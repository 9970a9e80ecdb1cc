// Command make writes the readings of examples/pears.
//
// The data are invented: no such trial was held, the cultivar names were made
// up, and every number comes from the seeded generator below. Nothing here
// says anything about real pears.
//
// Steps: lay out the season's lots, draw each visit's readings about its
// group's curve, spoil some of them as field sheets are spoilt, sort by
// visit, write one file a calendar year. Only + - * / and the square root are
// used, whose results every processor rounds alike, so that the files are the
// same bytes everywhere.
//
// From the top of the repository:
//
//	go run ./examples/pears/make examples/pears/data
package main

import (
	"bytes"
	"fmt"
	"os"
	"path/filepath"
	"sort"
	"strconv"
	"time"
)

func main() {
	if len(os.Args) != 2 {
		fmt.Fprintln(os.Stderr, "usage: make FOLDER")
		os.Exit(2)
	}
	for name, text := range files() {
		if err := os.WriteFile(filepath.Join(os.Args[1], name), text, 0o644); err != nil {
			fmt.Fprintln(os.Stderr, err)
			os.Exit(1)
		}
	}
}

// header names the columns of both files.
const header = "lot,cultivar,store,picked,visited,day,fruit,firmness,sugar,note\n"

// row is one visit to one lot.
type row struct {
	lot, cultivar, store string
	picked               time.Time
	day                  int
	fruit                string // fruit pressed; a cell may be "" or "NA"
	firmness             string // N, their mean
	sugar                string // % of the juice
	note                 string
}

func (r row) visited() time.Time { return r.picked.AddDate(0, 0, r.day) }

// files returns the season's files by name, one a calendar year.
func files() map[string][]byte {
	rows := season()
	sort.SliceStable(rows, func(i, j int) bool {
		a, b := rows[i], rows[j]
		if va, vb := a.visited(), b.visited(); !va.Equal(vb) {
			return va.Before(vb)
		}
		return a.lot < b.lot
	})
	texts := map[string]*bytes.Buffer{}
	for _, r := range rows {
		name := "readings-" + strconv.Itoa(r.visited().Year()) + ".csv"
		b := texts[name]
		if b == nil {
			b = bytes.NewBufferString(header)
			texts[name] = b
		}
		fmt.Fprintf(b, "%s,%s,%s,%s,%s,%d,%s,%s,%s,%s\n", r.lot, r.cultivar, r.store,
			r.picked.Format(time.DateOnly), r.visited().Format(time.DateOnly), r.day,
			r.fruit, r.firmness, r.sugar, r.note)
	}
	out := map[string][]byte{}
	for name, b := range texts {
		out[name] = b.Bytes()
	}
	return out
}
