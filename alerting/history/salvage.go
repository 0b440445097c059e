package history

import (
	"bytes"
	"cmp"
	"encoding/binary"
	"fmt"
	"io"
	"os"
	"path/filepath"
	"slices"

	bolt "go.etcd.io/bbolt"
)

// A journal whose structure is damaged is set aside, and a new one is begun
// with every record that is intact in the old one: each page is read by
// itself, whatever the pages above it say, and the chain tells which of what
// is found there is a record.

// maxRecord bounds what is taken for one record; no configuration is as long.
const maxRecord = 16 << 20

// found is a value in a damaged file that may be a record.
type found struct {
	record Record
	value  []byte
}

// salvager reads the pages of a damaged journal.
type salvager struct {
	f     io.ReaderAt
	pages int64
	found map[uint64][]found // by sequence; more than one where old pages are left
}

// salvage puts the intact records of a damaged journal into db. Pages that
// cannot be read are left out. The error is for db only.
func salvage(path string, db *bolt.DB) (taken int, err error) {
	f, err := os.Open(path)
	if err != nil {
		return 0, nil // it is gone: there is nothing to take
	}
	defer f.Close()
	info, err := f.Stat()
	if err != nil {
		return 0, nil
	}
	s := &salvager{f: f, pages: (info.Size() + pageSize - 1) / pageSize, found: map[uint64][]found{}}
	for id := int64(2); id < s.pages; id++ {
		s.page(id)
	}
	values := s.chosen()
	const atOnce = 1000
	for chunk := range slices.Chunk(values, atOnce) {
		err := db.Update(func(tx *bolt.Tx) error {
			for _, v := range chunk {
				if err := putRecord(tx, v.record.Seq, v.value); err != nil {
					return err
				}
			}
			return nil
		})
		if err != nil {
			return taken, err
		}
		taken += len(chunk)
	}
	return taken, nil
}

// read is up to n bytes from the start of a page; fewer at the end of the file
// and where the disk gives no more.
func (s *salvager) read(id int64, n int) []byte {
	b := make([]byte, n)
	got, err := s.f.ReadAt(b, id*pageSize)
	if err != nil && got < pageSize {
		return nil
	}
	return b[:got]
}

// page looks for records in one page and what follows it.
func (s *salvager) page(id int64) {
	b := s.read(id, pageSize)
	if len(b) < pageHeader {
		return
	}
	s.leaf(b, id)
}

// leaf looks for records in a leaf page; id is 0 for one inside another, which
// cannot be read on.
func (s *salvager) leaf(b []byte, id int64) {
	// Neither the type nor the count of the page is trusted: the first entry
	// points just past the table of all.
	if len(b) < pageHeader+leafElement {
		return
	}
	le := binary.LittleEndian
	n := max(int(le.Uint16(b[10:])), int(le.Uint32(b[pageHeader+4:])/leafElement))
	for i := range min(n, (len(b)-pageHeader)/leafElement) {
		at := pageHeader + i*leafElement
		flags, pos, ksize, vsize := le.Uint32(b[at:]), le.Uint32(b[at+4:]), le.Uint32(b[at+8:]), le.Uint32(b[at+12:])
		if vsize > maxRecord || pos > maxRecord || ksize > pageSize {
			continue
		}
		from := at + int(pos)
		end := from + int(ksize) + int(vsize)
		if end > len(b) && id != 0 {
			b = s.longer(b, id, end)
		}
		if end > len(b) {
			continue
		}
		key, value := b[from:from+int(ksize)], b[from+int(ksize):end]
		if flags&elementBucket != 0 && len(value) > bucketHeader {
			s.leaf(value[bucketHeader:], 0) // a small bucket lies in its entry
		}
		s.take(key, value)
	}
}

// longer is the page with as much after it as an entry asks for.
func (s *salvager) longer(b []byte, id int64, end int) []byte {
	if more := s.read(id, end); len(more) > len(b) {
		return more
	}
	return b
}

