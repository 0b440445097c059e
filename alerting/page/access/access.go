// Package access takes a name and a password, or the token of a session, and
// says who it is and what they may do: users in a file, passwords as argon2id
// hashes, sessions in memory, and how often somebody may try. Time is an
// argument. Next: page, which asks it about every request.
package access

import (
	"fmt"
	"slices"
)

// Role is what a user may do. Each may do what those before it may.
type Role int

// The roles. Nobody is somebody who is not known.
const (
	Nobody        Role = iota
	Viewer             // look
	Tower              // acknowledge, shelve, report, set the runway in use, sign sheets
	Officer            // write notes, hold, export
	Administrator      // everything; users are changed at the machine only
)

// roleWords are the roles as they are written.
func roleWords() []string { return []string{"", "viewer", "tower", "officer", "administrator"} }

// String is the word of a role, empty for Nobody.
func (r Role) String() string {
	if r < Nobody || r > Administrator {
		return ""
	}
	return roleWords()[r]
}

// ParseRole reads the word of a role.
func ParseRole(word string) (Role, error) {
	if i := slices.Index(roleWords(), word); i > 0 {
		return Role(i), nil
	}
	return Nobody, fmt.Errorf("there is no role %q; choose viewer, tower, officer or administrator", word)
}

// User is somebody who may log in.
type User struct {
	Name string
	Role Role
	hash hash
}
