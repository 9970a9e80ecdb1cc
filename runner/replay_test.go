package runner

import (
	"context"
	"encoding/json"
	"errors"
	"os"
	"path/filepath"
	"strings"
	"testing"
	"time"

	"batten/spec"
)

func replay(t *testing.T, dir, run, folder string) (*Replayed, error) {
	t.Helper()
	s, err := spec.Load(dir)
	if err != nil {
		t.Fatal(err)
	}
	return Replay(context.Background(), s, run, folder, Options{Program: "batten test"})
}

// TestReplay: a run comes out the same although spec, ledger, data's place and
// store have changed since; what has been tampered with is found, with its
// place; missing inputs are named.
func TestReplay(t *testing.T) {
	// a folder of its own, for what other tests replay at the same time is not left behind
	temp := t.TempDir()
	t.Setenv("TMPDIR", temp)
	t.Setenv("TMP", temp) // windows
	rows := rowsOf(4, 30)
	dir := write(t, "gcv", map[string][]string{"d1.csv": rows[:60], "d2.csv": rows[60:]})
	execute(t, dir, 2)
	s, err := spec.Load(dir)
	if err != nil {
		t.Fatal(err)
	}
	if _, err := Accept(context.Background(), s, "a start", Options{}); err != nil {
		t.Fatal(err)
	}
	second := execute(t, dir, 2).Record.Run // its report names the ledger
	want := outputs(t, dir)

	check := func(what, run, folder string) *Replayed {
		t.Helper()
		r, err := replay(t, dir, run, folder)
		if err != nil {
			t.Fatalf("%s: %v", what, err)
		}
		if !r.Same() || r.Outputs < 8 {
			t.Errorf("%s: %+v", what, r)
		}
		return r
	}
	check("at once", "", "")
	check("the first run", "1", "")

	// the spec goes on, another acceptance, the data moved to another folder
	put(t, dir, "study.hcl", strings.Replace(studyText, "RULE", "reml", 1))
	execute(t, dir, 2)
	archive := t.TempDir()
	if err := os.Rename(filepath.Join(dir, "d1.csv"), filepath.Join(archive, "kept.csv")); err != nil {
		t.Fatal(err)
	}
	var missing *MissingInputsError
	if _, err := replay(t, dir, second, ""); !errors.As(err, &missing) || len(missing.Files) != 1 || missing.Files[0].Path != "d1.csv" {
		t.Errorf("without d1.csv: %v", err)
	}
	r := check("data elsewhere", second, archive)
	if !strings.HasSuffix(r.Inputs[0].Found, "kept.csv") {
		t.Errorf("found at %q", r.Inputs[0].Found)
	}
	if err := os.Rename(filepath.Join(archive, "kept.csv"), filepath.Join(dir, "d1.csv")); err != nil {
		t.Fatal(err)
	}

	// a number in a recorded output is edited, and its digest in the record too
	for name, text := range want {
		put(t, filepath.Join(dir, "out"), name, text)
	}
	head, body, _ := strings.Cut(want["fits.csv"], "\n")
	bad := head + "\n" + strings.Replace(body, "gcv,", "gcv,9", 1) // its lambda
	put(t, filepath.Join(dir, "out"), "fits.csv", bad)
	file := filepath.Join(dir, ".batten", "runs", second+".json")
	b, err := os.ReadFile(file)
	if err != nil {
		t.Fatal(err)
	}
	var rec Record
	if err := json.Unmarshal(b, &rec); err != nil {
		t.Fatal(err)
	}
	for i := range rec.Outputs {
		if rec.Outputs[i].Path == "out/fits.csv" {
			rec.Outputs[i].SHA256 = digest([]byte(bad))
		}
	}
	if b, err = json.Marshal(&rec); err != nil {
		t.Fatal(err)
	}
	if err := os.WriteFile(file, b, 0o666); err != nil {
		t.Fatal(err)
	}
	r, err = replay(t, dir, second, "")
	if err != nil {
		t.Fatal(err)
	}
	if len(r.Different) != 1 || r.Different[0].Line != 2 || r.Different[0].Column != "lambda" || r.Different[0].Was != "9"+r.Different[0].Is {
		t.Errorf("a tampered table: %+v", r.Different)
	}
	if left, _ := filepath.Glob(filepath.Join(os.TempDir(), "batten-replay-*")); len(left) > 0 {
		t.Errorf("left behind: %v", left)
	}
	if got := outputs(t, dir)["fits.csv"]; got != bad {
		t.Error("a replay touched the study's outputs")
	}
}

// TestClockRunsBackwards: records are ordered by their count, not by the clock.
func TestClockRunsBackwards(t *testing.T) {
	dir := write(t, "gcv", map[string][]string{"d.csv": rowsOf(2, 20)})
	s, err := spec.Load(dir)
	if err != nil {
		t.Fatal(err)
	}
	at := time.Date(2026, 6, 1, 0, 0, 0, 0, time.UTC)
	for range 3 {
		if _, err := Execute(context.Background(), s, Options{Now: func() time.Time { return at }}); err != nil {
			t.Fatal(err)
		}
		at = at.AddDate(-1, 0, 0)
	}
	last, err := lastRecord(dir)
	if err != nil || !strings.HasPrefix(last.Run, "000003-") || !strings.HasPrefix(last.Started, "2024") {
		t.Errorf("the last run is %+v, %v", last, err)
	}
}
