package elementary

import (
	"crypto/sha256"
	"encoding/binary"
	"fmt"
	"math/rand/v2"
)

// Normals returns a source of standard normal deviates that depends on what
// they are for, the seed and the name of the group, on nothing else.
func Normals(what string, seed int64, group string) func() float64 {
	h := sha256.Sum256(fmt.Appendf(nil, "%s\n%d\n%s\n", what, seed, group))
	rng := rand.NewPCG(binary.LittleEndian.Uint64(h[:]), binary.LittleEndian.Uint64(h[8:]))
	return func() float64 {
		u := (float64(rng.Uint64()>>11) + 0.5) / (1 << 53)
		return NormalQuantile(u)
	}
}
