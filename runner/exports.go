package runner

import (
	"bytes"
	"context"
	"fmt"
	"io"
	"math"
	"sort"
	"strings"

	"golang.org/x/sync/errgroup"

	"batten/methods/reading"
	"batten/runner/table"
	"batten/spec"
	"batten/spec/expr"
)

// exportVersion is raised when an export's bytes change for the same fits.
const exportVersion = 1

// exportKey describes all that an export's bytes depend on.
func (r *Run) exportKey(e *spec.Export) string {
	k := newKey("export", exportVersion)
	k.add("what", e.What, e.SafeCells)
	of := e.Of
	if c := r.Study.ContrastByName(e.Of); c != nil {
		of = c.Of
		k.add("contrast", c.Across, c.Minus[0], c.Minus[1])
	}
	cf := r.curves[of]
	c := cf.def
	k.add("fits", cf.digest)
	k.add("reading", reading.Version)
	for i, v := range cf.verdict {
		if !v.fits() || len(v.Warned) > 0 {
			k.add("verdict", label(cf.by, cf.fits[i].Group), v.Outcome, strings.Join(v.Warned, ","))
		}
	}
	k.add("along", c.Along.Name.Text, c.Along.Unit)
	k.add("response", c.Response.Name.Text, c.Response.Unit)
	k.add("band", c.Band.Level, c.Band.Simultaneous, c.Band.NewReading, c.Band.Weight)
	k.add("seed", r.Study.Seed)
	g := c.Grid
	k.add("grid", g.Points, g.Step, len(g.At))
	for _, x := range g.At {
		k.add("at", x)
	}
	if g.From != nil {
		k.add("from", *g.From)
	}
	if g.To != nil {
		k.add("to", *g.To)
	}
	for _, q := range c.Readings {
		k.add("reading", q.Name.Text, q.Kind, q.At, q.Direction, q.All, q.From, q.To)
	}
	if e.What == spec.ExportResiduals {
		// lines of the files are in it, which the fits do not depend on
		rowsKey(k, r.Study, c.From, r.files)
	}
	return k.String()
}

// export writes one export.
func (r *Run) export(ctx context.Context, e *spec.Export, out io.Writer) error {
	if c := r.Study.ContrastByName(e.Of); c != nil {
		return r.exportContrast(c, e, out)
	}
	cf := r.curves[e.Of]
	x := &exporter{cf: cf, what: e.What, safe: e.SafeCells}
	if e.What == spec.ExportResiduals {
		if err := r.findLines(ctx, x); err != nil {
			return err
		}
	}
	if err := table.Header(out, append(append([]string(nil), cf.by...), x.columns()...)); err != nil {
		return err
	}
	return x.write(ctx, out, r.opt.Workers)
}

// exporter writes a curve's fits as rows, in the order of the groups.
type exporter struct {
	cf    *curveFits
	what  string
	safe  bool                  // cells of text cannot be taken for formulas
	lines map[string][]rowPlace // of residuals: the rows of each group
}

// rowPlace is a row with its place in the files.
type rowPlace struct {
	x, y, w float64
	file    string
	line    int
}

func (x *exporter) columns() []string {
	c := x.cf.def
	switch x.what {
	case spec.ExportGrid:
		return []string{c.Along.Name.Text, "fit", "se", "lower", "upper", "slope"}
	case spec.ExportFits:
		return []string{"n", "distinct", "rule", "lambda", "edf", "rss", "sigma", "gcv", "loocv", "reml", "score", "flags"}
	case spec.ExportReadings:
		return []string{"reading", "kind", "at", "value", "lower", "upper", "unit", "note"}
	case spec.ExportEvidence:
		return []string{"lambda", "edf", "rss", "gcv", "loocv", "reml", "score", "role"}
	case spec.ExportResiduals:
		return []string{"row", c.Along.Name.Text, c.Response.Name.Text, "weight", "fitted", "residual", "leverage", "left_out", "file"}
	}
	switch c.Order {
	case 1:
		return []string{"knot", "value"}
	case 3:
		return []string{"knot", "value", "slope", "curvature"}
	}
	return []string{"knot", "value", "curvature"}
}

