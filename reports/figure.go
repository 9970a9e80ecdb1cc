package reports

import (
	"bytes"
	"fmt"
	"html"
	"image/color"
	"math"
	"regexp"
	"strings"
	"time"
	"unicode"

	"gonum.org/v1/plot"
	"gonum.org/v1/plot/font"
	"gonum.org/v1/plot/plotter"
	"gonum.org/v1/plot/vg"
	"gonum.org/v1/plot/vg/draw"
	"gonum.org/v1/plot/vg/vgsvg"
)

// theme says what becomes of the stand-in colours.
type theme int

const (
	inFile theme = iota // the light palette on a light ground
	inPage              // CSS variables
)

var sans = font.Font{Typeface: "Liberation", Variant: "Sans"}

// frame begins a figure: axes without boxes, few ticks, labels with units.
func frame(x, y Axis) *plot.Plot {
	p := plot.New()
	p.BackgroundColor = nil
	for _, a := range []struct {
		axis *plot.Axis
		of   Axis
	}{{&p.X, x}, {&p.Y, y}} {
		a.axis.Label.Text = clip(a.of.label(), 70)
		a.axis.Label.TextStyle.Font = font.From(sans, 8.5)
		a.axis.Label.TextStyle.Color = ink("soft")
		a.axis.Tick.Label.Font = font.From(sans, 8)
		a.axis.Tick.Label.Color = ink("soft")
		a.axis.LineStyle = draw.LineStyle{Color: ink("rule"), Width: 0.7}
		a.axis.Tick.LineStyle = draw.LineStyle{Color: ink("rule"), Width: 0.7}
		a.axis.Tick.Length = 4
		a.axis.Padding = 4
		a.axis.Tick.Marker = ticks{date: a.of.Date}
	}
	return p
}

// ticks places few, round ticks; on a date axis at days, months or years.
type ticks struct{ date bool }

func (t ticks) Ticks(lo, hi float64) []plot.Tick {
	if t.date {
		return dateTicks(lo, hi)
	}
	if !(hi > lo) {
		return []plot.Tick{{Value: lo, Label: short(lo, 4)}}
	}
	step := niceStep((hi - lo) / 5)
	d := max(0, -int(math.Floor(math.Log10(step)+1e-9)))
	var out []plot.Tick
	for k := math.Ceil(lo/step - 1e-9); k*step <= hi+1e-9*step; k++ {
		v := k * step
		l := fixed(v, min(d, 9))
		if math.Abs(v) >= 1e6 || d > 6 {
			l = short(v, 3)
		}
		out = append(out, plot.Tick{Value: v, Label: l})
	}
	return out
}

// niceStep rounds a step up to 1, 2 or 5 times a power of ten.
func niceStep(s float64) float64 {
	p := math.Pow(10, math.Floor(math.Log10(s)))
	for _, m := range []float64{1, 2, 5} {
		if m*p >= s*0.999 {
			return m * p
		}
	}
	return 10 * p
}

func dateTicks(lo, hi float64) []plot.Tick {
	var out []plot.Tick
	day := func(t time.Time) float64 { return float64(t.Unix()) / 86400 }
	first := time.Unix(int64(math.Floor(lo))*86400, 0).UTC()
	span := hi - lo
	switch {
	case span > 5*365:
		every := int(niceStep(span / 365.25 / 6))
		for y := first.Year() / every * every; ; y += every {
			v := day(time.Date(y, 1, 1, 0, 0, 0, 0, time.UTC))
			if v > hi {
				return out
			}
			if v >= lo {
				out = append(out, plot.Tick{Value: v, Label: fmt.Sprint(y)})
			}
		}
	case span > 75:
		every := 1
		for _, e := range []int{1, 2, 3, 6, 12} {
			every = e
			if span/30.4/float64(e) <= 7 {
				break
			}
		}
		for y, m := first.Year(), (int(first.Month())-1)/every*every; ; m += every {
			v := day(time.Date(y, time.Month(m+1), 1, 0, 0, 0, 0, time.UTC))
			if v > hi {
				return out
			}
			if v >= lo {
				out = append(out, plot.Tick{Value: v, Label: isoDate(v)[:7]})
			}
		}
	}
	step := math.Max(1, math.Round(niceStep(span/4)))
	for v := math.Ceil(lo); v <= hi; v += step {
		out = append(out, plot.Tick{Value: v, Label: isoDate(v)})
	}
	return out
}

