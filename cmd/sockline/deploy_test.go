package main

import (
	"encoding/json"
	"fmt"
	"go/ast"
	"go/token"
	"os"
	"os/exec"
	"path/filepath"
	"regexp"
	"slices"
	"strconv"
	"strings"
	"testing"

	"sockline/alerting"
	"sockline/sensors/averages"
)

// The tests in this file hold what is deployed beside the program to the
// program: monitoring asks for what exists, the manual for operators explains
// what can be seen.

// deployed is the text of a file in deploy.
func deployed(t *testing.T, name string) string {
	t.Helper()
	return manual(t, filepath.Join("deploy", name))
}

// exposed is what /metrics of a running daemon shows: the labels of each name.
func exposed(t *testing.T) (labels map[string]map[string]bool, families []string) {
	t.Helper()
	// With somebody to tell, whose series exist only then.
	cfg := mustLoad(t, siteWith(t, "embedded://127.0.0.1:0", t.TempDir(), "\n[cap]\nsender = \"a@b\"\nspool = \""+t.TempDir()+
		"\"\n\n[[webhook]]\nurl = \"http://127.0.0.1:1/\"\n"))
	d := startDaemon(t, cfg, newHurry(1).clock(t), "")
	var body string
	until(t, "the metrics", func() bool {
		var code int
		code, body = d.get(t, "metrics")
		return code == 200
	})
	labels = map[string]map[string]bool{}
	label := regexp.MustCompile(`([a-z]+)="`)
	for line := range strings.Lines(body) {
		if rest, ok := strings.CutPrefix(line, "# TYPE "); ok {
			families = append(families, strings.Fields(rest)[0])
			continue
		}
		if strings.HasPrefix(line, "#") {
			continue
		}
		name := line[:strings.IndexAny(line, "{ ")]
		if labels[name] == nil {
			labels[name] = map[string]bool{}
		}
		for _, m := range label.FindAllStringSubmatch(line, -1) {
			labels[name][m[1]] = true
		}
	}
	if len(families) < 30 {
		t.Fatalf("the daemon shows %d metrics only", len(families))
	}
	return labels, families
}

// dashboard is what of the dashboard this test reads.
type dashboard struct {
	Title  string
	Panels []struct {
		ID      int
		Type    string
		Title   string
		GridPos struct{ X, Y, W, H int }
		Options struct{ Content string }
		Targets []struct{ Expr string }
	}
}

func readBoard(t *testing.T) dashboard {
	t.Helper()
	var b dashboard
	if err := json.Unmarshal([]byte(deployed(t, "monitoring/dashboard.json")), &b); err != nil {
		t.Fatal(err)
	}
	return b
}

// TestMonitoringAsksForWhatExists: every metric and label that a rule or a
// panel asks for is one that the daemon shows.
func TestMonitoringAsksForWhatExists(t *testing.T) {
	labels, _ := exposed(t)
	ask := map[string]string{} // query by where it stands
	for i, line := range strings.Split(deployed(t, "monitoring/rules.yml"), "\n") {
		if !strings.HasPrefix(strings.TrimSpace(line), "#") {
			ask[fmt.Sprint("rules.yml:", i+1)] = line
		}
	}
	ids := map[int]bool{}
	for _, p := range readBoard(t).Panels {
		if ids[p.ID] || p.GridPos.W == 0 || p.GridPos.H == 0 || p.GridPos.X+p.GridPos.W > 24 {
			t.Errorf("panel %q has no id or place of its own", p.Title)
		}
		ids[p.ID] = true
		if p.Type != "text" && len(p.Targets) == 0 {
			t.Errorf("panel %q asks for nothing", p.Title)
		}
		for i, target := range p.Targets {
			ask[fmt.Sprintf("panel %q, query %d", p.Title, i+1)] = target.Expr
		}
	}
	asked := 0
	query := regexp.MustCompile(`\b(sockline_[a-z0-9_]+)(?:\{([^}]*)\})?`)
	matcher := regexp.MustCompile(`([a-z]+)=~?"([^"]*)"`)
	// What Prometheus adds by itself or by monitoring/scrape.yml.
	outside := []string{"job", "instance", "airfield"}
	for where, expr := range ask {
		for _, q := range query.FindAllStringSubmatch(expr, -1) {
			asked++
			has, ok := labels[q[1]]
			if !ok {
				t.Errorf("%s asks for %s, which does not exist", where, q[1])
			}
			for _, m := range matcher.FindAllStringSubmatch(q[2], -1) {
				if !has[m[1]] && !slices.Contains(outside, m[1]) {
					t.Errorf("%s asks for the label %s of %s, which it has not", where, m[1], q[1])
				}
				if m[1] == "condition" && !slices.Contains(conditions(), alerting.Condition(m[2])) {
					t.Errorf("%s asks for the condition %q, which does not exist", where, m[2])
				}
			}
		}
	}
	if asked < 50 {
		t.Errorf("only %d metrics are asked for: this test looks in the wrong place", asked)
	}
}

