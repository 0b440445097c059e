package page

import (
	"bytes"
	"compress/gzip"
	"crypto/sha256"
	"embed"
	"encoding/hex"
	"fmt"
	"html/template"
	"io"
	"io/fs"
	"net/http"
	"path"
	"strconv"
	"strings"
	"sync"

	"sockline/alerting"
	"sockline/alerting/page/access"
)

//go:embed templates/*.html
var templateFiles embed.FS

//go:embed assets
var assetFiles embed.FS

// contentSecurityPolicy allows our own modules, style and connections, and
// nothing that is written into a page: whatever found its way into one could
// neither run nor call out. No text may become markup or a script by way of
// the DOM either (Trusted Types).
const contentSecurityPolicy = "default-src 'none'; script-src 'self'; style-src 'self'; img-src 'self'; " +
	"connect-src 'self'; base-uri 'none'; form-action 'self'; frame-ancestors 'none'; " +
	"require-trusted-types-for 'script'; trusted-types 'none'"

// asset is one file that a browser gets beside the pages.
type asset struct {
	contentType string
	plain       []byte
	packed      func() ([]byte, error) // by gzip, when it is first asked for
}

// glass is everything a browser gets: templates, and the files they name.
type glass struct {
	pages  map[string]*template.Template
	assets map[string]asset
	build  string // names this set of files: an address with it never changes what it gives
}

// assetTypes are the kinds of files there are.
func assetType(name string) (string, error) {
	switch path.Ext(name) {
	case ".js":
		return "text/javascript; charset=utf-8", nil
	case ".css":
		return "text/css; charset=utf-8", nil
	case ".svg":
		return "image/svg+xml", nil
	case ".txt":
		return "text/plain; charset=utf-8", nil
	}
	return "", fmt.Errorf("the file %s of the page is of no kind that is served", name)
}

// newGlass reads the files once: a request costs a lookup.
func newGlass() (*glass, error) {
	g := &glass{pages: make(map[string]*template.Template), assets: make(map[string]asset)}
	entries, err := fs.ReadDir(assetFiles, "assets")
	if err != nil {
		return nil, fmt.Errorf("read the files of the page: %w", err)
	}
	sum := sha256.New()
	for _, e := range entries {
		plain, err := assetFiles.ReadFile("assets/" + e.Name())
		if err != nil {
			return nil, fmt.Errorf("read the files of the page: %w", err)
		}
		kind, err := assetType(e.Name())
		if err != nil {
			return nil, err
		}
		g.assets[e.Name()] = asset{kind, plain, sync.OnceValues(func() ([]byte, error) { return pack(plain) })}
		fmt.Fprintf(sum, "%s %d\n", e.Name(), len(plain))
		sum.Write(plain)
	}
	g.build = hex.EncodeToString(sum.Sum(nil)[:8])
	for _, name := range []string{"now", "past", "event", "masts", "basis", "handover", "login"} {
		t, err := template.ParseFS(templateFiles, "templates/frame.html", "templates/"+name+".html")
		if err != nil {
			return nil, fmt.Errorf("read the template of the page: %w", err)
		}
		g.pages[name] = t
	}
	return g, nil
}

func pack(plain []byte) ([]byte, error) {
	var packed bytes.Buffer
	w, err := gzip.NewWriterLevel(&packed, gzip.BestCompression)
	if err != nil {
		return nil, fmt.Errorf("pack the files of the page: %w", err)
	}
	if _, err := w.Write(plain); err != nil {
		return nil, fmt.Errorf("pack the files of the page: %w", err)
	}
	if err := w.Close(); err != nil {
		return nil, fmt.Errorf("pack the files of the page: %w", err)
	}
	return packed.Bytes(), nil
}

// frontRoutes is every address that a person visits, and what those name.
func (p *Page) frontRoutes(mux *http.ServeMux) {
	mux.HandleFunc("GET /{$}", p.frontNow)
	mux.HandleFunc("GET /past", p.frontView("past", "Past"))
	mux.HandleFunc("GET /past/{id}", p.frontView("event", "Past"))
	mux.HandleFunc("GET /masts", p.frontView("masts", "Masts"))
	mux.HandleFunc("GET /basis", p.frontView("basis", "Basis"))
	mux.HandleFunc("GET /handover", p.frontView("handover", "Hand-over"))
	mux.HandleFunc("GET /assets/{build}/{file}", p.frontAsset)
}

