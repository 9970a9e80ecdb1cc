package cli

import (
	"bytes"
	"context"
	"flag"
	"os"
	"path/filepath"
	"regexp"
	"strings"
	"testing"

	"batten/spec"
)

var update = flag.Bool("update", false, "write README's outputs anew")

// runID matches what differs from run to run and from machine to machine: a
// run's id and its time, and the version of Go.
var runID = regexp.MustCompile(`\bgo1\.\d+(?:\.\d+)?\b|\b\d{6}-[0-9a-f]{12}\b|\d{4}-\d\d-\d\dT\d\d:\d\d:\d\dZ`)

// TestREADME runs every command that README shows, in order, in one folder
// with the examples in it, and compares what is printed. A line "..." stands
// for any lines.
func TestREADME(t *testing.T) {
	commands, specs := runPage(t, "README.md", "first", "pears")
	if commands < 8 || specs < 1 {
		t.Errorf("README shows %d commands and %d specs: this test found too few", commands, specs)
	}
}

// TestHarbourPage walks through the page of examples/harbour. The year's file as
// it first was is kept for it in first/.
func TestHarbourPage(t *testing.T) {
	if commands, _ := runPage(t, "examples/harbour/README.md", "harbour"); commands < 12 {
		t.Errorf("the page shows %d commands: this test found too few", commands)
	}
}

// runPage runs the commands of a page in a copy of the examples.
func runPage(t *testing.T, page string, examples ...string) (commands, specs int) {
	t.Helper()
	path := filepath.Join(top, filepath.FromSlash(page))
	b, err := os.ReadFile(path)
	if err != nil {
		t.Fatal(err)
	}
	dir := t.TempDir()
	for _, name := range examples {
		if err := copyTree(filepath.Join(top, "examples", name), filepath.Join(dir, "examples", name)); err != nil {
			t.Fatal(err)
		}
		if data := filepath.Join(dir, "examples", name, "data"); name == "harbour" {
			if err := copyTree(data, filepath.Join(dir, "examples", name, "first")); err != nil {
				t.Fatal(err)
			}
		}
	}
	t.Chdir(dir)
	t.Setenv("BATTEN_WHO", "A. Analyst")
	t.Setenv("SOURCE_DATE_EPOCH", "1790000000")

	parts := strings.Split(string(b), "```")
	for i := 1; i < len(parts); i += 2 {
		kind, body, _ := strings.Cut(parts[i], "\n")
		switch kind {
		case "console":
			n, text := runBlock(t, body)
			commands += n
			parts[i] = "console\n" + text
		case "hcl":
			if strings.HasPrefix(body, "study") {
				specs++
				if _, err := spec.Parse("README.md", dir, []byte(body)); err != nil {
					t.Errorf("a spec in %s: %v", page, err)
				}
			}
		}
	}
	if *update && !t.Failed() {
		if err := os.WriteFile(filepath.Join(wd, path), []byte(strings.Join(parts, "```")), 0o666); err != nil {
			t.Fatal(err)
		}
	}
	return commands, specs
}

// wd is the package's folder: tests change theirs.
var wd, _ = os.Getwd()

// runBlock runs the commands of one block, compares, and returns the block as
// it should be.
func runBlock(t *testing.T, body string) (n int, text string) {
	var out strings.Builder
	lines := strings.Split(strings.TrimRight(body, "\n"), "\n")
	for i := 0; i < len(lines); {
		cmd, ok := strings.CutPrefix(lines[i], "$ ")
		if !ok {
			t.Fatalf("a console block of README begins with %q, expected $ and a command", lines[i])
		}
		i++
		var want []string
		for i < len(lines) && !strings.HasPrefix(lines[i], "$ ") {
			want = append(want, lines[i])
			i++
		}
		n++
		got := runShown(t, cmd)
		out.WriteString("$ " + cmd + "\n")
		cut := -1 // where README cuts the output short
		for k, l := range want {
			if l == "..." {
				cut = k
			}
		}
		gotLines := strings.Split(strings.TrimRight(got, "\n"), "\n")
		if got == "" {
			gotLines = nil
		}
		var shown []string
		if cut >= 0 {
			tail := want[cut+1:]
			if cut > len(gotLines) || len(tail) > len(gotLines)-cut {
				t.Errorf("$ %s printed only %d lines:\n%s", cmd, len(gotLines), got)
				continue
			}
			shown = append(append(append(shown, gotLines[:cut]...), "..."), gotLines[len(gotLines)-len(tail):]...)
		} else {
			shown = gotLines
		}
		for _, l := range shown {
			out.WriteString(strings.TrimRight(l, " ") + "\n")
		}
		if *update {
			continue
		}
		if a, b := normal(shown), normal(want); a != b {
			t.Errorf("$ %s\nprints\n%s\nREADME says\n%s", cmd, a, b)
		}
	}
	return n, out.String()
}

func normal(lines []string) string {
	for i := range lines {
		lines[i] = strings.TrimRight(lines[i], " ")
	}
	return runID.ReplaceAllString(strings.Join(lines, "\n"), "RUN")
}

// runShown runs one command line as README shows it.
func runShown(t *testing.T, cmd string) string {
	t.Helper()
	cmd = strings.Replace(cmd, "go run ./cmd/batten", "batten", 1)
	var args []string
	for _, m := range regexp.MustCompile(`(?:[^\s"]|"[^"]*")+`).FindAllString(cmd, -1) {
		args = append(args, strings.ReplaceAll(m, `"`, ""))
	}
	switch args[0] {
	case "batten":
		var stdout, stderr bytes.Buffer
		if code := Run(context.Background(), args[1:], nil, &stdout, &stderr); code != Done && code != Wrong {
			t.Errorf("$ %s: exit status %d\n%s", cmd, code, stderr.String())
		}
		if stdout.Len() == 0 {
			return stderr.String()
		}
		return stdout.String()
	case "cp":
		b, err := os.ReadFile(args[1])
		if err == nil {
			err = os.MkdirAll(filepath.Dir(args[2]), 0o777)
		}
		if err == nil {
			err = os.WriteFile(args[2], b, 0o666)
		}
		if err != nil {
			t.Error(err)
		}
		return ""
	case "head":
		b, err := os.ReadFile(args[len(args)-1])
		if err != nil {
			t.Error(err)
			return ""
		}
		lines := strings.SplitAfter(string(b), "\n")
		return strings.Join(lines[:min(3, len(lines))], "")
	}
	t.Errorf("README shows %q, which this test cannot run", cmd)
	return ""
}
