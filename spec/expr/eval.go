package expr

import (
	"math"
	"strings"
)

// Eval runs the program over n rows. cols returns a column by name; each must
// have n rows. A missing operand makes the result missing; && and || follow
// three-valued logic, for a missing value cannot change false && x or
// true || x; a result that is not finite is missing.
func (p *Program) Eval(cols func(name string) *Column, n int) *Column {
	return eval(&p.root, cols, n)
}

func eval(nd *node, cols func(string) *Column, n int) *Column {
	switch nd.op {
	case "const":
		return constant(nd, n)
	case "column":
		return cols(nd.name)
	}
	args := make([]*Column, len(nd.args))
	for i := range nd.args {
		args[i] = eval(&nd.args[i], cols, n)
	}
	out := &Column{Kind: nd.kind}
	switch nd.op {
	case "&&", "||":
		out.Truth = logic(nd.op == "&&", args[0].Truth, args[1].Truth)
	case "not":
		out.Truth = make([]uint8, n)
		for i, t := range args[0].Truth {
			out.Truth[i] = [3]uint8{True, False, Unknown}[t]
		}
	case "==", "!=", "<", "<=", ">", ">=":
		out.Truth = compare(nd.op, args[0], args[1], n)
	case "?":
		choose(out, args[0].Truth, args[1], args[2], n)
	case "present":
		out.Truth = make([]uint8, n)
		for i := range out.Truth {
			if !args[0].Missing(i) {
				out.Truth[i] = True
			}
		}
	case "matches":
		out.Truth = perEntry(args[0], nd.re.MatchString)
	case "lower":
		text(out, args[0], strings.ToLower)
	case "upper":
		text(out, args[0], strings.ToUpper)
	case "trim":
		text(out, args[0], strings.TrimSpace)
	default:
		out.Num = numeric(nd, args, n)
	}
	return out
}

func constant(nd *node, n int) *Column {
	c := &Column{Kind: nd.kind}
	switch nd.kind {
	case Text:
		c.Dict, c.Code = []string{nd.text}, make([]uint32, n)
	case Bool:
		c.Truth = make([]uint8, n)
		for i := range c.Truth {
			c.Truth[i] = uint8(nd.num)
		}
	default:
		c.Num = make([]float64, n)
		for i := range c.Num {
			c.Num[i] = nd.num
		}
	}
	return c
}

// logic is three-valued && or ||.
func logic(and bool, a, b []uint8) []uint8 {
	out := make([]uint8, len(a))
	decides := True
	if and {
		decides = False
	}
	for i := range a {
		switch {
		case a[i] == decides || b[i] == decides:
			out[i] = decides
		case a[i] == Unknown || b[i] == Unknown:
			out[i] = Unknown
		default:
			out[i] = 1 - decides
		}
	}
	return out
}

func holds(op string, c int) bool {
	switch op {
	case "==":
		return c == 0
	case "!=":
		return c != 0
	case "<":
		return c < 0
	case "<=":
		return c <= 0
	case ">":
		return c > 0
	}
	return c >= 0
}

// truth holds a comparison's outcome for -1, 0 and 1.
func truth(op string) (t [3]uint8) {
	for c := -1; c <= 1; c++ {
		if holds(op, c) {
			t[c+1] = True
		}
	}
	return t
}

func compare(op string, a, b *Column, n int) []uint8 {
	out := make([]uint8, n)
	t := truth(op)
	switch a.Kind {
	case Text:
		if len(b.Dict) == 1 && allOne(b.Code) {
			return perEntry(a, func(s string) bool { return holds(op, strings.Compare(s, b.Dict[0])) })
		}
		for i := range out {
			if a.Code[i] == NoText || b.Code[i] == NoText {
				out[i] = Unknown
				continue
			}
			out[i] = t[strings.Compare(a.Dict[a.Code[i]], b.Dict[b.Code[i]])+1]
		}
	case Bool:
		for i := range out {
			switch {
			case a.Truth[i] == Unknown || b.Truth[i] == Unknown:
				out[i] = Unknown
			case a.Truth[i] == b.Truth[i]:
				out[i] = t[1]
			default:
				out[i] = t[0]
			}
		}
	default:
		x, y := a.Num[:n], b.Num[:n]
		for i := range out {
			switch {
			case x[i] < y[i]:
				out[i] = t[0]
			case x[i] > y[i]:
				out[i] = t[2]
			case x[i] == y[i]:
				out[i] = t[1]
			default:
				out[i] = Unknown
			}
		}
	}
	return out
}

