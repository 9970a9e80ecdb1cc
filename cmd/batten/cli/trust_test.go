package cli

import (
	"fmt"
	"io/fs"
	"math/rand/v2"
	"os"
	"os/exec"
	"path/filepath"
	"runtime"
	"slices"
	"strings"
	"testing"
	"time"
)

// ran runs the program in a process of its own.
func ran(args ...string) (out string, status int) {
	c := command(args...)
	b, _ := c.CombinedOutput()
	return string(b), c.ProcessState.ExitCode()
}

// stored lists the files of a study's store.
func stored(t *testing.T, dir string) (out []string) {
	t.Helper()
	err := filepath.WalkDir(filepath.Join(dir, ".batten"), func(p string, d fs.DirEntry, err error) error {
		if err == nil && !d.IsDir() && d.Name() != "lock" {
			out = append(out, p)
		}
		return err
	})
	if err != nil {
		t.Fatal(err)
	}
	return out
}

// TestKilledSweep kills sweeps at random moments: every record that stays answers
// still, and the next run ends with the same bytes.
func TestKilledSweep(t *testing.T) {
	if runtime.GOOS == "windows" {
		t.Skip("a killed process is another thing there")
	}
	dir := studyOf(t, 24)
	data := filepath.Join(dir, "d.csv")
	first, err := os.ReadFile(data)
	if err != nil {
		t.Fatal(err)
	}
	if out, status := ran("run", dir, "-q"); status != Done {
		t.Fatal(out)
	}
	want := outputsOf(t, dir)
	span := 25e6 // how long a sweep may be left alone, in ns
	rng := rand.New(rand.NewPCG(5, 8))
	kills, killed := kills(20)/4, 0
	for tries := 0; killed < kills; tries++ {
		if tries > 20*kills {
			t.Fatalf("only %d of %d sweeps were killed before they ended", killed, tries)
		}
		// a run of other data between two of the first, so that there is something to drop
		for _, text := range [][]byte{append(slices.Clone(first), fmt.Sprintf("g%02d,40.5,%d\n", tries%24, tries)...), first} {
			if err := os.WriteFile(data, text, 0o666); err != nil {
				t.Fatal(err)
			}
			if out, status := ran("run", dir, "-q"); status != Done {
				t.Fatal(out)
			}
		}
		c := command("sweep", dir, "--keep", "1", "-q")
		if err := c.Start(); err != nil {
			t.Fatal(err)
		}
		time.Sleep(time.Duration(rng.Float64() * span))
		_ = c.Process.Kill()
		if c.Wait() == nil {
			span *= 0.8
			continue
		}
		span *= 1.15
		killed++
		records, err := filepath.Glob(filepath.Join(dir, ".batten", "runs", "*.json"))
		if err != nil || len(records) == 0 {
			t.Fatalf("no record is left: %v", err)
		}
		for _, p := range records[max(0, len(records)-2):] {
			id := strings.TrimSuffix(filepath.Base(p), ".json")
			if out, status := ran("why", dir, "c", "g=g03", "--run", id); status != Done {
				t.Errorf("why %s after a killed sweep: %s", id, out)
			}
		}
		if out, status := ran("run", dir, "--json"); status != Done || !strings.Contains(out, `"computed": 0`) {
			t.Errorf("after a killed sweep: exit status %d: %s", status, out)
		}
		if outputsOf(t, dir) != want {
			t.Fatal("after a killed sweep the outputs differ")
		}
	}
}

// TestSweepBesideRuns: sweeps and runs of one study at the same time wait for
// each other.
func TestSweepBesideRuns(t *testing.T) {
	dir := slowStudy(t)
	if out, status := ran("run", dir, "-q"); status != Done {
		t.Fatal(out)
	}
	want := outputsOf(t, dir)
	for range 3 {
		var cs []*exec.Cmd
		var said [6]strings.Builder
		for i := range said {
			args := []string{"run", dir, "-q"}
			if i%2 == 1 {
				args = []string{"sweep", dir, "--keep", "1", "-q"}
			}
			c := command(args...)
			c.Stderr = &said[i]
			if err := c.Start(); err != nil {
				t.Fatal(err)
			}
			cs = append(cs, c)
		}
		for i, c := range cs {
			if err := c.Wait(); err != nil {
				t.Errorf("%v: %v: %s", c.Args, err, said[i].String())
			}
		}
		if outputsOf(t, dir) != want {
			t.Fatal("the outputs differ")
		}
	}
	if out, status := ran("run", dir, "--json"); status != Done || !strings.Contains(out, `"computed": 0`) {
		t.Errorf("exit status %d: %s", status, out)
	}
}

