package runner

import (
	"context"
	"fmt"
	"os"
	"path/filepath"
	"strings"
	"testing"

	"batten/spec"
)

// TestSweep: what the last runs and the ledger name stays, to the last byte;
// the rest goes; a dry sweep changes nothing; the next run computes nothing
// again and writes the same bytes.
func TestSweep(t *testing.T) {
	rows := rowsOf(4, 30)
	dir := write(t, "gcv", map[string][]string{"d.csv": rows})
	first := execute(t, dir, 2)
	if _, err := Accept(context.Background(), first.Study, "a start", Options{}); err != nil {
		t.Fatal(err)
	}
	for k := range 5 { // five runs with other data
		other := append([]string(nil), rows...)
		f := strings.Split(other[k*7], ",")
		f[2] = fmt.Sprint(3 + k)
		other[k*7] = strings.Join(f, ",")
		put(t, dir, "d.csv", rowsText(other))
		execute(t, dir, 2)
	}
	want := outputs(t, dir)
	s, err := spec.Load(dir)
	if err != nil {
		t.Fatal(err)
	}
	sweep := func(keep int, dry bool) *Swept {
		t.Helper()
		r, err := Sweep(context.Background(), s, keep, dry, Options{})
		if err != nil {
			t.Fatal(err)
		}
		return r
	}
	would, again := sweep(2, true), sweep(2, true)
	if would.Runs != 3 || would.Objects == 0 || fmt.Sprint(would) != fmt.Sprint(again) {
		t.Errorf("dry: %+v, again %+v", would, again)
	}
	did := sweep(2, false)
	if did.Runs != would.Runs || did.Objects != would.Objects || did.Bytes != would.Bytes || len(did.KeptRuns) != 3 {
		t.Errorf("dropped %+v, would have dropped %+v", did, would)
	}
	if more := sweep(2, false); more.Objects != 0 || more.Runs != 0 {
		t.Errorf("a second sweep dropped %+v", more)
	}
	r := execute(t, dir, 2)
	if r.Record.Counts.Computed != 0 {
		t.Errorf("after a sweep %d fits were computed again", r.Record.Counts.Computed)
	}
	for _, o := range r.Record.Outputs {
		if o.Wrote {
			t.Errorf("after a sweep %s was written again", o.Path)
		}
	}
	same(t, "after a sweep", outputs(t, dir), want)
	// the accepted run answers still, and so does the comparison with it
	c, err := Compare(context.Background(), s, "", "", Options{})
	if err != nil || len(c.Notes) > 0 || len(c.Moves) == 0 || len(c.Moves[0].Parts) == 0 {
		t.Errorf("compare after a sweep: %+v, %v", c, err)
	}
	if _, err := Sweep(context.Background(), s, 0, false, Options{}); err == nil {
		t.Error("keep 0 was accepted")
	}
}

// TestSweepKeepsAll: of a study with one run nothing is dropped; where a kept
// record cannot be read no object goes; a study that was never run gets no store.
func TestSweepKeepsAll(t *testing.T) {
	rows := rowsOf(3, 24)
	dir := write(t, "gcv", map[string][]string{"d.csv": rows})
	s, err := spec.Load(dir)
	if err != nil {
		t.Fatal(err)
	}
	sweep := func(keep int) *Swept {
		t.Helper()
		r, err := Sweep(context.Background(), s, keep, false, Options{})
		if err != nil {
			t.Fatal(err)
		}
		return r
	}
	if r := sweep(1); r.Kept != 0 || r.Bytes != 0 {
		t.Errorf("before any run: %+v", r)
	}
	if _, err := os.Stat(filepath.Join(dir, ".batten")); err == nil {
		t.Error("a sweep made a store")
	}
	execute(t, dir, 2)
	if r := sweep(1); r.Objects != 0 || r.Keys != 0 || r.Slots != 0 || r.Runs != 0 || r.Kept == 0 || r.Bytes != 0 {
		t.Errorf("after one run: %+v", r)
	}
	put(t, dir, "d.csv", rowsText(rows[:40]))
	execute(t, dir, 2)
	put(t, dir, "d.csv", rowsText(rows[:50]))
	execute(t, dir, 2)
	ids, err := listRuns(dir)
	if err != nil || len(ids) != 3 {
		t.Fatal(ids, err)
	}
	b, err := os.ReadFile(filepath.Join(runsDir(dir), ids[1]+".json"))
	if err != nil {
		t.Fatal(err)
	}
	damaged := append([]byte(nil), b...)
	damaged[len(b)/2] ^= 4
	put(t, runsDir(dir), ids[1]+".json", string(damaged))
	if r := sweep(2); r.Objects != 0 || r.Runs != 1 || fmt.Sprint(r.Unreadable) != fmt.Sprint(ids[1:2]) {
		t.Errorf("with a damaged record: %+v", r)
	}
	put(t, runsDir(dir), ids[1]+".json", string(b))
	if _, err := Compare(context.Background(), s, ids[1], ids[2], Options{}); err != nil {
		t.Errorf("what a damaged record named was dropped: %v", err)
	}
	if r := sweep(2); r.Objects == 0 || len(r.Unreadable) != 0 {
		t.Errorf("with the record brought back: %+v", r)
	}
}
