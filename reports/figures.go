package reports

import (
	"fmt"
	"math"
	"strings"

	"gonum.org/v1/plot"
	"gonum.org/v1/plot/vg"
	"gonum.org/v1/plot/vg/draw"
)

// sizes of figures, in points.
const (
	wideW, wideH   = 420, 236
	smallW, smallH = 206, 150
	tinyW, tinyH   = 150, 104
)

// fitFigure shows rows, curve, band and readings of one fit.
func fitFigure(c *Curve, f *Fit, t theme) []byte {
	p := frame(clean(c.X), clean(c.Y))
	curves(p, f.Grid, 1.6)
	p.Add(dots(f.Points, func(q Point) float64 { return q.Y }, 2.2))
	room(p)
	p.Add(readingMarks(c, f))
	desc := fmt.Sprintf("%s along %s: %d rows, the fitted curve with edf %s and its %s%% band.", c.Y.Name, c.X.Name, f.N, short(f.EDF, 3), percent(c.Level))
	return render(p, wideW, wideH, f.Name, desc, t)
}

// clean makes an axis's text fit for a figure.
func clean(a Axis) Axis {
	a.Name, a.Unit = clip(a.Name, 40), clip(a.Unit, 20)
	return a
}

func clip(s string, most int) string {
	r := []rune(printable(s))
	if len(r) > most {
		return string(r[:most-1]) + "…"
	}
	return string(r)
}

// readingMarks marks places read off the curve: crossings and extremes with
// the interval of their place on the axis below, values with theirs upright.
func readingMarks(c *Curve, f *Fit) plot.Plotter {
	return nowhere(func(dc *draw.Canvas, x, y func(float64) vg.Length) {
		style := draw.LineStyle{Color: ink("mark"), Width: 1.1}
		thin := draw.LineStyle{Color: ink("mark"), Width: 0.6, Dashes: []vg.Length{2, 2}}
		row := 0
		inside := func(v float64) bool { u := x(v); return u >= dc.Min.X-1 && u <= dc.Max.X+1 }
		clampX := func(v float64) vg.Length { return max(dc.Min.X, min(dc.Max.X, x(clampInf(v)))) }
		for _, r := range f.Readings {
			if math.IsNaN(r.Value) || strings.HasPrefix(r.Note, "at the end") {
				continue // an extreme at an end marks nothing of its own
			}
			name := clip(r.Name, 24)
			switch {
			case r.ValueIsX:
				if !inside(r.Value) || strings.HasPrefix(r.Kind, "steepest") {
					continue
				}
				g := heightAt(f, r)
				at := vg.Point{X: x(r.Value), Y: y(g)}
				base := dc.Min.Y + vg.Length(4+11*row)
				row++
				dc.StrokeLine2(thin, at.X, at.Y, at.X, base)
				ring(dc, at, 2.6)
				if !math.IsNaN(r.Lower) {
					dc.StrokeLine2(style, clampX(r.Lower), base, clampX(r.Upper), base)
				}
				dc.StrokeLine2(style, at.X, base-2.5, at.X, base+2.5)
				// the label on the side with more room
				right := clampX(r.Upper)
				if math.IsNaN(r.Upper) {
					right = at.X
				}
				if right+4+textWidth(name) < dc.Max.X {
					note(dc, vg.Point{X: right + 4, Y: base - 3}, name, "mark", draw.XLeft)
				} else {
					left := clampX(r.Lower)
					if math.IsNaN(r.Lower) {
						left = at.X
					}
					note(dc, vg.Point{X: left - 4, Y: base - 3}, name, "mark", draw.XRight)
				}
			case r.Kind == "value" && inside(r.At):
				at := vg.Point{X: x(r.At), Y: y(r.Value)}
				if l, u := y(clampInf(r.Lower)), y(clampInf(r.Upper)); u-l < 4*(dc.Max.Y-dc.Min.Y) {
					dc.StrokeLine2(style, at.X, l, at.X, u)
				}
				ring(dc, at, 2.6)
				if at.X+6+textWidth(name) < dc.Max.X {
					note(dc, vg.Point{X: at.X + 6, Y: at.Y + 4}, name, "mark", draw.XLeft)
				} else {
					note(dc, vg.Point{X: at.X - 6, Y: at.Y + 4}, name, "mark", draw.XRight)
				}
			}
		}
	})
}

func clampInf(v float64) float64 {
	switch {
	case math.IsInf(v, 1):
		return 1e300
	case math.IsInf(v, -1):
		return -1e300
	}
	return v
}