// frontAsset answers with a file. The address holds the build, so that a
// browser may keep the file for good and never mixes two versions.
func (p *Page) frontAsset(w http.ResponseWriter, r *http.Request) {
	a, ok := p.glass.assets[r.PathValue("file")]
	if !ok || r.PathValue("build") != p.glass.build {
		p.problem(w, http.StatusNotFound, "not-found", "There is nothing at this address.",
			"The page may be of an earlier version; load it again.")
		return
	}
	h := w.Header()
	h.Set("Content-Type", a.contentType)
	h.Set("Cache-Control", "public, max-age=31536000, immutable")
	h.Set("Vary", "Accept-Encoding")
	body := a.plain
	if strings.Contains(r.Header.Get("Accept-Encoding"), "gzip") {
		if packed, err := a.packed(); err == nil { // else as it is: longer, and no less right
			h.Set("Content-Encoding", "gzip")
			body = packed
		}
	}
	h.Set("Content-Length", strconv.Itoa(len(body)))
	if r.Method == http.MethodHead {
		return
	}
	_, _ = io.Copy(w, bytes.NewReader(body)) // an error is a client that has gone
}

// frame is what every page is filled with.
type frame struct {
	Build    string
	View     string // which page
	Title    string
	Heading  string // after the name of the airfield, in the title of the window
	Airfield string
	Exercise bool
	Recorded bool // not live: the record of exercises, looked at from a program that is none
	Visitor  visitor
	ID       string // of the event that is looked at
	Notice   string
	Words    frontWords // of the page Now
	Failed   string
	Next     string
}

// newFrame fills in what all pages have in common.
func (p *Page) newFrame(r *http.Request, view, title string) frame {
	last := p.opts.View()
	f := frame{
		Build: p.glass.build, View: view, Title: title, Heading: title, Airfield: p.opts.Airfield,
		Exercise: p.exercise(last), Visitor: p.visitorOf(r), Notice: alerting.Notice, ID: r.PathValue("id"),
	}
	if last != nil && last.Airfield != "" {
		f.Airfield = last.Airfield
	}
	return f
}

// frontView makes the handler of a page that its modules fill. The record of
// exercises is looked at apart, as an exercise: it stands beside nothing live.
func (p *Page) frontView(name, title string) http.HandlerFunc {
	return func(w http.ResponseWriter, r *http.Request) {
		f := p.newFrame(r, name, title)
		if (name == "past" || name == "event") && r.URL.Query().Get("record") == "exercise" && !f.Exercise {
			f.Exercise, f.Recorded = true, true
		}
		p.frontRender(w, http.StatusOK, name, &f)
	}
}

// frontNow renders the page that is left open: its words as of now, which the
// modules replace by what the stream brings.
func (p *Page) frontNow(w http.ResponseWriter, r *http.Request) {
	f := p.newFrame(r, "now", "Now")
	f.Words = p.frontWords()
	f.Heading = f.Words.Condition
	p.frontRender(w, http.StatusOK, "now", &f)
}

func (p *Page) frontRender(w http.ResponseWriter, status int, name string, f *frame) {
	var out bytes.Buffer
	if err := p.glass.pages[name].ExecuteTemplate(&out, "frame", f); err != nil {
		p.internal(w, "render the page", err)
		return
	}
	w.Header().Set("Content-Type", "text/html; charset=utf-8")
	w.WriteHeader(status)
	_, _ = w.Write(out.Bytes()) // an error is a client that has gone
}

// visitor is who looks at a page, as far as the page is concerned.
type visitor struct {
	access.Visitor
	Users bool // there are people who may log in
}

// visitorOf tells who looks. Without users everybody on this machine may look
// and nobody may change anything.
func (p *Page) visitorOf(r *http.Request) visitor {
	return visitor{p.who(r), p.opts.Gate != nil}
}

// frontLogin renders the form that logs somebody in, with why it failed the
// last time, and where to go from it.
func (p *Page) frontLogin(w http.ResponseWriter, r *http.Request, status int, failed, next string) {
	f := p.newFrame(r, "login", "Log in")
	f.Failed, f.Next = failed, next
	p.frontRender(w, status, "login", &f)
}
