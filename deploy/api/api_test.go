// Package api_test holds what the program answers against the description that
// it gives of itself. It is a module of its own: the validator is large, and
// nobody else needs it.
package api_test

import (
	"bufio"
	"encoding/json"
	"fmt"
	"io"
	"net/http"
	"os"
	"os/exec"
	"path/filepath"
	"strings"
	"testing"

	"github.com/pb33f/libopenapi"
	validator "github.com/pb33f/libopenapi-validator"
)

// exchange is one answer of the program, as its own tests keep it.
type exchange struct {
	Method, Path string
	Status       int
	Type, Body   string
}

// root is the top of the repository.
func root(t *testing.T) string {
	t.Helper()
	dir, err := filepath.Abs(filepath.Join("..", ".."))
	if err != nil {
		t.Fatal(err)
	}
	return dir
}

// described reads the description.
func described(t *testing.T) (libopenapi.Document, []byte) {
	t.Helper()
	text, err := os.ReadFile(filepath.Join(root(t), "alerting", "page", "openapi.json"))
	if err != nil {
		t.Fatal(err)
	}
	doc, err := libopenapi.NewDocument(text)
	if err != nil {
		t.Fatal(err)
	}
	return doc, text
}

// exchanges lets the tests of the program run and reads what was answered in
// them.
func exchanges(t *testing.T) []exchange {
	t.Helper()
	name := filepath.Join(t.TempDir(), "exchanges.jsonl")
	c := exec.Command("go", "test", "-count=1", "-run", "^(TestExchanges|TestPagesOfADaemon)$", "./cmd/sockline")
	c.Dir = root(t)
	c.Env = append(os.Environ(), "SOCKLINE_TEST_EXCHANGES="+name)
	if out, err := c.CombinedOutput(); err != nil {
		t.Fatalf("%v\n%s", err, out)
	}
	f, err := os.Open(name)
	if err != nil {
		t.Skipf("SKIPPED, NOT TESTED: nothing was answered, so the tests of the program were skipped: %v", err)
	}
	defer f.Close()
	var all []exchange
	lines := bufio.NewReader(f)
	for {
		line, err := lines.ReadBytes('\n')
		if err == io.EOF {
			return all
		}
		var e exchange
		if err != nil {
			t.Fatal(err)
		}
		if err := json.Unmarshal(line, &e); err != nil {
			t.Fatal(err)
		}
		all = append(all, e)
	}
}

// TestDescriptionIsOne: the description is valid OpenAPI 3.1 by its schema.
func TestDescriptionIsOne(t *testing.T) {
	doc, _ := described(t)
	v, errs := validator.NewValidator(doc)
	if len(errs) > 0 {
		t.Fatal(errs)
	}
	if ok, faults := v.ValidateDocument(); !ok {
		for _, f := range faults {
			t.Errorf("%s: %s", f.Message, f.Reason)
			for _, s := range f.SchemaValidationErrors {
				t.Errorf("  %s: %s", s.KeywordLocation, s.Reason)
			}
		}
	}
}

// answerOf is an exchange as the validator takes it.
func answerOf(t *testing.T, e *exchange) (*http.Request, *http.Response) {
	t.Helper()
	request, err := http.NewRequest(e.Method, "http://127.0.0.1"+e.Path, nil)
	if err != nil {
		t.Fatal(err)
	}
	return request, &http.Response{
		StatusCode: e.Status, Header: http.Header{"Content-Type": {e.Type}}, Body: io.NopCloser(strings.NewReader(e.Body)), Request: request,
	}
}