// TestFlippedBits: a bit flipped in any file of the store, in a record or in an
// output is mended by the next run, which ends with the same bytes.
func TestFlippedBits(t *testing.T) {
	dir := slowStudy(t)
	if out, status := ran("run", dir, "-q"); status != Done {
		t.Fatal(out)
	}
	want := outputsOf(t, dir)
	kinds := map[string]int{}
	for k, p := range append(stored(t, dir), filepath.Join(dir, "out", "grid.csv"), filepath.Join(dir, "out", "evidence.csv")) {
		kind := strings.Split(strings.TrimPrefix(filepath.ToSlash(p), filepath.ToSlash(dir)+"/"), "/")
		if name := strings.Join(kind[:min(2, len(kind)-1)], "/"); kinds[name] > 12 && os.Getenv("BATTEN_SLOW") == "" {
			continue // enough of this kind
		} else {
			kinds[name]++
		}
		b, err := os.ReadFile(p)
		if err != nil || len(b) == 0 {
			continue
		}
		b[(k*7919)%len(b)] ^= 1 << (k % 8)
		if err := os.WriteFile(p, b, 0o666); err != nil {
			t.Fatal(err)
		}
		if filepath.Base(p) == "format" {
			continue // any other number is another store's
		}
		if out, status := ran("run", dir, "-q"); status != Done {
			t.Fatalf("%s: exit status %d: %s", p, status, out)
		}
		if outputsOf(t, dir) != want {
			t.Fatalf("%s: after a flipped bit the outputs differ", p)
		}
		if filepath.Base(filepath.Dir(p)) == "runs" {
			if out, status := ran("why", dir, "c", "g=g03"); status != Done {
				t.Errorf("why, after a damaged record: %s", out)
			}
			id := strings.TrimSuffix(filepath.Base(p), ".json")
			if out, status := ran("why", dir, "c", "g=g03", "--run", id); status != Failed || !strings.Contains(out, "has been altered") {
				t.Errorf("why, of a damaged record: exit status %d: %s", status, out)
			}
		}
	}
	if len(kinds) < 4 {
		t.Errorf("only %v were tried", kinds)
	}
}

// TestNewerStore: a store of a newer version is left alone, and it is said what
// to do.
func TestNewerStore(t *testing.T) {
	dir := slowStudy(t)
	if out, status := ran("run", dir, "-q"); status != Done {
		t.Fatal(out)
	}
	before := len(stored(t, dir))
	if err := os.WriteFile(filepath.Join(dir, ".batten", "format"), []byte("99\n"), 0o666); err != nil {
		t.Fatal(err)
	}
	for _, command := range []string{"run", "sweep"} {
		if out, status := ran(command, dir); status != Failed || !strings.Contains(out, "use the newer program, or delete the folder") {
			t.Errorf("%s: exit status %d: %s", command, status, out)
		}
	}
	if len(stored(t, dir)) != before {
		t.Error("a newer store was touched")
	}
}

// TestMovedStudy: a study that was moved to another folder reuses its store and
// writes the same bytes; a lock file that a dead process left does not block.
func TestMovedStudy(t *testing.T) {
	dir := slowStudy(t)
	if out, status := ran("run", dir, "-q"); status != Done {
		t.Fatal(out)
	}
	want := outputsOf(t, dir)
	other := filepath.Join(t.TempDir(), "elsewhere")
	if err := os.Rename(dir, other); err != nil {
		t.Skip(err)
	}
	if err := os.WriteFile(filepath.Join(other, ".batten", "lock"), []byte("12345\n"), 0o666); err != nil {
		t.Fatal(err)
	}
	if err := os.RemoveAll(filepath.Join(other, "out")); err != nil {
		t.Fatal(err)
	}
	out, status := ran("run", other, "--json")
	if status != Done || !strings.Contains(out, `"computed": 0`) || !strings.Contains(out, `"reused": 60`) {
		t.Errorf("exit status %d: %s", status, out)
	}
	if outputsOf(t, other) != want {
		t.Error("in another folder the outputs differ")
	}
}

