package runner

import (
	"context"
	"math"
	"sort"
	"sync"

	"github.com/fxamacker/cbor/v2"
	"golang.org/x/sync/errgroup"

	"batten/methods/choose"
	"batten/spec"
)

// sharedChoice is what the groups under one rule have in common.
type sharedChoice struct {
	Value  float64 `cbor:"v"` // log lambda, or edf
	Groups int     `cbor:"n"`
}

// member is a group that follows a shared rule.
type member struct {
	j   *job
	i   int
	key string
}

// share settles, for every rule whose groups share lambda or edf, the one
// value that minimises the sum of their scores.
func (r *curveRun) share(ctx context.Context, c *spec.Curve, w *weighing, jobs []*job) (map[*spec.Rule]sharedChoice, error) {
	any := c.Rule.Shared != ""
	for i := range c.Exceptions {
		any = any || c.Exceptions[i].Rule.Shared != ""
	}
	if !any {
		return nil, nil
	}
	members := map[*spec.Rule][]member{}
	var mu sync.Mutex
	err := r.eachJob(ctx, jobs, func(ft *fitter, j *job) error {
		for i := range j.groups {
			f, rule, err := r.describe(ft, c, w, j, i, nil)
			if err != nil {
				return err
			}
			if rule.Shared != "" && f.Failed == "" {
				mu.Lock()
				members[rule] = append(members[rule], member{j, i, f.Key})
				mu.Unlock()
			}
		}
		return nil
	})
	if err != nil {
		return nil, err
	}
	out := map[*spec.Rule]sharedChoice{}
	for rule, ms := range members {
		sort.Slice(ms, func(a, b int) bool {
			return compareValues(ms[a].j.groups[ms[a].i].values, ms[b].j.groups[ms[b].i].values) < 0
		})
		k := newKey("shared", objectVersion)
		methodLines(k)
		ruleLines(k, r.study, rule)
		for _, m := range ms {
			k.add("fit", m.key)
		}
		var ch sharedChoice
		if b, _, ok := r.store.Get(k.String()); ok && cbor.Unmarshal(b, &ch) == nil {
			out[rule] = ch
			continue
		}
		if ch, err = r.settleShared(ctx, c, w, rule, ms); err != nil {
			return nil, err
		}
		b, err := codec.Marshal(ch)
		if err != nil {
			return nil, err
		}
		if _, err := r.store.Put(k.String(), b); err != nil {
			return nil, err
		}
		out[rule] = ch
	}
	return out, nil
}

// settleShared minimises the sum over the groups that the rule leaves room in:
// over the range of lambda (or edf) that suits every one of them.
func (r *curveRun) settleShared(ctx context.Context, c *spec.Curve, w *weighing, rule *spec.Rule, ms []member) (sharedChoice, error) {
	by := byNames(c)
	lows, highs := make([]float64, len(ms)), make([]float64, len(ms))
	use := make([]bool, len(ms))
	each := func(do func(ft *fitter, k int, block []int32, rule choose.Rule) error) error {
		const block = 8
		eg, ctx := errgroup.WithContext(ctx)
		overBlocks(ctx, eg, (len(ms)+block-1)/block, r.workers, nil, func(ft *fitter, b int) error {
			for k := b * block; k < min((b+1)*block, len(ms)); k++ {
				m := ms[k]
				of, err := r.load(ft, c, w, m.j, m.i, rule)
				if err != nil {
					return err
				}
				if err := do(ft, k, of, chooseRule(r.study, rule, label(by, m.j.text[m.i]), of, 0)); err != nil {
					return err
				}
			}
			return nil
		})
		return eg.Wait()
	}
	err := each(func(ft *fitter, k int, block []int32, cr choose.Rule) error {
		var err error
		lows[k], highs[k], err = choose.Reach(&ft.ws, &ft.data, cr, rule.Shared)
		if use[k] = err == nil; !use[k] {
			if _, ok := dataCause(err); !ok {
				return err
			}
		}
		return nil
	})
	if err != nil {
		return sharedChoice{}, err
	}
	ch := sharedChoice{}
	lo, hi := math.Inf(-1), math.Inf(-1)
	if rule.Shared == spec.SharedEDF {
		hi = math.Inf(1)
	}
	for k := range ms {
		if !use[k] {
			continue
		}
		ch.Groups++
		lo = max(lo, lows[k])
		if rule.Shared == spec.SharedEDF {
			hi = min(hi, highs[k])
		} else { // up to where the last of them is a straight line
			hi = max(hi, highs[k])
		}
	}
	if ch.Groups == 0 || !(hi > lo) {
		ch.Groups = 0
		return ch, nil
	}
	ch.Value, err = choose.Share(rule.Shared, lo, hi, func(at []float64) ([]float64, error) {
		terms := make([][]float64, len(ms))
		err := each(func(ft *fitter, k int, block []int32, cr choose.Rule) error {
			if !use[k] {
				return nil
			}
			terms[k] = make([]float64, len(at))
			return choose.Terms(&ft.ws, &ft.data, cr, rule.Shared, at, terms[k])
		})
		sum := make([]float64, len(at))
		for _, t := range terms { // in the order of the groups
			for i, v := range t {
				sum[i] += v
			}
		}
		return sum, err
	})
	return ch, err
}
