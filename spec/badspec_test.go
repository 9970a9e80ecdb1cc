package spec

import (
	"bytes"
	"errors"
	"fmt"
	"os"
	"path/filepath"
	"regexp"
	"strconv"
	"strings"
	"testing"
)

var (
	wantHere = regexp.MustCompile(`# want: (.*)$`)
	wantAt   = regexp.MustCompile(`^# want-at (\d+): (.*)$`)
)

// TestBadSpecs holds every spec of testdata/badspec to the mistakes noted on
// its lines: all of them, and no others.
func TestBadSpecs(t *testing.T) {
	files, err := filepath.Glob("../testdata/badspec/*.hcl")
	if err != nil {
		t.Fatal(err)
	}
	for _, f := range files {
		name := strings.TrimSuffix(filepath.Base(f), ".hcl")
		t.Run(name, func(t *testing.T) {
			text, err := os.ReadFile(f)
			if err != nil {
				t.Fatal(err)
			}
			want := map[int]string{}
			for i, l := range strings.Split(string(text), "\n") {
				if m := wantAt.FindStringSubmatch(l); m != nil {
					n, _ := strconv.Atoi(m[1])
					want[n] = m[2]
				} else if m := wantHere.FindStringSubmatch(l); m != nil {
					want[i+1] = m[1]
				}
			}
			if len(want) == 0 {
				t.Fatal("nothing is wanted")
			}
			_, err = Parse(name+".hcl", t.TempDir(), text)
			var m *Mistakes
			if !errors.As(err, &m) {
				t.Fatalf("no mistake was found: %v", err)
			}
			said := map[int]string{}
			for _, x := range m.List {
				said[x.Range.Start.Line] += x.Found + "\n" + x.Expected + "\n"
				if x.Found == "" || x.Expected == "" {
					t.Errorf("line %d: a mistake without what was found or expected", x.Range.Start.Line)
				}
			}
			for n, w := range want {
				for _, part := range strings.Split(w, " && ") {
					if !strings.Contains(said[n], part) {
						t.Errorf("line %d: nothing says %q, said is %q", n, part, said[n])
					}
				}
			}
			for n, s := range said {
				if want[n] == "" {
					t.Errorf("line %d is found wrong too: %s", n, s)
				}
			}
			var again bytes.Buffer
			m.Render(&again, false)
			if !strings.HasPrefix(again.String(), fmt.Sprintf("%s.hcl:%d:", name, m.List[0].Range.Start.Line)) {
				t.Errorf("rendered without a place: %s", again.String())
			}
		})
	}
	if len(files) < 60 {
		t.Errorf("only %d bad specs", len(files))
	}
}
