package page

import (
	"errors"
	"net"
	"net/http"
	"net/url"
	"strings"
	"time"

	"sockline/alerting/page/access"
)

// The cookie of a session, over TLS and without. The prefix makes browsers
// refuse one that another host or an unencrypted page set.
const (
	cookieTLS   = "__Host-sockline"
	cookiePlain = "sockline"
	// tokenHeader carries the token of the session with everything that changes
	// something: a foreign page can make a browser send the cookie, but not this.
	tokenHeader = "X-Sockline-Token"
	maxForm     = 8 << 10
)

func (p *Page) cookieName() string {
	if p.opts.TLS != nil {
		return cookieTLS
	}
	return cookiePlain
}

// who is behind a request; the zero Visitor where nobody has logged in.
func (p *Page) who(r *http.Request) access.Visitor {
	c, err := r.Cookie(p.cookieName())
	if err != nil || p.opts.Gate == nil {
		return access.Visitor{}
	}
	return p.opts.Gate.Visitor(c.Value, p.opts.Now())
}

// addressOf is where a request comes from.
func addressOf(r *http.Request) string {
	host, _, err := net.SplitHostPort(r.RemoteAddr)
	if err != nil {
		return r.RemoteAddr
	}
	return host
}

// atHand tells whether a request comes from this very machine. One that a
// proxy passes on says so, and does not.
func atHand(r *http.Request) bool {
	if r.Header.Get("Forwarded") != "" || r.Header.Get("X-Forwarded-For") != "" {
		return false
	}
	return loopback(addressOf(r))
}

// open are the addresses that everybody may read: what a browser needs to log
// in, and what a supervisor asks for.
func openToAll(path string) bool {
	return path == "/login" || path == "/healthz" || path == "/readyz" || strings.HasPrefix(path, "/assets/")
}

// mayRead lets those read who are on this machine or have logged in, and
// answers the others.
func (p *Page) mayRead(w http.ResponseWriter, r *http.Request) bool {
	if openToAll(r.URL.Path) || p.opts.Gate == nil || atHand(r) || p.who(r).Role >= access.Viewer {
		return true
	}
	if strings.Contains(r.Header.Get("Accept"), "text/html") && !strings.HasPrefix(r.URL.Path, "/api/") {
		http.Redirect(w, r, "/login?next="+url.QueryEscape(r.URL.RequestURI()), http.StatusSeeOther)
		return false
	}
	p.logInNeeded(w)
	return false
}

func (p *Page) logInNeeded(w http.ResponseWriter) {
	w.Header().Set("WWW-Authenticate", `Session realm="sockline"`)
	p.problem(w, http.StatusUnauthorized, "log-in-needed", "Nobody has logged in.", "Log in at /login.")
}

// allowed tells who wants to change something, if they may; else it has
// answered why not.
func (p *Page) allowed(w http.ResponseWriter, r *http.Request, role access.Role) (access.Visitor, bool) {
	if p.opts.Gate == nil || p.opts.People == nil {
		p.problem(w, http.StatusForbidden, "read-only", "This can only be read.",
			"There are no users here: name a users_file in [page], and add some with \"sockline users add\".")
		return access.Visitor{}, false
	}
	v := p.who(r)
	switch {
	case v.Role == access.Nobody:
		p.logInNeeded(w)
	case !v.Carries(r.Header.Get(tokenHeader)):
		p.problem(w, http.StatusForbidden, "no-token", "The request does not carry the token of its session.",
			"Send "+tokenHeader+" with the token that the page has in its head; load the page again if it is old.")
	case v.Role < role:
		if p.opts.Gate.Worth(v.Name, p.opts.Now()) {
			p.opts.People.Audit(Access{v.Name, "refused " + r.URL.Path + " to a " + v.Role.String(), addressOf(r), false})
		}
		p.problem(w, http.StatusForbidden, "role", "Your role does not do that.",
			"You are logged in as "+v.Role.String()+"; this needs "+role.String()+".")
	default:
		return v, true
	}
	return access.Visitor{}, false
}

// visitorObject tells somebody who they are, with the token of their session: for
// modules and programs that did not load a page. Other sites cannot read it.
func (p *Page) visitorObject(w http.ResponseWriter, r *http.Request) {
	v := p.who(r)
	p.json(w, http.StatusOK, "application/json", struct {
		Name  string `json:"name"` // empty: nobody has logged in
		Role  string `json:"role"`
		Token string `json:"token"`
		Users bool   `json:"users"` // there are people who may log in
		marks
	}{v.Name, v.Role.String(), v.Token, p.opts.Gate != nil, p.marks()})
}

