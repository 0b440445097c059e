package history

import (
	"bytes"
	"encoding/binary"
	"encoding/json"
	"math"

	bolt "go.etcd.io/bbolt"
)

// table is the list of stations that the last step referred to.
type table struct {
	id  uint32
	ids []string
}

// writeDay writes steps of one day into its file.
func (w *Writer) writeDay(name string, items []*item) error {
	if len(items) == 0 {
		return nil
	}
	if w.day == nil || w.dayName != name {
		w.foldRest()
		w.closeDay()
		f, err := w.s.shelf.acquire(name, dayLayout(), true)
		if err != nil {
			return err
		}
		w.day, w.dayName = f, name
		if w.folding, err = beginFolding(f, w.s.window); err != nil {
			return err
		}
	}
	known, fold := w.table, w.folding
	err := w.day.update(func(tx *bolt.Tx) error {
		steps, late := tx.Bucket([]byte(bucketSteps)), tx.Bucket([]byte(bucketLate))
		steps.FillPercent, late.FillPercent = 1, 1 // keys only ever rise
		for _, it := range items {
			var err error
			if known, err = tableFor(tx, known, it.stations); err != nil {
				return err
			}
			key, id := stepKey(it.step), binary.AppendUvarint(nil, uint64(known.id))
			// How many late ones there are stands with the step, so that their
			// loss is seen.
			body := append(binary.AppendUvarint(bytes.Clone(id), uint64(it.lates)), it.body...)
			if err := steps.Put(key, seal(key, body)); err != nil {
				return err
			}
			if it.late != nil {
				err = late.Put(key, seal(key, append(id, it.late...)))
			} else {
				err = late.Delete(key) // of an earlier submission of this step
			}
			if err != nil {
				return err
			}
			fold.wrote(it.step)
		}
		return fold.fold(tx, w.quiet)
	})
	if err != nil {
		w.table = table{} // whether it is on disk is unknown: look again
		return err
	}
	w.table, w.folding = known, fold
	return nil
}

// tableFor finds or adds the list of stations in the file of tx.
func tableFor(tx *bolt.Tx, known table, ids []string) (table, error) {
	if known.id != 0 && equalStrings(known.ids, ids) {
		return known, nil
	}
	tables, err := readTables(tx)
	if err != nil {
		return table{}, err
	}
	for id, stored := range tables {
		if id <= math.MaxUint32 && equalStrings(stored, ids) {
			return table{id: uint32(id), ids: stored}, nil
		}
	}
	b := tx.Bucket([]byte(bucketStations))
	id, err := b.NextSequence()
	if err != nil {
		return table{}, err
	}
	key := binary.BigEndian.AppendUint32(nil, uint32(id))
	text, err := json.Marshal(append([]string{}, ids...))
	if err != nil {
		return table{}, err
	}
	return table{id: uint32(id), ids: append([]string(nil), ids...)}, b.Put(key, seal(key, text))
}

// closeDay lets go of the file of readings.
func (w *Writer) closeDay() {
	if w.day == nil {
		return
	}
	if err := w.s.shelf.release(w.day); err != nil {
		w.s.opts.Log.Error().Str("component", "history").Err(err).Msg("a file of readings did not close in order")
	}
	w.day, w.dayName, w.table = nil, "", table{}
}
