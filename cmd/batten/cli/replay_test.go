package cli

import (
	"bytes"
	"context"
	"crypto/sha256"
	"encoding/json"
	"fmt"
	"os"
	"path/filepath"
	"strings"
	"testing"
)

// smallStudy has two groups and one table.
func smallStudy(t *testing.T) string {
	t.Helper()
	dir := t.TempDir()
	rows := "g,x,y\n"
	for i := range 12 {
		rows += fmt.Sprintf("a,%d,%g\nb,%d,%g\n", i, float64(i*i%7)+0.25, i, float64(i)/2+float64(i%3))
	}
	for name, text := range map[string]string{"d.csv": rows, "study.hcl": `study { title = "Small (invented)" }
input "d" {
  file    = "d.csv"
  columns = { g = text, x = number, y = number }
}
curve "c" {
  from     = d
  response = y
  along    = x
  by       = [g]
  smoothness { rule = gcv }
}
export "grid" {
  of   = c
  what = grid
  file = "out/grid.csv"
}
`} {
		if err := os.WriteFile(filepath.Join(dir, name), []byte(text), 0o666); err != nil {
			t.Fatal(err)
		}
	}
	return dir
}

// TestReplayStatuses: 0 the same, 2 no such run, 3 an input missing or altered,
// 4 it differs; each with an answer for programs.
func TestReplayStatuses(t *testing.T) {
	dir := smallStudy(t)
	run := func(want int, args ...string) (out, errs string) {
		t.Helper()
		var o, e bytes.Buffer
		if got := Run(context.Background(), args, nil, &o, &e); got != want {
			t.Fatalf("%v: exit status %d, want %d\n%s%s", args, got, want, o.String(), e.String())
		}
		return o.String(), e.String()
	}
	type answer struct {
		Same      bool
		Outputs   int
		Inputs    []inputJSON
		Different []struct {
			Path, Column, Was, Is string
			Line                  int
		}
		DifferentFits []string `json:"different_fits"`
	}
	ask := func(want int, args ...string) (a answer) {
		t.Helper()
		out, _ := run(want, append([]string{"replay", dir, "--json"}, args...)...)
		if err := json.Unmarshal([]byte(out), &a); err != nil {
			t.Fatalf("%v: %s", err, out)
		}
		return a
	}
	if _, errs := run(Wrong, "replay", dir); !strings.Contains(errs, "run it first") {
		t.Errorf("before any run: %s", errs)
	}
	run(Done, "run", dir, "-q")
	if a := ask(Done); !a.Same || a.Outputs != 1 || len(a.Inputs) != 1 || a.DifferentFits == nil {
		t.Errorf("%+v", a)
	}
	if out, _ := run(Done, "replay", dir, "1"); !strings.Contains(out, "came out the same") || !strings.Contains(out, "go1.") {
		t.Error(out)
	}
	if _, errs := run(Wrong, "replay", dir, "7"); !strings.Contains(errs, `no run "7"`) {
		t.Error(errs)
	}

	data := filepath.Join(dir, "d.csv")
	was, err := os.ReadFile(data)
	if err != nil {
		t.Fatal(err)
	}
	if err := os.WriteFile(data, append(was, "a,20,1\n"...), 0o666); err != nil {
		t.Fatal(err)
	}
	if _, errs := run(BadData, "replay", dir); !strings.Contains(errs, "d.csv has been altered") || !strings.Contains(errs, "--inputs") {
		t.Error(errs)
	}
	if a := ask(BadData); a.Same || len(a.Inputs) != 1 || !a.Inputs[0].Altered || a.Inputs[0].Found != "" {
		t.Errorf("altered: %+v", a)
	}
	if err := os.Remove(data); err != nil {
		t.Fatal(err)
	}
	if _, errs := run(BadData, "replay", dir); !strings.Contains(errs, "d.csv is not there") {
		t.Error(errs)
	}
	archive := t.TempDir()
	if err := os.WriteFile(filepath.Join(archive, "kept.csv"), was, 0o666); err != nil {
		t.Fatal(err)
	}
	if out, _ := run(Done, "replay", dir, "--inputs", archive); !strings.Contains(out, "no longer there; found at") {
		t.Error(out)
	}
	if _, errs := run(Wrong, "replay", dir, "--inputs", filepath.Join(archive, "none")); !strings.Contains(errs, "expected a folder") {
		t.Error(errs)
	}
	if err := os.WriteFile(data, was, 0o666); err != nil {
		t.Fatal(err)
	}

	// An output that says otherwise, and a record that vouches for it. A record
	// without its last line is as earlier versions wrote it.
	grid := filepath.Join(dir, "out", "grid.csv")
	text, err := os.ReadFile(grid)
	if err != nil {
		t.Fatal(err)
	}
	lines := strings.SplitAfter(string(text), "\n")
	cells := strings.Split(lines[4], ",")
	cells[2] = "9" + cells[2]
	lines[4] = strings.Join(cells, ",")
	forged := strings.Join(lines, "")
	if err := os.WriteFile(grid, []byte(forged), 0o666); err != nil {
		t.Fatal(err)
	}
	records, _ := filepath.Glob(filepath.Join(dir, ".batten", "runs", "*.json"))
	record, err := os.ReadFile(records[0])
	if err != nil {
		t.Fatal(err)
	}
	other := bytes.ReplaceAll(record, fmt.Appendf(nil, "%x", sha256.Sum256(text)), fmt.Appendf(nil, "%x", sha256.Sum256([]byte(forged))))
	if err := os.WriteFile(records[0], other, 0o666); err != nil {
		t.Fatal(err)
	}
	if _, errs := run(Failed, "replay", dir, "1"); !strings.Contains(errs, "has been altered since it was written") {
		t.Errorf("a forged record: %s", errs)
	}
	head, _, _ := bytes.Cut(other, []byte(",\n \"check\""))
	if err := os.WriteFile(records[0], append(head, "\n}\n"...), 0o666); err != nil {
		t.Fatal(err)
	}
	a := ask(Differs)
	if a.Same || len(a.Different) != 1 || a.Different[0].Line != 5 || a.Different[0].Column != "fit" || a.Different[0].Was != "9"+a.Different[0].Is {
		t.Errorf("forged: %+v", a)
	}
	if out, errs := run(Differs, "replay", dir); !strings.Contains(out, "differs first on line 5, column fit") || !strings.Contains(errs, "did not come out") {
		t.Error(out, errs)
	}
	if now, _ := os.ReadFile(grid); string(now) != forged {
		t.Error("a replay touched an output")
	}
}
