package runner

import (
	"crypto/sha256"
	"encoding/binary"
	"encoding/hex"
	"fmt"
	"hash"
	"math"
	"sort"
	"strings"

	"batten/methods/choose"
	"batten/methods/diagnose"
	"batten/methods/reading"
	"batten/methods/spline"
	"batten/runner/table"
	"batten/spec"
)

// key is a readable description of everything that a stored object depends
// on, one influence a line. Its digest names the object.
type key struct{ b strings.Builder }

func newKey(what string, version int) *key {
	k := &key{}
	k.add(what, version)
	return k
}

// add writes one line: a word and its values, text quoted where it could be
// mistaken for something else.
func (k *key) add(word string, values ...any) {
	k.b.WriteString(word)
	for _, v := range values {
		k.b.WriteByte(' ')
		switch v := v.(type) {
		case float64:
			k.b.WriteString(table.FormatNumber(v))
		case string:
			fmt.Fprintf(&k.b, "%q", v)
		default:
			fmt.Fprint(&k.b, v)
		}
	}
	k.b.WriteByte('\n')
}

func (k *key) String() string { return k.b.String() }
func (k *key) digest() string { return digest([]byte(k.b.String())) }

func digest(b []byte) string {
	h := sha256.Sum256(b)
	return hex.EncodeToString(h[:])
}

// objectVersion is raised when the layout of stored objects changes.
const objectVersion = 1

// methodLines writes the versions of the methods behind a fit.
func methodLines(k *key) {
	k.add("spline", spline.Version)
	k.add("choose", choose.Version)
	k.add("diagnose", diagnose.Version)
}

// Methods names the methods and their versions, for records and reports.
func Methods() []string {
	return []string{
		fmt.Sprintf("spline %d", spline.Version), fmt.Sprintf("choose %d", choose.Version),
		fmt.Sprintf("diagnose %d", diagnose.Version), fmt.Sprintf("reading %d", reading.Version),
	}
}

// rowsKey describes a table: the files' digests and every step to it.
func rowsKey(k *key, s *spec.Study, name string, files map[string][]table.File) {
	if in := s.InputByName(name); in != nil {
		k.add("input", int(in.Separator), int(in.Decimal))
		missing := append([]string(nil), in.Missing...)
		sort.Strings(missing)
		for _, m := range missing {
			k.add("missing", m)
		}
		for _, c := range in.Columns {
			k.add("column", c.Name.Text, c.Input, int(c.Kind))
		}
		for _, e := range in.Expects {
			if e.That != nil {
				k.add("expect", e.That.Key())
			}
			if len(e.Unique) > 0 {
				k.add("unique", strings.Join(e.Unique, " "))
			}
		}
		for _, f := range files[name] {
			k.add("file", f.Path, f.SHA256)
		}
		return
	}
	r := s.RowsByName(name)
	rowsKey(k, s, r.From, files)
	k.add("rows", r.Name.Text)
	for _, st := range r.Steps {
		if st.Add != nil {
			k.add("add", st.Name.Text, st.Add.Key())
		} else {
			k.add("drop", st.When.Key())
		}
	}
}

// curveKey describes a curve's fits, whole: the rows and the settings that
// decide them. Band, grid, readings and guards come after the fit and are not
// part of it.
func curveKey(s *spec.Study, c *spec.Curve, files map[string][]table.File) *key {
	k := newKey("curve", objectVersion)
	methodLines(k)
	k.add("parts", partCount)
	k.add("order", c.Order)
	k.add("response", c.Response.Name.Text)
	k.add("along", c.Along.Name.Text)
	for _, b := range c.By {
		k.add("by", b.Name.Text)
	}
	if c.Weight != nil {
		k.add("weight", c.Weight.Name.Text)
	}
	if c.Sigma != nil {
		k.add("sigma", c.Sigma.Name.Text)
	}
	for _, e := range c.Exceptions {
		k.add("only", e.Name.Text, e.Only.Key())
		ruleLines(k, s, &e.Rule)
	}
	ruleLines(k, s, &c.Rule)
	rowsKey(k, s, c.From, files)
	return k
}

// ruleLines describes a smoothness rule.
func ruleLines(k *key, s *spec.Study, r *spec.Rule) {
	k.add("rule", r.Name, r.DF, r.Lambda, r.Inflate, r.Sigma, r.DFAtLeast, r.DFAtMost, r.OneSE, r.Shared)
	if r.Name == spec.KFold {
		block := ""
		if r.Block != nil {
			block = r.Block.Name.Text
		}
		k.add("folds", r.Folds, block, r.Stretches, r.Gap)
		k.add("seed", s.Seed)
	}
}

// groupKey is the digest of all that one group's fit depends on.
func groupKey(s *spec.Study, r *spec.Rule, exception, group string, d *spline.Data, block []int32, shared float64) string {
	k := newKey("fit", objectVersion)
	methodLines(k)
	ruleLines(k, s, r)
	k.add("exception", exception)
	if r.Name == spec.KFold {
		k.add("group", group)
	}
	k.add("order", d.Null())
	k.add("shared", shared)
	k.add("rows", d.N, d.ZeroWeight)
	h := sha256.New()
	hashFloats(h, d.RowX)
	hashFloats(h, d.RowY)
	hashFloats(h, d.RowW)
	if block != nil {
		b := make([]byte, 4*len(d.Order))
		for i, row := range d.Order {
			binary.LittleEndian.PutUint32(b[4*i:], uint32(block[row]))
		}
		h.Write(b)
	}
	k.add("data", hex.EncodeToString(h.Sum(nil)))
	return k.digest()
}

func hashFloats(h hash.Hash, v []float64) {
	var buf [512]byte
	for len(v) > 0 {
		n := min(len(v), len(buf)/8)
		for i, f := range v[:n] {
			binary.LittleEndian.PutUint64(buf[8*i:], math.Float64bits(f))
		}
		h.Write(buf[:8*n])
		v = v[n:]
	}
}
