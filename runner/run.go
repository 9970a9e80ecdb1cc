// Package runner carries a study out: it builds the graph from the spec,
// reads inputs, makes rows, forms groups, fits every group in parallel parts,
// reuses what the store still holds, holds the fits to the guards, and writes
// exports, reports and the run's record; it keeps the ledger and answers from
// the record why a curve is as it is.
//
// Steps of a run: hash the inputs; for each curve ask the store for the whole
// of it, else read the rows, group them, and bring each part up to date; judge
// the fits; compare with the ledger; write what is not there already. Results
// depend on the spec's meaning and on the rows of each group, on nothing else.
//
// It leaves parsing to spec, numbers to methods, looks to reports, and flags,
// exit statuses and printing to cmd.
package runner

import (
	"context"
	"fmt"
	"os"
	"path/filepath"
	"runtime"
	"sync/atomic"
	"time"

	"batten/runner/ledger"
	"batten/runner/store"
	"batten/runner/table"
	"batten/spec"
)

// Options are a run's settings. None of them changes a result.
type Options struct {
	Workers  int // 0: all cores
	Progress Progress
	Program  string // name, version and commit, for the record
	Now      func() time.Time

	again *Record // a replay: what the ledger and the day were then
}

func (o *Options) fill() {
	if o.Workers <= 0 {
		o.Workers = runtime.GOMAXPROCS(0)
	}
	if o.Progress == nil {
		o.Progress = quiet{}
	}
	if o.Now == nil {
		o.Now = time.Now
	}
}

// Result is what a run arrived at, for printing.
type Result struct {
	Record *Record
	Run    *Run
}

// Run is a study brought up to date, in memory.
type Run struct {
	Study  *spec.Study
	Record *Record
	curves map[string]*curveFits
	files  map[string][]table.File
	state  *ledger.State
	tables *tables
	opt    Options

	standing standing
}

// Execute runs a study. On a *RefusedError the Run is returned beside it:
// the fits were made and recorded, outputs were not.
func Execute(ctx context.Context, s *spec.Study, opt Options) (*Run, error) {
	opt.fill()
	started := opt.Now()
	st, err := store.Open(filepath.Join(s.Dir, ".batten"))
	if err != nil {
		return nil, err
	}
	unlock, err := st.Lock(ctx, opt.Progress.Note)
	if err != nil {
		return nil, err
	}
	defer unlock()
	if err := checkOutputs(s); err != nil {
		return nil, err
	}
	clearOutputs(s)
	r := &Run{Study: s, opt: opt, curves: map[string]*curveFits{}}
	if r.files, err = hashInputs(ctx, s); err != nil {
		return nil, err
	}
	r.tables = &tables{study: s, workers: opt.Workers, frames: map[string]*frame{}}
	known := true
	for _, c := range s.Curves {
		known = known && st.Has(curveKey(s, c, r.files).String())
	}
	if known {
		r.digestExports()
	}
	var done, total atomic.Int64
	for _, c := range s.Curves {
		cr := &curveRun{study: s, store: st, files: r.files, tables: r.tables, workers: opt.Workers,
			progress: opt.Progress, done: &done, total: &total}
		cf, err := cr.fit(ctx, c)
		if err != nil {
			return nil, err
		}
		if err := judge(ctx, s, cf, opt.Workers); err != nil {
			return nil, err
		}
		r.curves[c.Name.Text] = cf
	}
	if err := r.sameInputs(); err != nil {
		return nil, err
	}
	r.Record = r.record(started)
	guards, whole, err := r.judgeWhole()
	if err != nil {
		return nil, err
	}
	r.Record.Guards, r.Record.Refused = guards, append(r.Record.Refused, whole...)
	if then := opt.again; then != nil {
		r.Record.Moved, r.Record.Ledger, r.Record.Dated, r.Record.Against = then.Moved, then.Ledger, then.Dated, then.Against
	} else {
		if r.state, err = ledger.ReadState(ledgerDir(s)); err != nil {
			return nil, err
		}
		r.Record.Ledger, r.Record.Dated, r.Record.Against = r.Ledger(), dated(), ledgerFiles(s, r.state)
		if err := r.findMoved(ctx); err != nil {
			return nil, err
		}
	}
	r.Record.Results = r.results()
	var refused error
	if len(r.Record.Refused) > 0 {
		refused = &RefusedError{Refused: r.Record.Refused}
	} else if err := r.writeOutputs(ctx, st); err != nil {
		return nil, err
	}
	r.Record.Finished = stamp(opt.Now())
	if err := writeRecord(s.Dir, r.Record); err != nil {
		return nil, err
	}
	if e, ok := refused.(*RefusedError); ok {
		e.Run = r.Record.Run
	}
	return r, refused
}

func stamp(t time.Time) string { return t.UTC().Format("2006-01-02T15:04:05Z") }

// hashInputs finds every input's files and takes their digests.
func hashInputs(ctx context.Context, s *spec.Study) (map[string][]table.File, error) {
	out := map[string][]table.File{}
	for _, in := range s.Inputs {
		src := source(s, in)
		paths, err := table.Find(src)
		if err != nil {
			return nil, inputError(err)
		}
		fs, err := table.Hash(ctx, src, paths)
		if err != nil {
			return nil, err
		}
		out[in.Name.Text] = fs
	}
	return out, nil
}

