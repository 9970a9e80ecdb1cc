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

var update = flag.Bool("update", false, "write the outputs that pages show anew")

// runID matches what differs from run to run: its id and its time.
var runID = regexp.MustCompile(`\b\d{6}-[0-9a-f]{12}\b|\d{4}-\d\d-\d\dT\d\d:\d\d:\d\dZ`)

// pages are the pages whose commands are run, each with the least number of
// commands and of whole specs that it shows.
var pages = []struct {
	path            string
	commands, specs int
}{
	{"README.md", 8, 1},
	{"examples/harbour/README.md", 7, 0},
}

// TestREADME runs every command that a page shows, in order, in one folder
// with copies of the examples in it, and compares what is printed. A line
// "..." stands for any lines.
func TestREADME(t *testing.T) {
	for _, p := range pages {
		t.Run(p.path, func(t *testing.T) {
			path := filepath.Join(wd, top, filepath.FromSlash(p.path))
			b, err := os.ReadFile(path)
			if err != nil {
				t.Fatal(err)
			}
			dir := t.TempDir()
			for _, name := range []string{"first", "pears", "harbour"} {
				if err := copyTree(filepath.Join(wd, top, "examples", name), filepath.Join(dir, "examples", name)); err != nil {
					t.Fatal(err)
				}
			}
			t.Chdir(dir)
			t.Setenv("BATTEN_WHO", "A. Analyst")
			t.Setenv("SOURCE_DATE_EPOCH", "1790000000")

			parts := strings.Split(string(b), "```")
			commands, specs := 0, 0
			for i := 1; i < len(parts); i += 2 {
				kind, body, _ := strings.Cut(parts[i], "\n")
				switch kind {
				case "console":
					n, text := runBlock(t, p.path, body)
					commands += n
					parts[i] = "console\n" + text
				case "hcl":
					if strings.HasPrefix(body, "study") {
						specs++
						if _, err := spec.Parse(p.path, dir, []byte(body)); err != nil {
							t.Errorf("a spec in %s: %v", p.path, err)
						}
					}
				}
			}
			if commands < p.commands || specs < p.specs {
				t.Errorf("%s shows %d commands and %d specs: this test found too few", p.path, commands, specs)
			}
			if *update && !t.Failed() {
				if err := os.WriteFile(path, []byte(strings.Join(parts, "```")), 0o666); err != nil {
					t.Fatal(err)
				}
			}
		})
	}
}

// wd is the package's folder: tests change theirs.
var wd, _ = os.Getwd()

// runBlock runs the commands of one block, compares, and returns the block as
// it should be.
func runBlock(t *testing.T, page, body string) (n int, text string) {
	var out strings.Builder
	lines := strings.Split(strings.TrimRight(body, "\n"), "\n")
	for i := 0; i < len(lines); {
		cmd, ok := strings.CutPrefix(lines[i], "$ ")
		if !ok {
			t.Fatalf("a console block of %s begins with %q, expected $ and a command", page, lines[i])
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
		cut := -1 // where the page cuts the output short
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
			t.Errorf("$ %s\nprints\n%s\n%s says\n%s", cmd, a, page, b)
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

// runShown runs one command line as a page shows it.
func runShown(t *testing.T, cmd string) string {
	t.Helper()
	cmd = strings.Replace(cmd, "go run ./cmd/batten", "batten", 1)
	var args []string
	for _, m := range regexp.MustCompile(`"([^"]*)"|(\S+)`).FindAllStringSubmatch(cmd, -1) {
		args = append(args, m[1]+m[2])
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
	case "head":
		b, err := os.ReadFile(args[len(args)-1])
		if err != nil {
			t.Error(err)
			return ""
		}
		lines := strings.SplitAfter(string(b), "\n")
		return strings.Join(lines[:min(3, len(lines))], "")
	case "cp": // files into a folder
		for _, file := range args[1 : len(args)-1] {
			b, err := os.ReadFile(file)
			if err == nil {
				err = os.WriteFile(filepath.Join(args[len(args)-1], filepath.Base(file)), b, 0o666)
			}
			if err != nil {
				t.Error(err)
			}
		}
		return ""
	}
	t.Errorf("a page shows %q, which this test cannot run", cmd)
	return ""
}
