package cli

import (
	"bytes"
	"debug/buildinfo"
	"os"
	"os/exec"
	"path/filepath"
	"runtime"
	"strings"
	"testing"

	slsa "github.com/in-toto/attestation/go/predicates/provenance/v1"
	intoto "github.com/in-toto/attestation/go/v1"
	"google.golang.org/protobuf/encoding/protojson"

	"batten/runner/table"
)

// TestRecordOfTheProgram builds the program, runs a study with it, and reads
// the statement about it with the standards' own types and checks (Go module
// github.com/in-toto/attestation v1.2.0): every output and input is there with
// the digest of the file that stands on disk, and every module that the
// toolchain says the program was built of.
func TestRecordOfTheProgram(t *testing.T) {
	if testing.Short() {
		t.Skip("builds the program")
	}
	dir := t.TempDir()
	exe := filepath.Join(dir, "batten")
	if runtime.GOOS == "windows" {
		exe += ".exe"
	}
	if out, err := exec.Command("go", "build", "-o", exe, "batten/cmd/batten").CombinedOutput(); err != nil {
		t.Fatalf("go build: %v\n%s", err, out)
	}
	study := filepath.Join(dir, "pears")
	if err := copyTree(filepath.Join(top, "examples/pears"), study); err != nil {
		t.Fatal(err)
	}
	run := func(args ...string) []byte {
		t.Helper()
		c := exec.Command(exe, args...)
		c.Env = append(os.Environ(), "BATTEN_WHO=A. Tester")
		var out, errs bytes.Buffer
		c.Stdout, c.Stderr = &out, &errs
		if err := c.Run(); err != nil {
			t.Fatalf("%v: %v\n%s", args, err, errs.String())
		}
		if errs.Len() > 0 {
			t.Errorf("%v says %s", args, errs.String())
		}
		return out.Bytes()
	}
	run("run", study, "-q")
	b := run("record", study, "--as", "in-toto")

	var s intoto.Statement
	if err := protojson.Unmarshal(b, &s); err != nil {
		t.Fatal(err)
	}
	if err := s.Validate(); err != nil {
		t.Fatal(err)
	}
	inner, err := protojson.Marshal(s.Predicate)
	if err != nil {
		t.Fatal(err)
	}
	var p slsa.Provenance
	if err := protojson.Unmarshal(inner, &p); err != nil {
		t.Fatal(err)
	}
	if err := p.Validate(); err != nil {
		t.Fatal(err)
	}
	stands := func(d *intoto.ResourceDescriptor) {
		t.Helper()
		b, err := os.ReadFile(filepath.Join(study, filepath.FromSlash(d.Name)))
		if sum := table.SHA256(b); err != nil || sum != d.Digest["sha256"] {
			t.Errorf("%s: %v, digest %s, the statement says %s", d.Name, err, sum, d.Digest["sha256"])
		}
	}
	made := map[string]bool{}
	for _, d := range s.Subject {
		stands(d)
		made[d.Name] = true
	}
	for _, f := range []string{"out/firmness_grid.csv", "out/weekly.md", "out/weekly.html", "out/store_effect_tests.csv"} {
		if !made[f] {
			t.Errorf("%s is no subject", f)
		}
	}
	files, mods := 0, map[string]string{}
	for _, d := range p.BuildDefinition.ResolvedDependencies {
		if d.Annotations.AsMap()["role"] == "module" {
			mods[d.Name] = d.Uri
			if len(d.Digest["dirHash"]) != 64 {
				t.Errorf("module %s has the digest %v", d.Name, d.Digest)
			}
			continue
		}
		stands(d)
		files++
	}
	if files != 3 {
		t.Errorf("%d files went in, expected the spec and two inputs", files)
	}
	info, err := buildinfo.ReadFile(exe)
	if err != nil {
		t.Fatal(err)
	}
	if len(info.Deps) < 10 || len(mods) != len(info.Deps) {
		t.Errorf("%d modules, the program is built of %d", len(mods), len(info.Deps))
	}
	for _, m := range info.Deps {
		if !strings.HasSuffix(mods[m.Path], "@"+m.Version) {
			t.Errorf("module %s %s is %q", m.Path, m.Version, mods[m.Path])
		}
	}
	for _, as := range []string{"prov", "ro-crate"} {
		b := run("record", study, "--as", as)
		for f := range made {
			if !bytes.Contains(b, []byte(f)) {
				t.Errorf("%s: %s is not there", as, f)
			}
		}
		if !bytes.Contains(b, []byte("pkg:golang/github.com/hashicorp/hcl/v2@")) || !bytes.Contains(b, []byte("A. Tester")) {
			t.Errorf("%s: modules or the person are not there", as)
		}
	}
}
