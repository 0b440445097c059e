package brokertest

// Freeze would stop the process from running while its sockets stay open;
// there is no such signal here.
func (b *Broker) Freeze() {
	b.tb.Skip("SKIPPED, NOT TESTED: a process cannot be frozen on this system")
}

// Thaw would let a frozen process run on.
func (b *Broker) Thaw() {}
