package intake

import (
	"os"
	"path/filepath"
	"slices"
	"strings"
	"testing"

	"platen/pipeline/run"
)

// unreadable tells line and key words of the message for each file.
var unreadable = map[string]struct {
	line  int64
	words string // separated by |
	isRun bool
}{
	"unreadable_empty.tsv":             {0, "empty file", false},
	"unreadable_header_only.tsv":       {5, "rows of numbers|header only", true},
	"unreadable_no_columns.tsv":        {0, "no column line|time [s]", false},
	"unreadable_numbers_only.tsv":      {1, "column names before the first row|time [s], force [nN]", false},
	"unreadable_missing_unit.tsv":      {4, `column "force"|a unit: one of N, mN, uN, nN, pN|force [N]`, true},
	"unreadable_unknown_unit.tsv":      {4, `column "force [mg]"|"mg"|N, mN, uN, nN, pN`, true},
	"unreadable_duplicate_column.tsv":  {4, `column "force [N]"|one column of force`, true},
	"unreadable_no_time.tsv":           {4, "a time column|such as time [s]", true},
	"unreadable_no_height.tsv":         {4, "a height or drive position column", true},
	"unreadable_text_in_number.tsv":    {8, `byte 234|column "force [nN]"|"overload"`, true},
	"unreadable_empty_cell.tsv":        {8, "an empty cell|may be empty", true},
	"unreadable_overflow.tsv":          {8, `"1e999"|a double can hold`, true},
	"unreadable_nan.tsv":               {8, `"NaN"|a number in every row`, true},
	"unreadable_inf.tsv":               {8, `"-Inf"|a number in every row`, true},
	"unreadable_nan_radius.tsv":        {8, `column "radius [um]"|"NaN"|leave the cell empty`, true},
	"unreadable_hex_float.tsv":         {8, `"0x1p-2"|hexadecimal`, true},
	"unreadable_thousands.tsv":         {8, `"1,234.5"|thousands`, true},
	"unreadable_two_decimal_signs.tsv": {8, `"1,5"|decimal sign of this file is '.'`, true},
	"unreadable_comma_twice.csv":       {2, "3 cells separated by comma|cannot be the delimiter too", true},
	"unreadable_ragged.tsv":            {8, "4 cells separated by tab|got 2", true},
	"unreadable_behind_end.tsv":        {9, `nothing behind the line "# end"`, true},
	"unreadable_bad_samples.tsv":       {1, `samples|plain digits|"many"`, false},
	"unreadable_ambiguous_start.tsv":   {2, `"03/04/2026 10:22"|2026-03-14T10:22:31+01:00`, false},
	"unreadable_cr_only.txt":           {1, "LF or CRLF|a CR alone", false},
	"unreadable_nul_inside.tsv":        {8, "NUL bytes at the end of the file only|5 NUL bytes", true},
	"unreadable_joined_bom.tsv":        {8, `column "time [s]"|\ufeff|a second file begins here`, true},
	"unreadable_zip.tsv":               {1, "zip archive|unpack", false},
	"unreadable_hdf5.h5":               {1, "HDF5 export is not read by this version: export as text", false},
	"unreadable_png.tsv":               {1, "PNG picture", false},
	"unreadable_binary.dat":            {1, "binary", false},
	"unreadable_json.log":              {1, "JSON", false},
	"unreadable_nul_only.tsv":          {0, "NUL bytes only", false},
}

func TestFolder(t *testing.T) {
	const dir = "../../testdata/intake"
	entries, err := os.ReadDir(dir)
	if err != nil {
		t.Fatal(err)
	}
	_, want := reading(t, []byte("time [s]\tforce [nN]\theight [um]\tradius [um]\n0.0000\t0.1234567\t21.04\t9.7\n0.0005\t0.125\t21.03\t\n0.0010\t-0.002\t21.02\t\n"), Options{}, nil)
	seen := 0
	for _, entry := range entries {
		name := entry.Name()
		if name == "README.md" {
			continue
		}
		t.Run(name, func(t *testing.T) {
			file, err := os.ReadFile(filepath.Join(dir, name))
			if err != nil {
				t.Fatal(err)
			}
			sameHoweverCut(t, file, Options{}, ones(len(file)))
			text, o := reading(t, file, Options{}, nil)
			if strings.HasPrefix(name, "good_") {
				// Here the stamps are printed as 5.0000e-04, there as 0.0005: the
				// sizes of their last digits are not compared.
				if o.err != nil || !slices.Equal(withoutQuantum(o.rows), withoutQuantum(want.rows)) {
					t.Fatalf("%v\nwant\n%v", o, want)
				}
				switch how := text.Complete(); name {
				case "good_samples.tsv":
					if how != run.ByCount {
						t.Errorf("Complete %q", how)
					}
				case "good_end_mark.tsv":
					if how != run.ByEndMark {
						t.Errorf("Complete %q", how)
					}
				case "good_nul_tail.tsv":
					if text.NULTail() != 64 || how != run.Growing {
						t.Errorf("NULTail %d, Complete %q", text.NULTail(), how)
					}
				default:
					if how != run.Growing {
						t.Errorf("Complete %q", how)
					}
				}
				return
			}
			u, known := unreadable[name]
			if !known {
				t.Fatalf("the name promises nothing, or a line in the table is missing")
			}
			seen++
			e, ok := o.err.(*Error)
			if !ok || e.Line != u.line || e.IsRun != u.isRun || e.File != "runs/a.tsv" || e.Fix == "" {
				t.Fatalf("%v\n%+v", o, e)
			}
			for _, w := range strings.Split(u.words, "|") {
				if !strings.Contains(e.Error(), w) {
					t.Errorf("%q lacks %q", e.Error(), w)
				}
			}
			if strings.ContainsAny(e.Error(), "\n\r\x00") {
				t.Errorf("message with control characters: %q", e.Error())
			}
		})
	}
	if seen != len(unreadable) {
		t.Errorf("%d of %d files of the table are there", seen, len(unreadable))
	}
}

func withoutQuantum(rows []string) []string {
	var out []string
	for _, r := range rows {
		t, rest, _ := strings.Cut(r, " q=")
		_, rest, _ = strings.Cut(rest, " ")
		out = append(out, t+" "+rest)
	}
	return out
}
