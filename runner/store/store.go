// Package store keeps a study's objects under .batten: content-addressed
// bytes that can be made again, never the only copy of anything.
//
// Steps: Put writes an object under its SHA-256 and the key that led to it;
// Get follows a key to its object and hashes it again; Slot and SetSlot keep
// small pointers, such as the last object of a part. Damage of any kind is a
// miss, never an error: the runner makes the object again. Lock keeps two runs
// of one study apart. The package knows nothing of what the objects hold.
package store

import (
	"context"
	"crypto/sha256"
	"encoding/hex"
	"errors"
	"fmt"
	"io/fs"
	"os"
	"path/filepath"
	"strconv"
	"strings"
	"time"

	"github.com/gofrs/flock"
)

// Format is raised when the layout of the store changes.
const Format = 1

// Store is an open store. Its methods may be called by many goroutines.
type Store struct{ dir string }

// NewerError says that the store was written by a newer program.
type NewerError struct {
	Dir        string
	Found, Own int
}

func (e *NewerError) Error() string {
	return fmt.Sprintf("%s is a store of format %d, this program reads format %d; use the newer program, or delete the folder: all in it can be made again",
		e.Dir, e.Found, e.Own)
}

// LinkError says that a folder of the study's own is a link: what is written to
// it would land elsewhere.
type LinkError struct{ Dir string }

func (e *LinkError) Error() string {
	return fmt.Sprintf("%s is a link; expected a folder of the study's own, or nothing yet: remove the link", e.Dir)
}

// UnwritableError says that the store cannot be written to.
type UnwritableError struct {
	Dir string
	Err error
}

func (e *UnwritableError) Error() string {
	return fmt.Sprintf("cannot write to the store %s: %v; the study's folder must be writable and have room", e.Dir, cause(e.Err))
}
func (e *UnwritableError) Unwrap() error { return e.Err }

// cause strips the temporary name from an error about it.
func cause(err error) error {
	var p *fs.PathError
	if errors.As(err, &p) {
		return p.Err
	}
	return err
}

// Open opens the store in dir for reading. It writes nothing: what is not
// there is a miss, and only a newer store is an error.
func Open(dir string) (*Store, error) {
	if fi, err := os.Lstat(dir); err == nil && fi.Mode()&os.ModeSymlink != 0 {
		return nil, &LinkError{dir}
	}
	s := &Store{dir: dir}
	_, err := s.format()
	return s, err
}

// format reads the store's format; 0 where there is none or none that can be
// read.
func (s *Store) format() (int, error) {
	b, err := os.ReadFile(filepath.Join(s.dir, "format"))
	if err != nil {
		return 0, nil
	}
	n, err := strconv.Atoi(strings.TrimSpace(string(b)))
	switch {
	case err != nil || n < 0:
		return 0, nil
	case n > Format:
		return n, &NewerError{s.dir, n, Format}
	}
	return n, nil
}

// Lock takes the study's one write lock, waiting for it, and makes the store
// ready to be written; note is told once if it has to wait. A lock dies with
// its process.
func (s *Store) Lock(ctx context.Context, note func(string)) (unlock func(), err error) {
	if err := os.MkdirAll(s.dir, 0o777); err != nil {
		return nil, &UnwritableError{s.dir, err}
	}
	l := flock.New(filepath.Join(s.dir, "lock"))
	ok, err := l.TryLock()
	if err != nil {
		return nil, &UnwritableError{s.dir, err}
	}
	if !ok {
		if note != nil {
			note("another run of this study is at work; waiting for it to end")
		}
		if ok, err = l.TryLockContext(ctx, 50*time.Millisecond); err != nil || !ok {
			return nil, fmt.Errorf("gave up waiting for another run of this study: %w", err)
		}
	}
	if err := s.prepare(); err != nil {
		_ = l.Unlock()
		return nil, err
	}
	return func() { _ = l.Unlock() }, nil
}

// prepare makes the store where there is none, empties one of an older format
// and removes what a killed process left. The caller holds the lock: without
// it one run would clear away what another is writing.
func (s *Store) prepare() error {
	n, err := s.format()
	if err != nil {
		return err
	}
	s.clean()
	if n == Format {
		return nil
	}
	for _, sub := range []string{"objects", "keys", "slots"} {
		if err := os.RemoveAll(filepath.Join(s.dir, sub)); err != nil {
			return &UnwritableError{s.dir, err}
		}
	}
	// The store need not be kept: git is told so by the store itself.
	if err := s.write(filepath.Join(s.dir, ".gitignore"), []byte("*\n")); err != nil {
		return err
	}
	return s.write(filepath.Join(s.dir, "format"), []byte(strconv.Itoa(Format)+"\n"))
}

