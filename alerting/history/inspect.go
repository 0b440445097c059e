package history

import (
	"bytes"
	"encoding/binary"
	"errors"
	"fmt"
	"hash/fnv"
	"io"
	"math"
)

// The layout of a bbolt file, version 2 of that format, as read in the
// library's source (internal/common: page.go, meta.go, bucket.go, inode.go).
// Numbers have the byte order of the machine that wrote the file; only little
// endian is accepted here, as on every platform the program is built for.
const (
	pageSize       = 4096
	pageHeader     = 16 // id u64, flags u16, count u16, overflow u32
	branchElement  = 16 // pos u32, key size u32, child u64
	leafElement    = 16 // flags u32, pos u32, key size u32, value size u32
	bucketHeader   = 16 // root u64, sequence u64; root 0: the page follows inline
	pageBranch     = 0x01
	pageLeaf       = 0x02
	pageMeta       = 0x04
	pageFreelist   = 0x10
	elementBucket  = 0x01
	metaMagic      = 0xED0CDAED
	metaVersion    = 2
	metaSummed     = 56 // bytes of the meta that its checksum covers
	maxTreeDepth   = 64
	countIsInFirst = 0xFFFF
)

// damageError is a file whose structure is not to be trusted.
type damageError struct{ what string }

func (e *damageError) Error() string { return e.what }

func damaged(format string, args ...any) error {
	return &damageError{what: fmt.Sprintf(format, args...)}
}

func isDamage(err error) bool {
	var d *damageError
	return errors.As(err, &d)
}

// meta is the head of the file: the newest of two that fits its checksum.
type meta struct {
	root, freelist, pages, tx uint64
}

// inspector walks every page of a file by plain reads, before the library
// maps it. The library trusts what it maps: a flipped bit in a page would be
// a fault, an endless loop or, in the list of free pages, a later write over
// live ones.
type inspector struct {
	f    io.ReaderAt
	meta meta
	seen []bool // pages reached or free
}

// inspect checks the structure of a file of this size. The notes name damage
// that the file can be used in spite of.
func inspect(f io.ReaderAt, size int64) (notes []string, err error) {
	in := &inspector{f: f}
	if notes, err = in.readMeta(); err != nil {
		return nil, err
	}
	m := in.meta
	if m.pages < 4 || m.pages > uint64(size)/pageSize {
		return nil, damaged("cut short: %d pages are in use, the file has %d", m.pages, size/pageSize)
	}
	in.seen = make([]bool, m.pages)
	in.seen[0], in.seen[1] = true, true
	if err := in.free(m.freelist); err != nil {
		return nil, err
	}
	if err := in.tree(m.root, nil, nil, 0); err != nil {
		return nil, err
	}
	for id, seen := range in.seen {
		if !seen {
			return nil, damaged("page %d is neither in use nor free", id)
		}
	}
	return notes, nil
}

func (in *inspector) readMeta() (notes []string, err error) {
	found := false
	for i := range int64(2) {
		m, err := in.metaAt(i)
		switch {
		case isDamage(err):
			notes = append(notes, fmt.Sprintf("head %d of 2 is damaged: the commit before it is in force, the last one may be missing", i+1))
		case err != nil:
			return nil, err
		case !found || m.tx > in.meta.tx:
			in.meta, found = m, true
		}
	}
	if !found {
		return nil, damaged("both heads are damaged")
	}
	return notes, nil
}

func (in *inspector) metaAt(i int64) (meta, error) {
	b := make([]byte, pageHeader+metaSummed+8)
	if _, err := in.f.ReadAt(b, i*pageSize); err != nil {
		if errors.Is(err, io.EOF) {
			return meta{}, damaged("head %d is cut off", i+1)
		}
		return meta{}, fmt.Errorf("read head %d: %w", i+1, err)
	}
	// The library never looks at the page header of a head, so nor does this.
	b = b[pageHeader:]
	le := binary.LittleEndian
	h := fnv.New64a()
	h.Write(b[:metaSummed])
	if le.Uint32(b) != metaMagic || le.Uint32(b[4:]) != metaVersion || h.Sum64() != le.Uint64(b[metaSummed:]) {
		return meta{}, damaged("head %d does not match its checksum", i+1)
	}
	if size := le.Uint32(b[8:]); size != pageSize {
		return meta{}, damaged("pages of %d bytes, %d expected", size, pageSize)
	}
	return meta{root: le.Uint64(b[16:]), freelist: le.Uint64(b[32:]), pages: le.Uint64(b[40:]), tx: le.Uint64(b[48:])}, nil
}

// page is a page with its overflow, its header already checked and its pages
// marked as reached.
type page struct {
	b     []byte
	flags uint16
	count int
}

func (in *inspector) page(id uint64) (page, error) {
	if id < 2 || id >= in.meta.pages {
		return page{}, damaged("a reference to page %d of %d", id, in.meta.pages)
	}
	b := make([]byte, pageSize)
	if _, err := in.f.ReadAt(b, int64(id)*pageSize); err != nil {
		return page{}, fmt.Errorf("read page %d: %w", id, err)
	}
	le := binary.LittleEndian
	overflow := uint64(le.Uint32(b[12:]))
	if le.Uint64(b) != id || id+overflow >= in.meta.pages {
		return page{}, damaged("page %d has a wrong header", id)
	}
	for i := id; i <= id+overflow; i++ {
		if in.seen[i] {
			return page{}, damaged("page %d is in use twice, or in use and free", i)
		}
		in.seen[i] = true
	}
	if overflow > 0 {
		b = make([]byte, (overflow+1)*pageSize)
		if _, err := in.f.ReadAt(b, int64(id)*pageSize); err != nil {
			return page{}, fmt.Errorf("read page %d: %w", id, err)
		}
	}
	return page{b: b, flags: le.Uint16(b[8:]), count: int(le.Uint16(b[10:]))}, nil
}

