package runner

import (
	"bytes"
	"context"
	"crypto/sha256"
	"encoding/hex"
	"errors"
	"io"
	"io/fs"
	"os"
	"path"
	"path/filepath"
	"sort"
	"strings"

	"batten/reports"
	"batten/runner/store"
	"batten/runner/table"
	"batten/spec"
)

// checkOutputs looks at every output's place before anything is computed, so
// that a run does not end in a folder it cannot write to.
func checkOutputs(s *spec.Study) error {
	for _, e := range s.Exports {
		for _, f := range []string{e.File, e.SchemaFile()} {
			if f == "" {
				continue
			}
			if _, err := store.OutputPath(s.Dir, f); err != nil {
				return outputError(s, e.Range.Start.Line, e.Range.Start.Column, err)
			}
		}
	}
	for _, r := range s.Reports {
		for _, f := range r.Files {
			if _, err := store.OutputPath(s.Dir, f); err != nil {
				return outputError(s, r.Range.Start.Line, r.Range.Start.Column, err)
			}
		}
	}
	return nil
}

// clearOutputs removes what a killed run left beside the outputs. The caller
// holds the study's lock and has looked at the outputs' places.
func clearOutputs(s *spec.Study) {
	var files, folders []string
	for _, e := range s.Exports {
		files = append(files, filepath.Join(s.Dir, filepath.FromSlash(e.File)))
		if f := e.SchemaFile(); f != "" {
			files = append(files, filepath.Join(s.Dir, filepath.FromSlash(f)))
		}
	}
	for _, rep := range s.Reports {
		for _, f := range rep.Files {
			files = append(files, filepath.Join(s.Dir, filepath.FromSlash(f)))
			if !strings.HasSuffix(f, ".md") {
				continue
			}
			folder := path.Join(path.Dir(f), figuresFolder(f))
			if _, err := store.OutputPath(s.Dir, path.Join(folder, "figure")); err == nil { // no link leads out
				folders = append(folders, filepath.Join(s.Dir, filepath.FromSlash(folder)))
			}
		}
	}
	store.ClearUnfinished(files, folders)
}

// figuresFolder is the folder, beside a Markdown report, of its figures.
func figuresFolder(file string) string {
	return strings.TrimSuffix(path.Base(file), ".md") + "_figures"
}

func outputError(s *spec.Study, line, col int, err error) error {
	return usagef("%s: %v", at(s, line, col), err)
}

// inputError says of an input that cannot be found what the spec can do.
func inputError(err error) error {
	var p *table.Problem
	if errors.As(err, &p) || errors.Is(err, fs.ErrNotExist) {
		return &UsageError{err.Error()}
	}
	return err
}

// out is one file to be brought up to date.
type out struct {
	path string // under the study's folder, slash form
	key  string // what its bytes depend on
	make func(w io.Writer) error
}

// writeOutputs brings exports and reports up to date. A file that stands
// there already with the bytes its key led to before is left alone.
func (r *Run) writeOutputs(ctx context.Context, st *store.Store) error {
	var outs []out
	for _, e := range r.Study.Exports {
		outs = append(outs, out{e.File, r.exportKey(e), func(w io.Writer) error { return r.export(ctx, e, w) }})
		if e.Schema {
			o, err := r.schemaOut(e)
			if err != nil {
				return err
			}
			outs = append(outs, o)
		}
	}
	for _, o := range outs {
		if err := ctx.Err(); err != nil {
			return &StoppedError{}
		}
		if err := r.write(st, o); err != nil {
			return err
		}
	}
	for _, rep := range r.Study.Reports {
		if err := r.writeReport(ctx, st, rep); err != nil {
			return err
		}
	}
	sort.SliceStable(r.Record.Outputs, func(i, j int) bool { return r.Record.Outputs[i].Path < r.Record.Outputs[j].Path })
	return nil
}

// standing takes the digests of the exports that stand already, while the
// fits are recalled: in a rerun without changes both take as long.
type standing map[string]chan stood

type stood struct {
	sum   string
	bytes int64
	err   error
}

func (r *Run) digestExports() {
	r.standing = standing{}
	for _, e := range r.Study.Exports {
		r.standing[e.File] = make(chan stood, 1)
	}
	go func() {
		for _, e := range r.Study.Exports {
			var s stood
			s.sum, s.bytes, s.err = r.digestOf(e.File)
			r.standing[e.File] <- s
		}
	}()
}

// digestOf is the digest of an output as it stands.
func (r *Run) digestOf(path string) (string, int64, error) {
	return fileDigest(filepath.Join(r.Study.Dir, filepath.FromSlash(path)))
}

