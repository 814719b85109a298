package store

import (
	"encoding/binary"
	"hash/fnv"
	"io"
	"os"

	"go.etcd.io/bbolt"
)

// pagesInOrder makes sure that bbolt can follow every page of the file without
// leaving it or going round in a circle: bbolt trusts what it maps, and a fault
// in one of its goroutines would end the process. It reads the file once, in
// ways that cannot fault, which also brings a cold file into memory fast.
//
// The layout of pages is that of bbolt's file format 2, from its source
// (internal/common: page.go, meta.go, bucket.go).
func (s *Store) pagesInOrder() error {
	return s.look(func(tx *bbolt.Tx) error {
		// While this transaction is open nobody commits, in this process or
		// another.
		f, err := os.Open(s.file.path)
		if err != nil {
			return err
		}
		defer f.Close()
		info, err := f.Stat()
		if err != nil {
			return err
		}
		return checkPages(f, info.Size())
	})
}

const (
	pageHeader  = 16 // id 8, flags 2, count 2, overflow 4
	element     = 16 // leaf: flags, pos, ksize, vsize; branch: pos, ksize, pgid 8
	bucketHead  = 16 // root pgid 8, sequence 8
	metaLength  = 64 // magic, version, page size, flags; root bucket; freelist, high water, txid, checksum
	branchPage  = 0x01
	leafPage    = 0x02
	freePage    = 0x10
	bucketEntry = 0x01
	noFreelist  = ^uint64(0)
)

var native = binary.NativeEndian

// pageWalk visits each page once.
type pageWalk struct {
	f    io.ReaderAt
	size uint64 // of a page
	high uint64 // pages in use are below
	seen []bool
}

// checkPages fails with damage.
func checkPages(f io.ReaderAt, fileSize int64) error {
	w := &pageWalk{f: f}
	root, freelist, err := w.meta(fileSize)
	if err != nil {
		return err
	}
	w.seen = make([]bool, w.high)
	w.seen[0], w.seen[1] = true, true
	if freelist != noFreelist {
		if err := w.free(freelist); err != nil {
			return err
		}
	}
	return w.page(root)
}

// meta reads the newer of the two valid meta pages, as bbolt does.
func (w *pageWalk) meta(fileSize int64) (root, freelist uint64, err error) {
	newest, found := uint64(0), false
	// The second meta page stands one page after the first; where the first is
	// spoiled its size must be guessed.
	sizes := []uint64{uint64(os.Getpagesize())}
	first := make([]byte, pageHeader+metaLength)
	if _, err := w.f.ReadAt(first, 0); err == nil && validMeta(first[pageHeader:]) {
		sizes = []uint64{uint64(native.Uint32(first[pageHeader+8:]))}
	} else {
		for n := uint64(1 << 10); n <= 16<<20; n <<= 1 {
			sizes = append(sizes, n)
		}
	}
	for _, size := range sizes {
		for at := range uint64(2) {
			b := make([]byte, pageHeader+metaLength)
			if _, err := w.f.ReadAt(b, int64(at*size)); err != nil {
				continue
			}
			m := b[pageHeader:]
			if !validMeta(m) {
				continue
			}
			if txid := native.Uint64(m[48:]); !found || txid > newest {
				found, newest = true, txid
				w.size = uint64(native.Uint32(m[8:]))
				root, freelist, w.high = native.Uint64(m[16:]), native.Uint64(m[32:]), native.Uint64(m[40:])
			}
		}
	}
	switch {
	case !found:
		return 0, 0, damage("neither of its two meta pages is valid")
	case w.size < 1<<9 || w.high < 2 || w.high > uint64(fileSize)/w.size:
		return 0, 0, damagef("it is cut short: %d bytes, but it should have %d pages of %d bytes", fileSize, w.high, w.size)
	}
	return root, freelist, nil
}

func validMeta(m []byte) bool {
	h := fnv.New64a()
	h.Write(m[:metaLength-8])
	return native.Uint32(m) == 0xED0CDAED && native.Uint32(m[4:]) == 2 && native.Uint64(m[metaLength-8:]) == h.Sum64()
}

