package cli

import (
	"bytes"
	"context"
	"crypto/ed25519"
	"crypto/rand"
	"encoding/pem"
	"fmt"
	"io/fs"
	"os"
	"os/signal"
	"path/filepath"
	"strconv"
	"strings"
	"testing"

	"github.com/rogpeppe/go-internal/testscript"
	"golang.org/x/crypto/ssh"
)

const top = "../../.."

func TestMain(m *testing.M) {
	testscript.Main(m, map[string]func(){
		"batten": func() {
			ctx, stop := signal.NotifyContext(context.Background(), os.Interrupt)
			code := Run(ctx, os.Args[1:], os.Stdin, os.Stdout, os.Stderr)
			stop()
			os.Exit(code)
		},
	})
}

// TestScripts runs testdata/script: the program as a user meets it.
func TestScripts(t *testing.T) {
	testscript.Run(t, testscript.Params{
		Dir: top + "/testdata/script",
		Setup: func(e *testscript.Env) error {
			e.Setenv("BATTEN_WHO", "A. Tester")
			for _, name := range []string{"first", "pears"} {
				if err := copyTree(filepath.Join(top, "examples", name), filepath.Join(e.WorkDir, name)); err != nil {
					return err
				}
			}
			return nil
		},
		Cmds: map[string]func(*testscript.TestScript, bool, []string){
			// newkey FILE [PASSPHRASE]: an SSH key made anew, its public half in FILE.pub
			"newkey": func(ts *testscript.TestScript, _ bool, args []string) {
				_, private, err := ed25519.GenerateKey(rand.Reader)
				ts.Check(err)
				block, err := ssh.MarshalPrivateKey(private, "")
				if len(args) > 1 {
					block, err = ssh.MarshalPrivateKeyWithPassphrase(private, "", []byte(args[1]))
				}
				ts.Check(err)
				public, err := ssh.NewPublicKey(private.Public())
				ts.Check(err)
				ts.Check(os.WriteFile(ts.MkAbs(args[0]), pem.EncodeToMemory(block), 0o600))
				ts.Check(os.WriteFile(ts.MkAbs(args[0]+".pub"), ssh.MarshalAuthorizedKey(public), 0o600))
			},
			// signers LIST PRINCIPAL PUBLIC: adds a line to a list of allowed signers
			"signers": func(ts *testscript.TestScript, _ bool, args []string) {
				f, err := os.OpenFile(ts.MkAbs(args[0]), os.O_APPEND|os.O_CREATE|os.O_WRONLY, 0o666)
				ts.Check(err)
				_, err = fmt.Fprintf(f, "%s namespaces=\"batten-ledger\" %s", args[1], ts.ReadFile(args[2]))
				ts.Check(err)
				ts.Check(f.Close())
			},
			// replace OLD NEW FILE: puts one text in the place of another, once
			"replace": func(ts *testscript.TestScript, _ bool, args []string) {
				old := ts.ReadFile(args[2])
				now := strings.Replace(old, args[0], args[1], 1)
				if now == old {
					ts.Fatalf("%s holds no %q", args[2], args[0])
				}
				ts.Check(os.WriteFile(ts.MkAbs(args[2]), []byte(now), 0o666))
			},
			// exits N cmd...: the command must end with that very status
			"exits": func(ts *testscript.TestScript, _ bool, args []string) {
				want, err := strconv.Atoi(args[0])
				ts.Check(err)
				var out, errs bytes.Buffer
				wd := ts.MkAbs(".")
				argv := args[2:]
				for i, a := range argv {
					if _, err := os.Stat(filepath.Join(wd, a)); err == nil && !strings.HasPrefix(a, "-") {
						argv[i] = filepath.Join(wd, a)
					}
				}
				if got := Run(context.Background(), argv, nil, &out, &errs); got != want {
					ts.Fatalf("exit status %d, want %d\n%s\n%s", got, want, out.String(), errs.String())
				}
			},
		},
	})
}

func copyTree(from, to string) error {
	return filepath.WalkDir(from, func(p string, d fs.DirEntry, err error) error {
		if err != nil {
			return err
		}
		rel, _ := filepath.Rel(from, p)
		if d.IsDir() {
			if n := d.Name(); n == "out" || n == ".batten" || n == "make" {
				return filepath.SkipDir
			}
			return os.MkdirAll(filepath.Join(to, rel), 0o777)
		}
		b, err := os.ReadFile(p)
		if err != nil {
			return err
		}
		return os.WriteFile(filepath.Join(to, rel), b, 0o666)
	})
}

// TestBadData runs every study of testdata/baddata and holds it to its
// want.txt: exit status, what is said, and that nothing is half written.
func TestBadData(t *testing.T) {
	dirs, err := os.ReadDir(top + "/testdata/baddata")
	if err != nil {
		t.Fatal(err)
	}
	n := 0
	for _, d := range dirs {
		if !d.IsDir() {
			continue
		}
		n++
		t.Run(d.Name(), func(t *testing.T) {
			t.Parallel()
			study := filepath.Join(t.TempDir(), d.Name())
			if err := copyTree(filepath.Join(top, "testdata/baddata", d.Name()), study); err != nil {
				t.Fatal(err)
			}
			b, err := os.ReadFile(filepath.Join(study, "want.txt"))
			if err != nil {
				t.Fatal(err)
			}
			lines := strings.Split(strings.TrimSpace(string(b)), "\n")
			want, err := strconv.Atoi(strings.TrimSpace(lines[0]))
			if err != nil {
				t.Fatal(err)
			}
			var out, errs bytes.Buffer
			got := Run(context.Background(), []string{"run", study}, nil, &out, &errs)
			said := out.String() + errs.String()
			if got != want {
				t.Errorf("exit status %d, want %d:\n%s", got, want, said)
			}
			for _, l := range lines[1:] {
				if l = strings.TrimSpace(l); !strings.Contains(said, l) {
					t.Errorf("nothing says %q:\n%s", l, said)
				}
			}
			_, err = os.Stat(filepath.Join(study, "out"))
			if want != 0 && err == nil {
				t.Error("there is an out/ folder after a failed run")
			}
			_ = filepath.WalkDir(study, func(p string, d fs.DirEntry, err error) error {
				if err == nil && strings.Contains(d.Name(), "tmp-") {
					t.Errorf("a temporary file was left: %s", p)
				}
				return nil
			})
		})
	}
	if n < 60 {
		t.Errorf("only %d studies were run", n)
	}
}
