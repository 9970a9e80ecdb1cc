package runner

import (
	"fmt"
	"hash/fnv"
	"math"
	"sort"

	"batten/runner/table"
	"batten/spec"
	"batten/spec/expr"
)

// job is one part to bring up to date.
type job struct {
	number int
	groups []group
	text   [][]string // values of groups[i] as text
	rules  []*spec.Rule
	out    *storedPart
	reused []bool // of groups[i]
	digest string
}

// plan shares the groups among parts and settles which rule each follows.
func (r *curveRun) plan(c *spec.Curve, groups []group) []*job {
	parts := make([]*job, partCount)
	by := byNames(c)
	for _, g := range groups {
		text := make([]string, len(g.values))
		for i, v := range g.values {
			text[i] = v.String()
		}
		h := fnv.New32a()
		h.Write([]byte(label(by, text)))
		p := int(h.Sum32() % partCount)
		if parts[p] == nil {
			parts[p] = &job{number: p}
		}
		j := parts[p]
		j.groups = append(j.groups, g)
		j.text = append(j.text, text)
	}
	var jobs []*job
	for _, j := range parts {
		if j != nil {
			jobs = append(jobs, j)
		}
	}
	return jobs
}

// weighing holds the columns of a curve as the fits want them.
type weighing struct {
	x, y, w []float64
	block   map[string][]int32 // by block column: ranks of its sorted values
}

func newWeighing(c *spec.Curve, f *frame) *weighing {
	w := &weighing{x: f.cols[c.Along.Name.Text].Num, y: f.cols[c.Response.Name.Text].Num, block: map[string][]int32{}}
	if c.Weight != nil {
		w.w = f.cols[c.Weight.Name.Text].Num
	}
	if c.Sigma != nil {
		w.w = make([]float64, f.n)
		for i, s := range f.cols[c.Sigma.Name.Text].Num {
			w.w[i] = 1 / float64(s*s)
		}
	}
	for _, b := range blocks(c) {
		w.block[b.Name.Text] = ranks(f.cols[b.Name.Text])
	}
	return w
}

// ranks numbers a column's values in their sorted order; missing is -1.
func ranks(c *expr.Column) []int32 {
	seen := map[value]bool{}
	var vals []value
	for i := range c.Len() {
		if !c.Missing(i) {
			if v := valueAt(c, i); !seen[v] {
				seen[v] = true
				vals = append(vals, v)
			}
		}
	}
	sort.Slice(vals, func(a, b int) bool { return vals[a].compare(vals[b]) < 0 })
	rank := make(map[value]int32, len(vals))
	for i, v := range vals {
		rank[v] = int32(i)
	}
	out := make([]int32, c.Len())
	for i := range out {
		out[i] = -1
		if !c.Missing(i) {
			out[i] = rank[valueAt(c, i)]
		}
	}
	return out
}

// rerank makes ranks dense within one group, so that a value seen only
// elsewhere changes nothing here.
func rerank(b []int32) {
	sorted := append([]int32(nil), b...)
	sort.Slice(sorted, func(i, j int) bool { return sorted[i] < sorted[j] })
	rank := map[int32]int32{}
	for _, v := range sorted {
		if _, ok := rank[v]; !ok {
			rank[v] = int32(len(rank))
		}
	}
	for i, v := range b {
		b[i] = rank[v]
	}
}

// part brings one part up to date.
func (r *curveRun) part(ft *fitter, c *spec.Curve, w *weighing, j *job, shared map[*spec.Rule]sharedChoice) error {
	by := byNames(c)
	j.reused = make([]bool, len(j.groups))
	keys := make([]string, len(j.groups))
	fits := make([]*storedFit, len(j.groups))
	pk := newKey("part", objectVersion)
	pk.add("curve", c.Name.Text)
	for _, b := range by {
		pk.add("by", b)
	}
	for i := range j.groups {
		f, rule, err := r.describe(ft, c, w, j, i, shared)
		if err != nil {
			return err
		}
		fits[i], keys[i] = f, f.Key
		j.rules = append(j.rules, rule)
		pk.add("group", label(by, j.text[i]), f.Key)
	}
	text := pk.String()
	slot := "part/" + c.Name.Text + "/" + fmt.Sprint(j.number)
	if b, dig, ok := r.store.Get(text); ok {
		var p storedPart
		if readPart(b, len(by), &p) == nil && len(p.Fits) == len(fits) {
			j.out, j.digest = &p, dig
			for i := range j.reused {
				j.reused[i] = true
			}
			return nil
		}
	}
	// A changed row refits its group alone: the part's last object still
	// holds the others.
	old := map[string]*storedFit{}
	if dig, ok := r.store.Slot(slot); ok {
		if b, ok := r.store.Object(dig); ok {
			var p storedPart
			if readPart(b, len(by), &p) == nil {
				for _, f := range p.Fits {
					old[label(by, f.Group)+"\n"+f.Key] = f
				}
			}
		}
	}
	for i := range fits {
		if f := old[label(by, fits[i].Group)+"\n"+keys[i]]; f != nil {
			fits[i] = f
			j.reused[i] = true
			continue
		}
		if fits[i].Failed != "" {
			continue
		}
		if err := r.compute(ft, c, w, j, i, fits[i]); err != nil {
			return fmt.Errorf("%s: %w", fitName(c.Name.Text, label(by, j.text[i])), err)
		}
	}
	j.out = &storedPart{Fits: fits}
	b, err := codec.Marshal(j.out)
	if err != nil {
		return err
	}
	if j.digest, err = r.store.Put(text, b); err != nil {
		return err
	}
	return r.store.SetSlot(slot, j.digest)
}

