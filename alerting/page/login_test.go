package page

import (
	"maps"
	"net/http"
	"net/url"
	"slices"
	"strings"
	"testing"
)

// form posts the form of the log-in.
func (g *guarded) form(path, from string, header map[string]string, values url.Values) *http.Response {
	h := map[string]string{"Content-Type": "application/x-www-form-urlencoded"}
	maps.Copy(h, header)
	return g.ask(request{method: "POST", path: path, body: values.Encode(), from: from, header: h})
}

func TestLogIn(t *testing.T) {
	g := guardAlone(t)
	good := url.Values{"name": {" Keeper "}, "password": {password}, "next": {"/past?x=1"}}
	r := g.form("/login", "192.0.2.9", nil, good)
	cookies := r.Cookies()
	if r.StatusCode != 303 || r.Header.Get("Location") != "/past?x=1" || len(cookies) != 1 {
		t.Fatalf("answer %d to %s with %v", r.StatusCode, r.Header.Get("Location"), cookies)
	}
	c := cookies[0]
	if c.Name != cookiePlain || !c.HttpOnly || c.SameSite != http.SameSiteStrictMode || c.MaxAge != 12*3600 || c.Path != "/" || c.Domain != "" || len(c.Value) < 43 {
		t.Errorf("cookie %+v", c)
	}
	v := g.Page.opts.Gate.Visitor(c.Value, noon)
	if v.Name != "keeper" {
		t.Fatalf("the session is that of %+v", v)
	}
	// Out again, and only with the token.
	out := map[string]string{"Cookie": cookiePlain + "=" + c.Value}
	if r := g.form("/logout", "", out, nil); r.StatusCode != 403 {
		t.Errorf("out without a token: answer %d", r.StatusCode)
	}
	r = g.form("/logout", "", out, url.Values{"token": {v.Token}})
	if after := g.Page.opts.Gate.Visitor(c.Value, noon); r.StatusCode != 303 || r.Cookies()[0].MaxAge >= 0 || after.Name != "" {
		t.Errorf("out: answer %d, then %+v", r.StatusCode, after)
	}
	want := []Access{{"keeper", "log-in as tower", "192.0.2.9", true}, {"keeper", "log-out", "127.0.0.1", true}}
	if !slices.Equal(g.deeds.audited, want) {
		t.Errorf("kept: %v", g.deeds.audited)
	}
}

func TestLogInRefused(t *testing.T) {
	g := guardAlone(t)
	values := func(name, password string) url.Values { return url.Values{"name": {name}, "password": {password}} }
	for _, tt := range []struct {
		values url.Values
		who    string
	}{
		{values("keeper", "gannet over the sea"), "keeper"}, {values("nobody", password), "nobody"},
		{values("", ""), ""}, {values(password, ""), ""}, // typed into the wrong field
	} {
		g.deeds.audited = nil
		r := g.form("/login", "", nil, tt.values)
		if body := text(t, r); r.StatusCode != 403 || len(r.Cookies()) != 0 || !strings.Contains(body, "name or the password is wrong") {
			t.Errorf("%v: answer %d %v", tt.values, r.StatusCode, r.Cookies())
		}
		if !slices.Equal(g.deeds.audited, []Access{{tt.who, "log-in refused", "127.0.0.1", false}}) {
			t.Errorf("%v: kept %v", tt.values, g.deeds.audited)
		}
	}
	if r := g.form("/login", "", map[string]string{"Sec-Fetch-Site": "cross-site"}, values("keeper", password)); r.StatusCode != 403 || len(r.Cookies()) != 0 {
		t.Errorf("from a foreign page: answer %d", r.StatusCode)
	}
	refused := 0
	for range 20 {
		r := g.form("/login", "192.0.2.66", nil, values("keeper", "wrong and wrong again"))
		if r.StatusCode == 429 && r.Header.Get("Retry-After") != "" {
			refused++
		}
	}
	if refused != 15 {
		t.Errorf("%d of 20 tries were refused unseen, want 15", refused)
	}
	if r := g.form("/login", "192.0.2.66", nil, values("keeper", password)); r.StatusCode != 429 {
		t.Errorf("the right password after too many tries: answer %d", r.StatusCode)
	}
}

func TestNextStaysHere(t *testing.T) {
	for to, want := range map[string]string{
		"": "/", "/": "/", "/past?a=b": "/past?a=b", "https://elsewhere.example/": "/", "//elsewhere.example": "/", "/\\elsewhere.example": "/",
		"javascript:alert(1)": "/", "/login": "/", "past": "/", "/%2f/elsewhere.example": "/", "/a\r\nSet-Cookie: x": "/",
	} {
		if got := next(to); got != want {
			t.Errorf("next %q is %q, want %q", to, got, want)
		}
	}
}
