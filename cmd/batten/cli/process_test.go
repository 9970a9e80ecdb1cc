package cli

import (
	"fmt"
	"io/fs"
	"math/rand/v2"
	"os"
	"os/exec"
	"path/filepath"
	"runtime"
	"strings"
	"testing"
	"time"
)

// command makes a real process of this program: the test binary answers to
// the name batten.
func command(args ...string) *exec.Cmd {
	exe, err := os.Executable()
	if err != nil {
		panic(err)
	}
	return &exec.Cmd{Path: exe, Args: append([]string{"batten"}, args...)}
}

// slowStudy takes a moment: many groups under a resampled rule.
func slowStudy(t *testing.T) string {
	t.Helper()
	dir := t.TempDir()
	var b strings.Builder
	b.WriteString("g,x,y\n")
	rng := rand.New(rand.NewPCG(4, 4))
	for g := range 60 {
		for i := range 40 {
			fmt.Fprintf(&b, "g%02d,%d,%.3f\n", g, i, float64((i-g)*(i-g))/100+rng.NormFloat64())
		}
	}
	spec := `study { title = "Killed (invented)" }
input "d" {
  file    = "d.csv"
  columns = { g = text, x = number, y = number }
}
curve "c" {
  from     = d
  response = y
  along    = x
  by       = [g]
  smoothness {
    rule  = kfold
    folds = 5
  }
}
export "grid" {
  of   = c
  what = grid
  file = "out/grid.csv"
}
export "evidence" {
  of   = c
  what = evidence
  file = "out/evidence.csv"
}
`
	for name, text := range map[string]string{"d.csv": b.String(), "study.hcl": spec} {
		if err := os.WriteFile(filepath.Join(dir, name), []byte(text), 0o666); err != nil {
			t.Fatal(err)
		}
	}
	return dir
}

func outputsOf(t *testing.T, dir string) string {
	t.Helper()
	var all strings.Builder
	for _, f := range []string{"grid.csv", "evidence.csv"} {
		b, err := os.ReadFile(filepath.Join(dir, "out", f))
		if err != nil {
			t.Fatal(err)
		}
		all.Write(b)
	}
	return all.String()
}

// TestKilled kills a run at a random moment, again and again: the next run
// ends with the bytes of an undisturbed one, and no output is ever half
// written.
func TestKilled(t *testing.T) {
	if runtime.GOOS == "windows" {
		t.Skip("a killed process is another thing there")
	}
	dir := slowStudy(t)
	start := time.Now()
	if out, err := command("run", dir, "-q").CombinedOutput(); err != nil {
		t.Fatalf("%v: %s", err, out)
	}
	took := time.Since(start)
	want := outputsOf(t, dir)
	rng := rand.New(rand.NewPCG(9, 9))
	kills := 15
	if os.Getenv("BATTEN_SLOW") != "" {
		kills = 200
	}
	killed := 0
	for range kills {
		for _, sub := range []string{"out", ".batten"} {
			if rng.IntN(2) == 0 {
				if err := os.RemoveAll(filepath.Join(dir, sub)); err != nil {
					t.Fatal(err)
				}
			}
		}
		c := command("run", dir, "-q")
		if err := c.Start(); err != nil {
			t.Fatal(err)
		}
		time.Sleep(time.Duration(rng.Float64() * float64(took)))
		_ = c.Process.Kill()
		if err := c.Wait(); err != nil {
			killed++
		} else {
			took -= took / 8 // the first run was slow: kill sooner
		}
		for _, f := range []string{"grid.csv", "evidence.csv"} {
			if b, err := os.ReadFile(filepath.Join(dir, "out", f)); err == nil && !strings.Contains(want, string(b)) {
				t.Fatalf("%s is half written after a kill", f)
			}
		}
		if out, err := command("run", dir, "-q").CombinedOutput(); err != nil {
			t.Fatalf("after a kill: %v: %s", err, out)
		}
		if outputsOf(t, dir) != want {
			t.Fatal("after a kill the outputs differ")
		}
	}
	t.Logf("%d of %d runs were killed before they ended", killed, kills)
	if killed < kills/5 {
		t.Errorf("only %d of %d runs were killed before they ended", killed, kills)
	}
	_ = filepath.WalkDir(filepath.Join(dir, ".batten"), func(p string, d fs.DirEntry, err error) error {
		if err == nil && strings.HasPrefix(d.Name(), "tmp-") {
			t.Errorf("left behind: %s", p)
		}
		return nil
	})
}

// TestSideBySide runs a study several times at the same time, from an empty
// store: all end well, with the same outputs and a record each.
func TestSideBySide(t *testing.T) {
	const rounds, runs = 4, 4
	dir := slowStudy(t)
	first := ""
	for range rounds {
		for _, sub := range []string{"out", ".batten"} {
			if err := os.RemoveAll(filepath.Join(dir, sub)); err != nil {
				t.Fatal(err)
			}
		}
		var cs [runs]*exec.Cmd
		var said [runs]strings.Builder
		for i := range cs {
			cs[i] = command("run", dir, "-q")
			cs[i].Stderr = &said[i]
			if err := cs[i].Start(); err != nil {
				t.Fatal(err)
			}
		}
		for i, c := range cs {
			if err := c.Wait(); err != nil {
				t.Errorf("%v: %s", err, said[i].String())
			}
		}
		records, err := os.ReadDir(filepath.Join(dir, ".batten", "runs"))
		if err != nil || len(records) != runs {
			t.Errorf("%d records, %v", len(records), err)
		}
		switch got := outputsOf(t, dir); {
		case first == "":
			first = got
		case got != first:
			t.Error("runs side by side gave other bytes")
		}
	}
	if err := os.RemoveAll(filepath.Join(dir, ".batten")); err != nil {
		t.Fatal(err)
	}
	if out, err := command("run", dir, "-q").CombinedOutput(); err != nil {
		t.Fatalf("%v: %s", err, out)
	}
	if outputsOf(t, dir) != first {
		t.Error("a run alone gave other bytes than runs side by side")
	}
}

// TestInterrupted: Ctrl-C ends a run cleanly, and what is done is kept.
func TestInterrupted(t *testing.T) {
	if runtime.GOOS == "windows" {
		t.Skip("there is no SIGINT for a child process")
	}
	dir := slowStudy(t)
	c := command("run", dir)
	var errs strings.Builder
	c.Stderr = &errs
	if err := c.Start(); err != nil {
		t.Fatal(err)
	}
	for range 400 { // until fitting has begun
		if objs, _ := filepath.Glob(filepath.Join(dir, ".batten/objects/*/*")); len(objs) > 2 {
			break
		}
		time.Sleep(2 * time.Millisecond)
	}
	_ = c.Process.Signal(os.Interrupt)
	err := c.Wait()
	if err == nil {
		t.Skip("the run ended before it could be interrupted")
	}
	if c.ProcessState.ExitCode() != Failed || !strings.Contains(errs.String(), "are done and kept") {
		t.Errorf("exit status %d: %s", c.ProcessState.ExitCode(), errs.String())
	}
	if _, err := os.Stat(filepath.Join(dir, "out")); err == nil {
		t.Error("an interrupted run wrote outputs")
	}
}
