package store

import (
	"context"
	"errors"
	"io/fs"
	"os"
	"path/filepath"
	"strings"
	"sync"
	"testing"
	"time"
)

func open(t *testing.T, dir string) *Store {
	t.Helper()
	s, err := Open(dir)
	if err != nil {
		t.Fatal(err)
	}
	return s
}

func files(t *testing.T, dir string) (out []string) {
	t.Helper()
	_ = filepath.WalkDir(dir, func(p string, d fs.DirEntry, err error) error {
		if err == nil && !d.IsDir() {
			out = append(out, p)
		}
		return nil
	})
	return out
}

// TestPutGet: what was put comes back, by key, by digest, by slot.
func TestPutGet(t *testing.T) {
	s := open(t, filepath.Join(t.TempDir(), ".batten"))
	d, err := s.Put("key 1\n", []byte("object"))
	if err != nil {
		t.Fatal(err)
	}
	if b, dig, ok := s.Get("key 1\n"); !ok || string(b) != "object" || dig != d {
		t.Errorf("%q %v", b, ok)
	}
	if _, _, ok := s.Get("key 2\n"); ok {
		t.Error("a key that was never put was found")
	}
	if err := s.SetSlot("part/1", d); err != nil {
		t.Fatal(err)
	}
	if got, ok := s.Slot("part/1"); !ok || got != d {
		t.Error("the slot is lost")
	}
	if _, ok := s.Object("../../../etc/passwd"); ok {
		t.Error("a digest that is none was followed")
	}
}

// TestFlippedBits: a flipped bit in any file is a miss, and putting again
// mends it.
func TestFlippedBits(t *testing.T) {
	dir := filepath.Join(t.TempDir(), ".batten")
	s := open(t, dir)
	put := func() {
		d, err := s.Put("key\n", []byte("the object's bytes"))
		if err != nil {
			t.Fatal(err)
		}
		if err := s.SetSlot("slot", d); err != nil {
			t.Fatal(err)
		}
	}
	put()
	n := 0
	for _, f := range files(t, dir) {
		if base := filepath.Base(f); base == "format" || base == "lock" || base == ".gitignore" {
			continue
		}
		n++
		b, err := os.ReadFile(f)
		if err != nil {
			t.Fatal(err)
		}
		for bit := range 8 * len(b) {
			bad := append([]byte(nil), b...)
			bad[bit/8] ^= 1 << (bit % 8)
			if err := os.WriteFile(f, bad, 0o666); err != nil {
				t.Fatal(err)
			}
			if o, _, ok := s.Get("key\n"); ok && string(o) != "the object's bytes" {
				t.Fatalf("%s, bit %d: wrong bytes were taken for right", f, bit)
			}
			if d, ok := s.Slot("slot"); ok {
				if o, ok := s.Object(d); ok && string(o) != "the object's bytes" {
					t.Fatalf("%s, bit %d: a slot led to wrong bytes", f, bit)
				}
			}
		}
		put()
		if _, _, ok := s.Get("key\n"); !ok {
			t.Fatalf("%s was not mended", f)
		}
	}
	if n != 3 {
		t.Errorf("%d files were tried, expected an object, a key and a slot", n)
	}
}

// TestFormats: a newer store is refused, an older or senseless one emptied.
func TestFormats(t *testing.T) {
	dir := filepath.Join(t.TempDir(), ".batten")
	s := open(t, dir)
	if _, err := s.Put("k", []byte("v")); err != nil {
		t.Fatal(err)
	}
	if err := os.WriteFile(filepath.Join(dir, "format"), []byte("99\n"), 0o666); err != nil {
		t.Fatal(err)
	}
	var newer *NewerError
	if _, err := Open(dir); !errors.As(err, &newer) || !strings.Contains(err.Error(), "newer program") {
		t.Errorf("%v", err)
	}
	if err := os.WriteFile(filepath.Join(dir, "format"), []byte("junk"), 0o666); err != nil {
		t.Fatal(err)
	}
	unlock, err := open(t, dir).Lock(context.Background(), nil)
	if err != nil {
		t.Fatal(err)
	}
	unlock()
	if _, _, ok := s.Get("k"); ok {
		t.Error("an object of an unknown format was kept")
	}
}

// TestLock: one at a time; waiting ends when the other lets go, or is given
// up.
func TestLock(t *testing.T) {
	s := open(t, filepath.Join(t.TempDir(), ".batten"))
	unlock, err := s.Lock(context.Background(), nil)
	if err != nil {
		t.Fatal(err)
	}
	ctx, cancel := context.WithTimeout(context.Background(), 100*time.Millisecond)
	defer cancel()
	told := ""
	if _, err := s.Lock(ctx, func(m string) { told = m }); err == nil || told == "" {
		t.Errorf("a second lock was given: %v, told %q", err, told)
	}
	var wg sync.WaitGroup
	wg.Add(1)
	go func() {
		defer wg.Done()
		u, err := s.Lock(context.Background(), nil)
		if err != nil {
			t.Error(err)
			return
		}
		u()
	}()
	unlock()
	wg.Wait()
}

// TestFiles: a file is there whole or not at all, and never outside the root.
func TestFiles(t *testing.T) {
	root := t.TempDir()
	path := filepath.Join(root, "out", "deep", "a.csv")
	if err := WriteFile(path, []byte("one")); err != nil {
		t.Fatal(err)
	}
	f, err := Create(path)
	if err != nil {
		t.Fatal(err)
	}
	if _, err := f.Write([]byte("two")); err != nil {
		t.Fatal(err)
	}
	f.Abort()
	if b, _ := os.ReadFile(path); string(b) != "one" {
		t.Errorf("an aborted write left %q", b)
	}
	if n := files(t, root); len(n) != 1 {
		t.Errorf("left behind: %v", n)
	}
	if _, err := OutputPath(root, "out/deep/b.csv"); err != nil {
		t.Error(err)
	}
	if _, err := OutputPath(root, "out/deep/a.csv/b.csv"); err == nil {
		t.Error("a file served as a folder")
	}
	if _, err := OutputPath(root, "out/deep"); err == nil {
		t.Error("a folder served as a file")
	}
	if err := os.Symlink(t.TempDir(), filepath.Join(root, "away")); err == nil {
		if _, err := OutputPath(root, "away/x.csv"); err == nil {
			t.Error("a link led out of the study's folder")
		}
	}
}
