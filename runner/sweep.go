package runner

import (
	"context"
	"os"
	"path/filepath"
	"strings"

	"github.com/fxamacker/cbor/v2"

	"batten/runner/ledger"
	"batten/runner/store"
	"batten/spec"
)

// Swept says what a sweep removed, or would remove.
type Swept struct {
	store.Swept
	Runs     int      // records removed
	KeptRuns []string // those that stay, oldest first
	Dry      bool
}

// Sweep drops the records of all but the last keep runs and of those that were
// accepted, and every stored object that no kept run names. What it drops can be
// computed again; what the ledger or a kept run names stays.
func Sweep(ctx context.Context, s *spec.Study, keep int, dry bool, opt Options) (*Swept, error) {
	opt.fill()
	if keep < 1 {
		return nil, usagef("--keep %d: expected 1 or more", keep)
	}
	st, err := store.Open(filepath.Join(s.Dir, ".batten"))
	if err != nil {
		return nil, err
	}
	unlock, err := st.Lock(ctx, opt.Progress.Note)
	if err != nil {
		return nil, err
	}
	defer unlock()
	ids, err := listRuns(s.Dir)
	if err != nil {
		return nil, err
	}
	state, err := ledger.ReadState(ledgerDir(s))
	if err != nil {
		return nil, err
	}
	kept := map[string]bool{}
	for _, id := range ids[max(0, len(ids)-keep):] {
		kept[id] = true
	}
	if state != nil {
		for _, a := range state.Accepted {
			kept[a.Run] = true
		}
	}
	out := &Swept{Dry: dry}
	objects, outputs := map[string]bool{}, map[string]bool{}
	for _, id := range ids {
		if !kept[id] {
			continue
		}
		out.KeptRuns = append(out.KeptRuns, id)
		rec, err := readRecord(s.Dir, id)
		if err != nil {
			continue // a record that cannot be read names nothing
		}
		for _, c := range rec.Curves {
			objects[c.Object] = true
			var m manifest
			if b, ok := st.Object(c.Object); ok && cbor.Unmarshal(b, &m) == nil {
				for _, p := range m.Parts {
					objects[p] = true
				}
			}
		}
		for _, o := range rec.Outputs {
			outputs[digest([]byte(o.SHA256))] = true
		}
	}
	out.Swept, err = st.Sweep(func(d string, keys []string) bool {
		if objects[d] || outputs[d] {
			return true
		}
		for _, k := range keys { // what groups share is small, and of every run
			if strings.HasPrefix(k, "shared ") {
				return true
			}
		}
		return false
	}, dry)
	if err != nil {
		return nil, err
	}
	for _, id := range ids {
		if kept[id] {
			continue
		}
		out.Runs++
		path := filepath.Join(runsDir(s.Dir), id+".json")
		if fi, err := os.Stat(path); err == nil {
			out.Bytes += fi.Size()
		}
		if !dry {
			if err := os.Remove(path); err != nil {
				return nil, &store.UnwritableError{Dir: runsDir(s.Dir), Err: err}
			}
		}
	}
	return out, nil
}
