package runner

import (
	"context"
	"errors"
	"io/fs"
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
	Runs       int      // records removed
	KeptRuns   []string // those that stay, oldest first
	Unreadable []string // of these, the ones whose records cannot be read
	Dry        bool
}

// Sweep drops the records of all but the last keep runs and of those that were
// accepted, and every stored object that no kept run names. What it drops can be
// computed again; what the ledger or a kept run names stays. Where a kept record
// cannot be read nobody knows what it names, and every object stays.
func Sweep(ctx context.Context, s *spec.Study, keep int, dry bool, opt Options) (*Swept, error) {
	opt.fill()
	if keep < 1 {
		return nil, usagef("--keep %d: expected 1 or more", keep)
	}
	out := &Swept{Dry: dry, KeptRuns: []string{}}
	dir := filepath.Join(s.Dir, ".batten")
	if _, err := os.Stat(dir); errors.Is(err, fs.ErrNotExist) {
		return out, nil // never run: a sweep makes no store
	}
	st, err := store.Open(dir)
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
	// Records go before what they name: a sweep that is killed leaves objects
	// too many, for the next one, and no record without its objects.
	for _, id := range ids {
		if kept[id] {
			out.KeptRuns = append(out.KeptRuns, id)
			continue
		}
		n, err := dropRecord(s.Dir, id, dry)
		if err != nil {
			return nil, err
		}
		out.Runs++
		out.Bytes += n
	}
	live := &named{store: st, objects: map[string]bool{}, results: map[string]bool{}}
	for _, id := range out.KeptRuns {
		rec, err := readRecord(s.Dir, id)
		if err != nil {
			out.Unreadable = append(out.Unreadable, id)
			continue
		}
		live.add(rec)
	}
	live.all = len(out.Unreadable) > 0
	bytes := out.Bytes
	if out.Swept, err = st.Sweep(live.holds, dry); err != nil {
		return nil, err
	}
	out.Bytes += bytes
	return out, nil
}

// dropRecord removes a run's record and returns its size.
func dropRecord(dir, id string, dry bool) (int64, error) {
	path := filepath.Join(runsDir(dir), id+".json")
	fi, err := os.Stat(path)
	if err == nil && !dry {
		err = os.Remove(path)
	}
	if err != nil {
		return 0, &store.UnwritableError{Dir: runsDir(dir), Err: err}
	}
	return fi.Size(), nil
}

// named is what the kept runs name.
type named struct {
	store   *store.Store
	all     bool
	objects map[string]bool // digests
	results map[string]bool // lines of keys
}

func (n *named) add(rec *Record) {
	for _, c := range rec.Curves {
		n.objects[c.Object] = true
		var m manifest
		if b, ok := n.store.Object(c.Object); ok && cbor.Unmarshal(b, &m) == nil {
			for _, p := range m.Parts {
				n.objects[p] = true
			}
		}
	}
	for _, o := range rec.Outputs { // kept as an object that holds its digest
		n.objects[digest([]byte(o.SHA256))] = true
	}
	k := &key{}
	k.add("results", rec.Results)
	n.results[strings.TrimSuffix(k.String(), "\n")] = true
}

// holds tells whether an object stays, by its digest or by a key that leads to
// it: the list of a report's figures is of a run's results, and what groups
// share is small and of every run.
func (n *named) holds(digest string, keys []string) bool {
	if n.all || n.objects[digest] {
		return true
	}
	for _, k := range keys {
		if strings.HasPrefix(k, "shared ") {
			return true
		}
		if strings.HasPrefix(k, "report ") {
			for line := range strings.Lines(k) {
				if n.results[strings.TrimSuffix(line, "\n")] {
					return true
				}
			}
		}
	}
	return false
}
