package webhook

import (
	"encoding/binary"
	"encoding/json"
	"errors"
	"fmt"
	"hash/crc32"
	"io"
	"io/fs"
	"os"
	"path/filepath"
)

// A queue file is a first line that names the format, then records one behind
// the other, each:
//
//	4 bytes  length of the payload, little endian
//	4 bytes  CRC-32C of the payload, little endian
//	payload  a record as JSON
//
// Records are only ever added. The first that is cut short or does not fit its
// checksum ends what is believed, and is cut off: behind a torn end there is
// nothing, and behind damage nothing can be trusted to be a record.
const (
	magic      = "sockline webhook queue 1\n"
	frameHead  = 8
	maxPayload = 4 << 20
	// tidyFrom is the size (bytes) from which a file is rewritten when most of
	// it is done with.
	tidyFrom = 1 << 20
)

// record says that an event waits, or that one does no longer.
type record struct {
	Put    uint64 `json:"put,omitempty"`    // number of the event that waits
	Handed int64  `json:"handed,omitempty"` // ms since 1970
	Event  *Event `json:"event,omitempty"`
	Done   uint64 `json:"done,omitempty"` // number of the event that is done with
}

// file is an open queue file.
type file struct {
	f     *os.File
	size  int64 // bytes
	live  int64 // bytes of what still waits
	sizes map[uint64]int64
	dirty bool
}

func table() *crc32.Table { return crc32.MakeTable(crc32.Castagnoli) }

// openFile opens or makes a queue file and gives what waits in it, oldest
// first, and how many bytes at its end were damaged and are now cut off.
func openFile(path string) (q *file, waiting []record, damage int64, err error) {
	if err := os.MkdirAll(filepath.Dir(path), 0o750); err != nil {
		return nil, nil, 0, fmt.Errorf("make the directory of a webhook's queue: %w: give it to the user that runs this program", err)
	}
	f, err := os.OpenFile(path, os.O_RDWR|os.O_APPEND|os.O_CREATE, 0o600)
	if err != nil {
		return nil, nil, 0, fmt.Errorf("open the queue of a webhook: %w: give it to the user that runs this program", err)
	}
	defer func() {
		if err != nil {
			err = errors.Join(err, f.Close())
		}
	}()
	if err := lock(f); err != nil {
		return nil, nil, 0, fmt.Errorf("lock the queue %s: %w: another sockline uses it; give each its own history directory", path, err)
	}
	text, err := io.ReadAll(f)
	if err != nil {
		return nil, nil, 0, fmt.Errorf("read the queue of a webhook: %w", err)
	}
	q = &file{f: f, sizes: make(map[uint64]int64)}
	records, good := scan(text)
	if good == 0 && len(text) > 0 && !isStart(text) {
		return nil, nil, 0, fmt.Errorf("the queue %s is not one of this version: move it away", path)
	}
	damage = int64(len(text)) - good
	if good == 0 {
		damage = 0 // a first line that was cut short held nothing
		good = int64(len(magic))
		if err := errors.Join(f.Truncate(0), write(f, []byte(magic)), f.Sync(), syncDir(path)); err != nil {
			return nil, nil, 0, fmt.Errorf("begin the queue of a webhook: %w", err)
		}
	} else if damage > 0 {
		if err := errors.Join(f.Truncate(good), f.Sync()); err != nil {
			return nil, nil, 0, fmt.Errorf("cut the damaged end off the queue of a webhook: %w", err)
		}
	}
	q.size = good
	at := map[uint64]int{}
	for i, r := range records {
		q.count(r.record, r.size)
		if r.Event != nil {
			at[r.Put] = i
		} else {
			delete(at, r.Done)
		}
	}
	for i, r := range records {
		if j, ok := at[r.Put]; ok && r.Event != nil && i == j {
			waiting = append(waiting, r.record)
		}
	}
	return q, waiting, damage, nil
}

// isStart tells the beginning of the first line.
func isStart(text []byte) bool {
	n := min(len(text), len(magic))
	return string(text[:n]) == magic[:n]
}

// sized is a record with the bytes that it takes.
type sized struct {
	record
	size int64
}

