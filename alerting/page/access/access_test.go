package access

import (
	"context"
	"encoding/hex"
	"errors"
	"fmt"
	"os"
	"path/filepath"
	"strings"
	"testing"
	"time"

	"golang.org/x/crypto/argon2"
)

// noon is the moment at which these tests begin.
func noon() time.Time { return time.Date(2026, 7, 1, 12, 0, 0, 0, time.UTC) }

const password = "gannet over the moor"

// file writes users; each name has the password above.
func file(t *testing.T, roles map[string]Role) string {
	t.Helper()
	path := filepath.Join(t.TempDir(), "users")
	var users []User
	for name, role := range roles {
		u, err := New(name, role, password)
		if err != nil {
			t.Fatal(err)
		}
		users = append(users, u)
	}
	if err := Write(path, users); err != nil {
		t.Fatal(err)
	}
	return path
}

func gate(t *testing.T, path string) *Gate {
	t.Helper()
	g, err := NewGate(path)
	if err != nil {
		t.Fatal(err)
	}
	return g
}

// TestHashAgainstVector: the value of argon2id in RFC 9106, section 5.3, is
// made with a secret and associated data, which this library does not offer;
// the vector below is that of the reference implementation's own tests
// (P-H-C/phc-winner-argon2, test.c: version 0x13, 2 passes, 64 MiB, 1 lane,
// "password" and "somesalt"; from memory, and confirmed by the library).
func TestHashAgainstVector(t *testing.T) {
	const want = "09316115d5cf24ed5a15a31a3ba326e5cf32edc24702987c02b6566f61913cf7"
	got := hex.EncodeToString(argon2.IDKey([]byte("password"), []byte("somesalt"), 2, 64*1024, 1, 32))
	if got != want {
		t.Fatalf("argon2id is %s, want %s", got, want)
	}
	// And the same as it stands in a file.
	h, err := parseHash("$argon2id$v=19$m=65536,t=2,p=1$c29tZXNhbHQ$CTFhFdXPJO1aFaMaO6Mm5c8y7cJHAph8ArZWb2GRPPc")
	if err != nil || !h.is("password") || h.is("Password") {
		t.Errorf("the hash of the reference implementation: %v", err)
	}
}

func TestBadHashes(t *testing.T) {
	good, err := newHash(password)
	if err != nil {
		t.Fatal(err)
	}
	if h, err := parseHash(good.String()); err != nil || h.String() != good.String() {
		t.Fatalf("a hash does not come back: %v", err)
	}
	for _, change := range [][2]string{
		{"argon2id", "argon2i"}, {"v=19", "v=16"}, {"m=19456", "m=999999999"}, {"m=19456", "m=-1"}, {"t=2", "t=0"},
		{"t=2", "t=4000"}, {"p=1", "p=0"}, {"p=1", "p=200"}, {"p=1", "p=1,x=1"}, {"$v", "$$v"}, {"m=19456", "m=019456"},
	} {
		if bad := strings.Replace(good.String(), change[0], change[1], 1); bad == good.String() {
			t.Errorf("%v changes nothing", change)
		} else if _, err := parseHash(bad); err == nil {
			t.Errorf("%s is taken", bad)
		}
	}
	if _, err := parseHash("$argon2id$v=19$m=19456,t=2,p=1$$"); err == nil {
		t.Error("an empty salt is taken")
	}
}

func TestNamesAndPasswords(t *testing.T) {
	for name, ok := range map[string]bool{
		"keeper": true, "a.b-c_9": true, "": false, ".a": false, "A": false, "a b": false, "a\nb": false, "ü": false, strings.Repeat("a", 65): false,
	} {
		if err := CheckName(name); (err == nil) != ok {
			t.Errorf("name %q: %v", name, err)
		}
	}
	for p, ok := range map[string]bool{
		password: true, "zwölf zeichen": true, "short": false, "aaaaaaaaaaaaaaaa": false, "Keeper.Keeper": false,
		"with\x00zero and more": false, strings.Repeat("ab", 300): false,
	} {
		if err := CheckPassword("keeper.keeper", p); (err == nil) != ok {
			t.Errorf("password %q: %v", p, err)
		}
	}
}

