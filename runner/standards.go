package runner

import (
	"bytes"
	"errors"
	"fmt"
	"os"
	"os/exec"
	"path/filepath"
	"runtime/debug"
	"slices"
	"strings"

	"batten/runner/ledger"
	"batten/runner/provenance"
	"batten/spec"
)

// Open standards that a run's record can be written in.
const (
	AsPROV    = "prov"
	AsROCrate = "ro-crate"
	AsInToto  = "in-toto"
)

// Standards lists them.
func Standards() []string { return []string{AsPROV, AsROCrate, AsInToto} }

// Provenance writes the run in an open standard, from its record and the
// ledger alone.
func (r *Recorded) Provenance(as string) ([]byte, error) {
	p := r.provenance()
	switch as {
	case AsPROV:
		return provenance.PROV(p)
	case AsROCrate:
		return provenance.ROCrate(p)
	case AsInToto:
		b, err := provenance.InToto(p)
		if errors.Is(err, provenance.ErrNothingMade) {
			why := "the spec asks for none"
			if len(p.Refused) > 0 {
				why = "a guard refused"
			}
			return nil, usagef("run %s: %v: %s; name a run with outputs, or take --as prov", p.ID, err, why)
		}
		return b, err
	}
	return nil, usagef("unknown standard %q; expected one of %s%s", as, strings.Join(Standards(), ", "), nearest(as, Standards()))
}

// provenance gathers what the record says of the run.
func (r *Recorded) provenance() *provenance.Run {
	rec, s := r.Record, r.Study
	name, version, _ := strings.Cut(rec.Program, " ")
	if name == "" {
		name = "batten"
	}
	p := &provenance.Run{
		ID: rec.Run, Results: rec.Results, Started: rec.Started, Finished: rec.Finished,
		Title: s.Title, Owner: s.Owner, Licence: s.Licence, Seed: rec.Seed, Dated: rec.Dated, Person: rec.Who,
		Program: provenance.Program{Name: name, Version: version, Go: rec.Go, Methods: rec.Methods, Modules: rec.Modules},
		Spec:    provenance.File{Path: rec.Spec.Path, SHA256: rec.Spec.SHA256, Bytes: int64(len(rec.Spec.Text))},
		Refused: rec.Refused,
	}
	for _, in := range rec.Inputs {
		out := provenance.Input{Name: in.Name}
		if def := s.InputByName(in.Name); def != nil {
			out.Pattern, out.Outside = def.File, def.Outside
		}
		for _, f := range in.Files {
			out.Files = append(out.Files, provenance.File{Path: f.Path, SHA256: f.SHA256, Bytes: f.Bytes})
		}
		p.Inputs = append(p.Inputs, out)
	}
	for _, c := range rec.Curves {
		out := provenance.Curve{Name: c.Name, Fits: c.Counts.Total, Object: c.Object}
		if def := s.CurveByName(c.Name); def != nil {
			out.Inputs = []string{sourceOf(s, def.From)}
		}
		p.Curves = append(p.Curves, out)
	}
	for _, f := range rec.Against {
		p.Against = append(p.Against, ledgerFile(f))
	}
	for _, o := range rec.Outputs {
		what, curves, isReport := describeOutput(s, o.Path)
		p.Outputs = append(p.Outputs, provenance.Output{
			File: provenance.File{Path: o.Path, SHA256: o.SHA256, Bytes: o.Bytes}, What: what, Curves: curves, Moved: isReport, Wrote: o.Wrote})
	}
	p.Acceptance = r.acceptance()
	return p
}

// sourceOf is the input that a table's rows came from.
func sourceOf(s *spec.Study, name string) string {
	for range len(s.Rows) + 1 {
		rows := s.RowsByName(name)
		if rows == nil {
			break
		}
		name = rows.From
	}
	return name
}

