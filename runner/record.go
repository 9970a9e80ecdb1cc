package runner

import (
	"bytes"
	"encoding/json"
	"errors"
	"fmt"
	"io/fs"
	"os"
	"path/filepath"
	"sort"
	"strconv"
	"strings"

	"batten/runner/provenance"
	"batten/runner/store"
)

// recordFormat is raised when a record's layout changes.
const recordFormat = 1

// Record says what one run did. It lies under .batten/runs, one file a run.
type Record struct {
	Format   int           `json:"format"`
	Run      string        `json:"run"`     // 000007-3f9ac2d10b44: a count, and the head of Results
	Results  string        `json:"results"` // digest of what the run arrived at; free of time and place
	Started  string        `json:"started"`
	Finished string        `json:"finished"`
	Program  string        `json:"program"`
	Go       string        `json:"go"`
	Methods  []string      `json:"methods"`
	Spec     SpecFile      `json:"spec"`
	Seed     int64         `json:"seed"`
	Inputs   []InputRecord `json:"inputs"`
	Curves   []CurveRecord `json:"curves"`
	Counts   Counts        `json:"fits"`
	Moved    []Move        `json:"moved"`
	Ledger   string        `json:"ledger,omitempty"` // the acceptance that Moved is against, in a line
	Dated    string        `json:"dated,omitempty"`  // the day that reports bear
	Outputs  []Output      `json:"outputs"`
	Refused  []string      `json:"refused,omitempty"`
	Guards   []GuardRecord `json:"guards,omitempty"` // every guard's result, in the order of the spec

	Who     string              `json:"who,omitempty"`     // who ran it, where known
	Against []FileRecord        `json:"against,omitempty"` // the ledger's files that it was compared with
	Modules []provenance.Module `json:"modules,omitempty"` // that the program was built of
}

// checkLine begins the last line of a record, which holds the digest of all
// before it. Records of earlier versions have none.
const checkLine = ",\n \"check\": \""

// AlteredRecordError says that a record is not what was written.
type AlteredRecordError struct{ Run, File string }

func (e *AlteredRecordError) Error() string {
	return fmt.Sprintf("the record of run %s has been altered since it was written, or damaged (%s); expected the bytes that its last line gives the digest of. Bring the file back from a backup, or run the study again", e.Run, filepath.ToSlash(e.File))
}

// SpecFile is the spec as it was run.
type SpecFile struct {
	Path   string `json:"path"` // under the study's folder
	SHA256 string `json:"sha256"`
	Text   string `json:"text"`
}

// InputRecord is one input's files.
type InputRecord struct {
	Name  string       `json:"name"`
	Rows  int          `json:"rows"`
	Files []FileRecord `json:"files"`
}

// FileRecord is one file with its digest.
type FileRecord struct {
	Path   string `json:"path"`
	SHA256 string `json:"sha256"`
	Bytes  int64  `json:"bytes"`
	Rows   int    `json:"rows"`
}

// CurveRecord is one curve's fits and what became of its rows.
type CurveRecord struct {
	Name       string          `json:"name"`
	Object     string          `json:"object"` // of the store: names every part
	Read       int             `json:"rows_read"`
	Dropped    []dropCount     `json:"dropped"`
	SetAside   []setAside      `json:"set_aside"`
	ZeroWeight int             `json:"zero_weight"`
	Counts     Counts          `json:"fits"`
	Verdicts   []VerdictRecord `json:"verdicts,omitempty"` // of fits that a guard or their data kept back, or warned of
}

// VerdictRecord is what the guards said of one fit.
type VerdictRecord struct {
	Fit     string   `json:"fit"`
	Outcome string   `json:"outcome"` // warn, skip, refuse, none
	Why     string   `json:"why,omitempty"`
	Warned  []string `json:"warned,omitempty"`
}

// Counts counts fits.
type Counts struct {
	Total    int `json:"total"`
	Computed int `json:"computed"`
	Reused   int `json:"reused"`
	Skipped  int `json:"skipped"`
	Refused  int `json:"refused"`
}

func (c *Counts) add(o Counts) {
	c.Total += o.Total
	c.Computed += o.Computed
	c.Reused += o.Reused
	c.Skipped += o.Skipped
	c.Refused += o.Refused
}

// Output is a file that the study makes.
type Output struct {
	Path   string `json:"path"`
	SHA256 string `json:"sha256"`
	Bytes  int64  `json:"bytes"`
	Wrote  bool   `json:"wrote"` // false: it stood there already with these bytes
}

func runsDir(dir string) string { return filepath.Join(dir, ".batten", "runs") }

// listRuns returns the ids of the recorded runs, oldest first. Their order is
// that of their counts, not of any clock.
func listRuns(dir string) ([]string, error) {
	es, err := os.ReadDir(runsDir(dir))
	if errors.Is(err, fs.ErrNotExist) {
		return nil, nil
	}
	if err != nil {
		return nil, err
	}
	var out []string
	for _, e := range es {
		id, ok := strings.CutSuffix(e.Name(), ".json")
		if _, n := runNumber(id); ok && n {
			out = append(out, id)
		}
	}
	sort.Slice(out, func(i, j int) bool {
		a, _ := runNumber(out[i])
		b, _ := runNumber(out[j])
		return a < b || a == b && out[i] < out[j]
	})
	return out, nil
}

func runNumber(id string) (int, bool) {
	head, _, ok := strings.Cut(id, "-")
	n, err := strconv.Atoi(head)
	return n, ok && err == nil
}

// lastRecord reads the newest record that can be read; nil where there is
// none. A damaged record is passed over.
func lastRecord(dir string) (*Record, error) {
	ids, err := listRuns(dir)
	if err != nil {
		return nil, err
	}
	for i := len(ids) - 1; i >= 0; i-- {
		if r, err := readRecord(dir, ids[i]); err == nil {
			return r, nil
		}
	}
	return nil, nil
}

func readRecord(dir, id string) (*Record, error) {
	file := filepath.Join(runsDir(dir), id+".json")
	b, err := os.ReadFile(file)
	if err != nil {
		return nil, err
	}
	if i := bytes.LastIndex(b, []byte(checkLine)); i >= 0 && !bytes.Equal(b, checked(b[:i:i])) {
		return nil, &AlteredRecordError{id, file}
	}
	var r Record
	if err := json.Unmarshal(b, &r); err != nil {
		return nil, &AlteredRecordError{id, file}
	}
	if r.Format > recordFormat {
		return nil, fmt.Errorf("record of run %s is of format %d, this program reads up to %d", id, r.Format, recordFormat)
	}
	return &r, nil
}

// writeRecord gives the record its number and writes it. The caller holds the
// study's lock.
func writeRecord(dir string, r *Record) error {
	ids, err := listRuns(dir)
	if err != nil {
		return err
	}
	n := 1
	if len(ids) > 0 {
		last, _ := runNumber(ids[len(ids)-1])
		n = last + 1
	}
	r.Format = recordFormat
	r.Run = fmt.Sprintf("%06d-%.12s", n, r.Results)
	b, err := json.MarshalIndent(r, "", " ")
	if err != nil {
		return err
	}
	return store.WriteFile(filepath.Join(runsDir(dir), r.Run+".json"), checked(bytes.TrimSuffix(b, []byte("\n}"))))
}

// checked ends a record with the digest of its bytes.
func checked(b []byte) []byte {
	return fmt.Appendf(b, "%s%s\"\n}\n", checkLine, digest(b))
}
