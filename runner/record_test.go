package runner

import (
	"errors"
	"os"
	"path/filepath"
	"reflect"
	"runtime"
	"testing"

	"batten/runner/store"
)

// TestAlteredRecord: with any bit flipped a record is refused, or reads as it
// did; a record of an earlier version, without its last line, is read.
func TestAlteredRecord(t *testing.T) {
	dir := write(t, "gcv", map[string][]string{"d.csv": rowsOf(2, 20)})
	run := execute(t, dir, 2).Record.Run
	file := filepath.Join(runsDir(dir), run+".json")
	sound, err := os.ReadFile(file)
	if err != nil {
		t.Fatal(err)
	}
	want, err := readRecord(dir, run)
	if err != nil {
		t.Fatal(err)
	}
	refused := 0
	for i := range sound {
		bad := append([]byte(nil), sound...)
		bad[i] ^= 1 << (i % 8)
		put(t, runsDir(dir), run+".json", string(bad))
		got, err := readRecord(dir, run)
		var altered *AlteredRecordError
		switch {
		case errors.As(err, &altered) && altered.Run == run:
			refused++
		case err != nil:
			t.Fatalf("byte %d: %v", i, err)
		case !reflect.DeepEqual(got, want):
			t.Fatalf("byte %d: an altered record was taken for sound", i)
		}
	}
	if refused < len(sound)-len(checkLine) {
		t.Errorf("%d of %d were refused", refused, len(sound))
	}
	for _, bad := range []string{"", "{", string(sound[:len(sound)/2]), string(sound) + " "} {
		put(t, runsDir(dir), run+".json", bad)
		if _, err := readRecord(dir, run); err == nil {
			t.Errorf("a record of %d bytes was read", len(bad))
		}
	}
	earlier := sound[:len(sound)-len(checkLine)-64-len("\"\n}\n")]
	put(t, runsDir(dir), run+".json", string(earlier)+"\n}\n")
	if got, err := readRecord(dir, run); err != nil || !reflect.DeepEqual(got, want) {
		t.Errorf("without its last line: %v", err)
	}
}

// TestUnfinishedOutputs: what a killed run left beside the outputs goes with the
// next one; what is somebody else's stays.
func TestUnfinishedOutputs(t *testing.T) {
	if runtime.GOOS == "windows" {
		t.Skip("a file that is open cannot be removed there")
	}
	dir := write(t, "gcv", map[string][]string{"d.csv": rowsOf(2, 20)})
	execute(t, dir, 2)
	names := func(pattern string) []string {
		found, err := filepath.Glob(filepath.Join(dir, filepath.FromSlash(pattern)))
		if err != nil {
			t.Fatal(err)
		}
		return found
	}
	if len(names("out/page_figures/*.svg")) == 0 {
		t.Fatal("the report has no figures")
	}
	begin := func(rel string) { // as a writer that is killed leaves it
		t.Helper()
		if _, err := store.Create(filepath.Join(dir, filepath.FromSlash(rel))); err != nil {
			t.Fatal(err)
		}
	}
	for _, rel := range []string{"out/grid.csv", "out/page.md", "out/page.html", "out/page_figures/c.svg", ".batten/runs/000002-0123456789ab.json"} {
		begin(rel)
	}
	begin("out/notes.csv") // no output of this study
	put(t, filepath.Join(dir, "out"), ".tmp-mine", "kept")
	if n := len(names("out/.tmp-*")) + len(names("out/page_figures/.tmp-*")) + len(names(".batten/runs/.tmp-*")); n != 7 {
		t.Fatalf("%d unfinished files were made", n)
	}
	execute(t, dir, 2)
	if n := len(names("out/.tmp-*")); n != 2 {
		t.Errorf("%d files are left in out/, expected the two that are not the study's", n)
	}
	if left := append(names("out/page_figures/.tmp-*"), names(".batten/runs/.tmp-*")...); len(left) > 0 {
		t.Errorf("left behind: %v", left)
	}
}
