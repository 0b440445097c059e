package history

// Days lists the UTC days of which readings are kept, ascending: 2006-01-02.
func (s *Store) Days() ([]string, error) { return s.days() }
