package phantom

import (
	"bytes"
	"errors"
	"fmt"
	"io"
	"iter"
	"math"
	"math/rand/v2"
	"slices"
	"strconv"
	"strings"
	"time"
	"unicode/utf16"

	"platen/pipeline/run"
)

// Encoding of the text.
type Encoding int

// The encodings. Those of two bytes begin with a byte order mark.
const (
	UTF8 Encoding = iota
	UTF8Marked
	UTF16LittleEndian
	UTF16BigEndian
	Latin1
)

// Ending tells how a file lets know that it is complete.
type Ending int

// The endings.
const (
	Declared Ending = iota // the header declares the number of samples
	EndMark                // the last line says so
	Silent                 // not at all
)

// Dialect is a way to write a run as text. The zero value is the run file of
// platen: tabs, decimal points, line feeds, UTF-8, header lines, force, height
// and imaged radius.
type Dialect struct {
	Delimiter    byte // tab, comma, semicolon or space; 0: tab
	DecimalComma bool
	CRLF         bool
	Encoding     Encoding
	MicroSign    bool   // µm for um
	Comment      string // before header lines and the end mark; empty: "# "
	NoHeader     bool   // no header lines at all
	Ending       Ending

	Deflection  bool // sensor deflection and drive position instead of force and height
	SectionArea bool // area of the imaged cross-section instead of its radius
	Segments    bool // a column with the index of the move
}

func (d Dialect) validate() error {
	switch d.Delimiter {
	case 0, '\t', ',', ';', ' ':
	default:
		return fmt.Errorf("Dialect.Delimiter = %q: want tab, comma, semicolon or space", d.Delimiter)
	}
	if d.DecimalComma && d.Delimiter == ',' {
		return errors.New("Dialect: a comma cannot be both delimiter and decimal sign")
	}
	if d.Encoding < UTF8 || d.Encoding > Latin1 {
		return fmt.Errorf("Dialect.Encoding = %d: want one of the encodings", d.Encoding)
	}
	if d.Ending < Declared || d.Ending > Silent {
		return fmt.Errorf("Dialect.Ending = %d: want one of the endings", d.Ending)
	}
	return nil
}

// WriteTo writes the whole file in the dialect of the recording's Spec.
func (r *Recording) WriteTo(w io.Writer) (n int64, err error) {
	pieces, err := r.Export(r.spec.Dialect)
	if err != nil {
		return 0, err
	}
	for _, p := range pieces {
		k, err := w.Write(p)
		n += int64(k)
		if err != nil {
			return n, fmt.Errorf("phantom: writing %s: %w", r.spec.Name, err)
		}
	}
	return n, nil
}

// Text simulates a run and returns the whole file in the dialect of its Spec,
// for runs short enough to be held.
func Text(s Spec) ([]byte, error) {
	rec, err := Simulate(s)
	if err != nil {
		return nil, err
	}
	var b bytes.Buffer
	_, err = rec.WriteTo(&b)
	return b.Bytes(), err
}

// Export yields the file in pieces, each with the moment of the run in s at
// which the instrument has it: the header first, at 0, then rows, then the end
// mark if there is one. A piece is valid until the next is asked for, and holds
// whole rows, a twentieth of a second of them or less. The error tells that the
// dialect, or this run in this dialect, cannot be written.
func (r *Recording) Export(d Dialect) (iter.Seq2[float64, []byte], error) {
	if err := d.validate(); err != nil {
		return nil, fmt.Errorf("phantom: %s: %w", r.spec.Name, err)
	}
	if n := r.spec.Fault.ByteCount; n > 0 {
		return r.meaningless(n), nil
	}
	if d.Deflection && r.header.SpringConstantNPerM == nil {
		return nil, fmt.Errorf("phantom: %s: deflection cannot be written without Rig.SpringConstantNPerM", r.spec.Name)
	}
	if d.Delimiter == 0 {
		d.Delimiter = '\t'
	}
	if d.Comment == "" {
		d.Comment = "# "
	}
	micro := "um"
	if d.MicroSign {
		micro = "µm"
	}
	decimal := byte('.')
	if d.DecimalComma {
		decimal = ','
	}
	eol := "\n"
	if d.CRLF {
		eol = "\r\n"
	}
	imaging := r.imageRow > 0 && r.spec.Cell.RadiusM > 0
	// An empty cell between spaces is no cell.
	if imaging && d.Delimiter == ' ' {
		return nil, fmt.Errorf("phantom: %s: cells that are sometimes empty cannot be parted by spaces: switch imaging off or take another delimiter", r.spec.Name)
	}

	return func(yield func(float64, []byte) bool) {
		var text, coded []byte
		first, stopped := true, false
		send := func(t float64) {
			if len(text) > 0 && !stopped {
				coded = d.Encoding.encode(coded[:0], text, first)
				first = false
				stopped = !yield(t, coded)
			}
			text = text[:0]
		}
		if !d.NoHeader {
			for _, line := range headerLines(r.header, micro, d.DecimalComma) {
				text = append(text, d.Comment+line+eol...)
			}
		}
		names := []string{"time [s]", "force [nN]", "height [" + micro + "]"}
		if d.Deflection {
			names = []string{"time [s]", "deflection [nm]", "drive [" + micro + "]"}
		}
		if imaging {
			if d.SectionArea {
				names = append(names, "section area ["+micro+"^2]")
			} else {
				names = append(names, "radius ["+micro+"]")
			}
		}
		if d.Segments {
			names = append(names, "segment")
		}
		text = append(text, strings.Join(names, string(d.Delimiter))+eol...)
		send(0)

		number := func(v float64) {
			at := len(text)
			text = strconv.AppendFloat(text, v, 'e', 6, 64)
			if decimal != '.' {
				if i := bytes.IndexByte(text[at:], '.'); i >= 0 {
					text[at+i] = decimal
				}
			}
		}
		done := errors.New("the receiver wants no more")
		perPiece := max(1, int(r.spec.Rig.RateHz/20))
		inPiece, last := 0, 0.0
		err := r.Blocks(func(b *run.Block) error {
			for i := range b.Len() {
				last = b.Time[i]
				number(last)
				text = append(text, d.Delimiter)
				if d.Deflection {
					deflection := b.Force[i] / r.header.SpringConstantNPerM.Value
					number(deflection * 1e9)
					text = append(text, d.Delimiter)
					number((b.Height[i] + deflection) * 1e6)
				} else {
					number(b.Force[i] * 1e9)
					text = append(text, d.Delimiter)
					number(b.Height[i] * 1e6)
				}
				if imaging {
					text = append(text, d.Delimiter)
					if v := b.Radius[i]; !math.IsNaN(v) {
						if d.SectionArea {
							number(math.Pi * v * v * 1e12)
						} else {
							number(v * 1e6)
						}
					}
				}
				if d.Segments {
					text = append(text, d.Delimiter)
					text = strconv.AppendInt(text, int64(b.Segment[i]), 10)
				}
				text = append(text, eol...)
				if inPiece++; inPiece == perPiece {
					inPiece = 0
					if send(last); stopped {
						return done
					}
				}
			}
			return nil
		})
		if err != nil {
			return // done: nothing else fails
		}
		if d.Ending == EndMark && r.spec.Fault.StopAtS == 0 {
			text = append(text, d.Comment+"end"+eol...)
		}
		send(last)
	}, nil
}

