package signature

import (
	"bytes"
	"errors"
	"fmt"
	"os"
	"strings"
	"time"

	"github.com/hiddeco/sshsig"
	"golang.org/x/crypto/ssh"
)

// Signers is a list of allowed signers, in the format of the ALLOWED SIGNERS
// section of OpenSSH's ssh-keygen(1): one a line, principals, options, key.
type Signers struct {
	path     string
	list     []signer
	unusable []string // lines that could not be read, each with its place
}

type signer struct {
	line          int
	principals    string
	namespaces    string    // a list of patterns; "": any
	after, before time.Time // zero: no bound
	key           []byte
}

// Verified says whose signature it is.
type Verified struct {
	Principals  string `json:"principals"`
	Fingerprint string `json:"key"`
	Line        int    `json:"line"` // of the list of allowed signers
}

// ReadSigners reads a list of allowed signers. Lines that it cannot use are
// passed over: they are named where no other line serves.
func ReadSigners(path string) (*Signers, error) {
	b, err := os.ReadFile(path)
	if err != nil {
		return nil, err
	}
	return parseSigners(path, b), nil
}

func parseSigners(path string, b []byte) *Signers {
	s := &Signers{path: path}
	n := 0
	for l := range strings.Lines(string(b)) {
		n++
		l = strings.TrimSpace(l)
		if l == "" || l[0] == '#' {
			continue
		}
		if g, err := parseSigner(l); err != nil {
			s.unusable = append(s.unusable, fmt.Sprintf("%s:%d: %v", path, n, err))
		} else {
			g.line = n
			s.list = append(s.list, g)
		}
	}
	return s
}

func parseSigner(l string) (signer, error) {
	var g signer
	var rest string
	if quoted, ok := strings.CutPrefix(l, `"`); ok {
		if g.principals, rest, ok = strings.Cut(quoted, `"`); !ok {
			return g, errors.New("a quotation mark is not closed")
		}
		if rest != "" && rest[0] != ' ' && rest[0] != '\t' {
			return g, errors.New("after the quoted principals a blank is missing")
		}
	} else if i := strings.IndexAny(l, " \t"); i > 0 {
		g.principals, rest = l[:i], l[i:]
	}
	if strings.TrimSpace(rest) == "" {
		return g, errors.New("expected principals, options where there are any, and a public key")
	}
	key, _, options, _, err := ssh.ParseAuthorizedKey([]byte(strings.TrimSpace(rest)))
	if err != nil {
		return g, errors.New("holds no public key that can be read after the principals")
	}
	g.key = key.Marshal()
	for _, o := range options {
		name, value, _ := strings.Cut(o, "=")
		value = strings.Trim(value, `"`)
		switch strings.ToLower(name) {
		case "namespaces":
			if g.namespaces = value; value == "" {
				return g, errors.New("namespaces is empty")
			}
		case "valid-after":
			g.after, err = moment(value)
		case "valid-before":
			g.before, err = moment(value)
		case "cert-authority":
			return g, errors.New("cert-authority: signatures by certificates are not read")
		default:
			return g, fmt.Errorf("unknown option %q", name)
		}
		if err != nil {
			return g, fmt.Errorf("%s: %v", strings.ToLower(name), err)
		}
	}
	return g, nil
}

// moment reads OpenSSH's YYYYMMDD[HHMM[SS]][Z]; without Z it is local time.
func moment(s string) (time.Time, error) {
	where := time.Local
	digits, utc := strings.CutSuffix(s, "Z")
	if utc {
		where = time.UTC
	}
	for _, layout := range []string{"20060102", "200601021504", "20060102150405"} {
		if len(layout) == len(digits) {
			if t, err := time.ParseInLocation(layout, digits, where); err == nil {
				return t, nil
			}
		}
	}
	return time.Time{}, fmt.Errorf("%q is no time; expected YYYYMMDD, YYYYMMDDHHMM or YYYYMMDDHHMMSS, with a Z for UTC", s)
}

// Fingerprint reads whose key an armoured signature says it is by, without
// checking it.
func Fingerprint(armoured []byte) (string, error) {
	sig, err := sshsig.Unarmor(armoured)
	if err != nil {
		return "", fmt.Errorf("is no SSH signature: %s", plain(err))
	}
	return ssh.FingerprintSHA256(sig.PublicKey), nil
}

// Verify holds an armoured signature of a message to the list. when is the
// time that a signer's span of validity must hold.
func (s *Signers) Verify(message, armoured []byte, when time.Time) (*Verified, error) {
	sig, err := sshsig.Unarmor(armoured)
	if err != nil {
		return nil, fmt.Errorf("is no SSH signature: %s", plain(err))
	}
	print := ssh.FingerprintSHA256(sig.PublicKey)
	if sig.Namespace != Namespace {
		return nil, fmt.Errorf("is a signature of namespace %q, expected %q", sig.Namespace, Namespace)
	}
	if err := sshsig.Verify(bytes.NewReader(message), sig, sig.PublicKey, sig.HashAlgorithm, Namespace); err != nil {
		return nil, fmt.Errorf("is not a signature of these files by its key %s", print)
	}
	// A key in hardware says in the first of its flags whether somebody was
	// there to touch it.
	if strings.HasPrefix(sig.PublicKey.Type(), "sk-") && (len(sig.Signature.Rest) == 0 || sig.Signature.Rest[0]&1 == 0) {
		return nil, fmt.Errorf("was made by the key %s without anybody touching it", print)
	}
	key, why := sig.PublicKey.Marshal(), ""
	for _, g := range s.list {
		switch {
		case !bytes.Equal(g.key, key):
		case g.namespaces != "" && !matchList(g.namespaces, Namespace):
			why = fmt.Sprintf(": line %d allows it for namespaces %q alone", g.line, g.namespaces)
		case !g.after.IsZero() && when.Before(g.after), !g.before.IsZero() && when.After(g.before):
			why = fmt.Sprintf(": line %d does not hold for %s", g.line, when.UTC().Format(time.RFC3339))
		default:
			return &Verified{g.principals, print, g.line}, nil
		}
	}
	for _, u := range s.unusable {
		why += "\n  " + u
	}
	return nil, fmt.Errorf("is by a key that %s does not allow (%s)%s", s.path, print, why)
}

// matchList tells whether a list of patterns takes in s: one of them must
// match, and none that begins with ! may.
func matchList(list, s string) bool {
	found := false
	for p := range strings.SplitSeq(list, ",") {
		p, not := strings.CutPrefix(p, "!")
		if match(p, s) {
			if not {
				return false
			}
			found = true
		}
	}
	return found
}

// match matches * and ?. It goes back to the last star alone, so that no
// pattern takes long.
func match(p, s string) bool {
	i, k, star, mark := 0, 0, -1, 0
	for k < len(s) {
		switch {
		case i < len(p) && p[i] == '*':
			star, mark = i, k
			i++
		case i < len(p) && (p[i] == '?' || p[i] == s[k]):
			i++
			k++
		case star >= 0:
			mark++
			i, k = star+1, mark
		default:
			return false
		}
	}
	return strings.Trim(p[i:], "*") == ""
}