// logInForm shows the form.
func (p *Page) logInForm(w http.ResponseWriter, r *http.Request) {
	if p.opts.Gate == nil {
		http.Redirect(w, r, "/", http.StatusSeeOther)
		return
	}
	p.frontLogin(w, r, http.StatusOK, "", next(r.URL.Query().Get("next")))
}

// logIn takes the form.
func (p *Page) logIn(w http.ResponseWriter, r *http.Request) {
	if p.opts.Gate == nil {
		p.problem(w, http.StatusForbidden, "read-only", "Nobody can log in here.", "There are no users: name a users_file in [page].")
		return
	}
	r.Body = http.MaxBytesReader(w, r.Body, maxForm)
	if err := r.ParseForm(); err != nil {
		p.frontLogin(w, r, http.StatusBadRequest, "The form cannot be understood.", "/")
		return
	}
	name, to := strings.ToLower(strings.TrimSpace(r.PostForm.Get("name"))), next(r.PostForm.Get("next"))
	key, v, err := p.opts.Gate.LogIn(r.Context(), name, r.PostForm.Get("password"), addressOf(r), p.opts.Now())
	switch {
	case errors.Is(err, access.ErrTooOften):
		w.Header().Set("Retry-After", "60")
		p.opts.Log.Warn().Str("from", addressOf(r)).Msg("somebody tries to log in too often")
		p.frontLogin(w, r, http.StatusTooManyRequests, sentenceOf(err), to)
		return
	case errors.Is(err, access.ErrWrong):
		if access.CheckName(name) != nil {
			name = "" // whatever was typed there, it may be a password
		}
		p.opts.People.Audit(Access{name, "log-in refused", addressOf(r), false})
		p.frontLogin(w, r, http.StatusForbidden, sentenceOf(err), to)
		return
	case err != nil:
		p.internal(w, "log somebody in", err)
		return
	}
	p.opts.People.Audit(Access{v.Name, "log-in as " + v.Role.String(), addressOf(r), true})
	if old, err := r.Cookie(p.cookieName()); err == nil {
		p.opts.Gate.LogOut(old.Value) // the session before is not left behind
	}
	p.cookie(w, key, access.Lasts)
	http.Redirect(w, r, to, http.StatusSeeOther)
}

// logOut ends a session. Its form carries the token.
func (p *Page) logOut(w http.ResponseWriter, r *http.Request) {
	v := p.who(r)
	if v.Role == access.Nobody {
		http.Redirect(w, r, "/", http.StatusSeeOther)
		return
	}
	r.Body = http.MaxBytesReader(w, r.Body, maxForm)
	if !v.Carries(r.Header.Get(tokenHeader)) && !v.Carries(r.PostFormValue("token")) {
		p.problem(w, http.StatusForbidden, "no-token", "The request does not carry the token of its session.", "Load the page again.")
		return
	}
	if c, err := r.Cookie(p.cookieName()); err == nil {
		p.opts.Gate.LogOut(c.Value)
	}
	p.opts.People.Audit(Access{v.Name, "log-out", addressOf(r), true})
	p.cookie(w, "", -time.Second)
	http.Redirect(w, r, "/", http.StatusSeeOther)
}

// cookie sets the cookie of a session, or takes it away.
func (p *Page) cookie(w http.ResponseWriter, key string, lasts time.Duration) {
	http.SetCookie(w, &http.Cookie{
		Name: p.cookieName(), Value: key, Path: "/", MaxAge: int(lasts / time.Second),
		HttpOnly: true, Secure: p.opts.TLS != nil, SameSite: http.SameSiteStrictMode,
	})
}

// next is a place of ours to go to; anything else leads to the front.
func next(to string) string {
	u, err := url.Parse(to)
	if err != nil || u.Scheme != "" || u.Host != "" || u.User != nil || !strings.HasPrefix(u.Path, "/") ||
		strings.HasPrefix(to, "//") || strings.ContainsAny(to, "\\\r\n\t") || strings.HasPrefix(u.Path, "/login") || strings.HasPrefix(u.Path, "//") {
		return "/"
	}
	return u.RequestURI()
}
