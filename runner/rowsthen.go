package runner

import (
	"context"
)

// rowsThen are a group's rows in the present files under the spec of the old
// run; nil where the files are not those of the new run, or have no such group.
func (k *comparer) rowsThen(b *before, group []string) (*oldRows, error) {
	k.reading.Lock()
	defer k.reading.Unlock()
	c := b.cf.def
	id := b.run.Record.Run + "/" + c.Name.Text
	all, ok := k.frames[id]
	if !ok {
		var err error
		if all, err = k.readThen(b); err != nil {
			return nil, err
		}
		k.frames[id] = all
	}
	return all[label(b.cf.by, group)], nil
}

// readThen reads the present files under an old spec. Files that are not those
// of the new run, or that the old spec cannot read, give nothing.
func (k *comparer) readThen(b *before) (map[string]*oldRows, error) {
	ctx := context.Background()
	files, err := hashInputs(ctx, b.run.Study)
	if err != nil {
		return nil, nil
	}
	now := map[string]bool{}
	for _, in := range k.now.Record.Inputs {
		for _, f := range in.Files {
			now[f.SHA256] = true
		}
	}
	for _, fs := range files {
		for _, f := range fs {
			if !now[f.SHA256] {
				return nil, nil
			}
		}
	}
	c := b.cf.def
	ts := &tables{study: b.run.Study, workers: k.opt.Workers, frames: map[string]*frame{}}
	f, err := ts.get(ctx, c.From)
	if err != nil {
		return nil, nil
	}
	groups, _, err := form(c, f, b.run.Study)
	if err != nil {
		return nil, nil
	}
	w := newWeighing(c, f)
	out := map[string]*oldRows{}
	ft := &fitter{}
	for _, g := range groups {
		text := make([]string, len(g.values))
		for i, v := range g.values {
			text[i] = v.String()
		}
		ft.gather(w.x, w.y, w.w, nil, g.rows)
		r := &oldRows{x: append([]float64(nil), ft.x...), y: append([]float64(nil), ft.y...)}
		if ws := ft.weights(); ws != nil {
			r.w = append([]float64(nil), ws...)
		}
		out[label(b.cf.by, text)] = r
	}
	return out, nil
}
