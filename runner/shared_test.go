package runner

import (
	"encoding/csv"
	"math"
	"os"
	"path/filepath"
	"strconv"
	"strings"
	"testing"

	"batten/methods/choose"
	"batten/methods/spline"
)

// table reads an export as columns by name.
func columnsOf(t *testing.T, dir, file string) map[string][]string {
	t.Helper()
	f, err := os.Open(filepath.Join(dir, "out", file))
	if err != nil {
		t.Fatal(err)
	}
	defer f.Close()
	all, err := csv.NewReader(f).ReadAll()
	if err != nil {
		t.Fatal(err)
	}
	out := map[string][]string{}
	for k, name := range all[0] {
		for _, r := range all[1:] {
			out[name] = append(out[name], r[k])
		}
	}
	return out
}

// TestShared: the groups under the rule have one lambda (one edf), at which the
// sum of their scores is no larger than anywhere on a fine scan; the exception
// keeps its own; one changed row changes what all of them share.
func TestShared(t *testing.T) {
	rows := rowsOf(6, 40)
	for _, what := range []string{"lambda", "edf"} {
		dir := write(t, "gcv\n    shared = "+what, map[string][]string{"d.csv": rows})
		r := execute(t, dir, 2)
		fits := columnsOf(t, dir, "fits.csv")
		value := ""
		for i, g := range fits["g"] {
			v := fits[what][i]
			switch {
			case g == "g01":
				continue
			case value == "":
				value = v
			case what == "lambda" && v != value:
				t.Errorf("lambda of %s is %s, of the first %s", g, v, value)
			case what == "edf" && math.Abs(number(t, v)-number(t, value)) > 1e-11:
				t.Errorf("edf of %s is %s, of the first %s", g, v, value)
			}
		}
		// the groups' own data, as they were fitted
		var data []*spline.Data
		for _, f := range r.curves["c"].fits {
			if f.Group[0] == "g01" {
				continue
			}
			d, err := spline.Collapse(f.X, f.Y, f.W)
			if err != nil {
				t.Fatal(err)
			}
			data = append(data, d)
		}
		var ws spline.Workspace
		sum := func(at float64) float64 {
			s := 0.0
			for _, d := range data {
				var v [1]float64
				if err := choose.Terms(&ws, d, choose.Rule{Name: "gcv"}, what, []float64{at}, v[:]); err != nil {
					t.Fatal(err)
				}
				s += v[0]
			}
			return s
		}
		at := number(t, value)
		place := func(v float64) float64 { return v }
		if what == "lambda" {
			at = math.Log(at)
		}
		least := sum(at)
		for k := -300; k <= 300; k++ {
			v := place(at + float64(k)*0.02)
			if what == "edf" && (v < 2.02 || v > 20) {
				continue
			}
			if s := sum(v); s < least*(1-1e-10) {
				t.Errorf("shared %s: the sum is %.12g at %g, %.12g at the choice %g", what, s, v, least, at)
				break
			}
		}
		// a changed row
		changed := append([]string(nil), rows...)
		changed[3] = strings.Replace(changed[3], ".", "1.", 1)
		put(t, dir, "d.csv", "g,x,y,w,lot\n"+strings.Join(changed, "\n")+"\n")
		r = execute(t, dir, 2)
		if r.Record.Counts.Computed != 5 || r.Record.Counts.Reused != 1 {
			t.Errorf("shared %s: after a changed row %+v", what, r.Record.Counts)
		}
	}
}

func number(t *testing.T, s string) float64 {
	t.Helper()
	v, err := strconv.ParseFloat(s, 64)
	if err != nil {
		t.Fatal(err)
	}
	return v
}