// clean removes temporary files that a killed process left. The caller holds
// the lock, so nobody is writing them.
func (s *Store) clean() {
	for _, pattern := range []string{"tmp-*", "objects/*/tmp-*", "keys/*/tmp-*", "slots/tmp-*", "runs/.tmp-*"} {
		found, _ := filepath.Glob(filepath.Join(s.dir, filepath.FromSlash(pattern)))
		for _, f := range found {
			_ = os.Remove(f)
		}
	}
}

func sum(b []byte) string {
	h := sha256.Sum256(b)
	return hex.EncodeToString(h[:])
}

func (s *Store) object(digest string) string {
	return filepath.Join(s.dir, "objects", digest[:2], digest)
}

func (s *Store) key(key string) string {
	d := sum([]byte(key))
	return filepath.Join(s.dir, "keys", d[:2], d)
}

// write replaces a file by renaming a whole one onto it. It does not wait for
// the disk: what a crash damages is found by its digest.
func (s *Store) write(path string, b []byte) error {
	dir := filepath.Dir(path)
	f, err := os.CreateTemp(dir, "tmp-*")
	if errors.Is(err, fs.ErrNotExist) {
		if err = os.MkdirAll(dir, 0o777); err == nil {
			f, err = os.CreateTemp(dir, "tmp-*")
		}
	}
	if err != nil {
		return &UnwritableError{s.dir, err}
	}
	_, err = f.Write(b)
	if cerr := f.Close(); err == nil {
		err = cerr
	}
	if err == nil {
		err = os.Rename(f.Name(), path)
	}
	if err != nil {
		_ = os.Remove(f.Name())
		return &UnwritableError{s.dir, err}
	}
	return nil
}

// Put stores an object under its digest, and the key that leads to it.
func (s *Store) Put(key string, object []byte) (digest string, err error) {
	digest = sum(object)
	path := s.object(digest)
	if fi, err := os.Stat(path); err != nil || fi.Size() != int64(len(object)) {
		if err := s.write(path, object); err != nil {
			return "", err
		}
	} else if old, err := os.ReadFile(path); err != nil || sum(old) != digest {
		if err := s.write(path, object); err != nil {
			return "", err
		}
	}
	return digest, s.write(s.key(key), []byte(digest+"\n"+key))
}

// Get follows a key to its object. ok is false where either is missing or not
// what it should be.
func (s *Store) Get(key string) (object []byte, digest string, ok bool) {
	b, err := os.ReadFile(s.key(key))
	if err != nil {
		return nil, "", false
	}
	digest, found, cut := strings.Cut(string(b), "\n")
	if !cut || found != key {
		return nil, "", false
	}
	object, ok = s.Object(digest)
	return object, digest, ok
}

// Has tells whether a key is there; what it leads to may still be damaged.
func (s *Store) Has(key string) bool {
	_, err := os.Stat(s.key(key))
	return err == nil
}

// Object returns the object of that digest, if it is there and sound.
func (s *Store) Object(digest string) ([]byte, bool) {
	if !isDigest(digest) {
		return nil, false
	}
	b, err := os.ReadFile(s.object(digest))
	if err != nil || sum(b) != digest {
		return nil, false
	}
	return b, true
}

func isDigest(d string) bool {
	if len(d) != 64 {
		return false
	}
	for _, c := range []byte(d) {
		if (c < '0' || c > '9') && (c < 'a' || c > 'f') {
			return false
		}
	}
	return true
}

func (s *Store) slot(name string) string {
	return filepath.Join(s.dir, "slots", sum([]byte(name))[:32])
}

// SetSlot points a name at an object.
func (s *Store) SetSlot(name, digest string) error {
	return s.write(s.slot(name), []byte(digest+"\n"+name+"\n"))
}

// Slot returns the digest a name points at. Whether the object is still there
// is for Object to tell.
func (s *Store) Slot(name string) (digest string, ok bool) {
	b, err := os.ReadFile(s.slot(name))
	if err != nil {
		return "", false
	}
	digest, rest, _ := strings.Cut(string(b), "\n")
	return digest, isDigest(digest) && rest == name+"\n"
}