// take keeps what may be a record.
func (s *salvager) take(key, value []byte) {
	r, err := parseRecord(key, value)
	if err != nil || r.Seq == 0 {
		return
	}
	for _, f := range s.found[r.Seq] {
		if bytes.Equal(f.value, value) {
			return
		}
	}
	value = bytes.Clone(value)
	r, _ = parseRecord(key, value)
	s.found[r.Seq] = append(s.found[r.Seq], found{record: r, value: value})
}

// chosen is one value for each sequence, ascending, as far as the chain bears
// them out: one that follows from the record before, also where that is
// damaged itself, or, where that is lost, one that the record after follows
// from; verification names the latter. A last record after a loss can be proved by neither and is left
// out, as are all that only look like records.
func (s *salvager) chosen() (out []found) {
	for _, seq := range sortedSeqs(s.found) {
		best, points := found{}, 0
		chosenBefore := seq == 1 || len(out) > 0 && out[len(out)-1].record.Seq == seq-1
		for _, f := range s.found[seq] {
			n := 0
			if s.follows(out, f) {
				n += 2
			}
			if s.leads(f) && (n > 0 || !chosenBefore) {
				n++
			}
			if n > points {
				best, points = f, n
			}
		}
		if points > 0 {
			out = append(out, best)
		}
	}
	return out
}

func sortedSeqs(m map[uint64][]found) []uint64 {
	seqs := make([]uint64, 0, len(m))
	for seq := range m {
		seqs = append(seqs, seq)
	}
	slices.Sort(seqs)
	return seqs
}

// follows reports whether f follows from what was found of the record before:
// from the hash in it, or from the one that its content ought to have.
func (s *salvager) follows(chosen []found, f found) bool {
	if f.record.Seq == 1 {
		return f.record.follows(head{}.hash)
	}
	return slices.ContainsFunc(s.found[f.record.Seq-1], func(before found) bool {
		if f.record.follows(before.record.Hash) {
			return true
		}
		i, there := slices.BinarySearchFunc(chosen, f.record.Seq-2, func(c found, seq uint64) int { return cmp.Compare(c.record.Seq, seq) })
		if !there && f.record.Seq > 2 {
			return false
		}
		earlier := head{}.hash
		if f.record.Seq > 2 {
			earlier = chosen[i].record.Hash
		}
		return f.record.follows(before.record.hashAfter(earlier))
	})
}

// leads reports whether something follows from f.
func (s *salvager) leads(f found) bool {
	return slices.ContainsFunc(s.found[f.record.Seq+1], func(next found) bool { return next.record.follows(f.record.Hash) })
}

// salvageNewest fills a new journal from the one that was set aside last, if
// there is one, and reports it. So it is also done by the next start when the
// first was cut off in between.
func salvageNewest(path string, db *bolt.DB, report func(string)) error {
	newest := newestAside(path)
	if newest == "" {
		return nil
	}
	taken, err := salvage(newest, db)
	if err != nil {
		return fmt.Errorf("take over the records of %s: %w", filepath.Base(newest), err)
	}
	if taken > 0 { // otherwise all has been said when it was set aside
		report(fmt.Sprintf("%s: %d intact records of %s are taken over into a new journal", path, taken, filepath.Base(newest)))
	}
	return nil
}

// newestAside is the file that was set aside last under this name, "" if none.
func newestAside(path string) string {
	asides, err := filepath.Glob(path + ".damaged-*")
	if err != nil || len(asides) == 0 {
		return ""
	}
	slices.SortFunc(asides, func(a, b string) int { return modified(a).compare(modified(b), a, b) })
	return asides[len(asides)-1]
}

// moment is when a file was last written, as far as that can be told.
type moment int64

func modified(path string) moment {
	info, err := os.Stat(path)
	if err != nil {
		return 0
	}
	return moment(info.ModTime().UnixNano())
}

// compare orders by time, then by name.
func (m moment) compare(o moment, a, b string) int {
	switch {
	case m < o:
		return -1
	case m > o:
		return 1
	case len(a) != len(b): // -2 comes after none, -10 after -9
		return len(a) - len(b)
	}
	return bytes.Compare([]byte(a), []byte(b))
}
