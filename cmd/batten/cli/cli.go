// Package cli is batten's command line: it reads arguments, calls the runner,
// prints, and turns errors into exit statuses. Results go to stdout; progress
// and diagnostics go to stderr.
package cli

import (
	"context"
	"encoding/json"
	"errors"
	"fmt"
	"io"
	"math"
	"os"
	"strings"

	"github.com/spf13/cobra"
	"golang.org/x/term"

	"batten/runner"
	"batten/runner/signature"
	"batten/spec"
)

// Exit statuses. README has the same table; a script tests each.
const (
	Done    = 0 // done
	Failed  = 1 // the program or the machine failed, or the run was stopped
	Wrong   = 2 // the spec or the command line is wrong
	BadData = 3 // the data are wrong, broke an expect, a guard refused, or the ledger is not sound
	Differs = 4 // curves differ from the ledger (run --hold)
)

// env is what every command has at hand.
type env struct {
	out, err io.Writer
	json     bool
	quiet    bool
}

// Run runs one command and returns its exit status.
func Run(ctx context.Context, args []string, stdin io.Reader, stdout, stderr io.Writer) int {
	e := &env{out: stdout, err: stderr}
	root := e.root()
	root.SetArgs(args)
	root.SetIn(stdin)
	root.SetOut(stdout)
	root.SetErr(stderr)
	err := root.ExecuteContext(ctx)
	if err != nil && strings.HasPrefix(err.Error(), "unknown command") {
		// the library has no type for it
		err = linef("%w\n  see: batten --help", err)
	}
	if err != nil {
		e.explain(err)
	}
	return status(err)
}

// status maps errors to exit statuses; it is the only place that does.
func status(err error) int {
	var (
		mistakes *spec.Mistakes
		usage    *runner.UsageError
		line     *lineError
		data     *runner.DataError
		refused  *runner.RefusedError
		moved    *runner.MovedError
		key      *signature.KeyError
		unsound  *runner.UnsoundError
		missing  *runner.MissingInputsError
		differs  *differsError
	)
	switch {
	case err == nil:
		return Done
	case errors.As(err, &mistakes), errors.As(err, &usage), errors.As(err, &line), errors.As(err, &key):
		return Wrong
	case errors.As(err, &data), errors.As(err, &refused), errors.As(err, &unsound), errors.As(err, &missing):
		return BadData
	case errors.As(err, &moved), errors.As(err, &differs):
		return Differs
	}
	return Failed
}

// lineError is a mistake on the command line.
type lineError struct{ err error }

func (e *lineError) Error() string { return e.err.Error() }
func (e *lineError) Unwrap() error { return e.err }

func linef(format string, a ...any) error { return &lineError{fmt.Errorf(format, a...)} }

// explain prints an error for a person.
func (e *env) explain(err error) {
	var mistakes *spec.Mistakes
	if errors.As(err, &mistakes) {
		mistakes.Render(e.err, colored(e.err))
		return
	}
	fmt.Fprintf(e.err, "batten: %v\n", err)
}

// colored tells whether w is a terminal that wants colour.
func colored(w io.Writer) bool {
	if os.Getenv("NO_COLOR") != "" || os.Getenv("TERM") == "dumb" {
		return false
	}
	return isTerminal(w)
}

func isTerminal(w io.Writer) bool {
	f, ok := w.(*os.File)
	return ok && term.IsTerminal(int(f.Fd()))
}

// width is how wide a table may be: the terminal's width, at most 120, and 80
// elsewhere.
func width(w io.Writer) int {
	if f, ok := w.(*os.File); ok {
		if c, _, err := term.GetSize(int(f.Fd())); err == nil && c >= 40 {
			return min(c, 120)
		}
	}
	return 80
}

func (e *env) root() *cobra.Command {
	root := &cobra.Command{
		Use:   "batten",
		Short: "Run curve studies: smooth curves for every group, by rule, on record",
		Long: `Batten fits a penalised smooth curve to every group of a data set, by a rule
written down in a spec file, and keeps the record of why each curve is as it is.

STUDY is a spec file, or a folder that holds study.hcl.`,
		Example: `  batten check study.hcl                 read the spec, say every mistake
  batten run study.hcl                   do what changed, write exports and reports
  batten why study.hcl firmness cultivar=Aroma store=air
  batten accept study.hcl --reason "season 2026, checked with the trial board"`,
		SilenceErrors: true,
		SilenceUsage:  true,
		Args:          cobra.NoArgs,
		RunE:          func(c *cobra.Command, _ []string) error { return c.Help() },
		Version:       version(),
	}
	root.SetVersionTemplate("{{.Version}}\n")
	root.SetFlagErrorFunc(func(c *cobra.Command, err error) error {
		return linef("%w\n  see: %s --help", err, c.CommandPath())
	})
	root.PersistentFlags().BoolVar(&e.json, "json", false, "print the answer as JSON")
	root.PersistentFlags().BoolVarP(&e.quiet, "quiet", "q", false, "no progress, no table: only what went wrong")
	root.AddCommand(e.check(), e.run(), e.why(), e.read(), e.accept(), e.graph(), e.compare(), e.replay(), e.sweep(), e.record())
	root.CompletionOptions.HiddenDefaultCmd = false
	for _, c := range root.Commands() {
		wrapArgs(c)
	}
	return root
}

// wrapArgs makes wrong arguments a mistake of the command line, with a hint.
func wrapArgs(c *cobra.Command) {
	inner := c.Args
	if inner == nil {
		return
	}
	c.Args = func(c *cobra.Command, args []string) error {
		if err := inner(c, args); err != nil {
			return linef("%w\n  usage: %s", err, c.UseLine())
		}
		return nil
	}
}

// load reads a study's spec.
func load(path string) (*spec.Study, error) {
	s, err := spec.Load(path)
	if err != nil {
		var m *spec.Mistakes
		if !errors.As(err, &m) && errors.Is(err, os.ErrNotExist) {
			return nil, linef("%s: no such study; name a spec file, or a folder that holds study.hcl", path)
		}
		return nil, err
	}
	return s, nil
}

// printJSON writes v; infinities and NaN, which JSON lacks, must have been
// turned to null before.
func (e *env) printJSON(v any) error {
	enc := json.NewEncoder(e.out)
	enc.SetIndent("", "  ")
	enc.SetEscapeHTML(false)
	return enc.Encode(v)
}

// number is a float64 that JSON can carry: NaN and infinities become null.
type number float64

func (n number) MarshalJSON() ([]byte, error) {
	if v := float64(n); math.IsNaN(v) || math.IsInf(v, 0) {
		return []byte("null"), nil
	}
	return json.Marshal(float64(n))
}

// matches reads arguments of the form col=value.
func matches(args []string) ([]runner.Match, error) {
	var out []runner.Match
	for _, a := range args {
		col, val, ok := strings.Cut(a, "=")
		if !ok || col == "" {
			return nil, linef("%q: expected col=value, such as cultivar=Aroma", a)
		}
		out = append(out, runner.Match{Column: col, Value: val})
	}
	return out, nil
}

// reopen loads the study and a recorded run of it for a command whose
// arguments are STUDY CURVE [col=value ...].
func reopen(args []string, run string) (*runner.Recorded, []runner.Match, error) {
	s, err := load(args[0])
	if err != nil {
		return nil, nil, err
	}
	match, err := matches(args[2:])
	if err != nil {
		return nil, nil, err
	}
	r, err := runner.Reopen(s, run)
	return r, match, err
}