func specOf(t *testing.T, dir string) []byte {
	t.Helper()
	b, err := os.ReadFile(filepath.Join(dir, "study.hcl"))
	if err != nil {
		t.Fatal(err)
	}
	return b
}

// mount mounts a small file system, or skips the test where that is not allowed.
func mount(t *testing.T, args ...string) {
	t.Helper()
	if runtime.GOOS != "linux" || os.Getuid() != 0 {
		t.Skip("this needs a file system of its own: root on linux")
	}
	if out, err := exec.Command("mount", args...).CombinedOutput(); err != nil {
		t.Skipf("cannot mount here: %v: %s", err, out)
	}
	at := args[len(args)-1]
	t.Cleanup(func() { _ = exec.Command("umount", "-l", at).Run() })
}

// TestFullDisk: a full disk ends a run with a clear message, no output is half
// written, and with room again the run ends as an undisturbed one.
func TestFullDisk(t *testing.T) {
	dir := slowStudy(t)
	if out, status := ran("run", dir, "-q"); status != Done {
		t.Fatal(out)
	}
	want := outputsOf(t, dir)
	small := t.TempDir()
	mount(t, "-t", "tmpfs", "-o", "size=1m", "tmpfs", small)
	for _, name := range []string{"study.hcl", "d.csv"} {
		b, err := os.ReadFile(filepath.Join(dir, name))
		if err != nil {
			t.Fatal(err)
		}
		if err := os.WriteFile(filepath.Join(small, name), b, 0o666); err != nil {
			t.Fatal(err)
		}
	}
	full := 0
	for _, mb := range []string{"200k", "400k", "800k", "1200k"} {
		if out, err := exec.Command("mount", "-o", "remount,size="+mb, small).CombinedOutput(); err != nil {
			t.Skipf("cannot change the size: %s", out)
		}
		out, status := ran("run", small, "-q")
		if status == Done {
			break
		}
		full++
		if status != Failed || !strings.Contains(out, "no space left") || strings.Contains(out, "panic") {
			t.Errorf("%s: exit status %d: %s", mb, status, out)
		}
		for _, f := range []string{"grid.csv", "evidence.csv"} {
			if b, err := os.ReadFile(filepath.Join(small, "out", f)); err == nil && !strings.Contains(want, string(b)) {
				t.Errorf("%s: %s is half written", mb, f)
			}
		}
	}
	if full == 0 {
		t.Error("the disk was never full: this test looked at nothing")
	}
	if out, err := exec.Command("mount", "-o", "remount,size=64m", small).CombinedOutput(); err != nil {
		t.Fatalf("%v: %s", err, out)
	}
	if out, status := ran("run", small, "-q"); status != Done {
		t.Fatalf("with room again: exit status %d: %s", status, out)
	}
	if outputsOf(t, small) != want {
		t.Error("after a full disk the outputs differ")
	}
}

