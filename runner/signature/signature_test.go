package signature

import (
	"crypto/ecdsa"
	"crypto/ed25519"
	"crypto/elliptic"
	"crypto/rand"
	"crypto/rsa"
	"encoding/pem"
	"net"
	"os"
	"os/exec"
	"path/filepath"
	"runtime"
	"strings"
	"testing"
	"time"

	"github.com/hiddeco/sshsig"
	"golang.org/x/crypto/ssh"
	"golang.org/x/crypto/ssh/agent"
)

// The keys of these tests are made anew in every run.
func newKeys(t *testing.T) map[string]any {
	t.Helper()
	_, ed, err := ed25519.GenerateKey(rand.Reader)
	if err != nil {
		t.Fatal(err)
	}
	ec, err := ecdsa.GenerateKey(elliptic.P256(), rand.Reader)
	if err != nil {
		t.Fatal(err)
	}
	r, err := rsa.GenerateKey(rand.Reader, 2048)
	if err != nil {
		t.Fatal(err)
	}
	return map[string]any{"ed25519": ed, "ecdsa": ec, "rsa": r}
}

// save writes a private key, encrypted where there is a passphrase, and its
// public half beside it.
func save(t *testing.T, dir, name string, private any, passphrase string) (path, public string) {
	t.Helper()
	var block *pem.Block
	var err error
	if passphrase == "" {
		block, err = ssh.MarshalPrivateKey(private, "")
	} else {
		block, err = ssh.MarshalPrivateKeyWithPassphrase(private, "", []byte(passphrase))
	}
	if err != nil {
		t.Fatal(err)
	}
	signer, err := ssh.NewSignerFromKey(private)
	if err != nil {
		t.Fatal(err)
	}
	path = filepath.Join(dir, name)
	public = strings.TrimSpace(string(ssh.MarshalAuthorizedKey(signer.PublicKey())))
	put(t, path, string(pem.EncodeToMemory(block)))
	put(t, path+".pub", public+" a key made for a test\n")
	return path, public
}

func put(t *testing.T, path, text string) {
	t.Helper()
	if err := os.WriteFile(path, []byte(text), 0o600); err != nil {
		t.Fatal(err)
	}
}

var message = []byte("0123  ledger/study.json\n4567  ledger/c.csv\n")

func TestSignAndVerify(t *testing.T) {
	for kind, private := range newKeys(t) {
		t.Run(kind, func(t *testing.T) {
			path, public := save(t, t.TempDir(), "key", private, "")
			k, err := Open(path, "", "")
			if err != nil {
				t.Fatal(err)
			}
			sig, err := k.Sign(message)
			if err != nil {
				t.Fatal(err)
			}
			s := parseSigners("list", []byte("# who may sign\n\na.tester@example.org,board namespaces=\"batten-*,git\" "+public+"\n"))
			v, err := s.Verify(message, sig, time.Now())
			if err != nil || v.Principals != "a.tester@example.org,board" || v.Line != 3 || v.Fingerprint != k.Fingerprint() {
				t.Fatalf("%+v, %v", v, err)
			}
			if f, err := Fingerprint(sig); err != nil || f != k.Fingerprint() {
				t.Errorf("%s, %v", f, err)
			}
			if _, err := s.Verify(append(message, ' '), sig, time.Now()); err == nil || !strings.Contains(err.Error(), "is not a signature of these files") {
				t.Errorf("another message: %v", err)
			}
		})
	}
}

