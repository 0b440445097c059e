package history

import (
	"bytes"
	"slices"

	bolt "go.etcd.io/bbolt"
)

// upgradeJournal makes a journal of an earlier format one of this: the same
// records, with the buckets that came since. The step is one transaction; an
// earlier program refuses the file from then on.
func (s *Store) upgradeJournal() error {
	l, key := s.journal.layout, []byte("format")
	old := false
	err := s.journal.view(func(tx *bolt.Tx) error {
		format, err := unseal(key, tx.Bucket([]byte(bucketAbout)).Get(key))
		old = err == nil && string(format) != l.format
		return nil
	})
	if err != nil || !old {
		return err
	}
	return s.journal.update(func(tx *bolt.Tx) error {
		for _, name := range l.buckets {
			if _, err := tx.CreateBucketIfNotExists([]byte(name)); err != nil {
				return err
			}
		}
		return tx.Bucket([]byte(bucketAbout)).Put(key, seal(key, []byte(l.format)))
	})
}

// sameIndex reports whether the stored index is the one that the records
// want.
func sameIndex(tx *bolt.Tx, want index) bool {
	events, ids := tx.Bucket([]byte(bucketEvents)), tx.Bucket([]byte(bucketIDs))
	if count(events) != len(want.events) || count(ids) != len(want.events) {
		return false
	}
	for at, row := range want.events {
		key, id := []byte(at), []byte(at[8:])
		if !bytes.Equal(events.Get(key), seal(key, row.encode())) || !bytes.Equal(ids.Get(id), seal(id, key[:8])) {
			return false
		}
	}
	people := tx.Bucket([]byte(bucketPeople))
	if people == nil { // of an earlier format
		return len(want.people) == 0
	}
	if count(people) != len(want.people) {
		return false
	}
	for at, kind := range want.people {
		if key := []byte(at); !bytes.Equal(people.Get(key), seal(key, []byte{byte(kind)})) {
			return false
		}
	}
	return true
}

func count(b *bolt.Bucket) (n int) {
	c := b.Cursor()
	for k, _ := c.First(); k != nil; k, _ = c.Next() {
		n++
	}
	return n
}

// rebuildIndex makes the index anew.
func rebuildIndex(tx *bolt.Tx, want index) error {
	for _, name := range []string{bucketEvents, bucketIDs, bucketPeople} {
		if err := tx.DeleteBucket([]byte(name)); err != nil {
			return err
		}
		if _, err := tx.CreateBucket([]byte(name)); err != nil {
			return err
		}
	}
	for _, at := range sortedKeys(want.events) {
		key, id := []byte(at), []byte(at[8:])
		if err := tx.Bucket([]byte(bucketEvents)).Put(key, seal(key, want.events[at].encode())); err != nil {
			return err
		}
		if err := tx.Bucket([]byte(bucketIDs)).Put(id, seal(id, key[:8])); err != nil {
			return err
		}
	}
	for _, at := range sortedKeys(want.people) {
		key := []byte(at)
		if err := tx.Bucket([]byte(bucketPeople)).Put(key, seal(key, []byte{byte(want.people[at])})); err != nil {
			return err
		}
	}
	return nil
}

func sortedKeys[V any](m map[string]V) []string {
	keys := make([]string, 0, len(m))
	for k := range m {
		keys = append(keys, k)
	}
	slices.Sort(keys)
	return keys
}
