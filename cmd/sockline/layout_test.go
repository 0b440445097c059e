package main

import (
	"bytes"
	"go/ast"
	"go/parser"
	"go/token"
	"io/fs"
	"os"
	"path"
	"path/filepath"
	"slices"
	"strconv"
	"strings"
	"testing"
)

// The tests in this file police the tree: what may import what, who reads a
// clock, what may be kept outside of functions, how long things grow.

// sourceFile is one Go file of the module.
type sourceFile struct {
	name   string // from the root of the module, with slashes
	pkg    string // its directory, the same way
	test   bool
	lines  int
	syntax *ast.File
}

// module reads every Go file of the module.
func module(t *testing.T) (*token.FileSet, []sourceFile) {
	t.Helper()
	root := filepath.Join("..", "..")
	if _, err := os.Stat(filepath.Join(root, "go.mod")); err != nil {
		t.Fatal(err)
	}
	set := token.NewFileSet()
	var files []sourceFile
	err := filepath.WalkDir(root, func(name string, d fs.DirEntry, err error) error {
		if err != nil {
			return err
		}
		if d.IsDir() && strings.HasPrefix(d.Name(), ".") && name != root {
			return fs.SkipDir
		}
		if d.IsDir() || !strings.HasSuffix(name, ".go") {
			return nil
		}
		source, err := os.ReadFile(name)
		if err != nil {
			return err
		}
		syntax, err := parser.ParseFile(set, name, source, parser.ParseComments|parser.SkipObjectResolution)
		if err != nil {
			return err
		}
		short, err := filepath.Rel(root, name)
		if err != nil {
			return err
		}
		short = filepath.ToSlash(short)
		files = append(files, sourceFile{
			name: short, pkg: path.Dir(short), test: strings.HasSuffix(short, "_test.go"),
			lines: bytes.Count(source, []byte("\n")), syntax: syntax,
		})
		return nil
	})
	if err != nil {
		t.Fatal(err)
	}
	if len(files) < 100 {
		t.Fatalf("the walk found %d files only", len(files))
	}
	return set, files
}

func (f *sourceFile) imports() []string {
	var paths []string
	for _, i := range f.syntax.Imports {
		p, err := strconv.Unquote(i.Path.Value)
		if err == nil {
			paths = append(paths, p)
		}
	}
	return paths
}

// under tells whether a package is one of these or below one.
func under(pkg string, roots ...string) bool {
	for _, r := range roots {
		if pkg == r || strings.HasPrefix(pkg, r+"/") {
			return true
		}
	}
	return false
}

// importRule is an import that only a few may have.
type importRule struct {
	what   string   // the import, or the root of the imports
	only   []string // packages that may; with what is below them
	tests  bool     // tests may, too
	reason string
}

var importRules = [...]importRule{
	{"sockline/alerting", []string{"alerting", "config", "cmd"}, true,
		"sensors does not know what its readings are used for"},
	{"sockline/config", []string{"cmd", "config"}, true,
		"the stages are told values, not where they were written"},
	{"sockline/cmd", nil, false, "a command is the end of the line"},
	{"sockline/testdata", []string{"cmd"}, true, "only the demo and simulate carry scenes and airfields"},
	{"github.com/eclipse/paho.mqtt.golang", []string{"sensors/feed"}, true, "all MQTT sessions live in feed"},
	{"github.com/mochi-mqtt/server/v2", []string{"sensors/feed"}, true, "the embedded broker lives in feed"},
	{"go.etcd.io/bbolt", []string{"alerting/history", "deploy/storebench"}, false, "the files of the history have one owner; a comparison has its own"},
	{"github.com/BurntSushi/toml", []string{"config"}, true, "configuration has one reader"},
	{"go.bug.st/serial", []string{"sensors/mast"}, false, "one package opens serial lines"},
	{"net/http", []string{"alerting/page", "alerting/publish/webhook", "cmd"}, true, "one package speaks HTTP to those who ask, one to those who are told"},
	{"github.com/prometheus/client_golang", []string{"alerting/page", "cmd"}, true, "metrics are made and served at the edge"},
	{"github.com/rs/zerolog/log", nil, false, "there is no global logger"},
	{"math/rand", []string{"none"}, false, "random numbers come from a seeded math/rand/v2"},
	{"testing", []string{"sensors/feed/brokertest", "testdata/outside"}, true, "the program does not test itself"},
}