func TestUsersFile(t *testing.T) {
	path := file(t, map[string]Role{"keeper": Tower})
	users, err := Read(path)
	if err != nil || len(users) != 1 || users[0].Role != Tower {
		t.Fatalf("read %v, %v", users, err)
	}
	if info, err := os.Stat(path); err != nil || info.Mode().Perm() != 0o600 {
		t.Errorf("mode %v, %v", info.Mode(), err)
	}
	line := users[0].Name + " tower " + users[0].hash.String()
	for content, phrase := range map[string]string{
		"x":                                  ":1: a line has a name",
		line + "\n" + line:                   ":2: the name keeper stands twice",
		"# c\n\nkeeper chief " + line[13:]:   `:3: there is no role "chief"`,
		"keeper tower $2y$10$abcdefghijklmn": "users add",
	} {
		if err := os.WriteFile(path, []byte(content), 0o600); err != nil {
			t.Fatal(err)
		}
		if _, err := Read(path); err == nil || !strings.Contains(err.Error(), phrase) {
			t.Errorf("%q: %v, want %q", content, err, phrase)
		}
	}
	for mode, ok := range map[os.FileMode]bool{0o640: true, 0o600: true, 0o644: false, 0o660: false} {
		if err := errors.Join(os.WriteFile(path, []byte(line), mode), os.Chmod(path, mode)); err != nil {
			t.Fatal(err)
		}
		if _, err := Read(path); (err == nil) != ok || err != nil && !strings.Contains(err.Error(), "chmod 640") {
			t.Errorf("mode %o: %v", mode, err)
		}
	}
	list := With(With(nil, users[0]), User{Name: "other", Role: Viewer})
	list = With(list, User{Name: "keeper", Role: Officer})
	if len(list) != 2 || list[0].Role != Officer {
		t.Errorf("a changed user: %v", list)
	}
	if rest, ok := Without(list, "keeper"); !ok || len(rest) != 1 {
		t.Errorf("without one: %v", rest)
	}
	if _, ok := Without(list, "nobody"); ok {
		t.Error("somebody who is not there is removed")
	}
}

func TestSessions(t *testing.T) {
	path := file(t, map[string]Role{"keeper": Tower, "guest": Viewer})
	g, now := gate(t, path), noon()
	key, v, err := g.LogIn(t.Context(), "keeper", password, "192.0.2.1", now)
	if err != nil || v.Name != "keeper" || v.Role != Tower {
		t.Fatalf("logged in as %+v, %v", v, err)
	}
	if got := g.Visitor(key, now.Add(Lasts-1)); got != v {
		t.Errorf("the session is that of %+v, want %+v", got, v)
	}
	if !v.Carries(v.Token) || v.Carries("") || v.Carries(v.Token[1:]) || (Visitor{}).Carries("") {
		t.Error("the token is not compared as it should be")
	}
	for _, other := range []string{"", "x", key + "x", key[1:], v.Token, strings.Repeat("k", 5000)} {
		if got := g.Visitor(other, now); got != (Visitor{}) {
			t.Errorf("the key %.20q is that of %+v", other, got)
		}
	}
	if got := g.Visitor(key, now.Add(Lasts)); got != (Visitor{}) {
		t.Errorf("after its end the session is that of %+v", got)
	}
	key, _, _ = g.LogIn(t.Context(), "keeper", password, "192.0.2.1", now)
	g.LogOut(key)
	if got := g.Visitor(key, now); got != (Visitor{}) {
		t.Errorf("after the log-out the session is that of %+v", got)
	}
}

// TestChangedUsers: a new role counts, a new password and a removal end the
// sessions, and so does a file that cannot be read.
func TestChangedUsers(t *testing.T) {
	path := file(t, map[string]Role{"keeper": Tower})
	g, now := gate(t, path), noon()
	key, _, err := g.LogIn(t.Context(), "keeper", password, "192.0.2.1", now)
	if err != nil {
		t.Fatal(err)
	}
	users, err := Read(path)
	if err != nil {
		t.Fatal(err)
	}
	turn := func(list []User) Visitor {
		t.Helper()
		if err := Write(path, list); err != nil {
			t.Fatal(err)
		}
		now = now.Add(lookEvery)
		if err := os.Chtimes(path, now, now); err != nil {
			t.Fatal(err)
		}
		return g.Visitor(key, now)
	}
	users[0].Role = Viewer
	if v := turn(users); v.Role != Viewer {
		t.Errorf("with another role: %+v", v)
	}
	again, err := New("keeper", Viewer, password)
	if err != nil {
		t.Fatal(err)
	}
	if v := turn([]User{again}); v != (Visitor{}) {
		t.Errorf("with a new hash: %+v", v)
	}
	if v := turn(users); v.Role != Viewer {
		t.Errorf("with the first hash again: %+v", v)
	}
	if err := os.WriteFile(path, []byte("rubbish"), 0o600); err != nil {
		t.Fatal(err)
	}
	now = now.Add(lookEvery)
	if v := g.Visitor(key, now); v != (Visitor{}) {
		t.Errorf("with a broken file: %+v", v)
	}
	if _, err := g.Users(now); err == nil {
		t.Error("a broken file has no problem")
	}
	if v := turn(nil); v != (Visitor{}) {
		t.Errorf("removed: %+v", v)
	}
}