// write formats blocks of fits in parallel and writes them in order.
func (x *exporter) write(ctx context.Context, out io.Writer, workers int) error {
	const block = 64
	n := (len(x.cf.fits) + block - 1) / block
	done := make([]chan []byte, n)
	for i := range done {
		done[i] = make(chan []byte, 1)
	}
	eg, ctx := errgroup.WithContext(ctx)
	free := make(chan struct{}, 4*max(1, workers)) // how far formatting may run ahead of writing
	overBlocks(ctx, eg, n, workers, free, func(ft *fitter, i int) error {
		w := &table.Writer{SafeCells: x.safe}
		for k := i * block; k < min((i+1)*block, len(x.cf.fits)); k++ {
			if !x.cf.verdict[k].fits() {
				continue
			}
			if err := x.fit(ft, w, k); err != nil {
				return err
			}
		}
		done[i] <- w.Bytes()
		return nil
	})
	eg.Go(func() error {
		for i := range n {
			select {
			case b := <-done[i]:
				if _, err := out.Write(b); err != nil {
					return err
				}
				<-free
			case <-ctx.Done():
				return ctx.Err()
			}
		}
		return nil
	})
	return eg.Wait()
}

// begin writes the by columns.
func (x *exporter) begin(w *table.Writer, k int) {
	for _, v := range x.cf.values[k] {
		groupCell(w, v)
	}
}

func groupCell(w *table.Writer, v value) {
	switch v.kind {
	case expr.Number:
		w.Number(v.num)
	case expr.Date:
		w.Place(v.num, true)
	default:
		w.Text(v.text)
	}
}

// fit writes one fit's rows.
func (x *exporter) fit(ft *fitter, w *table.Writer, k int) error {
	c, f := x.cf.def, x.cf.fits[k]
	date := c.Along.Kind == expr.Date
	switch x.what {
	case spec.ExportFits:
		x.begin(w, k)
		w.Int(f.N)
		w.Int(f.Distinct)
		w.Text(f.Rule)
		for _, v := range []float64{f.Lambda, f.EDF, f.RSS, f.Sigma, f.GCV, f.LOOCV, f.REML, f.Score} {
			w.Number(v)
		}
		w.Text(strings.Join(flagsOf(c, f, x.cf.verdict[k]), ";"))
		w.End()
		return nil
	case spec.ExportCoefficients:
		for j := range f.Knots {
			x.begin(w, k)
			w.Place(f.Knots[j], date)
			w.Number(f.Value[j])
			if c.Order == 3 {
				w.Number(f.Slope[j])
			}
			if c.Order > 1 {
				w.Number(f.Curvature[j])
			}
			w.End()
		}
		return nil
	case spec.ExportEvidence:
		x.evidence(w, k)
		return nil
	}
	d, err := ft.derive(x.cf, k, wants{grid: x.what == spec.ExportGrid, readings: x.what == spec.ExportReadings})
	if err != nil {
		return err
	}
	switch x.what {
	case spec.ExportGrid:
		for _, p := range d.grid {
			x.begin(w, k)
			w.Place(p.X, date)
			gridCells(w, p)
		}
	case spec.ExportReadings:
		for _, q := range d.readings {
			x.begin(w, k)
			w.Text(q.def.Name.Text)
			w.Text(q.Kind)
			w.Place(q.At, date && !isPlace(q.Kind))
			for _, v := range []float64{q.Value, q.Lower, q.Upper} {
				w.Place(v, date && isPlace(q.Kind) && !math.IsInf(v, 0))
			}
			w.Text(unitOf(c, q.Kind))
			w.Text(q.Note)
			w.End()
		}
	case spec.ExportResiduals:
		x.residuals(w, k, d)
	}
	return nil
}

func gridCells(w *table.Writer, p reading.Point) {
	for _, v := range []float64{p.Value, p.SE, p.Lower, p.Upper, p.Slope} {
		w.Number(v)
	}
	w.End()
}

// evidence writes candidates in order of edf; a candidate that is a minimum,
// or the chosen one, says so instead.
func (x *exporter) evidence(w *table.Writer, k int) {
	f := x.cf.fits[k]
	for _, c := range f.candidates() {
		role := "candidate"
		for _, m := range f.Minima {
			if m.Lambda == c.Lambda {
				role = "minimum"
			}
		}
		if c.Lambda == f.Lambda {
			role = "chosen"
		}
		x.begin(w, k)
		for _, v := range []float64{c.Lambda, c.EDF, c.RSS, c.GCV, c.LOOCV, c.REML, c.Score} {
			w.Number(v)
		}
		w.Text(role)
		w.End()
	}
}

