//go:build !amd64

package spline

// lanes is the memory of the vector kernel, of which there is none here.
type lanes struct{}

// evaluateLanes reports that there is no vector kernel for this processor.
func (*Workspace) evaluateLanes(*Data, *[4]float64, *[4]Criteria, bool) bool { return false }
