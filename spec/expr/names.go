package expr

import (
	"fmt"
	"sort"
	"strings"

	"github.com/agext/levenshtein"
)

// list writes names sorted, shortened where they are many.
func list(names []string) string {
	sort.Strings(names)
	if len(names) == 0 {
		return "none: there are no columns here"
	}
	if len(names) > 15 {
		return strings.Join(names[:15], ", ") + fmt.Sprintf(" and %d more", len(names)-15)
	}
	return strings.Join(names, ", ")
}

// Suggest names the nearest of the names, as the end of a sentence, or "":
// up to two letters differ, one in short names, or two changed places.
func Suggest(name string, all []string) string {
	sort.Strings(all)
	most := 2
	if len(name) < 4 {
		most = 1
	}
	best, at := most+1, ""
	for _, a := range all {
		d := levenshtein.Distance(strings.ToLower(name), strings.ToLower(a), nil)
		if transposed(name, a) {
			d = 1
		}
		if d < best {
			best, at = d, a
		}
	}
	if at == "" {
		return ""
	}
	return fmt.Sprintf("; did you mean %q?", at)
}

func transposed(a, b string) bool {
	if len(a) != len(b) || a == b {
		return false
	}
	i := 0
	for a[i] == b[i] {
		i++
	}
	return i+1 < len(a) && a[i] == b[i+1] && a[i+1] == b[i] && a[i+2:] == b[i+2:]
}
