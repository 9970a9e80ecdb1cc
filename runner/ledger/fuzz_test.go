package ledger

import (
	"os"
	"path/filepath"
	"testing"
)

// FuzzRead: no bytes of a ledger make the reader panic; a curve that is read can
// be written again.
func FuzzRead(f *testing.F) {
	a := &Accepted{By: []string{"g"}, Entries: []Entry{{Group: []string{"a"}, N: 9, Distinct: 8, Rule: "gcv", Lambda: 2, EDF: 3,
		Readings: []Value{{"top", 1, 0, 2}}, From: 0, To: 1, Curve: []float64{1, 2}, HalfWidth: []float64{0.1, 0.1}, Key: "0123456789abcdef"}}}
	if b, err := a.Encode(); err == nil {
		f.Add(b, []byte(`{"format":1,"study":"t","accepted":[],"curves":[]}`))
	}
	f.Add([]byte("g,n\n"), []byte(`{"format":2}`))
	dir := f.TempDir()
	f.Fuzz(func(t *testing.T, curve, state []byte) {
		for name, b := range map[string][]byte{"c.csv": curve, "study.json": state} {
			if err := os.WriteFile(filepath.Join(dir, name), b, 0o666); err != nil {
				t.Fatal(err)
			}
		}
		_, _ = ReadState(dir)
		if c, err := ReadCurve(dir, "c"); err == nil && c != nil {
			_, _ = c.Encode()
		}
	})
}
