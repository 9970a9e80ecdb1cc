package runner

import (
	"strings"
	"testing"
)

// TestSafeCells: a group named like a formula is made safe in exports, unless the
// spec says otherwise.
func TestSafeCells(t *testing.T) {
	var rows []string
	for _, r := range rowsOf(2, 20) {
		rows = append(rows, strings.Replace(r, "g00", "=1+1", 1))
	}
	for _, c := range []struct{ argument, want string }{{"", "\n'=1+1,"}, {"  safe_cells = false\n", "\n=1+1,"}} {
		dir := write(t, "gcv", map[string][]string{"d.csv": rows})
		text := strings.Replace(studyText, "RULE", "gcv", 1)
		put(t, dir, "study.hcl", strings.Replace(text, "  file = \"out/fits.csv\"\n", "  file = \"out/fits.csv\"\n"+c.argument, 1))
		execute(t, dir, 1)
		if got := outputs(t, dir)["fits.csv"]; !strings.Contains(got, c.want) {
			t.Errorf("%q: %s", c.argument, got)
		}
	}
}
