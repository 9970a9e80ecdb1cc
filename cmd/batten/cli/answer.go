package cli

import (
	"fmt"
	"strconv"
	"strings"

	"github.com/spf13/cobra"

	"batten/reports"
	"batten/runner"
	"batten/runner/graph"
	"batten/runner/table"
	"batten/spec"
	"batten/spec/expr"
)

func (e *env) graph() *cobra.Command {
	var as string
	c := &cobra.Command{
		Use:   "graph STUDY",
		Short: "Print the study's graph as text, DOT or Mermaid",
		Example: `  batten graph study.hcl
  batten graph study.hcl --as dot | dot -Tsvg > study.svg
  batten graph study.hcl --as mermaid`,
		Args: cobra.ExactArgs(1),
		RunE: func(c *cobra.Command, args []string) error {
			s, err := load(args[0])
			if err != nil {
				return err
			}
			g := graph.Of(s)
			if e.json {
				return e.printJSON(g)
			}
			switch as {
			case "text":
				fmt.Fprint(e.out, g.Text())
			case "dot":
				fmt.Fprint(e.out, g.DOT())
			case "mermaid":
				fmt.Fprint(e.out, g.Mermaid())
			default:
				return linef("--as %q: expected text, dot or mermaid", as)
			}
			return nil
		},
	}
	c.Flags().StringVar(&as, "as", "text", "text, dot or mermaid")
	return c
}

func (e *env) read() *cobra.Command {
	var at []string
	var run string
	c := &cobra.Command{
		Use:   "read STUDY CURVE [col=value ...] --at X,X",
		Short: "Values off a fitted curve, with their band, from the record",
		Example: `  batten read study.hcl firmness cultivar=Aroma store=air --at 30,60
  batten read study.hcl trend --at 2026-03-01`,
		Args: cobra.MinimumNArgs(2),
		RunE: func(c *cobra.Command, args []string) error {
			rec, match, err := reopen(args, run)
			if err != nil {
				return err
			}
			xs, err := parsePlaces(rec.Study, args[1], at)
			if err != nil {
				return err
			}
			values, def, err := rec.Read(args[1], match, xs)
			if err != nil {
				return err
			}
			return e.printValues(values, def)
		},
	}
	c.Flags().StringSliceVar(&at, "at", nil, "places on the x axis, separated by commas (required)")
	c.Flags().StringVar(&run, "run", "", "a recorded run (default: the last)")
	return c
}

// parsePlaces reads --at: numbers, or dates where the curve runs along dates.
func parsePlaces(s *spec.Study, curve string, at []string) ([]float64, error) {
	if len(at) == 0 {
		return nil, linef("read needs --at X,X: the places to read the curve at")
	}
	def := s.CurveByName(curve)
	var xs []float64
	for _, t := range at {
		t = strings.TrimSpace(t)
		if def != nil && def.Along.Kind == expr.Date {
			d, ok := expr.ParseDate(t)
			if !ok {
				return nil, linef("--at %q: expected an ISO date such as 2026-03-01, for %s is a date", t, def.Along.Name.Text)
			}
			xs = append(xs, d)
			continue
		}
		v, err := strconv.ParseFloat(t, 64)
		if err != nil || v-v != 0 {
			return nil, linef("--at %q: expected a number", t)
		}
		xs = append(xs, v)
	}
	return xs, nil
}

// printValues prints values off curves, at full precision as JSON, rounded to
// what the band supports as a table.
func (e *env) printValues(values []runner.Values, def *spec.Curve) error {
	x := func(v float64) string {
		if def.Along.Kind == expr.Date {
			return expr.FormatDate(v)
		}
		return table.FormatNumber(v)
	}
	if e.json {
		type point struct {
			At           any    `json:"at"`
			Fit          number `json:"fit"`
			SE           number `json:"se"`
			Lower        number `json:"lower"`
			Upper        number `json:"upper"`
			Slope        number `json:"slope"`
			Extrapolated bool   `json:"extrapolated"`
		}
		type fit struct {
			Fit    string            `json:"fit"`
			Group  map[string]string `json:"group"`
			Level  float64           `json:"level"`
			Unit   string            `json:"unit"`
			Points []point           `json:"points"`
		}
		var out []fit
		for _, v := range values {
			f := fit{Fit: v.Fit, Group: map[string]string{}, Level: def.Band.Level, Unit: def.Response.Unit}
			for k, b := range def.By {
				f.Group[b.Name.Text] = v.Group[k]
			}
			for _, p := range v.Points {
				var at any = number(p.X)
				if def.Along.Kind == expr.Date {
					at = x(p.X)
				}
				f.Points = append(f.Points, point{at, number(p.Value), number(p.SE), number(p.Lower), number(p.Upper), number(p.Slope), p.Extrapolated})
			}
			out = append(out, f)
		}
		return e.printJSON(out)
	}
	unit := func(name, u string) string {
		if u == "" {
			return name
		}
		return name + " (" + u + ")"
	}
	var header []string
	for _, b := range def.By {
		header = append(header, b.Name.Text)
	}
	header = append(header, unit(def.Along.Name.Text, def.Along.Unit), unit(def.Response.Name.Text, def.Response.Unit), "lower", "upper", "slope")
	var rows [][]string
	beyond := false
	for _, v := range values {
		for _, p := range v.Points {
			val, lo, hi := reports.Rounded(p.Value, p.Lower, p.Upper)
			place := x(p.X)
			if p.Extrapolated {
				place += " *"
				beyond = true
			}
			rows = append(rows, append(append([]string(nil), v.Group...), place, val, lo, hi, reports.Short(p.Slope, 4)))
		}
	}
	notes := []string{fmt.Sprintf("%g%% pointwise band.", 100*def.Band.Level)}
	if beyond {
		notes = append(notes, "* beyond the data: the curve goes on there by assumption.")
	}
	reports.Table(e.out, header, rows, notes, width(e.out))
	return nil
}