// scan reads records up to the first that cannot be believed, and says how
// many bytes are good.
func scan(text []byte) (records []sized, good int64) {
	if len(text) < len(magic) || string(text[:len(magic)]) != magic {
		return nil, 0
	}
	at := len(magic)
	for len(text)-at >= frameHead {
		n := int(binary.LittleEndian.Uint32(text[at:]))
		sum := binary.LittleEndian.Uint32(text[at+4:])
		if n > maxPayload || len(text)-at-frameHead < n {
			break
		}
		payload := text[at+frameHead : at+frameHead+n]
		var r record
		if crc32.Checksum(payload, table()) != sum || json.Unmarshal(payload, &r) != nil || !r.sound() {
			break
		}
		records = append(records, sized{r, int64(frameHead + n)})
		at += frameHead + n
	}
	return records, int64(at)
}

// sound tells a record that says one thing.
func (r *record) sound() bool {
	if r.Event == nil {
		return r.Done > 0 && r.Put == 0
	}
	return r.Put > 0 && r.Done == 0 && r.Event.Phase >= 0 && r.Event.Phase < phases
}

// frames puts records into the form of the file.
func frames(records []record) (out []byte, sizes []int64, err error) {
	for _, r := range records {
		payload, err := json.Marshal(r)
		if err != nil {
			return nil, nil, fmt.Errorf("write down an event: %w", err)
		}
		out = binary.LittleEndian.AppendUint32(out, uint32(len(payload)))
		out = binary.LittleEndian.AppendUint32(out, crc32.Checksum(payload, table()))
		out = append(out, payload...)
		sizes = append(sizes, int64(frameHead+len(payload)))
	}
	return out, sizes, nil
}

// append adds records with one write, so that only its end can be torn.
func (q *file) append(records []record) error {
	b, sizes, err := frames(records)
	if err != nil {
		return err
	}
	if err := write(q.f, b); err != nil {
		return fmt.Errorf("write to the queue of a webhook: %w", err)
	}
	q.size += int64(len(b))
	q.dirty = true
	for i, r := range records {
		q.count(r, sizes[i])
	}
	return nil
}

// count keeps book of what still waits.
func (q *file) count(r record, size int64) {
	if r.Event != nil {
		q.sizes[r.Put] = size
		q.live += size
		return
	}
	q.live -= q.sizes[r.Done]
	delete(q.sizes, r.Done)
}

// sync makes what was added durable.
func (q *file) sync() error {
	if !q.dirty {
		return nil
	}
	q.dirty = false
	if err := q.f.Sync(); err != nil {
		return fmt.Errorf("make the queue of a webhook durable: %w", err)
	}
	return nil
}

// wasteful tells a file most of which is done with.
func (q *file) wasteful() bool { return q.size > tidyFrom && q.live < q.size/2 }

func (q *file) close() error { return errors.Join(q.sync(), q.f.Close()) }

// rewrite makes a new file of what waits and puts it in the place of the old
// one. A crash leaves the one or the other, whole.
func rewrite(path string, waiting []record) (q *file, err error) {
	if err := os.MkdirAll(filepath.Dir(path), 0o750); err != nil {
		return nil, fmt.Errorf("make the directory of a webhook's queue: %w", err)
	}
	fresh := path + ".new"
	f, err := os.OpenFile(fresh, os.O_RDWR|os.O_APPEND|os.O_CREATE|os.O_TRUNC, 0o600)
	if err != nil {
		return nil, fmt.Errorf("make a new queue of a webhook: %w", err)
	}
	defer func() {
		if err != nil {
			err = errors.Join(err, f.Close())
			if e := os.Remove(fresh); e != nil && !errors.Is(e, fs.ErrNotExist) {
				err = errors.Join(err, e)
			}
		}
	}()
	if err := errors.Join(lock(f), write(f, []byte(magic))); err != nil {
		return nil, fmt.Errorf("make a new queue of a webhook: %w", err)
	}
	q = &file{f: f, size: int64(len(magic)), sizes: make(map[uint64]int64), dirty: true}
	if err := q.append(waiting); err != nil {
		return nil, err
	}
	if err := errors.Join(q.sync(), os.Rename(fresh, path), syncDir(path)); err != nil {
		return nil, fmt.Errorf("put the new queue of a webhook in place: %w", err)
	}
	return q, nil
}

func write(f *os.File, b []byte) error {
	_, err := f.Write(b)
	return err
}

// syncDir makes the names in the directory of a file durable.
func syncDir(path string) error {
	d, err := os.Open(filepath.Dir(path))
	if err != nil {
		return err
	}
	return errors.Join(d.Sync(), d.Close())
}