// sameInputs makes sure that the rows which were read are those which were
// hashed: a file that changed in between would make a record that lies.
func (r *Run) sameInputs() error {
	for name, f := range r.tables.frames {
		if r.Study.InputByName(name) == nil {
			continue
		}
		was := r.files[name]
		for i, now := range f.input.Files {
			if i >= len(was) || was[i].SHA256 != now.SHA256 {
				return fmt.Errorf("%s changed while it was read; nothing was written, run again", now.Path)
			}
			was[i].Rows = now.Rows
		}
	}
	return nil
}

// record fills in all of the run's record but what is written.
func (r *Run) record(started time.Time) *Record {
	s := r.Study
	rec := &Record{
		Started: stamp(started), Program: r.opt.Program, Go: runtime.Version(), Methods: Methods(),
		Spec: SpecFile{Path: filepath.Base(s.File), SHA256: s.Hash(), Text: string(s.Text)}, Seed: s.Seed,
		Moved: []Move{}, Outputs: []Output{},
		Who: operator(s.Dir), Modules: modules(),
	}
	for _, in := range s.Inputs {
		ir := InputRecord{Name: in.Name.Text}
		for _, f := range r.files[in.Name.Text] {
			ir.Files = append(ir.Files, FileRecord{f.Path, f.SHA256, f.Bytes, f.Rows})
			ir.Rows += f.Rows
		}
		rec.Inputs = append(rec.Inputs, ir)
	}
	for _, c := range s.Curves {
		cf := r.curves[c.Name.Text]
		cr := CurveRecord{Name: c.Name.Text, Object: cf.digest, Read: cf.count.Read,
			Dropped: cf.count.Dropped, SetAside: cf.aside, ZeroWeight: cf.zero}
		cr.Counts = cf.counts()
		for i, v := range cf.verdict {
			fit := fitName(c.Name.Text, label(cf.by, cf.fits[i].Group))
			outcome := v.Outcome
			if outcome == "" {
				if len(v.Warned) == 0 {
					continue
				}
				outcome = spec.Warn
			}
			cr.Verdicts = append(cr.Verdicts, VerdictRecord{fit, outcome, v.Why, v.Warned})
			if outcome == spec.Refuse {
				rec.Refused = append(rec.Refused, fit+": "+v.Why)
			}
		}
		rec.Counts.add(cr.Counts)
		rec.Curves = append(rec.Curves, cr)
	}
	return rec
}

// counts counts a curve's fits. A fit that a guard or its data kept back is
// skipped or refused, whether it came from the store or not.
func (cf *curveFits) counts() Counts {
	c := Counts{Total: len(cf.fits)}
	for i, v := range cf.verdict {
		switch {
		case v.Outcome == spec.Refuse:
			c.Refused++
		case !v.fits():
			c.Skipped++
		case cf.reused[i]:
			c.Reused++
		default:
			c.Computed++
		}
	}
	return c
}

// results digests what the run arrived at: fits, verdicts and everything that
// is shown of them. Runs that agree in it made the same outputs.
func (r *Run) results() string {
	k := newKey("results", recordFormat)
	k.add("spec", r.Record.Spec.SHA256)
	for _, m := range r.Record.Methods {
		k.add("method", m)
	}
	for _, in := range r.Record.Inputs {
		for _, f := range in.Files {
			k.add("file", in.Name, f.Path, f.SHA256)
		}
	}
	for _, c := range r.Record.Curves {
		k.add("curve", c.Name, c.Object)
		for _, v := range c.Verdicts {
			k.add("verdict", v.Fit, v.Outcome, v.Why)
		}
	}
	for _, g := range r.Record.Guards {
		if g.Kind == spec.OnCurve {
			continue // verdicts say it
		}
		k.add("guard", g.Guard, g.Judged)
		for _, f := range g.Failed {
			k.add("failed", f.Of, f.Found)
		}
	}
	return k.digest()
}

// findMoved compares the run with the ledger.
func (r *Run) findMoved(ctx context.Context) error {
	if r.state == nil {
		return nil
	}
	for _, c := range r.Study.Curves {
		old, err := ledger.ReadCurve(ledgerDir(r.Study), c.Name.Text)
		if err != nil {
			return err
		}
		m, err := moved(ctx, r.curves[c.Name.Text], old, r.opt.Workers)
		if err != nil {
			return err
		}
		r.Record.Moved = append(r.Record.Moved, m...)
	}
	for _, h := range r.state.Curves {
		if r.Study.CurveByName(h.Name) != nil {
			continue
		}
		m, err := movedAway(r.Study, h.Name)
		if err != nil {
			return err
		}
		r.Record.Moved = append(r.Record.Moved, m...)
	}
	markPending(r.state, r.Record.Moved)
	return nil
}

// Ledger says in one line what the ledger holds, or "".
func (r *Run) Ledger() string {
	a := r.state.Last()
	if a == nil {
		return ""
	}
	return acceptedLine(a)
}

// Check reads the heads of a study's inputs and looks at its outputs' places;
// it fits nothing and writes nothing.
func Check(ctx context.Context, s *spec.Study) ([]FileRecord, error) {
	if err := checkOutputs(s); err != nil {
		return nil, err
	}
	var out []FileRecord
	for _, in := range s.Inputs {
		if err := ctx.Err(); err != nil {
			return nil, err
		}
		src := source(s, in)
		paths, err := table.Find(src)
		if err != nil {
			return nil, inputError(err)
		}
		if err := table.Heads(src); err != nil {
			return nil, dataError(err)
		}
		for _, p := range paths {
			f := FileRecord{Path: p}
			if fi, err := os.Stat(filepath.Join(s.Dir, filepath.FromSlash(p))); err == nil {
				f.Bytes = fi.Size()
			}
			out = append(out, f)
		}
	}
	return out, nil
}
