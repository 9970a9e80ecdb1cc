// Package signature signs and checks messages in the SSH signature format
// (OpenSSH's PROTOCOL.sshsig), with keys that people have already.
//
// Steps: Open finds a key, in a file or in an agent; Key.Sign makes an armoured
// signature; ReadSigners reads a list of allowed signers; Signers.Verify holds
// a signature to it. What is signed is the caller's affair. The cryptography is
// golang.org/x/crypto's, the format that of github.com/hiddeco/sshsig.
package signature

import (
	"bytes"
	"crypto/x509"
	"errors"
	"fmt"
	"io"
	"net"
	"os"
	"strings"

	"github.com/hiddeco/sshsig"
	"golang.org/x/crypto/ssh"
	"golang.org/x/crypto/ssh/agent"
)

// Namespace keeps a ledger's signature from being taken for one of anything
// else.
const Namespace = "batten-ledger"

// KeyError says that a key cannot be used to sign.
type KeyError struct{ Path, Found string }

func (e *KeyError) Error() string { return fmt.Sprintf("key %s: %s", e.Path, e.Found) }

// Key is a key to sign with.
type Key struct {
	signer ssh.Signer
	path   string
	agent  io.Closer // nil where the key was read from a file
}

// Open opens a key: the private key in a file, or, for a file that holds a
// public key, its private half in the agent that listens at socket.
// passphrase is for a file that is encrypted; "" where there is none.
func Open(path, passphrase, socket string) (*Key, error) {
	b, err := os.ReadFile(path)
	if err != nil {
		return nil, &KeyError{path, cause(err)}
	}
	if pub, _, _, _, err := ssh.ParseAuthorizedKey(b); err == nil {
		return fromAgent(path, pub, socket)
	}
	signer, err := ssh.ParsePrivateKey(b)
	var locked *ssh.PassphraseMissingError
	if errors.As(err, &locked) {
		if passphrase == "" {
			return nil, &KeyError{path, "is encrypted; put its passphrase into BATTEN_KEY_PASSPHRASE, or add the key to ssh-agent and name its .pub file"}
		}
		signer, err = ssh.ParsePrivateKeyWithPassphrase(b, []byte(passphrase))
		if errors.Is(err, x509.IncorrectPasswordError) {
			return nil, &KeyError{path, "is encrypted, and the passphrase in BATTEN_KEY_PASSPHRASE does not open it"}
		}
	}
	if err != nil {
		return nil, &KeyError{path, fmt.Sprintf("cannot be read (%s); expected an OpenSSH private key, or the .pub file of one in ssh-agent", plain(err))}
	}
	return &Key{signer: signer, path: path}, nil
}

// fromAgent finds a public key's private half in an agent.
func fromAgent(path string, pub ssh.PublicKey, socket string) (*Key, error) {
	if socket == "" {
		return nil, &KeyError{path, "is a public key, and there is no agent to sign with it: SSH_AUTH_SOCK is not set; start ssh-agent and add the key, or name the private key's file"}
	}
	conn, err := dial(socket)
	if err != nil {
		return nil, &KeyError{path, fmt.Sprintf("the agent at SSH_AUTH_SOCK (%s) does not answer: %s", socket, cause(err))}
	}
	signers, err := agent.NewClient(conn).Signers()
	if err != nil {
		_ = conn.Close()
		return nil, &KeyError{path, "the agent does not say which keys it has: " + plain(err)}
	}
	for _, s := range signers {
		if bytes.Equal(s.PublicKey().Marshal(), pub.Marshal()) {
			return &Key{signer: s, path: path, agent: conn}, nil
		}
	}
	_ = conn.Close()
	return nil, &KeyError{path, fmt.Sprintf("the agent has no such key (%s); add it with ssh-add", ssh.FingerprintSHA256(pub))}
}

// dial connects to an agent: a socket, or on Windows a named pipe.
func dial(socket string) (io.ReadWriteCloser, error) {
	if strings.HasPrefix(socket, `\\.\pipe\`) {
		return os.OpenFile(socket, os.O_RDWR, 0)
	}
	return net.Dial("unix", socket)
}

// Fingerprint names the key as OpenSSH does: SHA256:...
func (k *Key) Fingerprint() string { return ssh.FingerprintSHA256(k.signer.PublicKey()) }

// Sign returns the armoured signature of a message.
func (k *Key) Sign(message []byte) ([]byte, error) {
	s, err := sshsig.Sign(bytes.NewReader(message), k.signer, sshsig.HashSHA512, Namespace)
	if err != nil {
		return nil, &KeyError{k.path, "does not sign: " + plain(err)}
	}
	return sshsig.Armor(s), nil
}

// Close lets go of the agent.
func (k *Key) Close() {
	if k.agent != nil {
		_ = k.agent.Close()
	}
}

// cause strips the path from an error about a file.
func cause(err error) string {
	var p *os.PathError
	if errors.As(err, &p) {
		return p.Err.Error()
	}
	return err.Error()
}

// plain strips a library's name from its error.
func plain(err error) string {
	return strings.TrimPrefix(strings.TrimPrefix(err.Error(), "ssh: "), "agent: ")
}