// shape is a plotter made of a function and the range it covers.
type shape struct {
	draw                   func(c *draw.Canvas, x, y func(float64) vg.Length)
	xmin, xmax, ymin, ymax float64
}

func (s shape) Plot(c draw.Canvas, p *plot.Plot) {
	x, y := p.Transforms(&c)
	s.draw(&c, x, y)
}

func (s shape) DataRange() (xmin, xmax, ymin, ymax float64) {
	return s.xmin, s.xmax, s.ymin, s.ymax
}

// nowhere covers no range: what it draws stands within that of the others.
func nowhere(draw func(c *draw.Canvas, x, y func(float64) vg.Length)) shape {
	return shape{draw: draw, xmin: math.Inf(1), xmax: math.Inf(-1), ymin: math.Inf(1), ymax: math.Inf(-1)}
}

// dots draws rows as rings of an area by weight, all in one path.
func dots(pts []Point, y func(Point) float64, r float64) plot.Plotter {
	s := nowhere(nil)
	most := 0.0
	for _, p := range pts {
		s.xmin, s.xmax = math.Min(s.xmin, p.X), math.Max(s.xmax, p.X)
		s.ymin, s.ymax = math.Min(s.ymin, y(p)), math.Max(s.ymax, y(p))
		most = math.Max(most, p.Weight)
	}
	s.draw = func(c *draw.Canvas, tx, ty func(float64) vg.Length) {
		var path vg.Path
		for _, p := range pts {
			rad := vg.Length(r * math.Max(0.45, math.Sqrt(p.Weight/most)))
			at := vg.Point{X: tx(p.X), Y: ty(y(p))}
			path.Move(vg.Point{X: at.X + rad, Y: at.Y})
			path.Arc(at, rad, 0, 2*math.Pi)
			path.Close()
		}
		c.SetLineStyle(draw.LineStyle{Color: ink("point"), Width: 0.6})
		c.Stroke(path)
	}
	return s
}

// line draws a polyline.
func line(xs, ys []float64, name string, width vg.Length, dashes ...vg.Length) plot.Plotter {
	pts := make(plotter.XYs, len(xs))
	for i := range xs {
		pts[i] = plotter.XY{X: xs[i], Y: ys[i]}
	}
	return &plotter.Line{XYs: pts, LineStyle: draw.LineStyle{Color: ink(name), Width: width, Dashes: dashes}}
}

// ribbon fills the stretch between two curves.
func ribbon(g []GridPoint, name string) plot.Plotter {
	var ring plotter.XYs
	for _, p := range g {
		ring = append(ring, plotter.XY{X: p.X, Y: p.Lower})
	}
	for i := len(g) - 1; i >= 0; i-- {
		ring = append(ring, plotter.XY{X: g[i].X, Y: g[i].Upper})
	}
	return &plotter.Polygon{XYs: []plotter.XYs{ring}, Color: ink(name)}
}

// runs splits a grid into stretches within and beyond the data.
func runs(g []GridPoint) [][]GridPoint {
	var out [][]GridPoint
	for i, p := range g {
		if i == 0 || p.Extrapolated != g[i-1].Extrapolated {
			var first []GridPoint
			if i > 0 {
				first = append(first, g[i-1]) // so that the stretches meet
				first[0].Extrapolated = p.Extrapolated
			}
			out = append(out, first)
		}
		out[len(out)-1] = append(out[len(out)-1], p)
	}
	return out
}

// curves adds a curve with its band, what lies beyond the data drawn apart.
func curves(p *plot.Plot, g []GridPoint, width vg.Length) {
	for _, r := range runs(g) {
		if finiteBand(r) {
			name := "band"
			if r[0].Extrapolated {
				name = "beyond"
			}
			p.Add(ribbon(r, name))
		}
	}
	for _, r := range runs(g) {
		var xs, ys []float64
		for _, q := range r {
			xs, ys = append(xs, q.X), append(ys, q.Fit)
		}
		if r[0].Extrapolated {
			p.Add(line(xs, ys, "curve", width, 3, 2))
		} else {
			p.Add(line(xs, ys, "curve", width))
		}
	}
}

