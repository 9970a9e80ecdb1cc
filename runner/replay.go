package runner

import (
	"bufio"
	"bytes"
	"context"
	"encoding/json"
	"errors"
	"fmt"
	"io/fs"
	"os"
	"path/filepath"
	"runtime"
	"strings"

	"batten/spec"
)

// Replayed says whether a recorded run came out again, byte for byte.
type Replayed struct {
	Run             string
	Recorded, Now   string       // the program that made the record, and this one
	Inputs          []FoundInput // every recorded input, where it was found
	Outputs         int          // compared
	Different       []Difference
	MethodsThen     []string
	MethodsNow      []string
	DifferentCurves []string // curves whose stored fits have another digest
	DifferentGuards []string // curves of whose fits the guards say something else, and "the whole"
}

// Same tells whether nothing differs.
func (r *Replayed) Same() bool {
	return len(r.Different)+len(r.DifferentCurves)+len(r.DifferentGuards) == 0
}

// FoundInput is a recorded input file.
type FoundInput struct {
	Path, SHA256 string
	Found        string // where it lies now: "" where it was not found
	Altered      bool   // a file stands at its path, with another digest
	Elsewhere    bool   // it was found, but not at its path
}

// Difference is one output that came out otherwise.
type Difference struct {
	Path            string
	Recorded, Again string // digests; Again is "" where the output was not made
	Line            int    // the first line that differs; 0 where it is not known
	Column          string // its column, in a table
	Was, Is         string // what stands there
	Note            string // why Line is not known
}

// MissingInputsError says which recorded inputs cannot be found.
type MissingInputsError struct {
	Run   string
	Files []FoundInput // those that were not found
	All   []FoundInput // every recorded one
}

func (e *MissingInputsError) Error() string {
	var s []string
	for _, f := range e.Files {
		what := "is not there"
		if f.Altered {
			what = "has been altered"
		}
		s = append(s, fmt.Sprintf("%s %s (recorded SHA-256 %.16s...)", f.Path, what, f.SHA256))
	}
	return fmt.Sprintf("run %s cannot be replayed: its inputs are not all here:\n  %s\n  bring back the files as they were (from git, or a backup), or name the folder they lie in with --inputs", e.Run, strings.Join(s, "\n  "))
}

// Replay computes a recorded run again from its inputs, which are found by their
// digests, and from the spec's text in the record, and compares every output.
// Nothing of the store is used and nothing of the study is touched. folder is
// one more place to look for inputs, or "".
func Replay(ctx context.Context, s *spec.Study, run, folder string, opt Options) (*Replayed, error) {
	opt.fill()
	rec, err := findRecord(s.Dir, run)
	if err != nil {
		return nil, err
	}
	if ids, err := listRuns(s.Dir); err == nil && run == "" && ids[len(ids)-1] != rec.Run {
		opt.Progress.Note(fmt.Sprintf("the record of run %s cannot be read; run %s before it is replayed", ids[len(ids)-1], rec.Run))
	}
	out := &Replayed{Run: rec.Run, Recorded: rec.Program + ", " + rec.Go, Now: opt.Program + ", " + runtime.Version(), MethodsThen: rec.Methods, MethodsNow: Methods()}
	dir, err := os.MkdirTemp("", "batten-replay-")
	if err != nil {
		return nil, fmt.Errorf("a replay needs a temporary folder: %w", err)
	}
	defer func() { _ = os.RemoveAll(dir) }()
	again, err := spec.Parse(filepath.Join(dir, rec.Spec.Path), dir, []byte(rec.Spec.Text))
	if err != nil {
		return nil, fmt.Errorf("the spec in the record of run %s cannot be read by this version: %w", rec.Run, err)
	}
	if err := findInputs(s, again, rec, folder, out); err != nil {
		return nil, err
	}
	opt.again = rec
	r, err := Execute(ctx, again, opt)
	var refused *RefusedError // again, or for the first time: the fits are there to compare
	if err != nil && !errors.As(err, &refused) {
		return nil, fmt.Errorf("run %s could not be computed again: %w", rec.Run, err)
	}
	out.compareFits(rec, r.Record)
	made := map[string]string{}
	for _, o := range r.Record.Outputs {
		made[o.Path] = o.SHA256
	}
	for _, o := range rec.Outputs {
		out.Outputs++
		if made[o.Path] == o.SHA256 {
			continue
		}
		d := Difference{Path: o.Path, Recorded: o.SHA256, Again: made[o.Path]}
		firstDifference(&d, filepath.Join(s.Dir, filepath.FromSlash(o.Path)), filepath.Join(dir, filepath.FromSlash(o.Path)))
		out.Different = append(out.Different, d)
	}
	return out, nil
}

// compareFits compares the digests of the fits, and what the guards said.
func (r *Replayed) compareFits(then, now *Record) {
	for i, c := range then.Curves {
		switch {
		case i >= len(now.Curves) || now.Curves[i].Object != c.Object:
			r.DifferentCurves = append(r.DifferentCurves, c.Name)
		case !sameWords(now.Curves[i].Verdicts, c.Verdicts):
			r.DifferentGuards = append(r.DifferentGuards, c.Name)
		}
	}
	if !sameWords(then.Guards, now.Guards) || !sameWords(then.Refused, now.Refused) && len(r.DifferentGuards) == 0 {
		r.DifferentGuards = append(r.DifferentGuards, "the whole")
	}
}

