package history

import "errors"

// Journal shows fn the records from sequence from on, in order. One that
// cannot be read is left out and the others still shown; the error returned at
// the end names it. An error of fn ends the walk and is returned as it is. The
// chain is not checked: Verify does that.
func (s *Store) Journal(from uint64, fn func(Record) error) error {
	var faults []error
	err := s.withJournal(func(j *file) error {
		return walk(j, from, func(key, value []byte) error {
			r, err := parseRecord(key, value)
			if err != nil {
				faults = append(faults, err)
				return nil
			}
			return fn(r)
		})
	})
	if err != nil {
		return err
	}
	return errors.Join(faults...)
}
