package cli

import (
	"os/exec"
	"strings"
	"testing"
)

// TestImportsPointOneWay holds the direction of imports: cmd to runner to
// spec, methods and reports, which do not know each other; methods knows
// nothing of HCL or of files.
func TestImportsPointOneWay(t *testing.T) {
	out, err := exec.Command("go", "list", "-f", `{{.ImportPath}} {{join .Imports " "}}`, "batten/...").Output()
	if err != nil {
		t.Fatalf("go list: %v", err)
	}
	// what each layer may import of the module
	may := map[string][]string{
		"cmd":      {"cmd", "runner", "spec", "methods", "reports"},
		"runner":   {"runner", "spec", "methods", "reports"},
		"spec":     {"spec"},
		"methods":  {"methods"},
		"reports":  {"reports"},
		"examples": {},
	}
	never := map[string][]string{
		"methods": {"os", "io/fs", "path/filepath", "github.com/hashicorp/hcl", "github.com/zclconf/go-cty", "encoding/csv"},
		"reports": {"os", "net/http", "math/rand"},
	}
	seen := 0
	for line := range strings.Lines(string(out)) {
		fields := strings.Fields(line)
		layer, _, _ := strings.Cut(strings.TrimPrefix(fields[0], "batten/"), "/")
		allowed, known := may[layer]
		if !known {
			t.Errorf("%s: a new top-level folder; the layout is fixed", fields[0])
			continue
		}
		seen++
		for _, imp := range fields[1:] {
			if to, ok := strings.CutPrefix(imp, "batten/"); ok {
				top, _, _ := strings.Cut(to, "/")
				ok := false
				for _, a := range allowed {
					ok = ok || a == top
				}
				if !ok {
					t.Errorf("%s imports %s: %s may import only %v", fields[0], imp, layer, allowed)
				}
			}
			for _, n := range never[layer] {
				if imp == n || strings.HasPrefix(imp, n+"/") {
					t.Errorf("%s imports %s, which %s must not", fields[0], imp, layer)
				}
			}
		}
	}
	if seen < 10 {
		t.Fatalf("go list named only %d packages: this test looked at nothing", seen)
	}
}