// TestEveryAnswerIsDescribed: every answer of a running daemon is one that the
// description has for its address, its method and its status, and every
// operation with JSON was asked for.
func TestEveryAnswerIsDescribed(t *testing.T) {
	doc, text := described(t)
	v, errs := validator.NewValidator(doc)
	if len(errs) > 0 {
		t.Fatal(errs)
	}
	held := 0
	asked := map[string]bool{} // operations answered with 200
	for _, e := range exchanges(t) {
		path, operation := operationOf(t, text, &e)
		if operation == "" {
			// What is not there is answered with a problem, by the same rules.
			if e.Status != http.StatusNotFound && e.Status != http.StatusMethodNotAllowed {
				t.Errorf("%s %s is answered with %d and not described", e.Method, e.Path, e.Status)
			}
			continue
		}
		request, response := answerOf(t, &e)
		ok, faults := v.ValidateHttpResponse(request, response)
		held++
		if !ok {
			for _, f := range faults {
				t.Errorf("%s %s, %d: %s: %s", e.Method, e.Path, e.Status, f.Message, f.Reason)
				for _, s := range f.SchemaValidationErrors {
					t.Errorf("  %s: %s", s.FieldPath, s.Reason)
				}
			}
		}
		if e.Status == http.StatusOK {
			asked[path+" "+operation] = true
		}
	}
	if held < 60 {
		t.Errorf("only %d answers were held against the description", held)
	}
	for operation := range withJSON(t, text) {
		if !asked[operation] {
			t.Errorf("%s was never answered with 200", operation)
		}
	}
	t.Logf("%d answers, %d operations", held, len(asked))
}

// TestWhatIsWrongIsFound: the validator finds an answer that is not described.
func TestWhatIsWrongIsFound(t *testing.T) {
	doc, _ := described(t)
	v, errs := validator.NewValidator(doc)
	if len(errs) > 0 {
		t.Fatal(errs)
	}
	good := `{"name":"","role":"tower","token":"x","users":true,"exercise":false,"notice":` + quoted(notice(t)) + `}`
	for _, e := range []exchange{
		{"GET", "/api/v1/visitor", 200, "application/json", good},
		{"GET", "/api/v1/visitor", 200, "application/json", strings.Replace(good, `"tower"`, `"chief"`, 1)},
		{"GET", "/api/v1/visitor", 200, "application/json", strings.Replace(good, `"name"`, `"more":1,"name"`, 1)},
		{"GET", "/api/v1/visitor", 200, "application/json", strings.Replace(good, "Measured", "measured", 1)},
		{"GET", "/api/v1/visitor", 200, "application/json", `{}`},
		{"GET", "/api/v1/visitor", 418, "application/json", good},
	} {
		request, response := answerOf(t, &e)
		if ok, _ := v.ValidateHttpResponse(request, response); ok != (e.Body == good && e.Status == 200) {
			t.Errorf("%d %s: found to be right: %v", e.Status, e.Body, ok)
		}
	}
}

func quoted(s string) string {
	b, err := json.Marshal(s)
	if err != nil {
		return `""`
	}
	return string(b)
}

// spec is what of the description these tests read by themselves.
type spec struct {
	Paths map[string]map[string]struct {
		Responses map[string]struct {
			Content map[string]json.RawMessage
		}
	}
	Components struct {
		Schemas struct {
			Notice struct{ Const string }
		}
	}
}

func read(t *testing.T, text []byte) (s spec) {
	t.Helper()
	if err := json.Unmarshal(text, &s); err != nil {
		t.Fatal(err)
	}
	return s
}

func notice(t *testing.T) string {
	t.Helper()
	_, text := described(t)
	return read(t, text).Components.Schemas.Notice.Const
}

// operationOf finds the described path and method of an exchange.
func operationOf(t *testing.T, text []byte, e *exchange) (path, method string) {
	t.Helper()
	address, _, _ := strings.Cut(e.Path, "?")
	parts := strings.Split(address, "/")
	for described, operations := range read(t, text).Paths {
		pattern := strings.Split(described, "/")
		fits := len(pattern) == len(parts)
		for i := range min(len(pattern), len(parts)) {
			fits = fits && (pattern[i] == parts[i] || pattern[i] == "{id}")
		}
		if _, known := operations[strings.ToLower(e.Method)]; fits && known {
			return described, strings.ToLower(e.Method)
		}
	}
	return "", ""
}

// withJSON are the operations that answer with JSON. Some are asked for in
// other tests.
func withJSON(t *testing.T, text []byte) map[string]bool {
	t.Helper()
	elsewhere := map[string]bool{"/api/v1/accesses get": true, "/api/v1/what-if get": true}
	out := map[string]bool{}
	for path, operations := range read(t, text).Paths {
		for method, o := range operations {
			if _, ok := o.Responses["200"].Content["application/json"]; ok && !elsewhere[fmt.Sprint(path, " ", method)] {
				out[fmt.Sprint(path, " ", method)] = true
			}
		}
	}
	return out
}
