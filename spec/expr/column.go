// Package expr compiles expressions over columns to typed kernels.
//
// Steps: Compile walks an HCL syntax tree once, checks every type and name
// against a Schema, folds constants, and returns a Program; Program.Eval runs
// it column by column over blocks of rows. It reads no files and knows no
// blocks of the spec.
package expr

import "math"

// Kind is the type of a column or of an expression's value.
type Kind uint8

const (
	Number Kind = iota + 1
	Text
	Bool
	Date // days since 1970-01-01 UTC, in Column.Num
)

// Truth values of a Bool column. Unknown is a missing value.
const (
	False uint8 = iota
	True
	Unknown
)

// NoText is the code of a missing cell of a Text column.
const NoText = ^uint32(0)

// Column holds one column of a table. Number and Date columns use Num, where
// NaN is missing (no infinities are ever stored); Text columns use Code and
// Dict (Dict without repeats, in any order); Bool columns use Truth.
type Column struct {
	Kind  Kind
	Num   []float64
	Code  []uint32
	Dict  []string
	Truth []uint8
}

// Len returns the number of rows.
func (c *Column) Len() int {
	switch c.Kind {
	case Text:
		return len(c.Code)
	case Bool:
		return len(c.Truth)
	default:
		return len(c.Num)
	}
}

// Missing tells whether row i has no value.
func (c *Column) Missing(i int) bool {
	switch c.Kind {
	case Text:
		return c.Code[i] == NoText
	case Bool:
		return c.Truth[i] == Unknown
	default:
		return math.IsNaN(c.Num[i])
	}
}
