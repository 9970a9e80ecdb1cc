package store

import (
	"bufio"
	"errors"
	"fmt"
	"os"
	"path/filepath"
	"runtime"
	"slices"
	"strings"
)

// OutputPath resolves an output's path under root and makes sure that no link
// leads out of it. Folders that are not there yet are made when it is written.
func OutputPath(root, rel string) (string, error) {
	full := filepath.Join(root, filepath.FromSlash(rel))
	base, err := filepath.EvalSymlinks(root)
	if err != nil {
		return "", err
	}
	if base, err = filepath.Abs(base); err != nil {
		return "", err
	}
	// The deepest folder that exists decides.
	dir := filepath.Dir(full)
	for {
		fi, err := os.Stat(dir)
		if err == nil {
			if !fi.IsDir() {
				return "", fmt.Errorf("%s cannot be written: %s is a file, expected a folder", rel, filepath.ToSlash(dir))
			}
			break
		}
		if up := filepath.Dir(dir); up != dir {
			dir = up
			continue
		}
		return "", err
	}
	real, err := filepath.EvalSymlinks(dir)
	if err != nil {
		return "", err
	}
	if real, err = filepath.Abs(real); err != nil {
		return "", err
	}
	if r, err := filepath.Rel(base, real); err != nil || r == ".." || strings.HasPrefix(r, ".."+string(filepath.Separator)) {
		return "", fmt.Errorf("%s leads out of the study's folder by a link; expected a folder under it", rel)
	}
	if fi, err := os.Lstat(full); err == nil {
		switch {
		case fi.IsDir():
			return "", fmt.Errorf("%s is a folder, expected a file's name", rel)
		case fi.Mode()&os.ModeSymlink != 0:
			return "", fmt.Errorf("%s is a link; expected a file, or nothing yet: remove the link", rel)
		}
	}
	return full, nil
}

// AtomicFile is a file in the making: nothing is seen of it until Commit.
type AtomicFile struct {
	f    *os.File
	w    *bufio.Writer
	path string
}

// WriteError says that a file could not be written; what stood there before
// stands there still.
type WriteError struct {
	Path string
	Err  error
}

func (e *WriteError) Error() string {
	return fmt.Sprintf("cannot write %s: %v; what stood there before was left as it was", filepath.ToSlash(e.Path), cause(e.Err))
}
func (e *WriteError) Unwrap() error { return e.Err }

// tempPrefix begins the names under which a file is written before it gets its
// own. It tells whose they are, so that what a killed run left can be removed
// without touching what somebody else is writing beside it.
func tempPrefix(path string) string { return ".tmp-" + sum([]byte(filepath.Base(path)))[:16] + "-" }

// ClearUnfinished removes what killed writers of these files left beside them,
// and what any left in folders that are all the study's own. The caller makes
// sure that nobody is writing them. What cannot be removed stays: it is in
// nobody's way.
func ClearUnfinished(files, folders []string) {
	of := map[string][]string{} // the beginnings of their names, by folder
	for _, f := range files {
		of[filepath.Dir(f)] = append(of[filepath.Dir(f)], tempPrefix(f))
	}
	for _, d := range folders {
		of[d] = append(of[d], ".tmp-")
	}
	for dir, prefixes := range of {
		es, err := os.ReadDir(dir)
		if err != nil {
			continue
		}
		for _, e := range es {
			if !e.Type().IsRegular() || !strings.HasPrefix(e.Name(), ".tmp-") {
				continue
			}
			if slices.ContainsFunc(prefixes, func(p string) bool { return strings.HasPrefix(e.Name(), p) }) {
				_ = os.Remove(filepath.Join(dir, e.Name()))
			}
		}
	}
}

// Create begins a file, making its folder where needed.
func Create(path string) (*AtomicFile, error) {
	dir := filepath.Dir(path)
	if err := os.MkdirAll(dir, 0o777); err != nil {
		return nil, &WriteError{path, err}
	}
	f, err := os.CreateTemp(dir, tempPrefix(path)+"*")
	if err != nil {
		return nil, &WriteError{path, err}
	}
	return &AtomicFile{f: f, w: bufio.NewWriterSize(f, 1<<18), path: path}, nil
}

func (a *AtomicFile) Write(p []byte) (int, error) {
	n, err := a.w.Write(p)
	if err != nil {
		err = &WriteError{a.path, err}
	}
	return n, err
}

// Commit puts the file in its place: contents on disk first, then the name,
// then the folder, so that a crash leaves the old file or the new one whole.
func (a *AtomicFile) Commit() error {
	err := a.w.Flush()
	if err == nil {
		err = a.f.Chmod(0o644)
	}
	if err == nil {
		err = a.f.Sync()
	}
	if cerr := a.f.Close(); err == nil {
		err = cerr
	}
	if err == nil {
		err = os.Rename(a.f.Name(), a.path)
	}
	if err != nil {
		_ = os.Remove(a.f.Name())
		return &WriteError{a.path, err}
	}
	return syncDir(filepath.Dir(a.path))
}

// Abort throws the file away.
func (a *AtomicFile) Abort() {
	_ = a.f.Close()
	_ = os.Remove(a.f.Name())
}

// WriteFile writes a whole file in one step that a crash cannot halve.
func WriteFile(path string, b []byte) error {
	a, err := Create(path)
	if err != nil {
		return err
	}
	if _, err := a.Write(b); err != nil {
		a.Abort()
		return err
	}
	return a.Commit()
}

// syncDir makes a rename last. Windows has no such call and needs none.
func syncDir(dir string) error {
	if runtime.GOOS == "windows" {
		return nil
	}
	d, err := os.Open(dir)
	if err != nil {
		return err
	}
	err = d.Sync()
	if cerr := d.Close(); err == nil {
		err = cerr
	}
	if errors.Is(err, os.ErrInvalid) {
		return nil // some file systems cannot sync a folder
	}
	return err
}
