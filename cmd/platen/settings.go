package main

import (
	"bytes"
	"crypto/sha256"
	"encoding/hex"
	"encoding/json"
	"errors"
	"fmt"
	"io/fs"
	"os"
	"path/filepath"

	"github.com/pelletier/go-toml/v2"

	"platen/pipeline"
	"platen/pipeline/cell"
	"platen/qc"
)

// settings is what platen.toml may say. Every key has a default, so the file
// may be missing, empty, or hold only what differs.
type settings struct {
	Watch    watchSettings     `toml:"watch"`
	Analysis pipeline.Settings `toml:"analysis"`
	Limits   qc.Limits         `toml:"limits"`
	Cells    cell.Settings     `toml:"cells"`
	Log      logSettings       `toml:"log"`

	file string // where they came from, "" for the defaults
}

type watchSettings struct {
	// SettleS: a run that declares no end is complete when its file has not
	// changed for this long. Default 5 s: exporters that buffer write at least
	// every second or two.
	SettleS float64 `toml:"settle_s"`
	// SweepS: the folder is looked through this often whatever the file
	// events say. Default 2 s.
	SweepS float64 `toml:"sweep_s"`
	// Include and Exclude are patterns of file names (not paths).
	Include []string `toml:"include"`
	Exclude []string `toml:"exclude"`
}

type logSettings struct {
	// MaxSizeMB is the size at which the session log starts a new part;
	// Keep the number of old, compressed parts that are kept.
	MaxSizeMB int `toml:"max_size_mb"`
	Keep      int `toml:"keep"`
}

func defaultSettings() settings {
	return settings{
		Watch: watchSettings{
			SettleS: 5,
			SweepS:  2,
			Include: []string{"*.tsv", "*.csv", "*.txt", "*.dat", "*.asc"},
			Exclude: []string{},
		},
		Analysis: pipeline.Defaults(),
		Limits:   qc.Defaults(),
		Cells:    cell.Defaults(),
		Log:      logSettings{MaxSizeMB: 10, Keep: 20},
	}
}

// loadSettings reads the file named, or looks for one in the usual places.
func loadSettings(file string) (*settings, error) {
	s := defaultSettings()
	if file == "" {
		file = findSettings()
	}
	if file == "" {
		return &s, nil
	}
	text, err := os.ReadFile(file)
	if err != nil {
		return nil, fmt.Errorf("settings: %w", err)
	}
	s.file = file
	if err := s.decode(text); err != nil {
		return nil, fmt.Errorf("settings file %s: %w", file, err)
	}
	return &s, nil
}

// findSettings looks in the current folder, then in the user's configuration
// folder.
func findSettings() string {
	places := []string{"platen.toml"}
	if dir, err := os.UserConfigDir(); err == nil {
		places = append(places, filepath.Join(dir, "platen", "platen.toml"))
	}
	for _, p := range places {
		if _, err := os.Stat(p); err == nil || !errors.Is(err, fs.ErrNotExist) {
			return p
		}
	}
	return ""
}

func (s *settings) decode(text []byte) error {
	// Editors on Windows put a byte order mark first, which TOML does not know.
	text = bytes.TrimPrefix(text, []byte("\xef\xbb\xbf"))
	d := toml.NewDecoder(bytes.NewReader(text))
	d.DisallowUnknownFields()
	err := d.Decode(s)
	var unknown *toml.StrictMissingError
	var bad *toml.DecodeError
	switch {
	case errors.As(err, &unknown):
		row, _ := unknown.Errors[0].Position()
		return fmt.Errorf("line %d: there is no such key; platen preflight lists the keys that exist\n%s", row, unknown.String())
	case errors.As(err, &bad):
		row, _ := bad.Position()
		return fmt.Errorf("line %d: %v\n%s", row, bad, bad.String())
	case err != nil:
		return err
	}
	return s.validate()
}

func (s *settings) validate() error {
	if err := s.Analysis.Validate(); err != nil {
		return err
	}
	if err := s.Limits.Validate(); err != nil {
		return err
	}
	if err := s.Cells.Validate(); err != nil {
		return err
	}
	for _, c := range []struct {
		key    string
		v      float64
		lo, hi float64
	}{
		{"watch.settle_s", s.Watch.SettleS, 0.5, 3600},
		{"watch.sweep_s", s.Watch.SweepS, 0.2, 600},
		{"log.max_size_mb", float64(s.Log.MaxSizeMB), 1, 1000},
		{"log.keep", float64(s.Log.Keep), 1, 10000},
	} {
		if !(c.v >= c.lo && c.v <= c.hi) {
			return fmt.Errorf("%s = %g: must lie between %g and %g", c.key, c.v, c.lo, c.hi)
		}
	}
	if len(s.Watch.Include) == 0 {
		return errors.New("watch.include is empty: no file would ever be read; give at least one pattern, such as \"*.tsv\"")
	}
	for _, p := range append(append([]string{}, s.Watch.Include...), s.Watch.Exclude...) {
		if _, err := filepath.Match(p, "x"); err != nil {
			return fmt.Errorf("watch.include or watch.exclude: %q is no file name pattern: write it like \"*.tsv\"", p)
		}
	}
	return nil
}

// fingerprint identifies the settings on which a result depends; those of the
// watching and the log do not change a result.
func (s *settings) fingerprint() string {
	return fingerprintOf(struct {
		Analysis pipeline.Settings
		Limits   qc.Limits
	}{s.Analysis, s.Limits})
}

// cellFingerprint identifies those on which a cell's document depends beside
// the results that it is made from.
func (s *settings) cellFingerprint() string { return fingerprintOf(s.Cells) }

func fingerprintOf(x any) string {
	text, err := json.Marshal(x)
	if err != nil {
		panic(err) // numbers that passed validate always encode
	}
	sum := sha256.Sum256(text)
	return hex.EncodeToString(sum[:])
}
