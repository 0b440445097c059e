//go:build unix

package brokertest

import "syscall"

// Freeze stops the process from running while its sockets stay open: the
// other side sees a connection on which nothing comes any more.
func (b *Broker) Freeze() { b.signal(syscall.SIGSTOP) }

// Thaw lets a frozen process run on.
func (b *Broker) Thaw() { b.signal(syscall.SIGCONT) }
