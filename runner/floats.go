package runner

import (
	"encoding/binary"
	"fmt"
	"math"

	"github.com/fxamacker/cbor/v2"

	"batten/methods/choose"
)

// floats is a list of numbers that is stored as one string of bytes, eight a
// number, little end first: several times as fast to read as a list.
type floats []float64

// MarshalCBOR writes the numbers as a byte string.
func (f floats) MarshalCBOR() ([]byte, error) {
	b := make([]byte, 8*len(f))
	for i, v := range f {
		binary.LittleEndian.PutUint64(b[8*i:], math.Float64bits(v))
	}
	return cbor.Marshal(b)
}

// UnmarshalCBOR reads them back.
func (f *floats) UnmarshalCBOR(data []byte) error {
	var b []byte
	if err := cbor.Unmarshal(data, &b); err != nil {
		return err
	}
	if len(b)%8 != 0 {
		return fmt.Errorf("%d bytes are no list of numbers", len(b))
	}
	*f = make(floats, len(b)/8)
	for i := range *f {
		(*f)[i] = math.Float64frombits(binary.LittleEndian.Uint64(b[8*i:]))
	}
	return nil
}

const candidateFields = 7

// packCandidates lays candidates out as plain numbers.
func packCandidates(c []choose.Candidate) floats {
	out := make(floats, 0, candidateFields*len(c))
	for _, x := range c {
		out = append(out, x.Lambda, x.EDF, x.RSS, x.GCV, x.LOOCV, x.REML, x.Score)
	}
	return out
}

// candidates reads them back.
func (f *storedFit) candidates() []choose.Candidate {
	out := make([]choose.Candidate, len(f.Candidates)/candidateFields)
	for i := range out {
		v := f.Candidates[candidateFields*i:]
		out[i] = choose.Candidate{Lambda: v[0], EDF: v[1], RSS: v[2], GCV: v[3], LOOCV: v[4], REML: v[5], Score: v[6]}
	}
	return out
}
