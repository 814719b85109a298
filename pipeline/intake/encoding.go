package intake

import (
	"bytes"
	"unicode/utf8"

	"golang.org/x/text/encoding/charmap"
	"golang.org/x/text/encoding/unicode"
	"golang.org/x/text/transform"
)

// encoding tells how the bytes of a file stand for text. Windows-1252 is not
// among them: it differs from UTF-8 in header lines only and is told from it
// line by line (decodeLine).
type encoding uint8

const (
	utf8Bytes encoding = iota
	utf16LE
	utf16BE
)

// detect tells the encoding from the first bytes of a file, and how many of
// them are a byte order mark.
func detect(b []byte) (enc encoding, mark int) {
	switch {
	case bytes.HasPrefix(b, []byte("\xef\xbb\xbf")):
		return utf8Bytes, 3
	case bytes.HasPrefix(b, []byte("\xff\xfe")):
		return utf16LE, 2
	case bytes.HasPrefix(b, []byte("\xfe\xff")):
		return utf16BE, 2
	case len(b) >= 4 && b[0] != 0 && b[1] == 0 && b[2] != 0 && b[3] == 0:
		return utf16LE, 0
	case len(b) >= 4 && b[0] == 0 && b[1] != 0 && b[2] == 0 && b[3] != 0:
		return utf16BE, 0
	}
	return utf8Bytes, 0
}

// unit returns the number of bytes of one code unit.
func (e encoding) unit() int64 {
	if e == utf8Bytes {
		return 1
	}
	return 2
}

// size returns the number of bytes in the file that the text b was read from.
func (e encoding) size(b []byte) int64 {
	if e == utf8Bytes {
		return int64(len(b))
	}
	var n int64
	for len(b) > 0 {
		r, k := utf8.DecodeRune(b)
		if n += 2; r > 0xffff {
			n += 2
		}
		b = b[k:]
	}
	return n
}

// decoder returns what turns UTF-16 into UTF-8. Lone surrogates become U+FFFD.
func (e encoding) decoder() transform.Transformer {
	order := unicode.LittleEndian
	if e == utf16BE {
		order = unicode.BigEndian
	}
	return unicode.UTF16(order, unicode.IgnoreBOM).NewDecoder().Transformer
}

// decodeLine returns a line as text: what is no UTF-8 is Windows-1252, of
// which Latin-1 is a part for all that matters here (µ, ±, ², °).
func decodeLine(b []byte) string {
	if utf8.Valid(b) {
		return string(b)
	}
	// The decoder has a character for every byte, so it cannot fail.
	s, _ := charmap.Windows1252.NewDecoder().Bytes(b)
	return string(s)
}
