package ledger

import (
	"bytes"
	"encoding/json"
	"fmt"
	"slices"

	"batten/runner/table"
)

// UnmarshalJSON keeps an acceptance as it was written beside what this version
// reads of it.
func (a *Acceptance) UnmarshalJSON(b []byte) error {
	type plain Acceptance
	if err := json.Unmarshal(b, (*plain)(a)); err != nil {
		return err
	}
	a.raw = bytes.Clone(b)
	return nil
}

// MarshalJSON writes an acceptance that was read as it was.
func (a Acceptance) MarshalJSON() ([]byte, error) {
	if a.raw != nil {
		return a.raw, nil
	}
	type plain Acceptance
	return json.Marshal(plain(a))
}

// digest is an acceptance's own, free of white space.
func (a *Acceptance) digest() (string, error) {
	b, err := json.Marshal(a)
	if err != nil {
		return "", err
	}
	var c bytes.Buffer
	if err := json.Compact(&c, b); err != nil {
		return "", err
	}
	return table.SHA256(c.Bytes()), nil
}

// Append adds an acceptance to the history, tied to the one before by its
// digest.
func (s *State) Append(a Acceptance) error {
	if last := s.Last(); last != nil {
		d, err := last.digest()
		if err != nil {
			return err
		}
		a.Previous = d
	}
	s.Accepted = append(s.Accepted, a)
	return nil
}

// Took returns the newest acceptance that took a fit of a curve; nil where
// none is known.
func (s *State) Took(curve, fit string) *Acceptance {
	for i := len(s.Accepted) - 1; i >= 0; i-- {
		a := &s.Accepted[i]
		if len(a.Only) == 0 || slices.Contains(a.Took, fit) || slices.Contains(a.Took, curve) {
			return a
		}
	}
	return nil
}

// continues makes sure that the history holds all of an older one, word for
// word and in order.
func (s *State) continues(old *State) error {
	if old == nil {
		return nil
	}
	for i := range old.Accepted {
		if i < len(s.Accepted) {
			was, err := old.Accepted[i].digest()
			if err != nil {
				return err
			}
			is, err := s.Accepted[i].digest()
			if err != nil {
				return err
			}
			if was == is {
				continue
			}
		}
		return fmt.Errorf("the history of acceptances would lose that of %s by %s; nothing was written", old.Accepted[i].When, old.Accepted[i].Who)
	}
	return nil
}

// broken returns the acceptances, by their place, that are not what the next
// one was tied to. Those of older programs were not tied.
func (s *State) broken() ([]int, error) {
	var out []int
	for i := 1; i < len(s.Accepted); i++ {
		d, err := s.Accepted[i-1].digest()
		if err != nil {
			return nil, err
		}
		if p := s.Accepted[i].Previous; p != "" && p != d {
			out = append(out, i-1)
		}
	}
	return out, nil
}