// headerLines writes what is known as "key: value".
func headerLines(h run.Header, micro string, decimalComma bool) []string {
	var lines []string
	add := func(key, value string) {
		if value != "" {
			lines = append(lines, key+": "+value)
		}
	}
	plain := func(v float64) string {
		s := strconv.FormatFloat(v, 'g', 7, 64)
		if decimalComma {
			s = strings.Replace(s, ".", ",", 1)
		}
		return s
	}
	quantity := func(key, unit string, q *run.Quantity, scale float64) {
		if q != nil {
			add(key+" ["+unit+"]", plain(q.Value*scale)+" ± "+plain(q.U*scale))
		}
	}
	add("kind", string(h.Kind))
	add("cell", h.Cell)
	add("session", h.Session)
	add("condition", h.Condition)
	add("operator", h.Operator)
	add("medium", h.Medium)
	add("note", h.Note)
	if !h.Started.IsZero() {
		add("started", h.Started.Format(time.RFC3339))
	}
	quantity("spring constant", "N/m", h.SpringConstantNPerM, 1)
	quantity("sensitivity", "nm/V", h.SensitivityMPerV, 1e9)
	quantity("diameter", micro, h.DiameterM, 1e6)
	quantity("temperature", "K", h.TemperatureK, 1)
	if h.DriveFrequencyHz > 0 {
		add("drive frequency [Hz]", plain(h.DriveFrequencyHz))
	}
	if h.Samples > 0 {
		add("samples", strconv.FormatInt(h.Samples, 10))
	}
	return lines
}

// encode appends text, which is UTF-8, in the encoding; first asks for the byte
// order mark.
func (e Encoding) encode(to, text []byte, first bool) []byte {
	switch e {
	case UTF8Marked:
		if first {
			to = append(to, "\ufeff"...)
		}
	case UTF16LittleEndian, UTF16BigEndian:
		var units []uint16
		if first {
			units = append(units, 0xfeff)
		}
		for _, c := range string(text) {
			units = utf16.AppendRune(units, c)
		}
		for _, u := range units {
			if e == UTF16LittleEndian {
				to = append(to, byte(u), byte(u>>8))
			} else {
				to = append(to, byte(u>>8), byte(u))
			}
		}
		return to
	case Latin1:
		for _, c := range string(text) {
			if c > 0xff {
				c = '?' // ISO 8859-1 has no more
			}
			to = append(to, byte(c))
		}
		return to
	}
	return append(to, text...)
}

// meaningless yields n bytes that are no text, in four pieces within a second.
func (r *Recording) meaningless(n int) iter.Seq2[float64, []byte] {
	return func(yield func(float64, []byte) bool) {
		rng := rand.New(rand.NewPCG(r.spec.Seed, streamBytes))
		b := make([]byte, n)
		for i := range b {
			b[i] = byte(rng.Uint32())
		}
		t := 0.0
		for piece := range slices.Chunk(b, (n+3)/4) {
			if !yield(t, piece) {
				return
			}
			t += 0.25
		}
	}
}
