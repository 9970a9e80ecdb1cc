package cli

import (
	"fmt"
	"strings"

	"github.com/spf13/cobra"

	"batten/runner"
)

func (e *env) sweep() *cobra.Command {
	var keep int
	var dry bool
	c := &cobra.Command{
		Use:   "sweep STUDY",
		Short: "Drop stored objects that no kept run names",
		Long: `Sweep makes room under .batten: it keeps the last runs and every accepted one, with
all that they name, and drops the rest. What it drops can be computed again. It
waits for a run that is at work.`,
		Example: `  batten sweep study.hcl --dry
  batten sweep study.hcl --keep 3`,
		Args: cobra.ExactArgs(1),
		RunE: func(c *cobra.Command, args []string) error {
			s, err := load(args[0])
			if err != nil {
				return err
			}
			r, err := runner.Sweep(c.Context(), s, keep, dry, runner.Options{Progress: e.progress()})
			if err != nil {
				return err
			}
			if e.json {
				return e.printJSON(map[string]any{"dry": r.Dry, "objects": r.Objects, "keys": r.Keys, "slots": r.Slots, "runs": r.Runs,
					"bytes": r.Bytes, "kept_objects": r.Kept, "kept_runs": r.KeptRuns, "unreadable_runs": append([]string{}, r.Unreadable...)})
			}
			if len(r.Unreadable) > 0 {
				fmt.Fprintf(e.err, "batten: records that cannot be read: %s; nobody knows what they name, so no object was dropped.\n  Remove their files in .batten/runs to let the objects go.\n", strings.Join(r.Unreadable, ", "))
			}
			if e.quiet {
				return nil
			}
			verb := "Dropped"
			if dry {
				verb = "Would drop"
			}
			fmt.Fprintf(e.out, "%s %s and %s, %.1f MB; %s and %s stay.\n", verb, count(r.Objects, "object", "objects"), count(r.Runs, "record", "records"),
				float64(r.Bytes)/1e6, count(r.Kept, "object", "objects"), count(len(r.KeptRuns), "record", "records"))
			return nil
		},
	}
	c.Flags().IntVar(&keep, "keep", 10, "how many of the last runs to keep, beside the accepted ones")
	c.Flags().BoolVar(&dry, "dry", false, "say what would be dropped, and drop nothing")
	return c
}
