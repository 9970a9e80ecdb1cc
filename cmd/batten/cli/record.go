package cli

import (
	"fmt"
	"strings"

	"github.com/spf13/cobra"

	"batten/runner"
	"batten/runner/provenance"
	"batten/runner/store"
)

func (e *env) record() *cobra.Command {
	var as, out string
	c := &cobra.Command{
		Use:   "record STUDY [RUN] --as STANDARD",
		Short: "The record of a run in an open standard: W3C PROV, RO-Crate, in-toto",
		Long: `Record writes what a run did for other programs to read: inputs, spec, program,
person, outputs and ledger, with their digests. It needs the record, not the
data.

  prov      W3C PROV as PROV-JSON
  ro-crate  RO-Crate 1.1 metadata, for the study's folder as a crate
  in-toto   an in-toto Statement v1 about the outputs, with a SLSA provenance v1
            predicate; it is unsigned and claims no level`,
		Example: `  batten record study.hcl --as prov
  batten record study.hcl --as ro-crate --out ` + provenance.MetadataFile + `
  batten record study.hcl 12 --as in-toto --out run12.intoto.json`,
		Args: cobra.RangeArgs(1, 2),
		RunE: func(c *cobra.Command, args []string) error {
			if as == "" {
				return linef("record needs --as STANDARD: one of %s", strings.Join(runner.Standards(), ", "))
			}
			s, err := load(args[0])
			if err != nil {
				return err
			}
			run := ""
			if len(args) > 1 {
				run = args[1]
			}
			r, err := runner.Reopen(s, run)
			if err != nil {
				return err
			}
			b, err := r.Provenance(as)
			if err != nil {
				return err
			}
			if len(r.Record.Modules) == 0 && !e.quiet {
				fmt.Fprintf(e.err, "batten: the record of run %s does not name the program's modules, so they are left out\n", r.Record.Run)
			}
			if out == "" {
				_, err := e.out.Write(b)
				return err
			}
			f, err := store.Create(out)
			if err != nil {
				return err
			}
			if _, err := f.Write(b); err != nil {
				f.Abort()
				return err
			}
			if err := f.Commit(); err != nil {
				return err
			}
			if !e.quiet {
				fmt.Fprintf(e.err, "Wrote run %s to %s.\n", r.Record.Run, out)
			}
			return nil
		},
	}
	c.Flags().StringVar(&as, "as", "", strings.Join(runner.Standards(), ", ")+" (required)")
	c.Flags().StringVar(&out, "out", "", "write to this file instead of standard output")
	return c
}
