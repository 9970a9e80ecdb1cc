package runner

import (
	"context"
	"os"
	"os/exec"
	"strings"
	"testing"

	"batten/spec"
)

// git runs git in a folder at a given time.
func git(t *testing.T, dir, when string, args ...string) {
	t.Helper()
	c := exec.Command("git", append([]string{"-C", dir, "-c", "user.name=A. Analyst", "-c", "user.email=a@example.org", "-c", "commit.gpgsign=false"}, args...)...)
	c.Env = append(os.Environ(), "GIT_COMMITTER_DATE="+when, "GIT_AUTHOR_DATE="+when, "GIT_CONFIG_GLOBAL=/dev/null")
	if out, err := c.CombinedOutput(); err != nil {
		t.Fatalf("git %v: %v: %s", args, err, out)
	}
}

// TestRuleHistory: the commit that gave the rule its meaning is found behind
// younger ones that changed only what stands around it, and it is said whether
// the data were there before.
func TestRuleHistory(t *testing.T) {
	if _, err := exec.LookPath("git"); err != nil {
		t.Skip("git is not installed")
	}
	dir := write(t, "gcv", map[string][]string{"d.csv": rowsOf(4, 20)})
	history := func() History {
		t.Helper()
		s, err := spec.Load(dir)
		if err != nil {
			t.Fatal(err)
		}
		return ruleHistory(context.Background(), s, "c", "", []InputRecord{{Name: "d", Files: []FileRecord{{Path: "d.csv"}}}})
	}
	if h := history(); h.Unknown == "" {
		t.Errorf("outside git: %+v", h)
	}
	git(t, dir, "2026-01-01T00:00:00Z", "init", "-q")
	git(t, dir, "2026-01-01T00:00:00Z", "add", "study.hcl")
	git(t, dir, "2026-01-01T00:00:00Z", "commit", "-qm", "the plan")
	git(t, dir, "2026-02-01T00:00:00Z", "add", "d.csv")
	git(t, dir, "2026-02-01T00:00:00Z", "commit", "-qm", "the data")
	text := strings.Replace(studyText, "RULE", "gcv", 1)
	put(t, dir, "study.hcl", strings.Replace(text, `title = "A test (invented)"`, `title = "Another title"`, 1))
	git(t, dir, "2026-03-01T00:00:00Z", "commit", "-qam", "a title")
	h := history()
	if h.Changed == nil || h.Changed.Subject != "the plan" || !h.Unchanged || h.After || len(h.Data) != 1 || h.Data[0].Subject != "the data" {
		t.Errorf("a rule older than the data: %+v", h)
	}
	put(t, dir, "study.hcl", strings.Replace(studyText, "RULE", "reml", 1))
	if h := history(); h.Changed != nil {
		t.Errorf("a rule that is not committed: %+v", h)
	}
	git(t, dir, "2026-04-01T00:00:00Z", "commit", "-qam", "another rule")
	h = history()
	if h.Changed == nil || h.Changed.Subject != "another rule" || h.Unchanged || !h.After {
		t.Errorf("a rule younger than the data: %+v", h)
	}
	// the exception has not changed since the plan
	s, err := spec.Load(dir)
	if err != nil {
		t.Fatal(err)
	}
	if h := ruleHistory(context.Background(), s, "c", "stiff one", nil); h.Changed == nil || h.Changed.Subject != "the plan" {
		t.Errorf("the exception: %+v", h)
	}
}

func TestStretches(t *testing.T) {
	if got := stretches([]int{9, 2, 3, 4, 7, 10}); got != "2-4, 7, 9-10" {
		t.Errorf("%q", got)
	}
}
