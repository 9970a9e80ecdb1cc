package runner

import (
	"bytes"
	"context"
	"fmt"
	"os"
	"os/exec"
	"path/filepath"
	"strings"
	"time"

	"batten/spec"
)

// History says when a rule got its present text, from the git repository that
// the study lies in, and whether that was after the data arrived.
type History struct {
	Unknown   string   // why nothing is known, or ""
	Changed   *Commit  // the commit that gave the rule its text; nil: not committed as it was run
	Unchanged bool     // it has had it since the spec was first committed
	Data      []Commit // the last commit of every input file; Path is set
	After     bool     // the rule's text is younger than some of the data
}

// Commit is one commit of the study's repository.
type Commit struct {
	ID, When, Who, Subject string
	Path                   string
}

// historyDepth bounds how many commits of the spec are read.
const historyDepth = 300

// ruleHistory follows the rule of one fit back through the commits of the spec.
func ruleHistory(ctx context.Context, s *spec.Study, curve, exception string, inputs []InputRecord) History {
	ctx, cancel := context.WithTimeout(ctx, 20*time.Second)
	defer cancel()
	if _, err := exec.LookPath("git"); err != nil {
		return History{Unknown: "git is not installed here"}
	}
	g := repository{ctx, s.Dir}
	if _, err := g.out("rev-parse", "--is-inside-work-tree"); err != nil {
		return History{Unknown: "the study does not lie in a git repository"}
	}
	name := filepath.Base(s.File)
	commits := g.log(historyDepth, name)
	if len(commits) == 0 {
		return History{Unknown: "the spec has not been committed"}
	}
	want, ok := ruleMeaning(s, curve, exception)
	if !ok {
		return History{Unknown: "the curve has no such rule"}
	}
	h := History{Unchanged: true}
	for i := range commits {
		text, err := g.out("cat-file", "blob", commits[i].ID+":./"+name)
		var then *spec.Study
		if err == nil {
			then, err = spec.Parse(s.File, s.Dir, []byte(text))
		}
		if err != nil { // a text that this version cannot read: no farther back
			h.Unchanged = false
			break
		}
		if got, ok := ruleMeaning(then, curve, exception); !ok || got != want {
			h.Unchanged = false
			break
		}
		h.Changed = &commits[i]
	}
	for _, in := range inputs {
		for _, f := range in.Files {
			if c := g.log(1, f.Path); len(c) == 1 {
				c[0].Path = f.Path
				h.Data = append(h.Data, c[0])
				if h.Changed != nil && moment(h.Changed.When).After(moment(c[0].When)) {
					h.After = true
				}
			}
		}
	}
	return h
}

func moment(s string) time.Time {
	t, _ := time.Parse(time.RFC3339, s)
	return t
}

// ruleMeaning describes the rule that a fit follows, whatever stands around it.
func ruleMeaning(s *spec.Study, curve, exception string) (string, bool) {
	c := s.CurveByName(curve)
	if c == nil {
		return "", false
	}
	r, only := &c.Rule, ""
	if exception != "" {
		r = nil
		for i := range c.Exceptions {
			if c.Exceptions[i].Name.Text == exception {
				r, only = &c.Exceptions[i].Rule, c.Exceptions[i].Only.Key()
			}
		}
		if r == nil {
			return "", false
		}
	}
	k := newKey("rule", objectVersion)
	k.add("order", c.Order)
	k.add("only", only)
	ruleLines(k, s, r)
	return k.String(), true
}

// repository asks git about the folder of a study. It runs plumbing that starts
// no other program, whatever the repository is set up to do.
type repository struct {
	ctx context.Context
	dir string
}

func (g repository) out(args ...string) (string, error) {
	cmd := exec.CommandContext(g.ctx, "git", append([]string{"-C", g.dir, "--no-pager", "-c", "core.fsmonitor=false"}, args...)...)
	cmd.Env = append(os.Environ(), "GIT_OPTIONAL_LOCKS=0", "LC_ALL=C")
	var out bytes.Buffer
	cmd.Stdout = &out
	if err := cmd.Run(); err != nil {
		return "", fmt.Errorf("git %s: %w", args[0], err)
	}
	return out.String(), nil
}

// log returns the newest commits that touched a file.
func (g repository) log(n int, path string) []Commit {
	text, err := g.out("log", fmt.Sprintf("-%d", n), "--no-show-signature", "--format=%H%x1f%cI%x1f%an%x1f%s", "--", filepath.FromSlash(path))
	if err != nil {
		return nil
	}
	var out []Commit
	for l := range strings.Lines(text) {
		f := strings.Split(strings.TrimSuffix(l, "\n"), "\x1f")
		if len(f) == 4 {
			out = append(out, Commit{ID: f[0], When: f[1], Who: f[2], Subject: f[3]})
		}
	}
	return out
}