// read reads a page with its overflow, and marks it as seen.
func (w *pageWalk) read(id uint64) (b []byte, flags uint16, count int, err error) {
	if id < 2 || id >= w.high {
		return nil, 0, 0, damagef("it points at page %d of %d", id, w.high)
	}
	head := make([]byte, pageHeader)
	if _, err := w.f.ReadAt(head, int64(id*w.size)); err != nil {
		return nil, 0, 0, err
	}
	if own := native.Uint64(head); own != id {
		return nil, 0, 0, damagef("page %d calls itself %d", id, own)
	}
	pages := 1 + uint64(native.Uint32(head[12:]))
	if pages > w.high-id {
		return nil, 0, 0, damagef("page %d reaches beyond the end", id)
	}
	for i := range pages {
		if w.seen[id+i] {
			return nil, 0, 0, damagef("page %d is used twice", id+i)
		}
		w.seen[id+i] = true
	}
	b = make([]byte, pages*w.size)
	if _, err := w.f.ReadAt(b, int64(id*w.size)); err != nil {
		return nil, 0, 0, err
	}
	return b, native.Uint16(head[8:]), int(native.Uint16(head[10:])), nil
}

// free reads the list of free pages: each lies in the file and is used by
// nothing else.
func (w *pageWalk) free(id uint64) error {
	b, flags, count, err := w.read(id)
	if err != nil {
		return err
	}
	if flags != freePage {
		return damagef("page %d should list the free pages", id)
	}
	b = b[pageHeader:]
	n := uint64(count)
	if count == 0xFFFF {
		n, b = native.Uint64(b), b[8:]
	}
	if n > uint64(len(b))/8 {
		return damagef("page %d lists more free pages than it holds", id)
	}
	for i := range n {
		p := native.Uint64(b[8*i:])
		if p < 2 || p >= w.high || w.seen[p] {
			return damagef("page %d lists page %d as free, which it is not", id, p)
		}
		w.seen[p] = true
	}
	return nil
}

// page follows a branch or leaf page, and the buckets in it.
func (w *pageWalk) page(id uint64) error {
	b, flags, count, err := w.read(id)
	if err != nil {
		return err
	}
	switch flags {
	case leafPage:
		return w.leaf(id, b, count)
	case branchPage:
		if count == 0 || pageHeader+count*element > len(b) {
			return damagef("page %d cannot have %d branches", id, count)
		}
		for i := range count {
			at := pageHeader + i*element
			e := b[at : at+element]
			if end := uint64(at) + uint64(native.Uint32(e)) + uint64(native.Uint32(e[4:])); end > uint64(len(b)) {
				return damagef("a key of page %d reaches beyond it", id)
			}
			if err := w.page(native.Uint64(e[8:])); err != nil {
				return err
			}
		}
		return nil
	}
	return damagef("page %d is neither branch nor leaf", id)
}

// leaf follows the entries of a leaf page, which may be inside the value of
// another (a small bucket).
func (w *pageWalk) leaf(id uint64, b []byte, count int) error {
	if pageHeader+count*element > len(b) {
		return damagef("page %d cannot have %d entries", id, count)
	}
	for i := range count {
		at := pageHeader + i*element
		e := b[at : at+element]
		from := uint64(at) + uint64(native.Uint32(e[4:])) + uint64(native.Uint32(e[8:]))
		to := from + uint64(native.Uint32(e[12:]))
		if to > uint64(len(b)) {
			return damagef("an entry of page %d reaches beyond it", id)
		}
		switch native.Uint32(e) {
		case 0:
			continue
		case bucketEntry:
		default:
			return damagef("an entry of page %d is of no known kind", id)
		}
		v := b[from:to]
		if len(v) < bucketHead {
			return damagef("a bucket in page %d is cut short", id)
		}
		if root := native.Uint64(v); root != 0 {
			if err := w.page(root); err != nil {
				return err
			}
			continue
		}
		inline := v[bucketHead:]
		if len(inline) < pageHeader || native.Uint16(inline[8:]) != leafPage {
			return damagef("a small bucket in page %d is no leaf", id)
		}
		if err := w.leaf(id, inline, int(native.Uint16(inline[10:]))); err != nil {
			return err
		}
	}
	return nil
}