func finiteBand(g []GridPoint) bool {
	for _, p := range g {
		if v := p.Upper - p.Lower; math.IsNaN(v) || math.IsInf(v, 0) {
			return false
		}
	}
	return len(g) > 1
}

// note writes a short text beside a place.
func note(c *draw.Canvas, at vg.Point, text, color string, align draw.XAlignment) {
	st := draw.TextStyle{Color: ink(color), Font: font.From(sans, 8), Handler: plot.DefaultTextHandler, XAlign: align, YAlign: draw.YBottom}
	c.FillText(st, at, printable(text))
}

// textWidth is about how wide a note is.
func textWidth(text string) vg.Length {
	st := draw.TextStyle{Font: font.From(sans, 8), Handler: plot.DefaultTextHandler}
	return st.Width(text)
}

var (
	fontStyle = regexp.MustCompile(`font-family:[^;]*;font-variant:normal;font-weight:normal;font-style:normal;`)
	anyBlack  = regexp.MustCompile(`#000000`)
)

// room widens the axes a little, so that nothing stands on their ends.
func room(p *plot.Plot) {
	for _, a := range []*plot.Axis{&p.X, &p.Y} {
		d := 0.025 * (a.Max - a.Min)
		a.Min, a.Max = a.Min-d, a.Max+d
	}
}

// render draws a figure to SVG. Width and height are in points.
func render(p *plot.Plot, w, h vg.Length, title, desc string, t theme) []byte {
	// axes that show one value need a range
	for _, a := range []*plot.Axis{&p.X, &p.Y} {
		if !(a.Max > a.Min) {
			d := math.Max(0.5, math.Abs(a.Min)*0.1)
			a.Min, a.Max = a.Min-d, a.Max+d
		}
	}
	c := vgsvg.New(w, h)
	p.Draw(draw.Crop(draw.New(c), 0, -9, 0, -5))
	var b bytes.Buffer
	_, _ = c.WriteTo(&b) // a buffer takes everything
	s := b.String()
	s = s[strings.Index(s, "<g "):]
	s = fontStyle.ReplaceAllString(s, "")
	s = anyBlack.ReplaceAllString(s, hex(ink("ink")))
	for _, i := range inks {
		to := i.light
		if t == inPage {
			to = "var(--" + i.name + ")"
		}
		s = strings.ReplaceAll(s, hex(i.stand), to)
	}
	s = strings.ReplaceAll(s, "\n\tstyle", " style")
	ground := ""
	size := fmt.Sprintf(`width="%g" height="%g" `, float64(w)*4/3, float64(h)*4/3)
	if t == inFile {
		ground = fmt.Sprintf(`<rect width="%g" height="%g" fill="%s"/>`, float64(w), float64(h), lightGround)
	} else {
		size = ""
	}
	head := fmt.Sprintf(`<svg xmlns="http://www.w3.org/2000/svg" %sviewBox="0 0 %g %g" role="img" font-family="system-ui, 'Segoe UI', 'Liberation Sans', Arial, sans-serif"><title>%s</title><desc>%s</desc>%s`,
		size, float64(w), float64(h), html.EscapeString(printable(title)), html.EscapeString(printable(desc)), ground)
	return []byte(head + "\n" + strings.TrimRight(s, "\n") + "\n")
}

func hex(c color.RGBA) string { return fmt.Sprintf("#%02X%02X%02X", c.R, c.G, c.B) }

// printable takes out control characters, which XML cannot carry and a terminal
// would obey, and shows what would pass unseen or turn the direction of what
// stands beside it: two names that differ in it must not look alike.
func printable(s string) string {
	s = strings.Map(func(r rune) rune {
		if r < ' ' || r >= 0x7f && r < 0xa0 || r == 0xfffe || r == 0xffff {
			return ' '
		}
		return r
	}, strings.ToValidUTF8(s, "�"))
	if !strings.ContainsFunc(s, unseen) {
		return s
	}
	var b strings.Builder
	for _, r := range s {
		if unseen(r) {
			fmt.Fprintf(&b, "<U+%04X>", r)
		} else {
			b.WriteRune(r)
		}
	}
	return b.String()
}

// unseen tells of format characters (zero-width, bidirectional) and of those for
// private use.
func unseen(r rune) bool {
	return r != 0xad && unicode.In(r, unicode.Cf, unicode.Co, unicode.Zl, unicode.Zp)
}
