package examples

import (
	"bytes"
	"os"
	"os/exec"
	"path/filepath"
	"strings"
	"testing"
)

// TestHarbourDataComeFromTheirGenerator runs the generator and compares bytes;
// the correction concerns forty rows, and no other.
func TestHarbourDataComeFromTheirGenerator(t *testing.T) {
	dir := t.TempDir()
	if out, err := exec.Command("go", "run", "./harbour/make", dir).CombinedOutput(); err != nil {
		t.Fatalf("%v\n%s", err, out)
	}
	text := map[string]string{}
	for _, name := range []string{"data/2025.csv", "later/2025.csv", "later/2026.csv"} {
		a, err := os.ReadFile(filepath.Join(dir, name))
		if err != nil {
			t.Fatal(err)
		}
		b, err := os.ReadFile(filepath.Join("harbour", name))
		if err != nil {
			t.Fatal(err)
		}
		if !bytes.Equal(a, b) {
			t.Errorf("%s is not what the generator writes; see its first comment", name)
		}
		text[name] = string(b)
	}
	was, is := strings.Split(text["data/2025.csv"], "\n"), strings.Split(text["later/2025.csv"], "\n")
	n := 0
	for i := range was {
		if i < len(is) && was[i] != is[i] {
			n++
			if !strings.HasPrefix(is[i], "ferry pier,") {
				t.Errorf("line %d was corrected: %s", i+1, is[i])
			}
		}
	}
	if len(was) != len(is) || n != 40 {
		t.Errorf("%d lines differ, want 40", n)
	}
}
