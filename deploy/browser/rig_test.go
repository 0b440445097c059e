// Package browser_test takes the page, as the program serves it, and looks at
// it through Debian's Chromium: what people see, hear, press and never see.
// It is a module of its own, so that no driver of a browser is among the
// program's dependencies. Next: nothing.
package browser_test

import (
	"bufio"
	"context"
	"errors"
	"fmt"
	"io"
	"net"
	"net/url"
	"os"
	"os/exec"
	"path/filepath"
	"regexp"
	"strings"
	"sync"
	"syscall"
	"testing"
	"time"

	"github.com/chromedp/cdproto/cdp"
	"github.com/chromedp/cdproto/log"
	"github.com/chromedp/cdproto/network"
	"github.com/chromedp/cdproto/runtime"
	"github.com/chromedp/chromedp"
)

// long tells that the full counts are wanted.
func long() bool { return os.Getenv("SOCKLINE_LONG") != "" }

// program is the built sockline; the tests of this package share it.
var program = sync.OnceValues(func() (string, error) {
	if path := os.Getenv("SOCKLINE_BINARY"); path != "" {
		return path, nil
	}
	dir, err := os.MkdirTemp("", "sockline-browser")
	if err != nil {
		return "", err
	}
	removeProgram = func() { _ = os.RemoveAll(dir) }
	path := filepath.Join(dir, "sockline")
	build := exec.Command("go", "build", "-trimpath", "-o", path, "./cmd/sockline")
	build.Dir = filepath.Join("..", "..")
	if out, err := build.CombinedOutput(); err != nil {
		return "", fmt.Errorf("build sockline: %w\n%s", err, out)
	}
	return path, nil
})

var removeProgram = func() {}

func binary(t *testing.T) string {
	t.Helper()
	path, err := program()
	if err != nil {
		t.Fatal(err)
	}
	return path
}

// daemon is a running sockline with its page.
type daemon struct {
	cmd *exec.Cmd
	url string
}

// start runs a command of sockline that serves a page, until the test ends.
func start(t *testing.T, args ...string) *daemon {
	t.Helper()
	cmd := exec.Command(binary(t), args...)
	cmd.Dir = t.TempDir()
	out, in := io.Pipe()
	cmd.Stdout, cmd.Stderr = in, in
	if err := cmd.Start(); err != nil {
		t.Fatal(err)
	}
	t.Cleanup(func() {
		_ = cmd.Process.Signal(syscall.SIGCONT)
		_ = cmd.Process.Kill()
		_ = cmd.Wait()
		_ = in.Close()
	})
	found, said := make(chan string, 1), &strings.Builder{}
	go func() {
		address := regexp.MustCompile(`http://127\.0\.0\.1:\d+`)
		lines := bufio.NewScanner(out)
		for lines.Scan() {
			if len(found) == 0 {
				said.WriteString(lines.Text() + "\n")
			}
			if a := address.FindString(lines.Text()); a != "" {
				select {
				case found <- a:
				default:
				}
			}
		}
	}()
	select {
	case a := <-found:
		return &daemon{cmd, a}
	case <-time.After(60 * time.Second):
		t.Fatalf("sockline %s served no page:\n%s", strings.Join(args, " "), said)
		return nil
	}
}

// demo is the demonstration, at a speed at which something happens soon.
func demo(t *testing.T, speed string) *daemon {
	t.Helper()
	return start(t, "demo", "--speed", speed, "--for", "10m", "--history", t.TempDir())
}

// freePort is a port that is free now.
func freePort(t *testing.T) int {
	t.Helper()
	l, err := net.Listen("tcp", "127.0.0.1:0")
	if err != nil {
		t.Fatal(err)
	}
	defer l.Close()
	return l.Addr().(*net.TCPAddr).Port
}

// chromium is one browser for the whole test binary.
var chromium = sync.OnceValues(func() (context.Context, error) {
	path, err := exec.LookPath("chromium")
	if err != nil {
		return nil, errors.New("chromium is missing: apt-get install chromium")
	}
	dir, err := os.MkdirTemp("", "sockline-chromium")
	if err != nil {
		return nil, err
	}
	options := []chromedp.ExecAllocatorOption{
		chromedp.ExecPath(path), chromedp.UserDataDir(dir), chromedp.Headless, chromedp.NoSandbox, chromedp.DisableGPU, chromedp.NoFirstRun,
		chromedp.Flag("disable-quic", true), chromedp.Flag("disable-background-networking", true),
		chromedp.Flag("disable-component-update", true), chromedp.Flag("disable-sync", true),
	}
	allocator, _ := chromedp.NewExecAllocator(context.Background(), options...)
	ctx, cancel := chromedp.NewContext(allocator)
	// The browser lives as long as the context of the first call: TestMain ends it.
	endChromium = func() {
		_ = chromedp.Cancel(ctx)
		cancel()
		_ = os.RemoveAll(dir)
	}
	return ctx, chromedp.Do(ctx)
})

var endChromium = func() {}

func TestMain(m *testing.M) {
	code := m.Run()
	endChromium()
	removeProgram()
	os.Exit(code)
}

// tab is a page of the browser, with all that went wrong in it.
type tab struct {
	t   *testing.T
	ctx context.Context

	mu       sync.Mutex
	wrong    []string
	expected []string // parts of what may go wrong
	asked    []string // every address that was asked for
	bytes    float64  // received
}

// screen is a size of window, in CSS pixels.
type screen struct {
	name       string
	wide, high int64
}