func TestWhoIsKeptOut(t *testing.T) {
	g, now := gate(t, file(t, map[string]Role{"keeper": Tower})), noon()
	for name, p := range map[string]string{"keeper": "gannet over the sea", "nobody": password, "": "", "root": strings.Repeat("p", 10000)} {
		if _, _, err := g.LogIn(t.Context(), name, p, "192.0.2."+fmt.Sprint(len(p)%200), now); !errors.Is(err, ErrWrong) {
			t.Errorf("%q: %v", name, err)
		}
	}
	ctx, cancel := context.WithCancel(t.Context())
	cancel()
	g.slots <- struct{}{}
	g.slots <- struct{}{} // both places are taken
	if _, _, err := g.LogIn(ctx, "keeper", password, "192.0.2.99", now); !errors.Is(err, context.Canceled) {
		t.Errorf("without a place: %v", err)
	}
}

// TestHowOftenOneMayTry: five tries of a name from an address, then one every
// 30 s; others are not kept out by that.
func TestHowOftenOneMayTry(t *testing.T) {
	l, now := limiter{buckets: make(map[string]*bucket)}, noon()
	tries := func(name, address string, n int) (taken int) {
		for range n {
			if l.take(name, address, now) {
				taken++
			}
		}
		return taken
	}
	if n := tries("keeper", "192.0.2.1", 50); n != 5 {
		t.Errorf("%d tries of 50, want 5", n)
	}
	if n := tries("keeper", "192.0.2.2", 1); n != 1 {
		t.Error("somebody else can keep the keeper out")
	}
	now = now.Add(30 * time.Second)
	if n := tries("keeper", "192.0.2.1", 50); n != 1 {
		t.Errorf("%d tries after 30 s, want 1", n)
	}
	l.forgive("keeper", "192.0.2.1")
	if n := tries("keeper", "192.0.2.1", 50); n != 5 {
		t.Errorf("%d tries after a log-in, want 5", n)
	}
	// Many names from one address, and one network of IPv6 counts as one.
	total := 0
	for n := range 100 {
		total += tries(fmt.Sprint("n", n), fmt.Sprintf("2001:db8::%x", n), 1)
	}
	if total != 20 {
		t.Errorf("%d tries from one network, want 20", total)
	}
	for n := range 100_000 {
		l.take(fmt.Sprint("m", n), fmt.Sprintf("198.51.%d.%d", n/250%250, n%250), now)
	}
	if n := len(l.buckets); n > 400 {
		t.Errorf("%d buckets are kept", n)
	}
	now = now.Add(time.Hour)
	l.take("keeper", "192.0.2.1", now)
	if n := len(l.buckets); n > 3 {
		t.Errorf("%d buckets are kept after an hour", n)
	}
	now = now.Add(-2 * time.Hour) // the clock is set back
	if n := tries("guest", "192.0.2.7", 50); n != 5 {
		t.Errorf("%d tries after the clock was set back, want 5", n)
	}
}

func TestManySessions(t *testing.T) {
	g, now := gate(t, file(t, map[string]Role{"keeper": Tower})), noon()
	u, _ := g.book.find("keeper", now)
	first, _, err := g.begin(u, now)
	if err != nil {
		t.Fatal(err)
	}
	for range maxSessions {
		now = now.Add(time.Second)
		if _, _, err := g.begin(u, now); err != nil {
			t.Fatal(err)
		}
	}
	if len(g.sessions) != maxSessions || g.Visitor(first, now) != (Visitor{}) {
		t.Errorf("%d sessions, and the first one is still one", len(g.sessions))
	}
}