// free reads the list of free pages and marks them.
func (in *inspector) free(id uint64) error {
	p, err := in.page(id)
	if err != nil {
		return err
	}
	if p.flags != pageFreelist {
		return damaged("page %d is not a list of free pages", id)
	}
	ids, n := p.b[pageHeader:], uint64(p.count)
	if n == countIsInFirst {
		n, ids = binary.LittleEndian.Uint64(ids), ids[8:]
	}
	if n > uint64(len(ids))/8 {
		return damaged("the list of free pages is longer than its page")
	}
	for i := range n {
		free := binary.LittleEndian.Uint64(ids[i*8:])
		if free < 2 || free >= in.meta.pages || in.seen[free] {
			return damaged("page %d is called free and is not", free)
		}
		in.seen[free] = true
	}
	return nil
}

// tree checks the page id and all beneath it. Keys must be at least low and
// less than high; nil is no limit.
func (in *inspector) tree(id uint64, low, high []byte, depth int) error {
	if depth > maxTreeDepth {
		return damaged("page %d lies too deep", id)
	}
	p, err := in.page(id)
	if err != nil {
		return err
	}
	switch p.flags {
	case pageLeaf:
		return in.leaf(p, id, low, high, depth)
	case pageBranch:
		return in.branch(p, id, low, high, depth)
	}
	return damaged("page %d has the unknown type %#x", id, p.flags)
}

func (in *inspector) branch(p page, id uint64, low, high []byte, depth int) error {
	if p.count == 0 || pageHeader+p.count*branchElement > len(p.b) {
		return damaged("page %d has a wrong number of entries", id)
	}
	keys := make([][]byte, p.count)
	le := binary.LittleEndian
	for i := range keys {
		at := pageHeader + i*branchElement
		key, ok := span(p.b, at, le.Uint32(p.b[at:]), le.Uint32(p.b[at+4:]))
		if !ok {
			return damaged("page %d: entry %d points outside", id, i)
		}
		keys[i] = key
	}
	if !ascending(keys, low, high) {
		return damaged("page %d: its keys are out of order", id)
	}
	for i, key := range keys {
		end := high
		if i+1 < len(keys) {
			end = keys[i+1]
		}
		child := le.Uint64(p.b[pageHeader+i*branchElement+8:])
		if err := in.tree(child, key, end, depth+1); err != nil {
			return err
		}
	}
	return nil
}

func (in *inspector) leaf(p page, id uint64, low, high []byte, depth int) error {
	if pageHeader+p.count*leafElement > len(p.b) {
		return damaged("page %d has a wrong number of entries", id)
	}
	keys := make([][]byte, p.count)
	le := binary.LittleEndian
	for i := range keys {
		at := pageHeader + i*leafElement
		flags, pos, ksize, vsize := le.Uint32(p.b[at:]), le.Uint32(p.b[at+4:]), le.Uint32(p.b[at+8:]), le.Uint32(p.b[at+12:])
		key, ok := span(p.b, at, pos, ksize)
		if !ok || uint64(pos)+uint64(ksize) > math.MaxUint32 {
			return damaged("page %d: entry %d points outside", id, i)
		}
		value, ok := span(p.b, at, pos+ksize, vsize)
		if !ok || flags&^elementBucket != 0 {
			return damaged("page %d: entry %d points outside or is of no known type", id, i)
		}
		keys[i] = key
		if flags == elementBucket {
			if err := in.bucket(value, depth); err != nil {
				return err
			}
		}
	}
	if !ascending(keys, low, high) {
		return damaged("page %d: its keys are out of order", id)
	}
	return nil
}

// bucket checks a bucket given as the value of a leaf entry.
func (in *inspector) bucket(value []byte, depth int) error {
	if len(value) < bucketHeader {
		return damaged("a bucket has no header")
	}
	if root := binary.LittleEndian.Uint64(value); root != 0 {
		return in.tree(root, nil, nil, depth+1)
	}
	inline := value[bucketHeader:]
	if len(inline) < pageHeader || binary.LittleEndian.Uint64(inline) != 0 || binary.LittleEndian.Uint16(inline[8:]) != pageLeaf {
		return damaged("an inline bucket has a wrong header")
	}
	p := page{b: inline, flags: pageLeaf, count: int(binary.LittleEndian.Uint16(inline[10:]))}
	return in.leaf(p, 0, nil, nil, depth+1)
}

// span is the n bytes at pos counted from the entry at offset at.
func span(b []byte, at int, pos, n uint32) ([]byte, bool) {
	from := uint64(at) + uint64(pos)
	if from+uint64(n) > uint64(len(b)) {
		return nil, false
	}
	return b[from : from+uint64(n)], true
}

// ascending reports whether keys rise strictly within [low, high).
func ascending(keys [][]byte, low, high []byte) bool {
	for i, key := range keys {
		if i > 0 && bytes.Compare(keys[i-1], key) >= 0 {
			return false
		}
	}
	if len(keys) == 0 {
		return true
	}
	return (low == nil || bytes.Compare(keys[0], low) >= 0) &&
		(high == nil || bytes.Compare(keys[len(keys)-1], high) < 0)
}