// write brings one file up to date.
func (r *Run) write(st *store.Store, o out) error {
	if b, _, ok := st.Get(o.key); ok {
		var s stood
		if c := r.standing[o.path]; c != nil {
			s = <-c
		} else {
			s.sum, s.bytes, s.err = r.digestOf(o.path)
		}
		if sum, n, err := s.sum, s.bytes, s.err; err == nil && sum == string(b) {
			r.Record.Outputs = append(r.Record.Outputs, Output{o.path, sum, n, false})
			return nil
		}
	}
	full, err := store.OutputPath(r.Study.Dir, o.path)
	if err != nil {
		return err
	}
	f, err := store.Create(full)
	if err != nil {
		return err
	}
	h := sha256.New()
	n := &counter{}
	if err := o.make(io.MultiWriter(f, h, n)); err != nil {
		f.Abort()
		return err
	}
	if err := f.Commit(); err != nil {
		return err
	}
	sum := hex.EncodeToString(h.Sum(nil))
	if _, err := st.Put(o.key, []byte(sum)); err != nil {
		return err
	}
	r.Record.Outputs = append(r.Record.Outputs, Output{o.path, sum, n.n, true})
	return nil
}

type counter struct{ n int64 }

func (c *counter) Write(p []byte) (int, error) {
	c.n += int64(len(p))
	return len(p), nil
}

func fileDigest(name string) (string, int64, error) {
	f, err := os.Open(name)
	if err != nil {
		return "", 0, err
	}
	defer f.Close()
	h := sha256.New()
	n, err := io.Copy(h, f)
	return hex.EncodeToString(h.Sum(nil)), n, err
}

// reportVersion is raised when a report's bytes change for the same results.
const reportVersion = 2

// writeReport writes a report's files, and figures beside a Markdown one.
func (r *Run) writeReport(ctx context.Context, st *store.Store, rep *spec.Report) error {
	k := newKey("report", reportVersion)
	k.add("program", r.Record.Program, r.Record.Go)
	k.add("results", r.results())
	k.add("title", rep.Title)
	k.add("dated", r.Record.Dated)
	k.add("ledger", r.Record.Ledger)
	for _, m := range r.Record.Moved {
		k.add("moved", m.Fit, strings.Join(m.words(), ","), val(m.Shift), val(m.At), val(m.OldEDF), val(m.NewEDF))
	}
	var doc *reports.Document // made once, and only if some file needs it
	document := func() (*reports.Document, error) {
		if doc != nil {
			return doc, nil
		}
		var err error
		doc, err = r.Document(ctx, rep.Title, rep.Show, false)
		return doc, err
	}
	for _, file := range rep.Files {
		fk := k.String() + "file " + file + "\n"
		if strings.HasSuffix(file, ".html") {
			err := r.write(st, out{file, fk, func(w io.Writer) error {
				d, err := document()
				if err != nil {
					return err
				}
				_, err = w.Write(reports.HTML(d))
				return err
			}})
			if err != nil {
				return err
			}
			continue
		}
		if err := r.writeMarkdown(st, file, fk, document); err != nil {
			return err
		}
	}
	return nil
}

// writeMarkdown writes a Markdown report and its figures, the figures first,
// so that the text never points at one that is not there.
func (r *Run) writeMarkdown(st *store.Store, file, key string, document func() (*reports.Document, error)) error {
	listKey := key + "figures\n"
	if b, _, ok := st.Get(listKey); ok && r.allStand(st, key, file, strings.Fields(string(b))) {
		return nil
	}
	d, err := document()
	if err != nil {
		return err
	}
	main, figures := reports.Markdown(d, figuresFolder(file))
	names := make([]string, 0, len(figures))
	for n := range figures {
		names = append(names, n)
	}
	sort.Strings(names)
	for _, n := range names {
		o := out{path.Join(path.Dir(file), n), key + "figure " + n + "\n", func(w io.Writer) error {
			_, err := w.Write(figures[n])
			return err
		}}
		if err := r.write(st, o); err != nil {
			return err
		}
	}
	if err := r.write(st, out{file, key, func(w io.Writer) error {
		_, err := io.Copy(w, bytes.NewReader(main))
		return err
	}}); err != nil {
		return err
	}
	_, err = st.Put(listKey, []byte(strings.Join(names, "\n")))
	return err
}

// allStand tells whether a Markdown report and all its figures are there with
// the bytes they should have, and if so notes them as outputs.
func (r *Run) allStand(st *store.Store, key, file string, figures []string) bool {
	var found []Output
	stands := func(name, key string) bool {
		want, _, ok := st.Get(key)
		if !ok {
			return false
		}
		sum, n, err := r.digestOf(name)
		found = append(found, Output{name, sum, n, false})
		return err == nil && sum == string(want)
	}
	for _, n := range figures {
		if !stands(path.Join(path.Dir(file), n), key+"figure "+n+"\n") {
			return false
		}
	}
	if !stands(file, key) {
		return false
	}
	r.Record.Outputs = append(r.Record.Outputs, found...)
	return true
}
