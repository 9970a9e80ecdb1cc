// Package table reads and writes the tables of a study: CSV and TSV files,
// plain or gzipped, into typed columns, and exports back to CSV.
//
// Steps: Find names an input's files and holds them to the study's folder;
// Hash takes their digests; Heads looks at header lines only; Read parses
// whole files in parallel blocks. What is wrong in the data comes back as
// Problems with file, line and column. It knows no curves and no spec: a
// Source says what to read.
package table

import (
	"context"
	"crypto/sha256"
	"encoding/hex"
	"errors"
	"fmt"
	"io"
	"io/fs"
	"maps"
	"os"
	"path/filepath"
	"slices"
	"sort"
	"strings"

	"golang.org/x/sync/errgroup"

	"batten/spec/expr"
)

// Source says what to read.
type Source struct {
	Name      string
	Root      string // the study's folder
	Pattern   string // a path or a glob under Root, with forward slashes
	Outside   bool   // files may lie elsewhere, on purpose
	Columns   []Column
	Missing   []string // cells that mean "missing"
	Separator byte     // 0: a tab for .tsv, else a comma
	Decimal   byte     // '.' or ','
	At        string   // where the spec names the file, for messages

	// Instead, where it is not nil, says where the files lie by the paths that
	// they go by; Pattern is not looked for.
	Instead map[string]string
}

// Column is one column to read.
type Column struct {
	Name   string
	Header string // in the file
	Kind   expr.Kind
	At     string // where the spec declares it
}

// File is one file with its digest.
type File struct {
	Path   string // relative to Root, forward slashes
	SHA256 string // of the bytes on disk
	Bytes  int64
	Rows   int // 0 until it has been read
}

// Problem is one thing wrong in a file.
type Problem struct {
	Path      string
	Line, Col int // 0: the whole file
	Text      string
}

func (p *Problem) Error() string {
	switch {
	case p.Line == 0:
		return p.Path + ": " + p.Text
	case p.Col == 0:
		return fmt.Sprintf("%s:%d: %s", p.Path, p.Line, p.Text)
	}
	return fmt.Sprintf("%s:%d:%d: %s", p.Path, p.Line, p.Col, p.Text)
}

// Problems are all that was found wrong, in the order of files and lines.
type Problems struct {
	List []*Problem
	More int // found beyond those listed
}

func (p *Problems) Error() string {
	var b strings.Builder
	for i, x := range p.List {
		if i > 0 {
			b.WriteByte('\n')
		}
		b.WriteString(x.Error())
	}
	if p.More > 0 {
		fmt.Fprintf(&b, "\n... and %d more", p.More)
	}
	return b.String()
}

// NotFoundError says that an input's files are not there.
type NotFoundError struct{ Text string }

func (e *NotFoundError) Error() string { return e.Text }

// Is makes errors.Is(err, fs.ErrNotExist) true.
func (e *NotFoundError) Is(target error) bool { return target == fs.ErrNotExist }

// Find returns the paths of a source's files, relative to Root, in the order
// of their names.
func Find(src Source) ([]string, error) {
	if src.Instead != nil {
		return slices.Sorted(maps.Keys(src.Instead)), nil
	}
	full := filepath.FromSlash(src.Pattern)
	if !filepath.IsAbs(full) {
		full = filepath.Join(src.Root, full)
	}
	var found []string
	if strings.ContainsAny(src.Pattern, "*?[") {
		var err error
		if found, err = filepath.Glob(full); err != nil {
			return nil, &NotFoundError{fmt.Sprintf("%s: the pattern %q is malformed: %v", src.At, src.Pattern, err)}
		}
		found = slices.DeleteFunc(found, func(p string) bool { fi, err := os.Stat(p); return err == nil && fi.IsDir() })
		if len(found) == 0 {
			return nil, &NotFoundError{fmt.Sprintf("%s: no file matches %q; expected at least one under %s", src.At, src.Pattern, folder(src.Pattern))}
		}
	} else {
		found = []string{full}
	}
	root, err := filepath.EvalSymlinks(src.Root)
	if err != nil {
		return nil, err
	}
	root, err = filepath.Abs(root)
	if err != nil {
		return nil, err
	}
	var out []string
	for _, p := range found {
		fi, err := os.Stat(p)
		if errors.Is(err, fs.ErrNotExist) {
			return nil, &NotFoundError{fmt.Sprintf("%s: there is no file %q; put it there, or mend the path", src.At, src.Pattern)}
		}
		if err != nil {
			return nil, fmt.Errorf("%s: %w", src.At, err)
		}
		if fi.IsDir() {
			return nil, &NotFoundError{fmt.Sprintf("%s: %q is a folder; expected a file, or a pattern such as \"%s/*.csv\"", src.At, src.Pattern, src.Pattern)}
		}
		if !fi.Mode().IsRegular() {
			return nil, &NotFoundError{fmt.Sprintf("%s: %q is no ordinary file", src.At, src.Pattern)}
		}
		real, err := filepath.EvalSymlinks(p)
		if err != nil {
			return nil, err
		}
		if real, err = filepath.Abs(real); err != nil {
			return nil, err
		}
		if rel, err := filepath.Rel(root, real); !src.Outside && (err != nil || rel == ".." || strings.HasPrefix(rel, ".."+string(filepath.Separator))) {
			return nil, &NotFoundError{fmt.Sprintf("%s: %q leads out of the study's folder by a link; write outside = true in the input if that is on purpose", src.At, src.Pattern)}
		}
		rel, err := filepath.Rel(src.Root, p)
		if err != nil {
			rel = p
		}
		out = append(out, filepath.ToSlash(rel))
	}
	sort.Strings(out)
	return out, nil
}

func folder(pattern string) string {
	if i := strings.LastIndexByte(pattern, '/'); i > 0 {
		return pattern[:i]
	}
	return "the study's folder"
}

func (s *Source) full(path string) string {
	if p, ok := s.Instead[path]; ok {
		return p
	}
	p := filepath.FromSlash(path)
	if filepath.IsAbs(p) {
		return p
	}
	return filepath.Join(s.Root, p)
}

// Hash takes the digests of files, as many at once as there are cores.
func Hash(ctx context.Context, src Source, paths []string) ([]File, error) {
	out := make([]File, len(paths))
	eg, ctx := errgroup.WithContext(ctx)
	eg.SetLimit(4)
	for i, p := range paths {
		eg.Go(func() error {
			if err := ctx.Err(); err != nil {
				return err
			}
			f, err := os.Open(src.full(p))
			if err != nil {
				return err
			}
			defer f.Close()
			h := sha256.New()
			n, err := io.CopyBuffer(struct{ io.Writer }{h}, struct{ io.Reader }{f}, make([]byte, 1<<20))
			if err != nil {
				return fmt.Errorf("%s: %w", p, err)
			}
			out[i] = File{Path: p, SHA256: hex.EncodeToString(h.Sum(nil)), Bytes: n}
			return nil
		})
	}
	return out, eg.Wait()
}

// SHA256 is the digest of b in hexadecimal.
func SHA256(b []byte) string {
	h := sha256.Sum256(b)
	return hex.EncodeToString(h[:])
}
