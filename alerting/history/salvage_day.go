package history

import (
	"bytes"
	"encoding/binary"
	"encoding/json"
	"fmt"
	"math"
	"os"
	"path/filepath"
	"slices"

	bolt "go.etcd.io/bbolt"

	"sockline/sensors"
)

// A file of readings whose structure is damaged is set aside, and what it still
// holds is taken over into a new one. Each value carries its own proof, a
// checksum over key and value, so that neither the tree nor the headers of
// pages are needed to find it: every place where an entry could stand is
// tried. The file set aside stays as it is.

// salvaged is what was found, by bucket, in the order of keys.
type salvaged map[string][]keyed

func (s salvaged) count() (n int) {
	for _, values := range s {
		n += len(values)
	}
	return n
}

// salvageReadings fills a new file from the one of its name that was set aside
// last, if there is one, and reports it.
func salvageReadings(path string, db *bolt.DB, report func(string)) error {
	aside := newestAside(path)
	if aside == "" {
		return nil
	}
	data, err := os.ReadFile(aside)
	if err != nil {
		report(fmt.Sprintf("what %s still holds cannot be read: %v", filepath.Base(aside), err))
		return nil
	}
	found := salvageDay(data)
	if found.count() == 0 { // all has been said when it was set aside
		return nil
	}
	if err := db.Update(found.fill); err != nil {
		return fmt.Errorf("take over the readings of %s: %w", filepath.Base(aside), err)
	}
	report(fmt.Sprintf("%s is begun anew with the %d values of %s that are as they were written", path, found.count(), filepath.Base(aside)))
	return nil
}

// readingsAside reports whether a file of readings that was set aside under
// this name still holds some.
func readingsAside(path string) bool {
	data, err := os.ReadFile(newestAside(path))
	return err == nil && salvageDay(data).count() > 0
}

// entries shows fn everything that could be an entry of a leaf: on each page,
// and in the small buckets that stand within one.
func entries(data []byte, fn func(key, value []byte)) {
	for page := 0; page+pageHeader <= len(data); page += pageSize {
		entriesOf(data, page, min(page+pageSize, len(data)), func(key, value []byte, flags uint32) {
			if flags == 0 {
				fn(key, value)
				return
			}
			if inline := value[min(bucketHeader, len(value)):]; len(inline) > 0 && len(inline) <= pageSize {
				entriesOf(inline, 0, len(inline), func(key, value []byte, flags uint32) {
					if flags == 0 {
						fn(key, value)
					}
				})
			}
		})
	}
}

// entriesOf tries each place for an entry between a page header at from and
// the end; the entry itself may reach further.
func entriesOf(b []byte, from, end int, fn func(key, value []byte, flags uint32)) {
	le := binary.LittleEndian
	for at := from + pageHeader; at+leafElement <= end; at += leafElement {
		flags, pos, ksize, vsize := le.Uint32(b[at:]), le.Uint32(b[at+4:]), le.Uint32(b[at+8:]), le.Uint32(b[at+12:])
		if flags&^elementBucket != 0 || ksize == 0 || ksize > 1<<10 || uint64(pos)+uint64(ksize) > math.MaxUint32 {
			continue
		}
		key, ok := span(b, at, pos, ksize)
		if !ok {
			continue
		}
		if value, ok := span(b, at, pos+ksize, vsize); ok {
			fn(key, value, flags)
		}
	}
}

// salvageDay collects rows, late readings, lists and blocks. Of a key with
// several values, from pages that were free already, the last one counts.
func salvageDay(data []byte) salvaged {
	found := map[string]map[string][]byte{bucketSteps: {}, bucketLate: {}, bucketStations: {}, bucketBlocks: {}}
	entries(data, func(key, value []byte) {
		body, err := unseal(key, value)
		if err != nil {
			return
		}
		bucket := ""
		switch len(key) {
		case 4:
			if json.Unmarshal(body, new([]string)) == nil {
				bucket = bucketStations
			}
		case 5:
			bucket = bucketBlocks
		case 8:
			bucket = rowOf(key, body)
		}
		if bucket != "" {
			found[bucket][string(key)] = bytes.Clone(value)
		}
	})
	dropFolded(found)
	return ordered(found)
}

// rowOf tells a step from late readings, which stand under the same key.
func rowOf(key, body []byte) string {
	at := keyStep(key)
	c := cursorAt(body)
	c.Uvarint()
	c.Uvarint()
	if c.readings(at, nil); !c.Bad && len(c.Left) == 0 {
		return bucketSteps
	}
	c = cursorAt(body)
	c.Uvarint()
	if c.late(at); !c.Bad && len(c.Left) == 0 {
		return bucketLate
	}
	return ""
}

// dropFolded drops rows that a frame has with all its blocks: pages that are
// free again still hold them.
func dropFolded(found map[string]map[string][]byte) {
	for key, value := range found[bucketBlocks] {
		second, number := keyBlock([]byte(key))
		if number != stationFrame {
			continue
		}
		body, err := unseal([]byte(key), value)
		if err != nil {
			continue
		}
		f, err := parseFrame(body, 0)
		if err != nil || slices.ContainsFunc(f.stations, func(s int) bool {
			return found[bucketBlocks][string(blockKey(sensors.Instant(second)*sensors.Second, s+1))] == nil
		}) {
			continue
		}
		for row := range found[bucketSteps] {
			at := keyStep([]byte(row))
			if into := (at - midnight(at)) / sensors.Second; slices.Contains(f.seconds, int(int64(into)-second)) {
				delete(found[bucketSteps], row)
				delete(found[bucketLate], row)
			}
		}
	}
}

func ordered(found map[string]map[string][]byte) salvaged {
	out := salvaged{}
	for bucket, values := range found {
		for key, value := range values {
			out[bucket] = append(out[bucket], keyed{[]byte(key), value})
		}
		slices.SortFunc(out[bucket], func(a, b keyed) int { return bytes.Compare(a.key, b.key) })
	}
	return out
}

// fill puts what was found into a new file.
func (s salvaged) fill(tx *bolt.Tx) error {
	for bucket, values := range s {
		b := tx.Bucket([]byte(bucket))
		b.FillPercent = 1
		highest := uint64(0)
		for _, v := range values {
			if err := b.Put(v.key, v.value); err != nil {
				return err
			}
			if bucket == bucketStations {
				highest = max(highest, uint64(binary.BigEndian.Uint32(v.key)))
			}
		}
		if highest > 0 { // the next list takes the next number
			if err := b.SetSequence(highest); err != nil {
				return err
			}
		}
	}
	return nil
}