// heightAt is the curve's height where a reading stands.
func heightAt(f *Fit, r Reading) float64 {
	if r.Kind == "crossing" || strings.HasSuffix(r.Kind, "_at") && !strings.HasPrefix(r.Kind, "steepest") {
		if !math.IsNaN(r.At) {
			return r.At
		}
	}
	for _, g := range f.Grid {
		if g.X >= r.Value {
			return g.Fit
		}
	}
	return math.NaN()
}

func ring(c *draw.Canvas, at vg.Point, r vg.Length) {
	var path vg.Path
	path.Move(vg.Point{X: at.X + r, Y: at.Y})
	path.Arc(at, r, 0, 2*math.Pi)
	path.Close()
	c.SetLineStyle(draw.LineStyle{Color: ink("mark"), Width: 1.3})
	c.Stroke(path)
}

// choiceFigure shows score against edf: candidates, minima, the choice.
func choiceFigure(f *Fit, t theme) []byte {
	e := &f.Evidence
	if len(e.Candidates) < 3 {
		return nil
	}
	p := frame(Axis{Name: "edf"}, Axis{Name: e.Criterion})
	var xs, ys []float64
	lo, hi := math.Inf(1), math.Inf(-1)
	for _, c := range e.Candidates {
		if math.IsInf(c.Score, 0) || math.IsNaN(c.Score) || !(c.EDF > 0) {
			continue
		}
		xs, ys = append(xs, math.Log2(c.EDF)), append(ys, c.Score)
		lo, hi = math.Min(lo, c.Score), math.Max(hi, c.Score)
	}
	if len(xs) < 2 {
		return nil
	}
	// The bottom matters: what is far above it is cut.
	sortedY := append([]float64(nil), ys...)
	insertion(sortedY)
	top := math.Min(hi, lo+4*(sortedY[len(sortedY)*6/10]-lo))
	if !(top > lo) {
		top = hi
	}
	if !(top > lo) {
		top = lo + math.Max(1e-9, 0.1*math.Abs(lo))
	}
	var cx, cy []float64
	for i := range xs {
		if ys[i] <= top {
			cx, cy = append(cx, xs[i]), append(cy, ys[i])
		}
	}
	p.Add(line(cx, cy, "curve", 1.4))
	p.Y.Min, p.Y.Max = lo-0.06*(top-lo), top
	p.X.Min, p.X.Max = xs[0], xs[len(xs)-1]
	p.X.Tick.Marker = edfTicks{}
	p.Add(nowhere(func(dc *draw.Canvas, x, y func(float64) vg.Length) {
		for i := range cx {
			dc.StrokeLine2(draw.LineStyle{Color: ink("point"), Width: 0.7}, x(cx[i]), y(cy[i])-2, x(cx[i]), y(cy[i])+2)
		}
		for k, m := range e.Minima {
			if m.Score > top || !(m.EDF > 0) {
				continue
			}
			at := vg.Point{X: x(math.Log2(m.EDF)), Y: y(m.Score)}
			text := "edf " + short(m.EDF, 3)
			if m.Chosen {
				ring(dc, at, 3.2)
				text = "chosen, " + text
			} else {
				dc.StrokeLine2(draw.LineStyle{Color: ink("soft"), Width: 1}, at.X-3, at.Y-3, at.X+3, at.Y+3)
				dc.StrokeLine2(draw.LineStyle{Color: ink("soft"), Width: 1}, at.X-3, at.Y+3, at.X+3, at.Y-3)
				if k > 2 {
					continue // a cross is enough
				}
				text = "minimum, " + text
			}
			color := "mark"
			if !m.Chosen {
				color = "soft"
			}
			up := vg.Length(8)
			if at.X+textWidth(text) < dc.Max.X {
				note(dc, vg.Point{X: at.X, Y: at.Y + up}, text, color, draw.XLeft)
			} else {
				note(dc, vg.Point{X: dc.Max.X, Y: at.Y + up}, text, color, draw.XRight)
			}
		}
	}))
	return render(p, smallW, smallH, "The choice for "+f.Name, fmt.Sprintf("%s against edf on a logarithmic axis; the choice is edf %s.", e.Criterion, short(f.EDF, 3)), t)
}

func insertion(v []float64) {
	for i := range v {
		for j := i; j > 0 && v[j] < v[j-1]; j-- {
			v[j], v[j-1] = v[j-1], v[j]
		}
	}
}

// edfTicks labels a base-2 logarithmic axis of edf.
type edfTicks struct{}