// residuals writes a fit's rows in x order, then by file and line.
func (x *exporter) residuals(w *table.Writer, k int, d *derived) {
	c := x.cf.def
	rows := x.lines[label(x.cf.by, x.cf.fits[k].Group)]
	data := d.fit.Data
	if len(rows) != data.N {
		return // cannot be: the lines come from the rows that were fitted
	}
	at := make([]int, data.N)
	for i := range at {
		at[i] = i
	}
	// rows and Data's rows agree in x, y and w, both sorted by them
	sort.SliceStable(at, func(a, b int) bool {
		p, q := &rows[at[a]], &rows[at[b]]
		switch {
		case p.x != q.x:
			return p.x < q.x
		case p.file != q.file:
			return p.file < q.file
		}
		return p.line < q.line
	})
	for _, i := range at {
		x.begin(w, k)
		w.Int(rows[i].line)
		w.Place(data.RowX[i], c.Along.Kind == expr.Date)
		w.Number(data.RowY[i])
		w.Number(data.RowW[i])
		e := d.fit.RowResidual(i)
		w.Number(data.RowY[i] - e)
		w.Number(e)
		w.Number(d.fit.RowLeverage(i))
		w.Number(d.fit.RowLeftOut(i))
		w.Text(rows[i].file)
		w.End()
	}
}

// findLines reads the rows again to say where in the files each stands.
func (r *Run) findLines(ctx context.Context, x *exporter) error {
	c := x.cf.def
	f, err := r.tables.get(ctx, c.From)
	if err != nil {
		return err
	}
	groups, _, err := form(c, f, r.Study)
	if err != nil {
		return err
	}
	w := newWeighing(c, f)
	x.lines = make(map[string][]rowPlace, len(groups))
	for _, g := range groups {
		text := make([]string, len(g.values))
		for i, v := range g.values {
			text[i] = v.String()
		}
		rows := make([]rowPlace, 0, len(g.rows))
		for _, i := range g.rows {
			p := rowPlace{x: w.x[i], y: w.y[i], w: 1}
			if w.w != nil {
				p.w = w.w[i]
			}
			if p.w == 0 {
				continue
			}
			p.file, p.line = f.place(int(i))
			rows = append(rows, p)
		}
		// the order of Data's rows, so that row k here is row k there
		sort.SliceStable(rows, func(a, b int) bool {
			p, q := &rows[a], &rows[b]
			switch {
			case p.x != q.x:
				return p.x < q.x
			case p.y != q.y:
				return p.y < q.y
			}
			return p.w < q.w
		})
		x.lines[label(x.cf.by, text)] = rows
	}
	return r.sameInputs()
}

// exportContrast writes a contrast's differences on their grid, or its tests.
func (r *Run) exportContrast(c *spec.Contrast, e *spec.Export, out io.Writer) error {
	what := e.What
	cf := r.curves[c.Of]
	var names []string
	for _, b := range cf.by {
		if b != c.Across {
			names = append(names, b)
		}
	}
	columns := []string{cf.def.Along.Name.Text, "fit", "se", "lower", "upper", "slope"}
	if what == spec.ExportTests {
		columns = []string{"test", "method", "largest", "p", "p_holm", "from", "to"}
	}
	var buf bytes.Buffer
	if err := table.Header(&buf, append(names, columns...)); err != nil {
		return err
	}
	pairs, _, err := cf.test(r.Study, c)
	if err != nil {
		return err
	}
	date := cf.def.Along.Kind == expr.Date
	w := table.Writer{SafeCells: e.SafeCells}
	for _, p := range pairs {
		begin := func() {
			for _, v := range p.values {
				groupCell(&w, v)
			}
		}
		if what == spec.ExportGrid {
			for _, g := range p.Grid {
				begin()
				w.Place(g.X, date)
				gridCells(&w, g)
			}
			continue
		}
		lo, hi := p.Grid[0].X, p.Grid[len(p.Grid)-1].X
		row := func(test, method string, largest, v, adjusted, from, to float64) {
			begin()
			w.Text(test)
			w.Text(method)
			for _, q := range []float64{largest, v, adjusted} {
				w.Number(q)
			}
			w.Place(from, date)
			w.Place(to, date)
			w.End()
		}
		nan := math.NaN()
		row("no_difference", "largest difference over its standard error; tube formula", p.None.Largest, p.None.P, p.holmNone, lo, hi)
		row("parallel", fmt.Sprintf("largest departure from the mean difference; %d posterior draws", reading.Draws), p.Same.Largest, p.Same.P, p.holmSame, lo, hi)
		for _, s := range p.Sure {
			row("surely_apart", "simultaneous band excludes 0", nan, nan, nan, s[0], s[1])
		}
	}
	buf.Write(w.Bytes())
	_, err = out.Write(buf.Bytes())
	return err
}
