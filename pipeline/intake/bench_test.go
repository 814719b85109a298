package intake

import (
	"bytes"
	"strconv"
	"testing"

	"platen/pipeline/run"
)

// Both in one run, so that a loaded machine slows both: the figure to trust is
// the ratio of the two.
func BenchmarkText(b *testing.B) {
	data := benchmarkFile(100_000)
	b.Run("intake", func(b *testing.B) {
		b.SetBytes(int64(len(data)))
		b.ReportAllocs()
		var sum float64
		for b.Loop() {
			text := NewText("bench", Options{}, func(k *run.Block) error {
				for i := range k.Time {
					sum += k.Time[i] + k.Force[i] + k.Height[i] + k.Radius[i]
				}
				return nil
			})
			for p := data; len(p) > 0; {
				n := min(256<<10, len(p))
				if err := text.Feed(p[:n]); err != nil {
					b.Fatal(err)
				}
				p = p[n:]
			}
			if err := text.Finish(); err != nil || text.Rows() != 100_000 {
				b.Fatal(err, text.Rows())
			}
		}
	})
	b.Run("split-strconv", func(b *testing.B) {
		b.SetBytes(int64(len(data)))
		b.ReportAllocs()
		var sum float64
		for b.Loop() {
			p := data
			for range 2 {
				p = p[bytes.IndexByte(p, '\n')+1:]
			}
			for len(p) > 0 {
				k := bytes.IndexByte(p, '\n')
				line := p[:k]
				p = p[k+1:]
				for more := true; more; {
					var cell []byte
					cell, line, more = bytes.Cut(line, []byte("\t"))
					v, err := strconv.ParseFloat(string(cell), 64)
					if err != nil {
						b.Fatal(err)
					}
					sum += v
				}
			}
		}
	})
}