// TestLargestFile: where the system lets no file grow beyond a size, a run ends
// with a clear message, leaves what stood there as it was, and nothing unfinished.
func TestLargestFile(t *testing.T) {
	sh, err := exec.LookPath("sh")
	if err != nil || runtime.GOOS == "windows" {
		t.Skip("this needs a shell with ulimit")
	}
	dir := slowStudy(t)
	if out, status := ran("run", dir, "-q"); status != Done {
		t.Fatal(out)
	}
	want := outputsOf(t, dir)
	exe, err := os.Executable()
	if err != nil {
		t.Fatal(err)
	}
	batten := filepath.Join(t.TempDir(), "batten") // the test binary answers to this name
	if err := os.Symlink(exe, batten); err != nil {
		t.Skip(err)
	}
	data := filepath.Join(dir, "d.csv")
	first, err := os.ReadFile(data)
	if err != nil {
		t.Fatal(err)
	}
	for k, blocks := range []string{"1", "4", "40", "400"} { // of 512 bytes, or 1024
		if err := os.WriteFile(data, append(slices.Clone(first), fmt.Sprintf("g%02d,41,%d\n", k, k)...), 0o666); err != nil {
			t.Fatal(err)
		}
		c := exec.Command(sh, "-c", "ulimit -f "+blocks+` && exec "$0" run "$1" -q`, batten, dir)
		b, _ := c.CombinedOutput()
		out, status := string(b), c.ProcessState.ExitCode()
		if status != Failed || !strings.Contains(out, "file too large") || strings.Contains(out, "goroutine") {
			t.Errorf("%s blocks: exit status %d: %s", blocks, status, out)
		}
		if outputsOf(t, dir) != want {
			t.Errorf("%s blocks: an output was changed", blocks)
		}
		if u := unfinished(dir); len(u) > 0 {
			t.Errorf("%s blocks: left behind: %v", blocks, u)
		}
	}
	if err := os.WriteFile(data, first, 0o666); err != nil {
		t.Fatal(err)
	}
	if out, status := ran("run", dir, "-q"); status != Done {
		t.Fatalf("without the limit: exit status %d: %s", status, out)
	}
	if outputsOf(t, dir) != want {
		t.Error("without the limit the outputs differ")
	}
}

// readOnly gives a folder's contents under a path where nothing can be written.
func readOnly(t *testing.T, dir string) string {
	t.Helper()
	if os.Getuid() > 0 { // no root: permissions hold
		_ = filepath.WalkDir(dir, func(p string, d fs.DirEntry, err error) error {
			if err == nil && d.IsDir() {
				t.Cleanup(func() { _ = os.Chmod(p, 0o755) })
				err = os.Chmod(p, 0o555)
			}
			return err
		})
		return dir
	}
	at := t.TempDir()
	mount(t, "--bind", dir, at)
	if out, err := exec.Command("mount", "-o", "remount,ro,bind", at).CombinedOutput(); err != nil {
		t.Skipf("cannot make it read-only: %s", out)
	}
	return at
}

// TestReadOnlyStudy: in a folder that cannot be written a run says so and does
// nothing; why, read and replay answer from the record all the same.
func TestReadOnlyStudy(t *testing.T) {
	dir := slowStudy(t)
	if out, status := ran("run", dir, "-q"); status != Done {
		t.Fatal(out)
	}
	want := outputsOf(t, dir)
	if err := os.WriteFile(filepath.Join(dir, "study.hcl"), append(specOf(t, dir), "export \"fits\" {\n  of   = c\n  what = fits\n  file = \"out/fits.csv\"\n}\n"...), 0o666); err != nil {
		t.Fatal(err)
	}
	at := readOnly(t, dir)
	out, status := ran("run", at, "-q")
	if status != Failed || !strings.Contains(out, "read-only") && !strings.Contains(out, "permission denied") || strings.Contains(out, "panic") {
		t.Errorf("exit status %d: %s", status, out)
	}
	for _, args := range [][]string{{"why", at, "c", "g=g03"}, {"read", at, "c", "g=g03", "--at", "4"}, {"check", at}, {"replay", at}} {
		if out, status := ran(args...); status != Done {
			t.Errorf("%v: exit status %d: %s", args, status, out)
		}
	}
	if outputsOf(t, dir) != want {
		t.Error("the outputs changed")
	}
}

// TestLinkedFolders: a study that brings its own .batten or ledger as a link to
// somewhere else does not get anything written there.
func TestLinkedFolders(t *testing.T) {
	for _, name := range []string{".batten", "ledger"} {
		dir, other := slowStudy(t), t.TempDir()
		if err := os.Symlink(other, filepath.Join(dir, name)); err != nil {
			t.Skip(err)
		}
		out, status := ran("run", dir, "-q")
		if status == Done || !strings.Contains(out, "is a link") {
			t.Errorf("%s: exit status %d: %s", name, status, out)
		}
		if out, status := ran("accept", dir, "--reason", "x"); status == Done || !strings.Contains(out, "batten") {
			t.Errorf("%s: accept: exit status %d: %s", name, status, out)
		}
		if left, _ := os.ReadDir(other); len(left) > 0 {
			t.Errorf("%s: %d files were written through the link", name, len(left))
		}
	}
}
