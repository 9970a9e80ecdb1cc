package cli

import (
	"errors"
	"fmt"

	"github.com/spf13/cobra"

	"batten/runner"
)

// differsError says that a replay did not come out as recorded.
type differsError struct{ run string }

func (e *differsError) Error() string { return "run " + e.run + " did not come out as it was recorded" }

func (e *env) replay() *cobra.Command {
	var folder string
	var workers int
	c := &cobra.Command{
		Use:   "replay STUDY [RUN]",
		Short: "Compute a recorded run again and compare every byte",
		Long: `Replay proves a record: it finds the inputs by their digests, takes the spec from
the record, computes everything anew without the store, and compares every output
with what was recorded. It touches nothing of the study. Exit status 4 when
anything differs, 3 when an input is missing or altered.`,
		Example: `  batten replay study.hcl
  batten replay study.hcl 12 --inputs ~/archive/2026`,
		Args: cobra.RangeArgs(1, 2),
		RunE: func(c *cobra.Command, args []string) error {
			s, err := load(args[0])
			if err != nil {
				return err
			}
			run := ""
			if len(args) > 1 {
				run = args[1]
			}
			r, err := runner.Replay(c.Context(), s, run, folder, runner.Options{Workers: workers, Progress: e.progress(), Program: version()})
			var missing *runner.MissingInputsError
			if errors.As(err, &missing) && e.json {
				return errors.Join(e.printJSON(map[string]any{"run": missing.Run, "same": false, "inputs": inputsJSON(missing.All)}), err)
			}
			if err != nil {
				return err
			}
			if err := e.printReplay(r); err != nil {
				return err
			}
			if !r.Same() {
				return &differsError{r.Run}
			}
			return nil
		},
	}
	c.Flags().StringVar(&folder, "inputs", "", "another folder in which to look for the inputs")
	c.Flags().IntVar(&workers, "workers", 0, "how many groups to fit at once (0: one a core)")
	return c
}

type inputJSON struct {
	Path    string `json:"path"`
	SHA256  string `json:"sha256"`
	Found   string `json:"found"`   // "" where it was not
	Altered bool   `json:"altered"` // another file stands at its path
}

func inputsJSON(files []runner.FoundInput) []inputJSON {
	out := []inputJSON{}
	for _, f := range files {
		out = append(out, inputJSON{f.Path, f.SHA256, f.Found, f.Altered})
	}
	return out
}

func (e *env) printReplay(r *runner.Replayed) error {
	if e.json {
		type difference struct {
			Path     string `json:"path"`
			Recorded string `json:"recorded_sha256"`
			Again    string `json:"again_sha256,omitempty"`
			Line     int    `json:"line,omitempty"`
			Column   string `json:"column,omitempty"`
			Was      string `json:"was,omitempty"`
			Is       string `json:"is,omitempty"`
			Note     string `json:"note,omitempty"`
		}
		diffs := []difference{}
		for _, d := range r.Different {
			diffs = append(diffs, difference(d))
		}
		return e.printJSON(map[string]any{"run": r.Run, "same": r.Same(), "recorded_by": r.Recorded, "replayed_by": r.Now, "inputs": inputsJSON(r.Inputs),
			"methods_recorded": r.MethodsThen, "methods_now": r.MethodsNow, "outputs": r.Outputs, "different": diffs,
			"different_fits": append([]string{}, r.DifferentCurves...), "different_guards": append([]string{}, r.DifferentGuards...)})
	}
	if e.quiet {
		return nil
	}
	wide := width(e.out)
	say := func(format string, a ...any) { fmt.Fprintln(e.out, wrap(fmt.Sprintf(format, a...), wide)) }
	say("Run %s, recorded by %s; computed again by %s.", r.Run, r.Recorded, r.Now)
	for _, f := range r.Inputs {
		where := ""
		switch {
		case f.Altered:
			where = ", altered since; the recorded one was found at " + f.Found
		case f.Elsewhere:
			where = ", no longer there; found at " + f.Found
		}
		say("  %s (SHA-256 %.16s...)%s", f.Path, f.SHA256, where)
	}
	if r.Same() && r.Outputs == 0 {
		say("The fits came out the same, and so did what the guards say of them; the run wrote no outputs.")
		return nil
	}
	if r.Same() {
		say("All %s came out the same, byte for byte, and so did the fits.", count(r.Outputs, "output", "outputs"))
		return nil
	}
	for _, c := range r.DifferentCurves {
		say("The fits of curve %q differ.", c)
	}
	for _, g := range r.DifferentGuards {
		if g == "the whole" {
			say("What the guards say of the study differs.")
		} else {
			say("What the guards say of the fits of curve %q differs.", g)
		}
	}
	for _, d := range r.Different {
		switch {
		case d.Line > 0 && d.Column != "":
			say("%s differs first on line %d, column %s: recorded %s, now %s", d.Path, d.Line, d.Column, d.Was, d.Is)
		case d.Line > 0:
			say("%s differs first on line %d:", d.Path, d.Line)
			fmt.Fprintf(e.out, "  recorded: %s\n  now:      %s\n", d.Was, d.Is)
		default:
			say("%s differs: %s", d.Path, d.Note)
		}
	}
	if fmt.Sprint(r.MethodsThen) != fmt.Sprint(r.MethodsNow) {
		say("The methods' versions differ: recorded %v, now %v.", r.MethodsThen, r.MethodsNow)
	}
	return nil
}