// describeOutput says what an output is and which curves it shows.
func describeOutput(s *spec.Study, file string) (what string, curves []string, report bool) {
	of := func(name string) string {
		if c := s.ContrastByName(name); c != nil {
			return c.Of
		}
		return name
	}
	for _, e := range s.Exports {
		switch file {
		case e.File:
			return fmt.Sprintf("export %q: %s of %s", e.Name.Text, e.What, e.Of), []string{of(e.Of)}, false
		case e.SchemaFile():
			return fmt.Sprintf("Table Schema of %s", e.File), []string{of(e.Of)}, false
		}
	}
	for _, rep := range s.Reports {
		for _, n := range rep.Show {
			if c := of(n); !slices.Contains(curves, c) {
				curves = append(curves, c)
			}
		}
		for _, f := range rep.Files {
			if f == file {
				return fmt.Sprintf("report %q: %s", rep.Name.Text, rep.Title), curves, true
			}
			if md, ok := strings.CutSuffix(f, ".md"); ok && strings.HasPrefix(file, md+"_figures/") {
				return fmt.Sprintf("figure of report %q", rep.Name.Text), curves, false
			}
		}
		curves = nil
	}
	return "output", nil, false
}

// acceptance finds the act that made the run the ledger, and the ledger's
// files where no later one has replaced them.
func (r *Recorded) acceptance() *provenance.Acceptance {
	if r.state == nil {
		return nil
	}
	for i := len(r.state.Accepted) - 1; i >= 0; i-- {
		a := &r.state.Accepted[i]
		if a.Run != r.Record.Run || a.Spec.SHA256 != r.Record.Spec.SHA256 {
			continue
		}
		out := &provenance.Acceptance{Who: a.Who, When: a.When, Why: a.Why}
		if i < len(r.state.Accepted)-1 {
			return out
		}
		for _, f := range ledgerFiles(r.Study, r.state) {
			name := strings.TrimSuffix(strings.TrimPrefix(f.Path, "ledger/"), ".csv")
			if name == "study.json" {
				name = ""
			}
			out.Ledger = append(out.Ledger, provenance.LedgerFile{File: ledgerFile(f), Curve: name})
		}
		return out
	}
	return nil
}

// ledgerFiles are the ledger's files with their digests: of the curves' files
// as they were accepted, whatever stands there now.
func ledgerFiles(s *spec.Study, state *ledger.State) []FileRecord {
	if state == nil {
		return nil
	}
	var out []FileRecord
	for _, h := range state.Curves {
		out = append(out, FileRecord{Path: "ledger/" + h.Name + ".csv", SHA256: h.SHA256, Rows: h.Fits})
	}
	if sum, n, err := fileDigest(filepath.Join(ledgerDir(s), "study.json")); err == nil {
		out = append(out, FileRecord{Path: "ledger/study.json", SHA256: sum, Bytes: n})
	}
	return out
}

// ledgerFile is a file of the ledger, whose length may not be known.
func ledgerFile(f FileRecord) provenance.File {
	if f.Bytes == 0 {
		f.Bytes = -1
	}
	return provenance.File{Path: f.Path, SHA256: f.SHA256, Bytes: f.Bytes}
}

// operator is the person who runs the program: BATTEN_WHO, else git's user;
// "" where neither is set, for a login name may be a machine's.
func operator(dir string) string {
	if w := strings.TrimSpace(os.Getenv("BATTEN_WHO")); w != "" {
		return w
	}
	cmd := exec.Command("git", "-C", dir, "config", "--get-regexp", `^user\.(name|email)$`)
	b, err := cmd.Output()
	if err != nil {
		return ""
	}
	var name, mail string
	for l := range bytes.Lines(b) {
		k, v, _ := strings.Cut(strings.TrimSpace(string(l)), " ")
		switch k {
		case "user.name":
			name = v // the last one counts, as it does for git
		case "user.email":
			mail = v
		}
	}
	if name != "" && mail != "" {
		return fmt.Sprintf("%s <%s>", name, mail)
	}
	return name
}

// modules are those that this program was built of.
func modules() []provenance.Module {
	info, ok := debug.ReadBuildInfo()
	if !ok {
		return nil
	}
	var out []provenance.Module
	for _, m := range info.Deps {
		if m.Replace != nil {
			m = m.Replace
		}
		out = append(out, provenance.Module{Path: m.Path, Version: m.Version, Sum: m.Sum})
	}
	slices.SortFunc(out, func(a, b provenance.Module) int { return strings.Compare(a.Path, b.Path) })
	return out
}
