package runner

import (
	"context"
	"fmt"
	"runtime"
	"sort"
	"strconv"
	"sync/atomic"

	"github.com/fxamacker/cbor/v2"
	"golang.org/x/sync/errgroup"

	"batten/runner/store"
	"batten/runner/table"
	"batten/spec"
	"batten/spec/expr"
)

// partCount is the fixed number of shares that a curve's groups fall into. A
// group's part depends on its name alone, so that a new group moves no other.
const partCount = 256

// curveFits is a curve with all its fits, in the order of the groups.
type curveFits struct {
	def     *spec.Curve
	digest  string // of the manifest: names every part's object
	count   rowCount
	aside   []setAside
	zero    int
	rows    []int // of each file of the input
	fits    []*storedFit
	values  [][]value // of fits[i]
	by      []string
	seed    int64                  // of draws from a posterior
	reused  []bool                 // of fits[i]: it came from the store
	verdict []verdict              // of fits[i]; set by judge
	guards  []GuardRecord          // how the guards on the curve went; set by judge
	tests   map[string]testedPairs // of contrasts
}

// manifest is what the store keeps of a curve: its parts and row counts.
type manifest struct {
	Parts  []string // object digests, in the order of part numbers
	Number []int    // the parts' numbers
	Count  rowCount
	Aside  []setAside
	Zero   int
	Rows   []int // of each file of the input, in their order
}

// curveRun is what the curve stage needs.
type curveRun struct {
	study    *spec.Study
	store    *store.Store
	files    map[string][]table.File // by input
	tables   *tables
	workers  int
	progress Progress
	done     *atomic.Int64 // parts finished, over all curves
	total    *atomic.Int64
}

// fit brings one curve up to date: the whole curve from the store where
// nothing it depends on changed, else part by part, group by group.
func (r *curveRun) fit(ctx context.Context, c *spec.Curve) (*curveFits, error) {
	k := curveKey(r.study, c, r.files)
	if cf := r.recall(c, k.String()); cf != nil {
		return cf, nil
	}
	f, err := r.tables.get(ctx, c.From)
	if err != nil {
		return nil, err
	}
	groups, aside, err := form(c, f, r.study)
	if err != nil {
		return nil, err
	}
	cf := &curveFits{def: c, count: f.count, aside: aside, by: byNames(c), seed: r.study.Seed}
	jobs := r.plan(c, groups)
	r.total.Add(int64(len(jobs)))
	r.progress.Start(c.Name.Text, len(groups))

	w := newWeighing(c, f)
	shared, err := r.share(ctx, c, w, jobs)
	if err == nil {
		err = r.eachJob(ctx, jobs, func(ft *fitter, j *job) error {
			if err := r.part(ft, c, w, j, shared); err != nil {
				return err
			}
			r.done.Add(1)
			r.progress.Add(len(j.groups))
			return nil
		})
	}
	r.progress.Stop()
	if err != nil {
		if ctx.Err() != nil {
			return nil, &StoppedError{Done: int(r.done.Load()), Total: int(r.total.Load())}
		}
		return nil, err
	}
	m := manifest{Count: f.count, Aside: aside}
	for _, file := range f.input.Files {
		m.Rows = append(m.Rows, file.Rows)
	}
	for _, j := range jobs {
		m.Parts = append(m.Parts, j.digest)
		m.Number = append(m.Number, j.number)
		for i, g := range j.groups {
			cf.fits = append(cf.fits, j.out.Fits[i])
			cf.values = append(cf.values, g.values)
			cf.reused = append(cf.reused, j.reused[i])
			m.Zero += j.out.Fits[i].ZeroW
		}
	}
	cf.zero = m.Zero
	sort.Sort(byGroup{cf})
	b, err := codec.Marshal(m)
	if err != nil {
		return nil, err
	}
	if cf.digest, err = r.store.Put(k.String(), b); err != nil {
		return nil, err
	}
	return cf, nil
}

