package intake

import "bytes"

// headBytes is the number of first bytes that decide on encoding and format.
const headBytes = 8

// signatures are first bytes of files that are no delimited text, as the
// specification of each format gives them.
var signatures = []struct {
	bytes, what, fix string
}{
	{"\x89HDF\r\n\x1a\n", "an HDF5 file", "HDF5 export is not read by this version: export as text"},
	{"PK\x03\x04", "a zip archive or a spreadsheet (such as .xlsx)", "unpack it, or export as text with tabs"},
	{"\x1f\x8b", "a gzip-compressed file", "decompress it"},
	{"\x28\xb5\x2f\xfd", "a zstd-compressed file", "decompress it"},
	{"BZh", "a bzip2-compressed file", "decompress it"},
	{"\xfd7zXZ\x00", "an xz-compressed file", "decompress it"},
	{"7z\xbc\xaf\x27\x1c", "a 7z archive", "unpack it"},
	{"\xd0\xcf\x11\xe0\xa1\xb1\x1a\xe1", "an old office document (such as .xls)", "export as text with tabs"},
	{"\x89PNG\r\n\x1a\n", "a PNG picture", notARun},
	{"\xff\xd8\xff", "a JPEG picture", notARun},
	{"GIF8", "a GIF picture", notARun},
	{"II*\x00", "a TIFF picture", notARun},
	{"MM\x00*", "a TIFF picture", notARun},
	{"%PDF-", "a PDF document", notARun},
	{"SQLite f", "an SQLite database", notARun},
	{"CDF\x01", "a NetCDF file", "export as text"},
	{"CDF\x02", "a NetCDF file", "export as text"},
	{"PAR1", "a Parquet file", "export as text"},
	{"MATLAB 5", "a MATLAB data file", "export as text"},
	{"\x7fELF", "a program", notARun},
	{`{\rtf`, "a rich text document", "export as plain text"},
	{`{"`, "JSON", notARun},
	{"<", "XML or HTML", "export as text with tabs"},
}

const notARun = "move it out of the folder of runs"

// looksLike names the format that the first bytes of a file belong to; "" for
// none that is known.
func looksLike(head []byte) (what, fix string) {
	for _, s := range signatures {
		if bytes.HasPrefix(head, []byte(s.bytes)) {
			return s.what, s.fix
		}
	}
	return "", ""
}

// controlByte returns the place of the first control character that no line of
// text holds, -1 when there is none. Ctrl-Z may end a text file of old.
func controlByte(b []byte) int {
	for i, c := range b {
		if c < 0x20 && c != '\t' && c != '\r' && c != '\n' && c != '\f' && c != 0x1a {
			return i
		}
	}
	return -1
}