func TestWhoMaySign(t *testing.T) {
	dir := t.TempDir()
	keys := newKeys(t)
	path, public := save(t, dir, "key", keys["ed25519"], "")
	_, other := save(t, dir, "other", keys["ecdsa"], "")
	k, err := Open(path, "", "")
	if err != nil {
		t.Fatal(err)
	}
	sig, err := k.Sign(message)
	if err != nil {
		t.Fatal(err)
	}
	when := time.Date(2026, 3, 1, 12, 0, 0, 0, time.UTC)
	for _, c := range []struct{ list, want string }{
		{"a " + public, ""},
		{`"a b",c ` + public, "list:1: after the quoted principals a blank is missing"},
		{`"a b,c" ` + public, ""},
		{"a " + other, "does not allow"},
		{"", "does not allow"},
		{"a " + other + "\nb " + public, ""},
		{`a namespaces="git" ` + public, `line 1 allows it for namespaces "git" alone`},
		{`a namespaces="git,batten-ledger" ` + public, ""},
		{`a namespaces="*,!batten-*" ` + public, "alone"},
		{`a NameSpaces="batten-??????" ` + public, ""},
		{`a valid-after="20260301Z",valid-before="20260302Z" ` + public, ""},
		{`a valid-before="202603011159Z" ` + public, "line 1 does not hold for 2026-03-01T12:00:00Z"},
		{`a valid-after="20260301120001Z" ` + public, "does not hold"},
		{`a valid-after="20260301120001Z" ` + public + "\na " + public, ""},
		{`a valid-after="soon" ` + public, `list:1: valid-after: "soon" is no time`},
		{`a cert-authority ` + public, "list:1: cert-authority"},
		{`a frobnicate ` + public, `list:1: unknown option "frobnicate"`},
		{"a nonsense", "list:1: holds no public key"},
		{"a", "list:1: expected principals"},
		{"\"a " + public, "not closed"},
	} {
		_, err := parseSigners("list", []byte(c.list)).Verify(message, sig, when)
		switch {
		case c.want == "" && err != nil:
			t.Errorf("%q: %v", c.list, err)
		case c.want != "" && (err == nil || !strings.Contains(err.Error(), c.want)):
			t.Errorf("%q: %v, want %q", c.list, err, c.want)
		}
	}
	s := parseSigners("list", []byte("a "+public))
	raw, err := ssh.ParsePrivateKey(read(t, path))
	if err != nil {
		t.Fatal(err)
	}
	foreign, err := sshsig.Sign(strings.NewReader(string(message)), raw, sshsig.HashSHA512, "git")
	if err != nil {
		t.Fatal(err)
	}
	if _, err := s.Verify(message, sshsig.Armor(foreign), when); err == nil || !strings.Contains(err.Error(), `of namespace "git"`) {
		t.Errorf("a signature for another use: %v", err)
	}
	if _, err := s.Verify(message, []byte("junk"), when); err == nil || !strings.Contains(err.Error(), "is no SSH signature") {
		t.Errorf("junk: %v", err)
	}
}

func read(t *testing.T, path string) []byte {
	t.Helper()
	b, err := os.ReadFile(path)
	if err != nil {
		t.Fatal(err)
	}
	return b
}

func TestOpen(t *testing.T) {
	dir := t.TempDir()
	keys := newKeys(t)
	locked, public := save(t, dir, "locked", keys["ed25519"], "open sesame")
	put(t, filepath.Join(dir, "junk"), "junk")
	refuses := func(path, passphrase, socket, want string) {
		t.Helper()
		if _, err := Open(path, passphrase, socket); err == nil || !strings.Contains(err.Error(), want) {
			t.Errorf("%s: %v, want %q", path, err, want)
		}
	}
	refuses(locked, "", "", "put its passphrase into BATTEN_KEY_PASSPHRASE")
	refuses(locked, "wrong", "", "does not open it")
	refuses(filepath.Join(dir, "none"), "", "", "no such file")
	refuses(filepath.Join(dir, "junk"), "", "", "expected an OpenSSH private key")
	refuses(locked+".pub", "", "", "SSH_AUTH_SOCK is not set")
	refuses(locked+".pub", "", filepath.Join(dir, "nobody"), "does not answer")
	k, err := Open(locked, "open sesame", "")
	if err != nil {
		t.Fatal(err)
	}
	if pub, _, _, _, _ := ssh.ParseAuthorizedKey([]byte(public)); k.Fingerprint() != ssh.FingerprintSHA256(pub) {
		t.Error("another key was opened")
	}
}

// TestAgent signs through an agent, which is the library's own, in this
// process.
func TestAgent(t *testing.T) {
	if runtime.GOOS == "windows" {
		t.Skip("the agent of this test listens on a socket file")
	}
	keys := newKeys(t)
	dir, err := os.MkdirTemp("", "sock") // a socket's path must be short
	if err != nil {
		t.Fatal(err)
	}
	defer os.RemoveAll(dir)
	ring := agent.NewKeyring()
	for _, kind := range []string{"ed25519", "rsa"} {
		if err := ring.Add(agent.AddedKey{PrivateKey: keys[kind]}); err != nil {
			t.Fatal(err)
		}
	}
	socket := filepath.Join(dir, "agent")
	l, err := net.Listen("unix", socket)
	if err != nil {
		t.Fatal(err)
	}
	defer l.Close()
	go func() {
		for {
			c, err := l.Accept()
			if err != nil {
				return
			}
			go func() { _ = agent.ServeAgent(ring, c) }()
		}
	}()
	for _, kind := range []string{"ed25519", "rsa"} {
		path, public := save(t, dir, kind, keys[kind], "")
		k, err := Open(path+".pub", "", socket)
		if err != nil {
			t.Fatal(err)
		}
		sig, err := k.Sign(message)
		k.Close()
		if err != nil {
			t.Fatal(err)
		}
		if _, err := parseSigners("list", []byte("a "+public)).Verify(message, sig, time.Now()); err != nil {
			t.Errorf("%s: %v", kind, err)
		}
	}
	path, _ := save(t, dir, "ecdsa", keys["ecdsa"], "")
	if _, err := Open(path+".pub", "", socket); err == nil || !strings.Contains(err.Error(), "has no such key") {
		t.Errorf("a key that the agent lacks: %v", err)
	}
}