func allOne(code []uint32) bool {
	for _, c := range code {
		if c != 0 {
			return false
		}
	}
	return true
}

// perEntry evaluates a condition on text once a dictionary entry.
func perEntry(c *Column, f func(string) bool) []uint8 {
	table := make([]uint8, len(c.Dict))
	for k, s := range c.Dict {
		if f(s) {
			table[k] = True
		}
	}
	out := make([]uint8, len(c.Code))
	for i, k := range c.Code {
		if k == NoText {
			out[i] = Unknown
			continue
		}
		out[i] = table[k]
	}
	return out
}

// text maps text once a dictionary entry; equal results become one entry.
func text(out, c *Column, f func(string) string) {
	index := make(map[string]uint32, len(c.Dict))
	code := make([]uint32, len(c.Dict))
	for k, s := range c.Dict {
		v := f(s)
		at, ok := index[v]
		if !ok {
			at = uint32(len(out.Dict))
			index[v] = at
			out.Dict = append(out.Dict, v)
		}
		code[k] = at
	}
	out.Code = make([]uint32, len(c.Code))
	for i, k := range c.Code {
		if k == NoText {
			out.Code[i] = NoText
			continue
		}
		out.Code[i] = code[k]
	}
}

func choose(out *Column, q []uint8, a, b *Column, n int) {
	switch out.Kind {
	case Text:
		index := map[string]uint32{}
		out.Code = make([]uint32, n)
		for i := range out.Code {
			c := a
			if q[i] == False {
				c = b
			}
			if q[i] == Unknown || c.Code[i] == NoText {
				out.Code[i] = NoText
				continue
			}
			s := c.Dict[c.Code[i]]
			at, ok := index[s]
			if !ok {
				at = uint32(len(out.Dict))
				index[s] = at
				out.Dict = append(out.Dict, s)
			}
			out.Code[i] = at
		}
	case Bool:
		out.Truth = make([]uint8, n)
		for i := range out.Truth {
			out.Truth[i] = [3]uint8{b.Truth[i], a.Truth[i], Unknown}[q[i]]
		}
	default:
		out.Num = make([]float64, n)
		for i := range out.Num {
			switch q[i] {
			case True:
				out.Num[i] = a.Num[i]
			case False:
				out.Num[i] = b.Num[i]
			default:
				out.Num[i] = math.NaN()
			}
		}
	}
}

func numeric(nd *node, args []*Column, n int) []float64 {
	out := make([]float64, n)
	x := args[0].Num
	var y []float64
	if len(args) > 1 {
		y = args[1].Num
	}
	each := func(f func(float64) float64) {
		for i, v := range x {
			out[i] = f(v)
		}
	}
	switch nd.op {
	case "+":
		for i := range out {
			out[i] = x[i] + y[i]
		}
	case "-":
		for i := range out {
			out[i] = x[i] - y[i]
		}
	case "days_since":
		for i := range out {
			out[i] = x[i] - y[i]
		}
	case "*":
		for i := range out {
			out[i] = x[i] * y[i]
		}
	case "/":
		for i := range out {
			out[i] = x[i] / y[i]
		}
	case "%":
		for i := range out {
			out[i] = math.Mod(x[i], y[i])
		}
	case "neg":
		for i := range out {
			out[i] = -x[i]
		}
	case "log":
		each(logE)
	case "log10":
		each(log10E)
	case "exp":
		each(expE)
	case "sqrt":
		each(math.Sqrt)
	case "abs":
		each(math.Abs)
	case "round":
		scale := 1.0
		if len(nd.args) == 2 {
			for range int(math.Max(0, math.Min(15, nd.args[1].num))) {
				scale *= 10
			}
		}
		each(func(v float64) float64 { return math.Round(float64(v*scale)) / scale })
	case "min", "max":
		copy(out, x)
		for _, a := range args[1:] {
			for i, v := range a.Num {
				switch {
				case math.IsNaN(v):
					out[i] = v
				case nd.op == "min" && v < out[i], nd.op == "max" && v > out[i]:
					out[i] = v
				}
			}
		}
	case "year":
		each(func(v float64) float64 {
			if math.IsNaN(v) {
				return v
			}
			y, _ := civil(v)
			return float64(y)
		})
	case "month":
		each(func(v float64) float64 {
			if math.IsNaN(v) {
				return v
			}
			_, m := civil(v)
			return float64(m)
		})
	}
	for i, v := range out {
		if math.IsInf(v, 0) {
			out[i] = math.NaN()
		}
	}
	return out
}
