package main

import (
	"bufio"
	"fmt"
	"go/ast"
	"os"
	"path/filepath"
	"regexp"
	"strings"
	"testing"
)

// Every package says what comes in and goes out; every exported name says what
// it is.
func TestComments(t *testing.T) {
	set, files := module(t)
	said := map[string]bool{}
	for _, f := range files {
		if f.test {
			continue
		}
		said[f.pkg] = said[f.pkg] || false
		if doc := f.syntax.Doc; doc != nil {
			want := "Package " + f.syntax.Name.Name + " "
			if text := doc.Text(); strings.HasPrefix(text, want) && len(text) > len(want)+40 {
				said[f.pkg] = true
			} else {
				t.Errorf("%s: the package comment does not begin with %q and go on to say something", f.name, want)
			}
		}
		for _, d := range f.syntax.Decls {
			for _, n := range undocumented(d) {
				t.Errorf("%s: %s is exported and has no comment", set.Position(n.Pos()), n.Name)
			}
		}
	}
	for pkg, ok := range said {
		if !ok {
			t.Errorf("%s has no package comment", pkg)
		}
	}
}

// undocumented are the exported names of a declaration that nothing is said of.
func undocumented(d ast.Decl) []*ast.Ident {
	var names []*ast.Ident
	switch d := d.(type) {
	case *ast.FuncDecl:
		wellKnown := d.Name.Name == "Error" || d.Name.Name == "Unwrap"
		if d.Name.IsExported() && d.Doc == nil && exportedReceiver(d) && !wellKnown {
			names = append(names, d.Name)
		}
	case *ast.GenDecl:
		for _, s := range d.Specs {
			switch s := s.(type) {
			case *ast.TypeSpec:
				if s.Name.IsExported() && d.Doc == nil && s.Doc == nil {
					names = append(names, s.Name)
				}
			case *ast.ValueSpec:
				for _, n := range s.Names {
					if n.IsExported() && d.Doc == nil && s.Doc == nil && s.Comment == nil {
						names = append(names, n)
					}
				}
			}
		}
	}
	return names
}

// exportedReceiver tells whether a function has no receiver or an exported one:
// methods that fulfil an interface on hidden types need no words.
func exportedReceiver(d *ast.FuncDecl) bool {
	if d.Recv == nil {
		return true
	}
	e := d.Recv.List[0].Type
	if star, ok := e.(*ast.StarExpr); ok {
		e = star.X
	}
	x, ok := e.(*ast.Ident)
	return ok && x.IsExported()
}

// Files and functions that one can read.
func TestSizes(t *testing.T) {
	const fileLines, functionLines = 500, 80
	set, files := module(t)
	for _, f := range files {
		if f.lines > fileLines {
			t.Errorf("%s has %d lines; at most %d", f.name, f.lines, fileLines)
		}
		if f.test {
			continue
		}
		for _, d := range f.syntax.Decls {
			fn, ok := d.(*ast.FuncDecl)
			if !ok {
				continue
			}
			if n := set.Position(fn.End()).Line - set.Position(fn.Pos()).Line + 1; n > functionLines {
				t.Errorf("%s: %s has %d lines; at most %d", set.Position(fn.Pos()), fn.Name.Name, n, functionLines)
			}
		}
	}
}

// The manual for developers names every package, and no other.
func TestDeveloperManualNamesEveryPackage(t *testing.T) {
	_, files := module(t)
	packages, directories := map[string]bool{}, map[string]bool{}
	for _, f := range files {
		directories[f.pkg] = true // of tests alone, too
		if !f.test {
			packages[f.pkg] = true
		}
	}
	manual, err := os.Open(filepath.Join("..", "..", "DEVELOPERS.md"))
	if err != nil {
		t.Fatal(err)
	}
	defer manual.Close()
	named := map[string]bool{}
	lines := bufio.NewScanner(manual)
	for lines.Scan() {
		// The map of packages is a table: | `package` | what it does |
		cells := strings.Split(lines.Text(), "|")
		if len(cells) < 3 {
			continue
		}
		name := strings.TrimSpace(cells[1])
		if p := strings.Trim(name, "`"); name == fmt.Sprintf("`%s`", p) && under(p, "sensors", "alerting", "config", "cmd", "testdata", "deploy") {
			named[p] = true
		}
	}
	if err := lines.Err(); err != nil {
		t.Fatal(err)
	}
	for p := range packages {
		if !named[p] {
			t.Errorf("DEVELOPERS.md does not name the package %s", p)
		}
	}
	for p := range named {
		if !directories[p] {
			t.Errorf("DEVELOPERS.md names the package %s, which does not exist", p)
		}
	}
}

// TestWhatIsSkippedIsRunElsewhere: a test that skips itself, or a part, under
// the race detector is named in deploy/check, which runs it without.
func TestWhatIsSkippedIsRunElsewhere(t *testing.T) {
	check := deployed(t, "check")
	_, files := module(t)
	found := 0
	for _, f := range files {
		for _, d := range f.syntax.Decls {
			fn, ok := d.(*ast.FuncDecl)
			if !ok || !f.test || !strings.HasPrefix(fn.Name.Name, "Test") || !skipsUnderRace(fn) {
				continue
			}
			found++
			if !regexp.MustCompile(`-run='\^\([A-Za-z0-9|]*\b` + fn.Name.Name + `\b`).MatchString(check) {
				t.Errorf("%s: %s skips itself under the race detector, and deploy/check does not run it without: add it to \"what the race detector is spared\"", f.name, fn.Name.Name)
			}
		}
	}
	if found < 10 {
		t.Errorf("only %d tests skip themselves: this one looks for something else", found)
	}
}

// skipsUnderRace finds "if racing ... { t.Skip(...) }".
func skipsUnderRace(fn *ast.FuncDecl) (skips bool) {
	ast.Inspect(fn, func(n ast.Node) bool {
		branch, ok := n.(*ast.IfStmt)
		if !ok {
			return true
		}
		racing := false
		ast.Inspect(branch.Cond, func(n ast.Node) bool {
			if id, ok := n.(*ast.Ident); ok && id.Name == "racing" {
				racing = true
			}
			return true
		})
		for _, s := range branch.Body.List {
			e, ok := s.(*ast.ExprStmt)
			if !ok || !racing {
				continue
			}
			call, ok := e.X.(*ast.CallExpr)
			if !ok {
				continue
			}
			if sel, ok := call.Fun.(*ast.SelectorExpr); ok && sel.Sel.Name == "Skip" {
				skips = true
			}
		}
		return true
	})
	return skips
}