// TestOpenSSHAgrees holds the format to OpenSSH's own program: it verifies what
// is signed here, and what it signs is verified here.
func TestOpenSSHAgrees(t *testing.T) {
	program, err := exec.LookPath("ssh-keygen")
	if err != nil {
		t.Skip("there is no ssh-keygen on this machine")
	}
	run := func(stdin string, args ...string) (string, error) {
		cmd := exec.Command(program, args...)
		cmd.Stdin = strings.NewReader(stdin)
		b, err := cmd.CombinedOutput()
		return string(b), err
	}
	for _, kind := range []string{"ed25519", "ecdsa", "rsa"} {
		t.Run(kind, func(t *testing.T) {
			dir := t.TempDir()
			key, list, sig := filepath.Join(dir, "key"), filepath.Join(dir, "list"), filepath.Join(dir, "m.sig")
			if out, err := run("", "-q", "-t", kind, "-N", "open sesame", "-C", "made for a test", "-f", key); err != nil {
				t.Fatalf("%v: %s", err, out)
			}
			put(t, list, `board@example.org namespaces="batten-ledger" `+string(read(t, key+".pub")))
			k, err := Open(key, "open sesame", "")
			if err != nil {
				t.Fatal(err)
			}
			ours, err := k.Sign(message)
			if err != nil {
				t.Fatal(err)
			}
			put(t, sig, string(ours))
			verify := func(m string) (string, error) {
				return run(m, "-Y", "verify", "-f", list, "-I", "board@example.org", "-n", Namespace, "-s", sig)
			}
			if out, err := verify(string(message)); err != nil || !strings.Contains(out, k.Fingerprint()) {
				t.Errorf("ssh-keygen does not take our signature: %v: %s", err, out)
			}
			if out, err := verify(string(message) + "."); err == nil {
				t.Errorf("ssh-keygen takes our signature for another message: %s", out)
			}
			// the other way round, with a key without a passphrase
			if out, err := run("", "-q", "-p", "-P", "open sesame", "-N", "", "-f", key); err != nil {
				t.Fatalf("%v: %s", err, out)
			}
			file := filepath.Join(dir, "m")
			put(t, file, string(message))
			if err := os.Remove(sig); err != nil {
				t.Fatal(err)
			}
			if out, err := run("", "-q", "-Y", "sign", "-f", key, "-n", Namespace, file); err != nil {
				t.Fatalf("%v: %s", err, out)
			}
			s, err := ReadSigners(list)
			if err != nil {
				t.Fatal(err)
			}
			v, err := s.Verify(message, read(t, sig), time.Now())
			if err != nil || v.Principals != "board@example.org" || v.Fingerprint != k.Fingerprint() {
				t.Errorf("we do not take ssh-keygen's signature: %+v, %v", v, err)
			}
			if _, err := s.Verify(append(message, '.'), read(t, sig), time.Now()); err == nil {
				t.Error("we take ssh-keygen's signature for another message")
			}
		})
	}
}

// TestMatchIsQuick: a pattern of many stars is no trap.
func TestMatchIsQuick(t *testing.T) {
	start := time.Now()
	if match(strings.Repeat("*a", 2000)+"b", strings.Repeat("a", 4000)) {
		t.Error("matched")
	}
	if d := time.Since(start); d > 5*time.Second {
		t.Errorf("took %v", d)
	}
}

func FuzzSigners(f *testing.F) {
	_, private, err := ed25519.GenerateKey(rand.Reader)
	if err != nil {
		f.Fatal(err)
	}
	signer, err := ssh.NewSignerFromKey(private)
	if err != nil {
		f.Fatal(err)
	}
	raw, err := sshsig.Sign(strings.NewReader(string(message)), signer, sshsig.HashSHA512, Namespace)
	if err != nil {
		f.Fatal(err)
	}
	sig := sshsig.Armor(raw)
	public := string(ssh.MarshalAuthorizedKey(signer.PublicKey()))
	f.Add("a "+public, string(sig))
	f.Add(`"a b" namespaces="x,!y*",valid-after="20260101" `+public, string(sig[:len(sig)/2]))
	f.Fuzz(func(t *testing.T, list, s string) {
		when := time.Date(2026, 3, 1, 0, 0, 0, 0, time.UTC)
		// a list may say anything; another message is never verified
		if _, err := parseSigners("list", []byte(list)).Verify([]byte("another"), sig, when); err == nil {
			t.Error("another message was verified")
		}
		_, _ = parseSigners("list", []byte("a "+public)).Verify(message, []byte(s), when)
	})
}