// load puts group i's rows into the worker's memory, collapsed. A group that
// cannot carry a curve comes back with the reason.
func (r *curveRun) load(ft *fitter, c *spec.Curve, w *weighing, j *job, i int, rule *spec.Rule) (block []int32, err error) {
	if rule != nil && rule.Block != nil {
		block = w.block[rule.Block.Name.Text]
	}
	ft.gather(w.x, w.y, w.w, block, j.groups[i].rows)
	ft.data.Penalty = c.Order
	err = ft.data.Reset(ft.x, ft.y, ft.weights())
	if block != nil {
		rerank(ft.block)
		return ft.block, err
	}
	return nil, err
}

// describe settles a group's rule and key.
func (r *curveRun) describe(ft *fitter, c *spec.Curve, w *weighing, j *job, i int, shared map[*spec.Rule]sharedChoice) (*storedFit, *spec.Rule, error) {
	out := &storedFit{Group: j.text[i]}
	if c.Order != 2 {
		out.Order = c.Order
	}
	_, err := r.load(ft, c, w, j, i, nil)
	why := ""
	if err != nil {
		var ok bool
		if why, ok = dataCause(err); !ok {
			return nil, nil, err
		}
	}
	out.N, out.Distinct, out.ZeroW = ft.data.N, len(ft.data.X), ft.data.ZeroWeight
	rule, exception := ruleFor(c, j.groups[i].values, out.N, out.Distinct)
	out.Rule, out.Exception = rule.Name, exception
	var block []int32
	if rule.Block != nil && why == "" {
		if block, err = r.load(ft, c, w, j, i, rule); err != nil {
			return nil, nil, err
		}
	}
	group := label(byNames(c), j.text[i])
	out.Failed = why
	if ch, ok := shared[rule]; ok && why == "" {
		if ch.Groups == 0 {
			out.Failed = fmt.Sprintf("the groups under this rule leave no %s that suits all of them", rule.Shared)
		}
		out.Shared, out.SharedValue, out.SharedBy = rule.Shared, ch.Value, ch.Groups
	}
	out.Key = groupKey(r.study, rule, exception, group, &ft.data, block, out.SharedValue)
	return out, rule, nil
}

// compute fits group i.
func (r *curveRun) compute(ft *fitter, c *spec.Curve, w *weighing, j *job, i int, out *storedFit) error {
	rule := j.rules[i]
	block, err := r.load(ft, c, w, j, i, rule)
	if err != nil {
		return err
	}
	return ft.compute(r.study, rule, out, label(byNames(c), j.text[i]), block)
}

// ruleFor finds the rule that a group follows: the first exception that
// holds, else the curve's own.
func ruleFor(c *spec.Curve, vals []value, n, distinct int) (*spec.Rule, string) {
	for i := range c.Exceptions {
		e := &c.Exceptions[i]
		t := e.Only.Eval(func(name string) *expr.Column {
			switch name {
			case "n":
				return oneNumber(float64(n))
			case "distinct":
				return oneNumber(float64(distinct))
			}
			for k, b := range c.By {
				if b.Name.Text == name {
					return column(vals[k])
				}
			}
			panic("unchecked column " + name + " in an exception")
		}, 1)
		if t.Truth[0] == expr.True {
			return &e.Rule, e.Name.Text
		}
	}
	return &c.Rule, ""
}

func oneNumber(v float64) *expr.Column { return &expr.Column{Kind: expr.Number, Num: []float64{v}} }

// column returns one value as a column of one row.
func column(v value) *expr.Column {
	switch v.kind {
	case expr.Text:
		return &expr.Column{Kind: expr.Text, Code: []uint32{0}, Dict: []string{v.text}}
	case expr.Bool:
		t := expr.False
		if v.text == "true" {
			t = expr.True
		}
		return &expr.Column{Kind: expr.Bool, Truth: []uint8{t}}
	default:
		return &expr.Column{Kind: v.kind, Num: []float64{v.num}}
	}
}

// gridOf returns where a fit's curve is tabulated.
func gridOf(g *spec.Grid, lo, hi float64) ([]float64, error) {
	if len(g.At) > 0 {
		return g.At, nil
	}
	if g.From != nil {
		lo = *g.From
	}
	if g.To != nil {
		hi = *g.To
	}
	if hi < lo {
		return nil, nil
	}
	if g.Step > 0 {
		first, last := math.Ceil(lo/g.Step), math.Floor(hi/g.Step)
		if last-first > maxGrid {
			return nil, fmt.Errorf("grid step = %s makes %.0f points, at most %d are tabulated; use a wider step",
				table.FormatNumber(g.Step), last-first+1, maxGrid)
		}
		var out []float64
		for k := first; k <= last; k++ {
			out = append(out, float64(k*g.Step))
		}
		return out, nil
	}
	out := make([]float64, g.Points)
	for i := range out {
		t := float64(i) / float64(max(1, g.Points-1))
		out[i] = lo + float64((hi-lo)*t)
	}
	if len(out) > 1 {
		out[len(out)-1] = hi
	}
	return out, nil
}

// maxGrid bounds one fit's table.
const maxGrid = 1_000_000
