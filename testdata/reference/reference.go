// Package reference reads the check values beside it, for tests. See README.md
// for their sources and definitions.
package reference

import (
	"encoding/csv"
	"encoding/json"
	"os"
	"path/filepath"
	"runtime"
	"strconv"
	"testing"
)

// Set is one group of one data set with its check values.
type Set struct {
	Name      string
	X         []float64                               `json:"-"`
	Y         []float64                               `json:"-"`
	W         []float64                               `json:"-"` // nil where every row weighs 1
	Row       []int                                   `json:"-"` // 1-based data row of the CSV
	N         int                                     `json:"n"`
	M         int                                     `json:"m"`
	LineLimit struct{ Intercept, Slope, RSS float64 } `json:"line_limit"`
	Cases     []Case                                  `json:"cases"`
	Optima    struct {
		SearchEDF        []float64 `json:"search_edf"`
		GCV, LOOCV, REML Optimum
	} `json:"optima"`
	KFold *struct {
		K     int   `json:"k"`
		Fold  []int `json:"fold_of_each_used_row"`
		Cases []struct {
			Lambda  float64   `json:"lambda"`
			CV      float64   `json:"cv"`
			FoldSSE []float64 `json:"fold_sse"`
		} `json:"cases"`
	} `json:"kfold"`
	Group string `json:"group"`
}

// Case is a fit at one lambda.
type Case struct {
	Lambda    float64 `json:"lambda"`
	EDF       float64 `json:"edf"`
	RSS       float64 `json:"rss"`
	Roughness float64 `json:"roughness"`
	GCV       float64 `json:"gcv"`
	LOOCV     float64 `json:"loocv"`
	REML      float64 `json:"neg2_reml"`
	Sigma2    float64 `json:"sigma2"`
	Leverage  []struct {
		Row int     `json:"row"`
		H   float64 `json:"h"`
	} `json:"leverage"`
	Fit []struct {
		X  float64 `json:"x"`
		G  float64 `json:"g"`
		DG float64 `json:"dg"`
	} `json:"fit"`
	HalfWidth []struct {
		X  float64 `json:"x"`
		HW float64 `json:"hw_gp"`
	} `json:"halfwidth95"`
	Crossings *struct {
		Level float64   `json:"level"`
		Count int       `json:"count"`
		X     []float64 `json:"x"`
	} `json:"crossings"`
	Max *struct {
		X        float64 `json:"x"`
		G        float64 `json:"g"`
		Interior bool    `json:"interior"`
	} `json:"max"`
}

// Optimum is the minimum of one criterion over the searched edf.
type Optimum struct {
	Where  string    `json:"where"`
	Lambda float64   `json:"lambda"`
	EDF    float64   `json:"edf"`
	Value  float64   `json:"value"`
	Sigma2 float64   `json:"sigma2"`
	Others []Optimum `json:"other_local_minima"`
}

// Names lists the data sets.
var Names = []string{"cars", "mcycle", "nhtemp", "LakeHuron", "airquality", "Orange", "pressure", "norris", "synth_w",
	"ChickWeight_by_chick", "ChickWeight_by_diet"}

// Dir is the folder of this package.
func Dir() string {
	_, file, _, _ := runtime.Caller(0)
	return filepath.Dir(file)
}

// Load reads a data set: one Set a group.
func Load(t testing.TB, name string) []Set {
	t.Helper()
	b, err := os.ReadFile(filepath.Join(Dir(), name+".json"))
	if err != nil {
		t.Fatal(err)
	}
	var head struct {
		File, X, Y     string
		Weights, Group *string
		Groups         []json.RawMessage
	}
	if err := json.Unmarshal(b, &head); err != nil {
		t.Fatal(err)
	}
	raw := head.Groups
	if head.Group == nil {
		raw = []json.RawMessage{b}
	}
	cols := columns(t, filepath.Join(Dir(), head.File))
	var out []Set
	for _, r := range raw {
		var s Set
		var group struct{ Group *string }
		if err := json.Unmarshal(r, &group); err != nil {
			t.Fatal(err)
		}
		if err := json.Unmarshal(r, &s); err != nil {
			t.Fatal(err)
		}
		s.Name = name
		if group.Group != nil {
			s.Name += "/" + *group.Group
		}
		for i := range cols[head.X] {
			if head.Group != nil && cols[*head.Group][i] != *group.Group {
				continue
			}
			x, errx := strconv.ParseFloat(cols[head.X][i], 64)
			y, erry := strconv.ParseFloat(cols[head.Y][i], 64)
			if errx != nil || erry != nil {
				continue // NA: the reference drops such rows
			}
			s.X, s.Y, s.Row = append(s.X, x), append(s.Y, y), append(s.Row, i+1)
			if head.Weights != nil {
				w, err := strconv.ParseFloat(cols[*head.Weights][i], 64)
				if err != nil {
					t.Fatal(err)
				}
				s.W = append(s.W, w)
			}
		}
		if len(s.X) != s.N && s.N > 0 {
			t.Fatalf("%s: %d rows, the reference has %d", s.Name, len(s.X), s.N)
		}
		if len(s.Cases) > 0 {
			out = append(out, s)
		}
	}
	return out
}

func columns(t testing.TB, file string) map[string][]string {
	t.Helper()
	f, err := os.Open(file)
	if err != nil {
		t.Fatal(err)
	}
	defer f.Close()
	rows, err := csv.NewReader(f).ReadAll()
	if err != nil {
		t.Fatal(err)
	}
	out := map[string][]string{}
	for k, name := range rows[0] {
		for _, r := range rows[1:] {
			out[name] = append(out[name], r[k])
		}
	}
	return out
}