// TestPromtool checks rules and queries with the program that comes with
// Prometheus, and plays the rules' own tests.
func TestPromtool(t *testing.T) {
	promtool := shell(t, "promtool")
	dir := filepath.Join("..", "..", "deploy", "monitoring")
	check := func(args ...string) {
		t.Helper()
		if out, err := exec.CommandContext(t.Context(), promtool, args...).CombinedOutput(); err != nil {
			t.Errorf("promtool %s: %v\n%s", strings.Join(args, " "), err, out)
		}
	}
	check("check", "rules", filepath.Join(dir, "rules.yml"))
	check("test", "rules", filepath.Join(dir, "rules_test.yml"))
	check("check", "config", "--syntax-only", filepath.Join(dir, "scrape.yml"))

	// Each query of the board as a rule, so that its grammar is looked at.
	var b strings.Builder
	b.WriteString("groups:\n  - name: board\n    rules:\n")
	for i, p := range readBoard(t).Panels {
		for j, target := range p.Targets {
			fmt.Fprintf(&b, "      - {record: 'board:%d:%d', expr: %s}\n", i, j, strconv.Quote(strings.ReplaceAll(target.Expr, "$airfield", ".*")))
		}
	}
	check("check", "rules", writeFile(t, "board.yml", b.String()))

	// What the daemon exposes, as the tool reads it.
	m := daemonMetrics(t)
	lint := exec.CommandContext(t.Context(), promtool, "check", "metrics")
	lint.Stdin = strings.NewReader(m)
	if out, err := lint.CombinedOutput(); err != nil {
		t.Errorf("promtool check metrics: %v\n%s", err, out)
	}
}

// daemonMetrics is the text of /metrics.
func daemonMetrics(t *testing.T) string {
	t.Helper()
	cfg := mustLoad(t, site(t, "embedded://127.0.0.1:0", t.TempDir()))
	d := startDaemon(t, cfg, newHurry(1).clock(t), "")
	_, body := d.get(t, "metrics")
	return body
}

// Every rule has a test of its own and a line on what to do.
func TestRulesAreTestedAndExplained(t *testing.T) {
	tests, text := deployed(t, "monitoring/rules_test.yml"), deployed(t, "operations.md")
	rules := regexp.MustCompile(`(?m)^ +- alert: (\w+)$`).FindAllStringSubmatch(deployed(t, "monitoring/rules.yml"), -1)
	if len(rules) < 10 {
		t.Fatalf("%d rules", len(rules))
	}
	for _, r := range rules {
		if !strings.Contains(tests, r[1]) {
			t.Errorf("no test of rules_test.yml names %s", r[1])
		}
		if !strings.Contains(text, "`"+r[1]+"`") {
			t.Errorf("operations.md does not say what to do about %s", r[1])
		}
	}
}

// codes are the kinds of word that operators meet in JSON, topics and metrics:
// all constants of these types are explained in operations.md.
var codes = [...]struct{ pkg, kind string }{
	{"alerting", "Condition"}, {"alerting", "PathState"}, {"alerting", "Kind"},
	{"alerting/lifecycle", "State"}, {"alerting/lifecycle", "Trend"}, {"alerting/lifecycle", "CloseReason"},
	{"alerting/publish", "Mode"}, {"sensors/quality", "Reason"}, {"sensors/decode", "Reason"},
}

