package store

import (
	"errors"
	"io/fs"
	"os"
	"path/filepath"
	"strings"
)

// Swept counts what a sweep removed, or would remove.
type Swept struct {
	Objects, Keys, Slots int
	Bytes                int64
	Kept                 int // objects that stay
}

// Sweep removes every object that live does not hold, and the keys and slots
// that lead to none that stays. live is asked with an object's digest and the
// keys that lead to it. With dry nothing is removed. The caller holds the lock.
func (s *Store) Sweep(live func(digest string, keys []string) bool, dry bool) (Swept, error) {
	var out Swept
	type link struct {
		path, digest, key string
		size              int64
	}
	var links []link
	keysOf := map[string][]string{}
	err := eachFile(filepath.Join(s.dir, "keys"), func(path string, size int64) error {
		b, err := os.ReadFile(path)
		if err != nil {
			return err
		}
		digest, key, _ := strings.Cut(string(b), "\n")
		links = append(links, link{path, digest, key, size})
		keysOf[digest] = append(keysOf[digest], key)
		return nil
	})
	if err != nil {
		return out, err
	}
	remove := func(path string, size int64) error {
		out.Bytes += size
		if dry {
			return nil
		}
		if err := os.Remove(path); err != nil && !errors.Is(err, fs.ErrNotExist) {
			return &UnwritableError{s.dir, err}
		}
		return nil
	}
	stays := map[string]bool{}
	err = eachFile(filepath.Join(s.dir, "objects"), func(path string, size int64) error {
		digest := filepath.Base(path)
		if isDigest(digest) && live(digest, keysOf[digest]) {
			stays[digest] = true
			out.Kept++
			return nil
		}
		out.Objects++
		return remove(path, size)
	})
	if err != nil {
		return out, err
	}
	for _, l := range links {
		if !stays[l.digest] {
			out.Keys++
			if err := remove(l.path, l.size); err != nil {
				return out, err
			}
		}
	}
	err = eachFile(filepath.Join(s.dir, "slots"), func(path string, size int64) error {
		b, err := os.ReadFile(path)
		if err != nil {
			return err
		}
		if digest, _, _ := strings.Cut(string(b), "\n"); stays[digest] {
			return nil
		}
		out.Slots++
		return remove(path, size)
	})
	return out, err
}

// eachFile calls do for every ordinary file under a folder, which need not be
// there.
func eachFile(dir string, do func(path string, size int64) error) error {
	return filepath.WalkDir(dir, func(path string, d fs.DirEntry, err error) error {
		if errors.Is(err, fs.ErrNotExist) {
			return nil
		}
		if err != nil || d.IsDir() {
			return err
		}
		fi, err := d.Info()
		if errors.Is(err, fs.ErrNotExist) {
			return nil
		}
		if err != nil {
			return err
		}
		return do(path, fi.Size())
	})
}
