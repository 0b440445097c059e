package access

import (
	"bufio"
	"bytes"
	"errors"
	"fmt"
	"io/fs"
	"os"
	"path/filepath"
	"slices"
	"strings"
	"sync"
	"time"
)

const (
	maxUsersFile = 1 << 20
	maxName      = 64
)

// header is the first line of the file.
const header = "# users of sockline: name, role and hash of the password; written by \"sockline users\"\n"

// CheckName refuses a name that could be taken for something else in a log.
func CheckName(name string) error {
	ok := name != "" && len(name) <= maxName
	for i, r := range name {
		letter := r >= 'a' && r <= 'z' || r >= '0' && r <= '9'
		ok = ok && (letter || i > 0 && strings.ContainsRune(".-_", r))
	}
	if !ok {
		return fmt.Errorf("the name %.70q does not do: use 1 to %d of a-z, 0-9, and within it . - _", name, maxName)
	}
	return nil
}

// New is a user with a password.
func New(name string, role Role, password string) (User, error) {
	if err := errors.Join(CheckName(name), CheckPassword(name, password)); err != nil {
		return User{}, err
	}
	if role <= Nobody || role > Administrator {
		return User{}, errors.New("a user needs a role")
	}
	h, err := newHash(password)
	return User{name, role, h}, err
}

// Read reads the users in a file, in its order. A file that others could
// change or read is refused.
func Read(path string) ([]User, error) {
	f, err := os.Open(path)
	if err != nil {
		return nil, fmt.Errorf("read the users: %w", err)
	}
	defer f.Close()
	info, err := f.Stat()
	if err != nil {
		return nil, fmt.Errorf("read the users: %w", err)
	}
	if mode := info.Mode().Perm(); mode&0o027 != 0 && os.PathSeparator == '/' {
		return nil, fmt.Errorf("read the users: %s can be changed by its group or read by others (mode %04o); run: chmod 640 %s", path, mode, path)
	}
	if info.Size() > maxUsersFile {
		return nil, fmt.Errorf("read the users: %s is longer than 1 MiB; this is hardly a list of users", path)
	}
	var users []User
	lines := bufio.NewScanner(f)
	for n := 1; lines.Scan(); n++ {
		line := strings.TrimSpace(lines.Text())
		if line == "" || line[0] == '#' {
			continue
		}
		u, err := parseUser(line)
		if err == nil && slices.ContainsFunc(users, func(o User) bool { return o.Name == u.Name }) {
			err = fmt.Errorf("the name %s stands twice", u.Name)
		}
		if err != nil {
			return nil, fmt.Errorf("read the users: %s:%d: %w", path, n, err)
		}
		users = append(users, u)
	}
	if err := lines.Err(); err != nil {
		return nil, fmt.Errorf("read the users: %s: %w", path, err)
	}
	return users, nil
}

func parseUser(line string) (User, error) {
	fields := strings.Fields(line)
	if len(fields) != 3 {
		return User{}, fmt.Errorf("a line has a name, a role and a hash, not %d words", len(fields))
	}
	role, err := ParseRole(fields[1])
	if err := errors.Join(CheckName(fields[0]), err); err != nil {
		return User{}, err
	}
	h, err := parseHash(fields[2])
	if err != nil {
		return User{}, fmt.Errorf("user %s: %w", fields[0], err)
	}
	return User{fields[0], role, h}, nil
}

// Write puts users into a file, whole or not at all. A file that is there
// keeps its mode.
func Write(path string, users []User) error {
	var text bytes.Buffer
	text.WriteString(header)
	for _, u := range users {
		fmt.Fprintf(&text, "%s %s %s\n", u.Name, u.Role, u.hash)
	}
	mode := fs.FileMode(0o600)
	if info, err := os.Stat(path); err == nil {
		mode = info.Mode().Perm() &^ 0o027
	}
	f, err := os.CreateTemp(filepath.Dir(path), ".users-*")
	if err != nil {
		return fmt.Errorf("write the users: %w", err)
	}
	_, err = f.Write(text.Bytes())
	err = errors.Join(err, f.Chmod(mode), sameOwner(f, path), f.Sync(), f.Close())
	if err == nil {
		err = os.Rename(f.Name(), path)
	}
	if err != nil {
		return fmt.Errorf("write the users: %w", errors.Join(err, os.Remove(f.Name())))
	}
	return nil
}

// With is users with one more, or with another role and password for one who
// is there.
func With(users []User, u User) []User {
	out := slices.Clone(users)
	if i := slices.IndexFunc(out, func(o User) bool { return o.Name == u.Name }); i >= 0 {
		out[i] = u
		return out
	}
	return append(out, u)
}

// Without is users without one; false if the name is not there.
func Without(users []User, name string) ([]User, bool) {
	out := slices.DeleteFunc(slices.Clone(users), func(o User) bool { return o.Name == name })
	return out, len(out) < len(users)
}

// lookEvery is how old the knowledge of the file may get: who is removed is
// out within this.
const lookEvery = 2 * time.Second

// book is the file of users as it was last read.
type book struct {
	path string

	mu     sync.Mutex
	users  map[string]User
	looked time.Time
	size   int64
	mod    time.Time
	err    error
	told   map[string]User // as of the last changes; nil before the first
}

// find is the user of a name; false if there is none. A file that cannot be
// read has no users: nobody gets in by breaking it.
func (b *book) find(name string, now time.Time) (User, bool) {
	b.mu.Lock()
	defer b.mu.Unlock()
	b.look(now)
	u, ok := b.users[name]
	return u, ok
}

// state is how many users there are, and what is wrong with the file.
func (b *book) state(now time.Time) (int, error) {
	b.mu.Lock()
	defer b.mu.Unlock()
	b.look(now)
	return len(b.users), b.err
}

func (b *book) look(now time.Time) {
	if age := now.Sub(b.looked); !b.looked.IsZero() && age >= 0 && age < lookEvery {
		return
	}
	b.looked = now
	info, err := os.Stat(b.path)
	if err == nil && b.err == nil && b.users != nil && info.Size() == b.size && info.ModTime().Equal(b.mod) {
		return
	}
	b.users = make(map[string]User)
	list, err := Read(b.path)
	if b.err = err; err != nil {
		return
	}
	if info != nil {
		b.size, b.mod = info.Size(), info.ModTime()
	}
	for _, u := range list {
		b.users[u.Name] = u
	}
}

// changes compares the users with those of the time before.
func (b *book) changes(now time.Time) (out []Change, err error) {
	b.mu.Lock()
	defer b.mu.Unlock()
	b.look(now)
	if b.err != nil {
		return nil, b.err
	}
	first := b.told == nil
	for name, u := range b.users {
		before, known := b.told[name]
		switch {
		case first:
			out = append(out, Change{name, "is a user as " + u.Role.String()})
		case !known:
			out = append(out, Change{name, "added as " + u.Role.String()})
		case before.Role != u.Role:
			out = append(out, Change{name, "is " + u.Role.String() + " and was " + before.Role.String()})
		case before.hash.String() != u.hash.String():
			out = append(out, Change{name, "has another password"})
		}
	}
	for name := range b.told {
		if _, still := b.users[name]; !still {
			out = append(out, Change{name, "removed"})
		}
	}
	b.told = b.users
	slices.SortFunc(out, func(x, y Change) int { return strings.Compare(x.Name, y.Name) })
	return out, nil
}