// constants are the values of the string constants of a type.
func constants(files []sourceFile, pkg, kind string) (values []string) {
	for _, f := range files {
		if f.pkg != pkg || f.test {
			continue
		}
		ast.Inspect(f.syntax, func(n ast.Node) bool {
			v, ok := n.(*ast.ValueSpec)
			if !ok {
				return true
			}
			if x, ok := v.Type.(*ast.Ident); !ok || x.Name != kind {
				return true
			}
			for _, e := range v.Values {
				if lit, ok := e.(*ast.BasicLit); ok && lit.Kind == token.STRING {
					if s, err := strconv.Unquote(lit.Value); err == nil {
						values = append(values, s)
					}
				}
			}
			return true
		})
	}
	return values
}

// TestEverythingIsExplained: each metric, condition, state and reason that can
// be seen stands in the manual for operators.
func TestEverythingIsExplained(t *testing.T) {
	_, files := module(t)
	text := deployed(t, "operations.md")
	explained := func(what, code string) {
		t.Helper()
		if !strings.Contains(text, "`"+code+"`") {
			t.Errorf("deploy/operations.md does not explain the %s `%s`", what, code)
		}
	}
	for _, c := range codes {
		values := constants(files, c.pkg, c.kind)
		if len(values) < 2 {
			t.Errorf("%s.%s has %d constants: this test looks in the wrong place", c.pkg, c.kind, len(values))
		}
		for _, v := range values {
			explained(c.pkg+" "+c.kind, v)
		}
	}
	for s := averages.State(0); s.String() != "unknown"; s++ {
		explained("state of a mast", s.String())
	}
	for l := alerting.Noticeable; l <= alerting.BeyondMargin; l++ {
		explained("level", l.String())
	}
	for _, g := range []string{unreadable, inconsistent, noValue} {
		explained("group of rejections", g)
	}
	_, families := exposed(t)
	for _, f := range families {
		explained("metric", f)
	}
	// And nothing is explained that does not exist.
	for _, m := range regexp.MustCompile("`(sockline_[a-z0-9_]+)`").FindAllStringSubmatch(text, -1) {
		if !slices.Contains(families, m[1]) {
			t.Errorf("operations.md explains the metric %s, which does not exist", m[1])
		}
	}
}

// Everything that is printed or shown to people ends with the notice.
func TestDeployedTextsHoldTheNotice(t *testing.T) {
	for _, name := range []string{
		"install.md", "operations.md", "region.md", "telling.md", "commissioning.html", "daily.html", "monitoring/dashboard.json", "package/nfpm.yaml",
	} {
		words := strings.Join(strings.Fields(strings.ReplaceAll(deployed(t, name), "\n>", " ")), " ")
		if !strings.Contains(words, alerting.Notice) {
			t.Errorf("deploy/%s does not hold the notice", name)
		}
	}
}

// What the manuals tell people to type exists.
func TestManualsNameRealCommands(t *testing.T) {
	typed := regexp.MustCompile(`(?m)(?:^|[^/\w.-])sockline ([a-z]+(?: [a-z]+)?)((?:[^\n]*\\\n)*[^\n]*--[^\n]*)`)
	flags := regexp.MustCompile(`--([a-z-]+)`)
	seen := 0
	for _, name := range []string{"install.md", "operations.md", "region.md", "telling.md", "sockline.service", "sockline.example.toml"} {
		for _, m := range typed.FindAllStringSubmatch(deployed(t, name), -1) {
			c, _, ok := find(strings.Fields(m[1]))
			if !ok {
				t.Errorf("deploy/%s names the command %q, which does not exist", name, m[1])
				continue
			}
			known := options(c)
			rest, _, _ := strings.Cut(m[2], "`")
			for _, f := range flags.FindAllStringSubmatch(rest, -1) {
				seen++
				if !slices.ContainsFunc(known, func(o option) bool { return o.name == f[1] }) {
					t.Errorf("deploy/%s: %s has no flag --%s", name, c.name, f[1])
				}
			}
		}
	}
	if seen < 15 {
		t.Errorf("%d flags were looked at: this test looks in the wrong place", seen)
	}
	for _, link := range []string{"commissioning.html", "daily.html", "sockline.service"} {
		if _, err := os.Stat(filepath.Join("..", "..", "deploy", link)); err != nil {
			t.Error(err)
		}
	}
}