func TestImports(t *testing.T) {
	_, files := module(t)
	used := map[string]bool{}
	for _, f := range files {
		for _, p := range f.imports() {
			for _, r := range importRules {
				if p != r.what && !(strings.HasPrefix(p, r.what+"/") && r.what != "math/rand" && r.what != "testing") {
					continue
				}
				used[r.what] = true
				if !under(f.pkg, r.only...) && !(f.test && r.tests) {
					t.Errorf("%s imports %s: %s", f.name, p, r.reason)
				}
			}
		}
	}
	for _, what := range []string{"sockline/config", "go.etcd.io/bbolt", "github.com/eclipse/paho.mqtt.golang"} {
		if !used[what] {
			t.Errorf("nothing imports %s: the rule about it checks nothing", what)
		}
	}
}

// flow is the order in which a message becomes a notice. No package imports
// one that comes after it; those of the last row do not import one another.
var flow = [...][]string{
	{"sensors/quantity"},
	{"sensors", "alerting", "alerting/packed", "alerting/contingency"},
	{"sensors/decode", "sensors/synthetic", "sensors/feed"},
	{"sensors/quality", "sensors/correction", "sensors/mast"},
	{"sensors/averages"},
	{"alerting/airfield", "alerting/kinematics"},
	{"alerting/windfield", "alerting/drift", "alerting/front", "alerting/vertical"},
	{"alerting/shear", "alerting/outflow"},
	{"alerting/hazard"},
	{"alerting/lifecycle"},
	{"alerting/wording", "alerting/engine"},
	{"alerting/attention", "alerting/page/access"},
	{"alerting/history", "alerting/publish", "alerting/publish/cap", "alerting/publish/webhook", "alerting/page", "alerting/judged", "alerting/survey"},
	{"alerting/history/export", "alerting/history/backup"},
	{"alerting/history/bundle"},
	{"alerting/review"},
}

func TestFlowDoesNotTurnBack(t *testing.T) {
	_, files := module(t)
	rank := map[string]int{}
	for i, row := range flow {
		for _, p := range row {
			rank[p] = i + 1
		}
	}
	seen := map[string]bool{}
	for _, f := range files {
		from, known := rank[f.pkg]
		if !known || f.test {
			continue
		}
		seen[f.pkg] = true
		for _, p := range f.imports() {
			to := rank[strings.TrimPrefix(p, "sockline/")]
			if to > from || to == from && strings.TrimPrefix(p, "sockline/") != f.pkg {
				t.Errorf("%s imports %s, which comes after it in the flow or beside it", f.name, p)
			}
		}
	}
	for p := range rank {
		if !seen[p] {
			t.Errorf("the flow names %s, which does not exist", p)
		}
	}
	for _, f := range files {
		if _, known := rank[f.pkg]; !known && !f.test && under(f.pkg, "sensors", "alerting") && f.pkg != "sensors/feed/brokertest" {
			t.Errorf("%s is not in the flow: add its package to this test", f.name)
		}
	}
}

// inline are the packages that run in the one goroutine that owns the
// evaluation: they wait for nothing and share nothing.
var inline = [...]string{
	"sensors", "sensors/quantity", "sensors/decode", "sensors/quality", "sensors/correction", "sensors/averages",
	"alerting", "alerting/airfield", "alerting/kinematics", "alerting/windfield", "alerting/drift", "alerting/front", "alerting/vertical", "alerting/shear", "alerting/outflow", "alerting/hazard",
	"alerting/lifecycle", "alerting/wording", "alerting/engine",
}

func TestEvaluationIsOneGoroutine(t *testing.T) {
	set, files := module(t)
	for _, f := range files {
		if f.test || !slices.Contains(inline[:], f.pkg) {
			continue
		}
		for _, p := range f.imports() {
			if p == "sync" || p == "sync/atomic" || p == "context" || p == "os" || p == "net" {
				t.Errorf("%s imports %s: nothing from decode to wording waits, shares or reaches outside", f.name, p)
			}
		}
		ast.Inspect(f.syntax, func(n ast.Node) bool {
			switch n.(type) {
			case *ast.GoStmt, *ast.SelectStmt, *ast.SendStmt:
				t.Errorf("%s: the evaluation starts no goroutine and waits for none", set.Position(n.Pos()))
			}
			return true
		})
	}
}

// selected calls fn with each use of a name of an imported package.
func selected(f *sourceFile, importPath string, fn func(name string, at token.Pos)) {
	local := ""
	for _, i := range f.syntax.Imports {
		if i.Path.Value == strconv.Quote(importPath) {
			local = path.Base(importPath)
			if i.Name != nil {
				local = i.Name.Name
			}
		}
	}
	if local == "" {
		return
	}
	ast.Inspect(f.syntax, func(n ast.Node) bool {
		if s, ok := n.(*ast.SelectorExpr); ok {
			if x, ok := s.X.(*ast.Ident); ok && x.Name == local {
				fn(s.Sel.Name, s.Pos())
			}
		}
		return true
	})
}

