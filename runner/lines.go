package runner

import (
	"context"
	"fmt"
	"sort"
	"strings"
)

// FileLines are the lines of one file whose rows went into a fit.
type FileLines struct {
	Path  string
	N     int
	Lines string // "2-37, 40"; shortened where they are many stretches
}

// linesLimit is how many bytes of inputs are read again to name lines.
const linesLimit = 256 << 20

// fitLines says which lines of the inputs a fit's rows stand on, where the files
// are still those of the run; note says why not.
func (r *Recorded) fitLines(ctx context.Context, cf *curveFits, group []string) (out []FileLines, note string) {
	size := int64(0)
	was := map[string]string{}
	for _, in := range r.Record.Inputs {
		for _, f := range in.Files {
			size += f.Bytes
			was[in.Name+"\n"+f.Path] = f.SHA256
		}
	}
	if size > linesLimit {
		return nil, "the inputs are too large to read again for their lines"
	}
	files, err := hashInputs(ctx, r.Study)
	if err != nil {
		return nil, "the data are not here, so their lines cannot be named"
	}
	for name, fs := range files {
		for _, f := range fs {
			if was[name+"\n"+f.Path] != f.SHA256 {
				return nil, fmt.Sprintf("%s is not what it was in this run, so lines cannot be named", f.Path)
			}
		}
	}
	c := cf.def
	ts := &tables{study: r.Study, workers: 1, frames: map[string]*frame{}}
	f, err := ts.get(ctx, c.From)
	if err != nil {
		return nil, "the data cannot be read again: " + err.Error()
	}
	groups, _, err := form(c, f, r.Study)
	if err != nil {
		return nil, "the data cannot be read again: " + err.Error()
	}
	w := newWeighing(c, f)
	at := map[string][]int{}
	for _, g := range groups {
		text := make([]string, len(g.values))
		for i, v := range g.values {
			text[i] = v.String()
		}
		if label(cf.by, text) != label(cf.by, group) {
			continue
		}
		for _, row := range g.rows {
			if w.w != nil && w.w[row] == 0 {
				continue
			}
			path, line := f.place(int(row))
			at[path] = append(at[path], line)
		}
	}
	for path, lines := range at {
		out = append(out, FileLines{path, len(lines), stretches(lines)})
	}
	sort.Slice(out, func(i, j int) bool { return out[i].Path < out[j].Path })
	return out, ""
}

// stretches writes line numbers as stretches, at most twelve.
func stretches(lines []int) string {
	sort.Ints(lines)
	var parts []string
	for i := 0; i < len(lines); {
		j := i
		for j+1 < len(lines) && lines[j+1] <= lines[j]+1 {
			j++
		}
		s := fmt.Sprint(lines[i])
		if lines[j] > lines[i] {
			s += fmt.Sprintf("-%d", lines[j])
		}
		parts = append(parts, s)
		i = j + 1
	}
	if len(parts) > 12 {
		return strings.Join(parts[:12], ", ") + fmt.Sprintf(" and %d more stretches", len(parts)-12)
	}
	return strings.Join(parts, ", ")
}