func (edfTicks) Ticks(lo, hi float64) []plot.Tick {
	var out []plot.Tick
	last := math.Inf(-1)
	for _, v := range []float64{2, 3, 4, 6, 8, 12, 16, 24, 32, 48, 64, 96, 128, 256, 512, 1024, 2048, 4096} {
		u := math.Log2(v)
		if u >= lo-0.02 && u <= hi && u-last >= (hi-lo)/7 {
			out = append(out, plot.Tick{Value: u, Label: exact(v)})
			last = u
		}
	}
	return out
}

// residualFigure shows residuals against x.
func residualFigure(c *Curve, f *Fit, t theme) []byte {
	if len(f.Points) == 0 {
		return nil
	}
	y := clean(c.Y)
	y.Name = "residual"
	p := frame(clean(c.X), y)
	p.Add(dots(f.Points, func(q Point) float64 { return q.Residual }, 1.8))
	p.Add(line([]float64{p.X.Min, p.X.Max}, []float64{0, 0}, "curve", 0.9))
	room(p)
	if c.X.Date { // their labels are wide
		p.X.Tick.Marker = few{p.X.Tick.Marker}
	}
	return render(p, smallW, smallH, "Residuals of "+f.Name, fmt.Sprintf("Residuals of %d rows against %s, with the zero line.", f.N, c.X.Name), t)
}

// tinyFigure is one of the small multiples, on shared scales.
func tinyFigure(c *Curve, f *Fit, lo, hi [2]float64, t theme) []byte {
	p := frame(Axis{Date: c.X.Date}, Axis{})
	curves(p, f.Grid, 1.2)
	p.Add(dots(f.Points, func(q Point) float64 { return q.Y }, 1))
	p.X.Min, p.X.Max, p.Y.Min, p.Y.Max = lo[0], hi[0], lo[1], hi[1]
	room(p)
	p.X.Tick.Marker, p.Y.Tick.Marker = few{p.X.Tick.Marker}, few{p.Y.Tick.Marker}
	p.X.Tick.Label.Font.Size, p.Y.Tick.Label.Font.Size = 6.5, 6.5
	return render(p, tinyW, tinyH, f.Name, fmt.Sprintf("%s along %s", c.Y.Name, c.X.Name), t)
}

// few keeps the labels of every other tick.
type few struct{ of plot.Ticker }

func (f few) Ticks(lo, hi float64) []plot.Tick {
	all := f.of.Ticks(lo, hi)
	for i := range all {
		if i%2 == 1 && len(all) > 3 {
			all[i].Label = ""
		}
	}
	return all
}

// extent is the range of what a curve's shown fits cover.
func extent(fits []*Fit) (lo, hi [2]float64) {
	lo, hi = [2]float64{math.Inf(1), math.Inf(1)}, [2]float64{math.Inf(-1), math.Inf(-1)}
	put := func(x, y float64) {
		lo[0], hi[0] = math.Min(lo[0], x), math.Max(hi[0], x)
		lo[1], hi[1] = math.Min(lo[1], y), math.Max(hi[1], y)
	}
	for _, f := range fits {
		for _, p := range f.Points {
			put(p.X, p.Y)
		}
		for _, g := range f.Grid {
			if !g.Extrapolated {
				put(g.X, g.Fit)
			}
		}
	}
	return lo, hi
}

// contrastFigure shows a difference with its band and the zero line; where
// the band excludes zero the axis is marked.
func contrastFigure(c *Contrast, p *Pair, t theme) []byte {
	y := clean(c.Y)
	y.Name = "difference" // of what, the text above says: names may be long
	fig := frame(clean(c.X), y)
	if c.X.Date { // their labels are wide
		fig.X.Tick.Marker = few{fig.X.Tick.Marker}
	}
	curves(fig, p.Grid, 1.5)
	fig.Y.Min, fig.Y.Max = math.Min(fig.Y.Min, 0), math.Max(fig.Y.Max, 0)
	room(fig)
	if len(p.Grid) > 0 {
		fig.Add(line([]float64{p.Grid[0].X, p.Grid[len(p.Grid)-1].X}, []float64{0, 0}, "soft", 0.8))
	}
	fig.Add(nowhere(func(dc *draw.Canvas, x, _ func(float64) vg.Length) {
		for _, s := range p.SurelyNot {
			dc.StrokeLine2(draw.LineStyle{Color: ink("mark"), Width: 2.4}, x(s[0]), dc.Min.Y, x(s[1])+0.5, dc.Min.Y)
		}
	}))
	return render(fig, smallW*1.4, smallH, c.Name+" "+p.Group, "The difference of two curves with its band and the zero line.", t)
}
