package page

import (
	"html/template"
	"net/http"
)

// frontLogin is a plain form until there is a better one.
func (p *Page) frontLogin(w http.ResponseWriter, _ *http.Request, status int, failed, next string) {
	t := template.Must(template.New("").Parse(`<!DOCTYPE html><title>Log in</title><p>{{.F}}</p><form method="post" action="/login"><input name="name"><input name="password" type="password"><input type="hidden" name="next" value="{{.N}}"><button>Log in</button></form>`))
	w.WriteHeader(status)
	_ = t.Execute(w, struct{ F, N string }{failed, next})
}