// eachJob hands the jobs to the workers.
func (r *curveRun) eachJob(ctx context.Context, jobs []*job, do func(*fitter, *job) error) error {
	eg, ctx := errgroup.WithContext(ctx)
	overBlocks(ctx, eg, len(jobs), min(r.workers, len(jobs)), nil, func(ft *fitter, k int) error { return do(ft, jobs[k]) })
	return eg.Wait()
}

// recall returns a curve that the store holds whole, or nil.
func (r *curveRun) recall(c *spec.Curve, key string) *curveFits {
	b, dig, ok := r.store.Get(key)
	if !ok {
		return nil
	}
	cf, err := openCurve(r.store, c, r.study.Seed, dig, b)
	if err != nil {
		return nil
	}
	files := r.files[inputOf(r.study, c.From)]
	for i := range files {
		if i < len(cf.rows) {
			files[i].Rows = cf.rows[i]
		}
	}
	return cf
}

// inputOf names the input that a table is made from.
func inputOf(s *spec.Study, table string) string {
	for {
		r := s.RowsByName(table)
		if r == nil {
			return table
		}
		table = r.From
	}
}

// openCurve reads a curve's fits by its manifest. An error means that some
// object is missing, damaged or of another layout.
func openCurve(st *store.Store, c *spec.Curve, seed int64, dig string, b []byte) (*curveFits, error) {
	var m manifest
	if err := cbor.Unmarshal(b, &m); err != nil {
		return nil, err
	}
	cf := &curveFits{def: c, digest: dig, count: m.Count, aside: m.Aside, zero: m.Zero, rows: m.Rows, by: byNames(c), seed: seed}
	parts := make([]storedPart, len(m.Parts))
	var eg errgroup.Group
	eg.SetLimit(runtime.GOMAXPROCS(0))
	for i, p := range m.Parts {
		eg.Go(func() error {
			obj, ok := st.Object(p)
			if !ok {
				return fmt.Errorf("part %.12s of curve %q is no longer in the store", p, c.Name.Text)
			}
			return readPart(obj, len(c.By), &parts[i])
		})
	}
	if err := eg.Wait(); err != nil {
		return nil, err
	}
	for _, part := range parts {
		for _, f := range part.Fits {
			vs, err := parseValues(c, f.Group)
			if err != nil {
				return nil, err
			}
			cf.fits = append(cf.fits, f)
			cf.values = append(cf.values, vs)
			cf.reused = append(cf.reused, true)
		}
	}
	sort.Sort(byGroup{cf})
	return cf, nil
}

// byGroup sorts a curve's fits by group.
type byGroup struct{ *curveFits }

func (b byGroup) Len() int           { return len(b.fits) }
func (b byGroup) Less(i, j int) bool { return compareValues(b.values[i], b.values[j]) < 0 }
func (b byGroup) Swap(i, j int) {
	b.fits[i], b.fits[j] = b.fits[j], b.fits[i]
	b.values[i], b.values[j] = b.values[j], b.values[i]
	b.reused[i], b.reused[j] = b.reused[j], b.reused[i]
}

func byNames(c *spec.Curve) []string {
	var out []string
	for _, b := range c.By {
		out = append(out, b.Name.Text)
	}
	return out
}

// parseValues reads a group's values back from their text.
func parseValues(c *spec.Curve, text []string) ([]value, error) {
	if len(text) != len(c.By) {
		return nil, fmt.Errorf("a stored group has %d values, expected %d", len(text), len(c.By))
	}
	out := make([]value, len(text))
	for i, t := range text {
		v := value{text: t, kind: c.By[i].Kind}
		switch v.kind {
		case expr.Number:
			n, err := strconv.ParseFloat(t, 64)
			if err != nil {
				return nil, err
			}
			v = value{num: n, kind: v.kind}
		case expr.Date:
			n, ok := expr.ParseDate(t)
			if !ok {
				return nil, fmt.Errorf("%q is no date", t)
			}
			v = value{num: n, kind: v.kind}
		}
		out[i] = v
	}
	return out, nil
}
