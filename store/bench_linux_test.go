package store

import (
	"fmt"
	"os"
	"path/filepath"
	"slices"
	"syscall"
	"testing"
	"time"

	"go.etcd.io/bbolt"

	"platen/pipeline/run"
)

// BenchmarkOpenPerCommit compares, turn by turn, what the store does for each
// result (open, commit, close), the same commit in a file that stays open, and
// the limit: 16 KiB written and fdatasync'ed. It reports medians.
//
// Measured in nine runs (2 shared cores, ext4 on a virtual disk): Put 1.1 to
// 2.1 ms, kept open 0.7 to 1.3 ms, limit 0.21 to 0.35 ms. Opening for each
// commit costs 1.6 to 1.7 times the commit alone, of which the line of
// openInTurn is 3 %: that is what letting readers in between is worth. Put is
// 5.2 to 6.3 times the limit. Put includes the JSON of the comparison, the
// commit alone does not.
func BenchmarkOpenPerCommit(b *testing.B) {
	s := open(b, b.TempDir(), Options{})
	kept := open(b, b.TempDir(), Options{})
	db, err := bbolt.Open(kept.file.path, 0o600, &bbolt.Options{FreelistType: bbolt.FreelistMapType})
	if err != nil {
		b.Fatal(err)
	}
	defer db.Close()
	f, err := os.Create(filepath.Join(b.TempDir(), "limit"))
	if err != nil {
		b.Fatal(err)
	}
	defer f.Close()
	block := make([]byte, 16<<10)
	var each, open, limit []time.Duration
	timed := func(to *[]time.Duration, do func() error) {
		start := time.Now()
		if err := do(); err != nil {
			b.Fatal(err)
		}
		*to = append(*to, time.Since(start))
	}
	n := 0
	for b.Loop() {
		n++
		e := entry(fmt.Sprintf("/x/%d.tsv", n), fmt.Sprint(n))
		d, err := prepareDocument(e)
		if err != nil {
			b.Fatal(err)
		}
		timed(&limit, func() error {
			if _, err := f.WriteAt(block, int64(n%64)*int64(len(block))); err != nil {
				return err
			}
			return syscall.Fdatasync(int(f.Fd()))
		})
		timed(&each, func() error { _, err := s.Put(e); return err })
		timed(&open, func() error {
			return db.Update(func(tx *bbolt.Tx) error { return (&putting{tx: tx, store: kept}).one(d) })
		})
	}
	median := func(x []time.Duration) float64 {
		slices.Sort(x)
		return float64(x[len(x)/2].Microseconds())
	}
	b.ReportMetric(median(each), "µs/Put")
	b.ReportMetric(median(open), "µs/kept-open")
	b.ReportMetric(median(limit), "µs/16KiB-fdatasync")
	b.ReportMetric(median(each)/median(open), "Put/kept-open")
	b.ReportMetric(median(each)/median(limit), "Put/fdatasync")
	b.ReportMetric(0, "ns/op")
}

// BenchmarkPut100 stores 100 results in one transaction.
func BenchmarkPut100(b *testing.B) {
	s := open(b, b.TempDir(), Options{})
	n := 0
	for b.Loop() {
		es := make([]Entry, 100)
		for i := range es {
			n++
			es[i] = entry(fmt.Sprintf("/x/%d.tsv", n), fmt.Sprint(n))
		}
		if _, err := s.Put(es...); err != nil {
			b.Fatal(err)
		}
	}
}

// BenchmarkList500 opens a store of 2000 results to read and lists the 500 of a
// session, as platen results does.
func BenchmarkList500(b *testing.B) {
	folder := b.TempDir()
	s := open(b, folder, Options{})
	var es []Entry
	for n := range 2000 {
		es = append(es, entry(fmt.Sprintf("/x/%d.tsv", n), fmt.Sprint(n), func(r *run.Result) { r.Run.Session = fmt.Sprint("s", n%4) }))
	}
	if _, err := s.Put(es...); err != nil {
		b.Fatal(err)
	}
	b.ReportAllocs()
	for b.Loop() {
		r, err := Read(folder)
		if err != nil {
			b.Fatal(err)
		}
		rs, err := r.Results(Filter{Session: "s1"})
		if err != nil || len(rs) != 500 {
			b.Fatal(len(rs), err)
		}
	}
}

// BenchmarkOpen10000 opens a store of 10,000 results, each of a file of its
// own: closed in order, after a crash (which checks everything), and to read.
func BenchmarkOpen10000(b *testing.B) {
	folder := b.TempDir()
	s := open(b, folder, Options{})
	for n := 0; n < 10000; n += 500 {
		var es []Entry
		for i := n; i < n+500; i++ {
			es = append(es, entry(fmt.Sprintf("/x/%d.tsv", i), fmt.Sprint(i), func(r *run.Result) { r.Run.Session = fmt.Sprint("s", i%20) }))
		}
		if _, err := s.Put(es...); err != nil {
			b.Fatal(err)
		}
	}
	info, err := os.Stat(s.file.path)
	if err != nil {
		b.Fatal(err)
	}
	if err := s.Close(); err != nil {
		b.Fatal(err)
	}
	for _, c := range []struct {
		name string
		open func() (*Store, error)
	}{
		{"in order", func() (*Store, error) { return Open(folder, Options{}) }},
		{"after a crash", func() (*Store, error) {
			if err := os.WriteFile(s.lock.owner, nil, 0o600); err != nil {
				return nil, err
			}
			return Open(folder, Options{})
		}},
		{"to read", func() (*Store, error) { return Read(folder) }},
	} {
		b.Run(c.name, func(b *testing.B) {
			b.ReportAllocs()
			for b.Loop() {
				s, err := c.open()
				if err != nil {
					b.Fatal(err)
				}
				if err := s.Close(); err != nil {
					b.Fatal(err)
				}
			}
			b.ReportMetric(float64(info.Size())/1e6, "MB-file")
		})
	}
}