var screens = [...]screen{{"1920x1080", 1920, 1080}, {"1280x800", 1280, 800}, {"phone", 390, 844}}

// open opens a page in a window of a size. Whatever goes wrong in it fails the
// test at its end.
func open(t *testing.T, address string, s screen, expected ...string) *tab {
	t.Helper()
	browser, err := chromium()
	if err != nil {
		t.Fatal(err)
	}
	ctx, cancel := chromedp.NewContext(browser)
	b := &tab{t: t, ctx: ctx, expected: append(expected, "AudioContext was not allowed")}
	t.Cleanup(func() {
		cancel()
		b.mu.Lock()
		defer b.mu.Unlock()
		for _, w := range b.wrong {
			t.Errorf("%s: %s", address, w)
		}
		host := mustParse(address).Host
		for _, a := range b.asked {
			if u := mustParse(a); u.Host != host && u.Scheme != "data" && u.Scheme != "blob" {
				t.Errorf("%s asks for %s, which is elsewhere", address, a)
			}
		}
	})
	b.do(chromedp.EmulateViewport(s.wide, s.high))
	if err := chromedp.Listen(ctx, b.event); err != nil {
		t.Fatal(err)
	}
	if _, err := chromedp.Call(ctx, log.Enable, cdp.Empty{}); err != nil {
		t.Fatal(err)
	}
	if _, err := chromedp.Call(ctx, network.Enable, network.EnableParams{}); err != nil {
		t.Fatal(err)
	}
	b.do(chromedp.Navigate(address))
	return b
}

func mustParse(address string) *url.URL {
	u, err := url.Parse(address)
	if err != nil {
		return &url.URL{Host: address}
	}
	return u
}

func (b *tab) event(ev any) {
	b.mu.Lock()
	defer b.mu.Unlock()
	text := ""
	switch e := ev.(type) {
	case *runtime.EventExceptionThrown:
		text = "exception: " + e.ExceptionDetails.Text
		if x := e.ExceptionDetails.Exception; x != nil {
			text += " " + x.Description
		}
	case *log.EventEntryAdded:
		text = fmt.Sprintf("%s: %s %s", e.Entry.Level, e.Entry.Text, e.Entry.URL)
	case *network.EventRequestWillBeSent:
		b.asked = append(b.asked, e.Request.URL)
	case *network.EventLoadingFinished:
		b.bytes += e.EncodedDataLength
	}
	if text == "" {
		return
	}
	for _, x := range b.expected {
		if strings.Contains(text, x) {
			return
		}
	}
	b.wrong = append(b.wrong, text)
}

func (b *tab) do(steps ...chromedp.Action[chromedp.Void]) {
	b.t.Helper()
	ctx, cancel := context.WithTimeout(b.ctx, 60*time.Second)
	defer cancel()
	// The first call must have no limit: it makes the window.
	if err := chromedp.Do(b.ctx); err != nil {
		b.t.Fatal(err)
	}
	if err := chromedp.Do(ctx, steps...); err != nil {
		b.t.Fatal(err)
	}
}

// eval is the value of an expression in the page.
func eval[T any](b *tab, expression string) T {
	b.t.Helper()
	v, err := tryEval[T](b, expression)
	if err != nil {
		b.t.Fatalf("evaluate %.200s: %v", expression, err)
	}
	return v
}

func tryEval[T any](b *tab, expression string) (T, error) {
	ctx, cancel := context.WithTimeout(b.ctx, 60*time.Second)
	defer cancel()
	return chromedp.Run(ctx, chromedp.Evaluate[T](expression, chromedp.EvalAwaitPromise))
}

// until waits for a condition of the page to be true, and tells how long it
// took.
func (b *tab) until(within time.Duration, condition string) time.Duration {
	b.t.Helper()
	begun := time.Now()
	tick := time.NewTicker(50 * time.Millisecond)
	defer tick.Stop()
	for {
		// An error is a page that is just being loaded anew.
		if done, err := tryEval[bool](b, "Boolean("+condition+")"); err == nil && done {
			return time.Since(begun)
		}
		if time.Since(begun) > within {
			b.shot("late-" + b.t.Name())
			b.t.Fatalf("within %s it did not become true: %s\nThe page says: %.1500s", within, condition, eval[string](b, "document.body.innerText"))
		}
		<-tick.C
	}
}

// glass waits until the first step is shown.
func (b *tab) glass() {
	b.t.Helper()
	b.until(20*time.Second, `document.getElementById("glass") && !document.getElementById("glass").hidden && !document.body.classList.contains("blank")`)
}

// light sets one of the lights.
func (b *tab) light(name string) {
	b.t.Helper()
	eval[bool](b, fmt.Sprintf(`(localStorage.setItem("sockline.light", %q), window.dispatchEvent(new Event("sockline-screen")), true)`, name))
}

// shot keeps a picture of the window, for people to look at.
func (b *tab) shot(name string) {
	b.t.Helper()
	picture, err := chromedp.Run(b.ctx, chromedp.CaptureScreenshot())
	if err != nil {
		b.t.Fatal(err)
	}
	dir := os.Getenv("SOCKLINE_SHOTS")
	if dir == "" {
		dir = "shots"
	}
	if err := os.MkdirAll(dir, 0o755); err != nil {
		b.t.Fatal(err)
	}
	name = regexp.MustCompile(`[^A-Za-z0-9-]+`).ReplaceAllString(name, "-") + ".png"
	if err := os.WriteFile(filepath.Join(dir, name), picture, 0o644); err != nil {
		b.t.Fatal(err)
	}
}
