package access

import (
	"context"
	"crypto/rand"
	"crypto/sha256"
	"crypto/subtle"
	"encoding/base64"
	"errors"
	"fmt"
	"sync"
	"time"
)

const (
	// Lasts is how long a session lasts.
	Lasts       = 12 * time.Hour
	maxSessions = 1000
	tokenBytes  = 32
	// atOnce bounds how many passwords are checked side by side: each takes
	// 19 MiB and a core.
	atOnce = 2
)

// What keeps somebody out. The text is for them, and tells no more than that.
var (
	ErrWrong    = errors.New("the name or the password is wrong")
	ErrTooOften = errors.New("there were too many tries; wait a minute")
)

// Visitor is who is behind a request.
type Visitor struct {
	Name  string // empty for somebody who is not logged in
	Role  Role
	Token string // that a change must carry besides the cookie
}

// Gate lets people in. Its methods may be called from any goroutine.
type Gate struct {
	book  book
	limit limiter
	heard limiter // of what is told of somebody who may not
	slots chan struct{}
	decoy hash

	mu       sync.Mutex
	sessions map[[sha256.Size]byte]*session
}

type session struct {
	name    string
	version string // of the password: another one ends the session
	token   string
	ends    time.Time
}

// NewGate is a gate for the users in a file, which may come later and may
// change.
func NewGate(path string) (*Gate, error) {
	decoy, err := newHash("nobody has this password")
	if err != nil {
		return nil, err
	}
	return &Gate{
		book: book{path: path}, slots: make(chan struct{}, atOnce), decoy: decoy,
		limit: limiter{buckets: make(map[string]*bucket)}, heard: limiter{buckets: make(map[string]*bucket)}, sessions: make(map[[sha256.Size]byte]*session),
	}, nil
}

// Users is how many there are, and what is wrong with their file.
func (g *Gate) Users(now time.Time) (int, error) { return g.book.state(now) }

// Change is what has become of a user.
type Change struct{ Name, What string }

// Changes is what has changed in the file of users since it was asked for last;
// the first time, everybody who is there. The error is what is wrong with the
// file: the users of before are then no users any more, which is no change.
func (g *Gate) Changes(now time.Time) ([]Change, error) { return g.book.changes(now) }

// LogIn checks a name and a password that came from an address, and begins a
// session. The key goes into the cookie.
func (g *Gate) LogIn(ctx context.Context, name, password, address string, now time.Time) (key string, v Visitor, err error) {
	if !g.limit.take(name, address, now) {
		return "", Visitor{}, ErrTooOften
	}
	select {
	case g.slots <- struct{}{}:
		defer func() { <-g.slots }()
	case <-ctx.Done():
		return "", Visitor{}, ctx.Err()
	}
	u, known := g.book.find(name, now)
	h := g.decoy // an unknown name takes as long as a known one
	if known {
		h = u.hash
	}
	if right := len(password) <= mostPassword && h.is(password); !right || !known {
		return "", Visitor{}, ErrWrong
	}
	g.limit.forgive(name, address)
	return g.begin(u, now)
}

func (g *Gate) begin(u User, now time.Time) (key string, v Visitor, err error) {
	var secret [2 * tokenBytes]byte
	if _, err := rand.Read(secret[:]); err != nil {
		return "", Visitor{}, fmt.Errorf("begin a session: %w", err)
	}
	key = base64.RawURLEncoding.EncodeToString(secret[:tokenBytes])
	s := &session{u.Name, u.hash.String(), base64.RawURLEncoding.EncodeToString(secret[tokenBytes:]), now.Add(Lasts)}
	g.mu.Lock()
	defer g.mu.Unlock()
	g.tidy(now)
	g.sessions[sha256.Sum256([]byte(key))] = s
	return key, Visitor{u.Name, u.Role, s.token}, nil
}

// tidy drops the sessions that have ended, and the one that ends first where
// there are too many.
func (g *Gate) tidy(now time.Time) {
	var first [sha256.Size]byte
	var ends time.Time
	for k, s := range g.sessions {
		if !now.Before(s.ends) {
			delete(g.sessions, k)
		} else if ends.IsZero() || s.ends.Before(ends) {
			first, ends = k, s.ends
		}
	}
	if len(g.sessions) >= maxSessions {
		delete(g.sessions, first)
	}
}

// Visitor is who a key belongs to; the zero Visitor if to nobody, or nobody
// any more. Only a digest of the key is looked up, so the time that takes says
// nothing of the keys there are.
func (g *Gate) Visitor(key string, now time.Time) Visitor {
	if key == "" || len(key) > 128 {
		return Visitor{}
	}
	digest := sha256.Sum256([]byte(key))
	g.mu.Lock()
	s := g.sessions[digest]
	if s != nil && !now.Before(s.ends) {
		delete(g.sessions, digest)
		s = nil
	}
	g.mu.Unlock()
	if s == nil {
		return Visitor{}
	}
	u, ok := g.book.find(s.name, now)
	if !ok || u.hash.String() != s.version {
		return Visitor{}
	}
	return Visitor{u.Name, u.Role, s.token}
}

// Carries tells whether a request carries the token of its session.
func (v Visitor) Carries(token string) bool {
	return v.Token != "" && subtle.ConstantTimeCompare([]byte(token), []byte(v.Token)) == 1
}

// Worth tells whether what a user was refused is worth another line: nobody
// fills the history by asking.
func (g *Gate) Worth(name string, now time.Time) bool { return g.heard.take(name, "", now) }

// LogOut ends a session.
func (g *Gate) LogOut(key string) {
	g.mu.Lock()
	defer g.mu.Unlock()
	delete(g.sessions, sha256.Sum256([]byte(key)))
}
