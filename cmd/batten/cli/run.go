package cli

import (
	"errors"
	"fmt"

	"github.com/spf13/cobra"

	"batten/reports"
	"batten/runner"
)

func (e *env) check() *cobra.Command {
	var onLedger bool
	var signers string
	c := &cobra.Command{
		Use:   "check STUDY",
		Short: "Read the spec and the heads of its inputs; say every mistake; fit nothing",
		Long: `Check reads the spec and the heads of its inputs, and says every mistake.

With --ledger it looks at the accepted curves instead: whether every file in
ledger/ is the one that was accepted, which lines were edited since, and whether
the signature, where there is one, is by an allowed signer.`,
		Example: `  batten check study.hcl
  batten check examples/pears
  batten check study.hcl --ledger --signers ~/.ssh/allowed_signers`,
		Args: cobra.ExactArgs(1),
		RunE: func(c *cobra.Command, args []string) error {
			s, err := load(args[0])
			if err != nil {
				return err
			}
			if onLedger {
				return e.checkLedger(s, signers)
			}
			if signers != "" {
				return linef("--signers is for check --ledger")
			}
			files, err := runner.Check(c.Context(), s)
			if err != nil {
				return err
			}
			if e.json {
				return e.printJSON(map[string]any{"study": s.Title, "spec_sha256": s.Hash(), "inputs": files,
					"curves": len(s.Curves), "exports": len(s.Exports), "reports": len(s.Reports)})
			}
			if !e.quiet {
				fmt.Fprintf(e.out, "%s is sound: %s from %s.\n", args[0], count(len(s.Curves), "curve", "curves"), count(len(files), "file", "files"))
			}
			return nil
		},
	}
	c.Flags().BoolVar(&onLedger, "ledger", false, "hold the accepted curves to their digests and signature")
	c.Flags().StringVar(&signers, "signers", "", "a list of allowed signers (default: ledger/allowed_signers)")
	return c
}

func count(n int, one, many string) string {
	if n == 1 {
		return "1 " + one
	}
	return fmt.Sprintf("%d %s", n, many)
}

func (e *env) run() *cobra.Command {
	var workers int
	var hold bool
	c := &cobra.Command{
		Use:   "run STUDY",
		Short: "Do what changed; write exports, reports and the run's record",
		Long: `Run brings a study up to date: it fits the groups whose rows or rule changed,
reuses the others, writes exports and reports, records the run, and says which
fits moved against the ledger.`,
		Example: `  batten run study.hcl
  batten run study.hcl --hold            exit 4 when a curve differs from the ledger
  batten run study.hcl --json | jq .fits`,
		Args: cobra.ExactArgs(1),
		RunE: func(c *cobra.Command, args []string) error {
			if workers < 0 {
				return linef("--workers %d: expected 0 (all cores) or more", workers)
			}
			s, err := load(args[0])
			if err != nil {
				return err
			}
			r, err := runner.Execute(c.Context(), s, runner.Options{Workers: workers, Progress: e.progress(), Program: version()})
			var refused *runner.RefusedError
			if err != nil && !errors.As(err, &refused) {
				return err
			}
			if perr := e.printRun(c, r); perr != nil {
				return perr
			}
			if err == nil && hold && len(r.Record.Moved) > 0 {
				return &runner.MovedError{N: len(r.Record.Moved)}
			}
			return err
		},
	}
	c.Flags().IntVar(&workers, "workers", 0, "how many groups to fit at once (0: one a core)")
	c.Flags().BoolVar(&hold, "hold", false, "exit with status 4 when any fit differs from the ledger")
	return c
}

// printRun prints what a run did: JSON for programs, a table for people.
func (e *env) printRun(c *cobra.Command, r *runner.Run) error {
	if e.json {
		return e.printJSON(struct {
			Run     string          `json:"run"`
			Fits    runner.Counts   `json:"fits"`
			Moved   []runner.Move   `json:"moved"`
			Outputs []runner.Output `json:"outputs"`
			Refused []string        `json:"refused,omitempty"`

			Guards []runner.GuardRecord `json:"guards,omitempty"`
		}{r.Record.Run, r.Record.Counts, r.Record.Moved, r.Record.Outputs, r.Record.Refused, r.Record.Guards})
	}
	if e.quiet {
		return nil
	}
	d, err := r.Document(c.Context(), r.Study.Title, nil, true)
	if err != nil {
		return err
	}
	reports.Terminal(e.out, d, reports.TerminalOptions{Width: width(e.out), Color: colored(e.out)})
	n := r.Record.Counts
	fmt.Fprintf(e.out, "\nRun %s: %s; %d computed, %d reused, %d skipped, %d refused.\n", r.Record.Run,
		count(n.Total, "fit", "fits"), n.Computed, n.Reused, n.Skipped, n.Refused)
	wrote, stood := 0, 0
	for _, o := range r.Record.Outputs {
		if o.Wrote {
			wrote++
		} else {
			stood++
		}
	}
	if wrote+stood > 0 {
		fmt.Fprintf(e.out, "Outputs: %d written, %d already up to date.\n", wrote, stood)
		for _, o := range r.Record.Outputs {
			if o.Wrote && !isFigure(o.Path) {
				fmt.Fprintf(e.out, "  %s\n", o.Path)
			}
		}
	}
	return nil
}