// sameWords compares two parts of a record as they are written.
func sameWords[T any](a, b []T) bool {
	if len(a) == 0 || len(b) == 0 {
		return len(a) == len(b)
	}
	x, errA := json.Marshal(a)
	y, errB := json.Marshal(b)
	return errA == nil && errB == nil && bytes.Equal(x, y)
}

// findInputs finds every recorded input by its digest: at its own path first,
// then among the files of the study's folder and of the one that is named.
func findInputs(s, again *spec.Study, rec *Record, folder string, out *Replayed) error {
	byDigest := map[string]string{}
	searched := false
	search := func() error {
		searched = true
		places := []string{s.Dir}
		if folder != "" {
			if fi, err := os.Stat(folder); err != nil || !fi.IsDir() {
				return usagef("--inputs %s: expected a folder", folder)
			}
			places = append(places, folder)
		}
		size := map[int64]bool{}
		for _, in := range rec.Inputs {
			for _, f := range in.Files {
				size[f.Bytes] = true
			}
		}
		for _, p := range places {
			_ = filepath.WalkDir(p, func(path string, d fs.DirEntry, err error) error {
				if err != nil || d.IsDir() {
					if err == nil && (d.Name() == ".batten" || d.Name() == ".git") {
						return fs.SkipDir
					}
					return nil
				}
				if fi, err := d.Info(); err == nil && fi.Mode().IsRegular() && size[fi.Size()] {
					if sum, _, err := fileDigest(path); err == nil {
						byDigest[sum] = path
					}
				}
				return nil
			})
		}
		return nil
	}
	var missing []FoundInput
	for _, in := range rec.Inputs {
		def := again.InputByName(in.Name)
		if def == nil {
			return fmt.Errorf("the record of run %s names the input %q, which its spec lacks", rec.Run, in.Name)
		}
		src := source(s, def)
		def.Instead = map[string]string{}
		for _, f := range in.Files {
			found := FoundInput{Path: f.Path, SHA256: f.SHA256}
			at := src.Root
			if filepath.IsAbs(filepath.FromSlash(f.Path)) {
				at = ""
			}
			own := filepath.Join(at, filepath.FromSlash(f.Path))
			sum, _, err := fileDigest(own)
			switch {
			case err == nil && sum == f.SHA256:
				found.Found = own
			default:
				found.Altered = err == nil
				if !searched {
					if err := search(); err != nil {
						return err
					}
				}
				found.Found = byDigest[f.SHA256]
				found.Elsewhere = found.Found != ""
			}
			if found.Found == "" {
				missing = append(missing, found)
			} else if abs, err := filepath.Abs(found.Found); err == nil {
				def.Instead[f.Path] = abs
			}
			out.Inputs = append(out.Inputs, found)
		}
	}
	if len(missing) > 0 {
		return &MissingInputsError{rec.Run, missing, out.Inputs}
	}
	return nil
}

// firstDifference says where two files part, where the recorded one still
// stands as it was recorded.
func firstDifference(d *Difference, recorded, again string) {
	if d.Again == "" {
		d.Note = "it was not made again"
		return
	}
	if sum, _, err := fileDigest(recorded); err != nil || sum != d.Recorded {
		d.Note = "the file no longer stands as it was recorded, so it cannot be compared line by line"
		return
	}
	a, err := os.Open(recorded)
	if err != nil {
		d.Note = err.Error()
		return
	}
	defer a.Close()
	b, err := os.Open(again)
	if err != nil {
		d.Note = err.Error()
		return
	}
	defer b.Close()
	sa, sb := bufio.NewScanner(a), bufio.NewScanner(b)
	sa.Buffer(nil, 64<<20)
	sb.Buffer(nil, 64<<20)
	var header []string
	for line := 1; ; line++ {
		ma, mb := sa.Scan(), sb.Scan()
		ta, tb := sa.Text(), sb.Text()
		if line == 1 && ma {
			header = strings.Split(ta, ",")
		}
		if !ma && !mb {
			d.Note = "only the ends of lines differ"
			return
		}
		if ma == mb && ta == tb {
			continue
		}
		d.Line = line
		d.Was, d.Is = ta, tb
		ca, cb := strings.Split(ta, ","), strings.Split(tb, ",")
		if strings.HasSuffix(d.Path, ".csv") && len(ca) == len(cb) && len(ca) == len(header) {
			for i := range ca {
				if ca[i] != cb[i] {
					d.Column, d.Was, d.Is = header[i], ca[i], cb[i]
					return
				}
			}
		}
		d.Was, d.Is = around(ta, tb), around(tb, ta)
		return
	}
}

// around cuts a text to where it parts from another.
func around(t, other string) string {
	k := 0
	for k < len(t) && k < len(other) && t[k] == other[k] {
		k++
	}
	lo, hi := max(0, k-20), min(len(t), k+40)
	return strings.ToValidUTF8(t[lo:hi], "")
}