// Time is an argument: only the command and feed read a clock.
func TestWhoReadsAClock(t *testing.T) {
	set, files := module(t)
	reads := 0
	for _, f := range files {
		if f.test {
			continue
		}
		selected(&f, "time", func(name string, at token.Pos) {
			if name != "Now" && name != "Since" && name != "Until" {
				return
			}
			reads++
			if !under(f.pkg, "cmd/sockline", "sensors/feed") {
				t.Errorf("%s: time.%s: time is an argument everywhere but in cmd and feed", set.Position(at), name)
			}
		})
	}
	if reads == 0 {
		t.Error("nobody reads a clock: this test looks in the wrong place")
	}
}

// A test that sleeps is slow or lucky, unless its time is not real: in a bubble
// of testing/synctest a sleep takes none.
func TestNoSleepInTests(t *testing.T) {
	set, files := module(t)
	for _, f := range files {
		if !f.test || slices.Contains(f.imports(), "testing/synctest") {
			continue
		}
		selected(&f, "time", func(name string, at token.Pos) {
			if name == "Sleep" {
				t.Errorf("%s: wait for what is awaited, with a deadline", set.Position(at))
			}
		})
	}
}

// A program ends where it began.
func TestWhoExits(t *testing.T) {
	set, files := module(t)
	for _, f := range files {
		spans := []ast.Node{}
		for _, d := range f.syntax.Decls {
			if fn, ok := d.(*ast.FuncDecl); ok && f.test && fn.Name.Name == "TestMain" {
				spans = append(spans, fn)
			}
		}
		selected(&f, "os", func(name string, at token.Pos) {
			inTestMain := slices.ContainsFunc(spans, func(n ast.Node) bool { return n.Pos() <= at && at < n.End() })
			if name == "Exit" && f.name != "cmd/sockline/main.go" && !inTestMain {
				t.Errorf("%s: only main ends the program, and TestMain a test", set.Position(at))
			}
		})
	}
}

// variables outside of functions that are neither errors nor embedded files,
// with the reason why each may be there.
var variables = map[string]string{
	"alerting/windfield.timeSteps": "a table of numbers: Go has no constant arrays",
	"alerting/lifecycle.kinds":     "a table of constants: Go has no constant arrays",
	"cmd/sockline.version":         "set by the linker",
}

func TestNoSharedState(t *testing.T) {
	set, files := module(t)
	unused := map[string]bool{}
	for name := range variables {
		unused[name] = true
	}
	for _, f := range files {
		if f.test {
			continue
		}
		for _, d := range f.syntax.Decls {
			switch d := d.(type) {
			case *ast.FuncDecl:
				if d.Recv == nil && d.Name.Name == "init" {
					t.Errorf("%s: what happens at start happens in main", set.Position(d.Pos()))
				}
			case *ast.GenDecl:
				if d.Tok != token.VAR {
					continue
				}
				for _, s := range d.Specs {
					checkVariable(t, set, &f, d, s.(*ast.ValueSpec), unused)
				}
			}
		}
	}
	for name := range unused {
		t.Errorf("%s is allowed and does not exist", name)
	}
}

func checkVariable(t *testing.T, set *token.FileSet, f *sourceFile, d *ast.GenDecl, v *ast.ValueSpec, unused map[string]bool) {
	t.Helper()
	for i, name := range v.Names {
		key := f.pkg + "." + name.Name
		_, allowed := variables[key]
		delete(unused, key)
		switch {
		case allowed, name.Name == "_":
		case embedded(d.Doc), embedded(v.Doc):
		case i < len(v.Values) && sentinel(v.Values[i]):
		default:
			t.Errorf("%s: %s is shared by everything in this process; hand it over, or give its reason in this test", set.Position(v.Pos()), key)
		}
	}
}

func embedded(doc *ast.CommentGroup) bool {
	if doc == nil {
		return false
	}
	return slices.ContainsFunc(doc.List, func(c *ast.Comment) bool { return strings.HasPrefix(c.Text, "//go:embed ") })
}

// sentinel tells whether a value is errors.New("...").
func sentinel(e ast.Expr) bool {
	call, ok := e.(*ast.CallExpr)
	if !ok {
		return false
	}
	s, ok := call.Fun.(*ast.SelectorExpr)
	if !ok || s.Sel.Name != "New" {
		return false
	}
	x, ok := s.X.(*ast.Ident)
	return ok && x.Name == "errors"
}
