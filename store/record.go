package store

import (
	"encoding/hex"
	"encoding/json"
	"fmt"
	"strings"
	"time"
	"unicode/utf8"

	"platen/pipeline/run"
)

// Ref names one revision of one result.
type Ref struct {
	ID       string `json:"id"`
	Revision int    `json:"revision"` // from 1
}

func (r Ref) key() []byte { return fmt.Appendf(nil, "%s/%06d", r.ID, r.Revision) }

// String is the form in which a revision is named to people.
func (r Ref) String() string {
	id := r.ID
	if len(id) > 12 {
		id = id[:12]
	}
	return fmt.Sprintf("%s/%d", id, r.Revision)
}

// Record is a stored result with what became of it.
type Record struct {
	Ref
	Arrival      uint64     // order in which results were stored, from 1
	Stored       time.Time  // UTC
	Paths        []string   // files whose current result this is
	SupersededBy *Ref       // set when there are none
	Result       run.Result // as of the first file that had these bytes
}

// Path is what is known of a run file.
type Path struct {
	Path        string // full path, with forward slashes
	Size        int64
	ModTimeNs   int64
	Fingerprint string // of its first and last bytes, as the caller makes it
	Current     Ref
	Earlier     []Ref // oldest first
}

// recordJSON and pathJSON are the stored forms.
type (
	recordJSON struct {
		Ref
		Arrival      uint64     `json:"arrival"`
		Stored       time.Time  `json:"stored"`
		Paths        []fileName `json:"paths"`
		SupersededBy *Ref       `json:"superseded_by,omitempty"`
		Result       run.Result `json:"result"`
	}
	pathJSON struct {
		Path        fileName `json:"path"`
		Size        int64    `json:"size"`
		ModTimeNs   int64    `json:"mtime_ns"`
		Fingerprint string   `json:"fingerprint"`
		Current     Ref      `json:"current"`
		Earlier     []Ref    `json:"earlier,omitempty"`
	}
)

// MarshalJSON writes the stored form.
func (r Record) MarshalJSON() ([]byte, error) {
	names := make([]fileName, len(r.Paths))
	for i, p := range r.Paths {
		names[i] = fileName(p)
	}
	return json.Marshal(recordJSON{r.Ref, r.Arrival, r.Stored, names, r.SupersededBy, r.Result})
}

// UnmarshalJSON reads the stored form.
func (r *Record) UnmarshalJSON(text []byte) error {
	var j recordJSON
	if err := json.Unmarshal(text, &j); err != nil {
		return err
	}
	*r = Record{Ref: j.Ref, Arrival: j.Arrival, Stored: j.Stored, SupersededBy: j.SupersededBy, Result: j.Result}
	for _, n := range j.Paths {
		r.Paths = append(r.Paths, string(n))
	}
	return nil
}

// MarshalJSON writes the stored form.
func (p Path) MarshalJSON() ([]byte, error) {
	return json.Marshal(pathJSON{fileName(p.Path), p.Size, p.ModTimeNs, p.Fingerprint, p.Current, p.Earlier})
}

// UnmarshalJSON reads the stored form.
func (p *Path) UnmarshalJSON(text []byte) error {
	var j pathJSON
	if err := json.Unmarshal(text, &j); err != nil {
		return err
	}
	*p = Path{string(j.Path), j.Size, j.ModTimeNs, j.Fingerprint, j.Current, j.Earlier}
	return nil
}

// fileName is a path in JSON. A name may hold bytes that are not UTF-8, for
// which JSON has no place: each is written as NUL, which no name holds, and two
// hexadecimal digits.
type fileName string

// MarshalText escapes what is not UTF-8.
func (n fileName) MarshalText() ([]byte, error) {
	var out []byte
	for s := string(n); s != ""; {
		r, size := utf8.DecodeRuneInString(s)
		if r == utf8.RuneError && size == 1 {
			out = append(out, 0)
			out = hex.AppendEncode(out, []byte(s[:1]))
		} else {
			out = append(out, s[:size]...)
		}
		s = s[size:]
	}
	return out, nil
}

// UnmarshalText undoes MarshalText.
func (n *fileName) UnmarshalText(text []byte) error {
	head, rest, escaped := strings.Cut(string(text), "\x00")
	out := head
	for escaped {
		if len(rest) < 2 {
			return fmt.Errorf("file name: an escape is cut short")
		}
		b, err := hex.DecodeString(rest[:2])
		if err != nil {
			return fmt.Errorf("file name: %w", err)
		}
		head, rest, escaped = strings.Cut(rest[2:], "\x00")
		out += string(b) + head
	}
	*n = fileName(out)
	return nil
}
