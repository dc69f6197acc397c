package main

import (
	"context"
	"flag"
	"fmt"
	"net"
	"net/http"
	"os"
	"os/exec"
	"path/filepath"
	"slices"
	"strings"
	"testing"
	"time"

	"github.com/chromedp/cdproto/emulation"
	"github.com/chromedp/cdproto/log"
	"github.com/chromedp/cdproto/runtime"
	"github.com/chromedp/chromedp"
)

var shots = flag.String("page.shots", "", "keep pictures of the page's screens in this folder")

// browser is a tab of a browser that looks at the page of a service.
type browser struct {
	t    *testing.T
	ctx  context.Context //nolint:containedctx // of the tab, as the library has it
	base string
}

// newBrowser starts a browser, or skips the test where there is none.
func newBrowser(t *testing.T, base string) *browser {
	t.Helper()
	path := ""
	for _, name := range []string{"chromium", "chromium-browser"} {
		if found, err := exec.LookPath(name); err == nil {
			path = found
		}
	}
	switch {
	case path == "" && os.Getenv("TAILBELL_CI") != "":
		t.Fatal("chromium is missing: install it (Debian: apt-get install chromium)")
	case path == "":
		t.Skip("chromium is not installed: the page is not looked at in a browser")
	}
	options := append(slices.Clone(chromedp.DefaultExecAllocatorOptions[:]), chromedp.ExecPath(path), chromedp.DisableGPU, chromedp.UserDataDir(t.TempDir()))
	if os.Geteuid() == 0 {
		options = append(options, chromedp.NoSandbox)
	}
	ctx, cancelProcess := chromedp.NewExecAllocator(context.WithoutCancel(t.Context()), options...)
	ctx, cancelTab := chromedp.NewContext(ctx)
	ctx, cancel := context.WithTimeout(ctx, 5*patience)
	t.Cleanup(func() { cancel(); cancelTab(); cancelProcess() })
	b := &browser{t: t, ctx: ctx, base: base}
	err := chromedp.Listen(ctx, func(event any) {
		switch e := event.(type) {
		case *runtime.EventExceptionThrown:
			t.Errorf("the page's script failed: %s %v", e.ExceptionDetails.Text, e.ExceptionDetails.Exception)
		case *log.EventEntryAdded:
			if strings.Contains(e.Entry.Text, "Content Security Policy") {
				t.Error(e.Entry.Text)
			}
		}
	})
	if err != nil {
		t.Fatal(err)
	}
	return b
}

func (b *browser) run(what string, actions ...chromedp.Action[chromedp.Void]) {
	b.t.Helper()
	ctx, cancel := context.WithTimeout(b.ctx, patience)
	defer cancel()
	for _, action := range actions {
		err := chromedp.Do(ctx, action)
		for err != nil && ctx.Err() == nil && strings.Contains(err.Error(), goneNode) {
			err = chromedp.Do(ctx, action)
		}
		if err != nil {
			b.t.Fatalf("%s: %v\n%s", what, err, b.text())
		}
	}
}

// goneNode is what the browser says of an element that was found, but replaced by
// news before it could be used.
const goneNode = "Could not find node with given id"

func (b *browser) open(target string) {
	b.t.Helper()
	b.run("opening "+target, chromedp.Navigate(b.base+target), chromedp.WaitReady("main"))
}

// inTab evaluates an expression in the tab.
func inTab[T any](b *browser, expression string, options ...chromedp.EvaluateOption) T {
	b.t.Helper()
	ctx, cancel := context.WithTimeout(b.ctx, patience)
	defer cancel()
	value, err := chromedp.Run(ctx, chromedp.Evaluate[T](expression, options...))
	if err != nil {
		b.t.Fatalf("%.200s: %v", expression, err)
	}
	return value
}

// text is what the tab shows.
func (b *browser) text() string {
	ctx, cancel := context.WithTimeout(b.ctx, 5*time.Second)
	defer cancel()
	text, err := chromedp.Run(ctx, chromedp.Evaluate[string]("document.body.innerText"))
	if err != nil {
		return "(" + err.Error() + ")"
	}
	return strings.Join(strings.Fields(text), " ")
}

// shows waits until the tab shows all of these.
func (b *browser) shows(wants ...string) {
	b.t.Helper()
	tick := time.NewTicker(50 * time.Millisecond)
	defer tick.Stop()
	over := time.NewTimer(patience)
	defer over.Stop()
	for _, want := range wants {
		for !strings.Contains(b.text(), want) {
			select {
			case <-tick.C:
			case <-over.C:
				b.t.Fatalf("waited in vain for %q:\n%s", want, b.text())
			}
		}
	}
}

// violations are what axe finds wrong with what the tab shows.
func (b *browser) violations() []string {
	b.t.Helper()
	axe := string(readAll(b.t, filepath.Join("..", "..", "alert", "page", "testdata", "axe", "axe.min.js")))
	inTab[int](b, axe+";0")
	return inTab[[]string](b, `axe.run(document, {resultTypes: ["violations"]}).then(r => r.violations.map(v =>
		v.id + ": " + v.help + ": " + v.nodes.slice(0, 3).map(n => n.html + " (" + n.failureSummary + ")").join(" | ")))`, chromedp.EvalAwaitPromise)
}

// look sets width and theme, reads the screen again, and keeps a picture if
// asked to.
func (b *browser) look(name, target string, width int64, theme string) {
	b.t.Helper()
	b.run("setting the size", chromedp.EmulateViewport(width, 900))
	_, err := chromedp.Call(b.ctx, emulation.SetEmulatedMedia, emulation.SetEmulatedMediaParams{
		Features: []*emulation.MediaFeature{{Name: "prefers-color-scheme", Value: theme}},
	})
	if err != nil {
		b.t.Fatal(err)
	}
	b.open(target)
	if inTab[bool](b, "document.documentElement.scrollWidth > innerWidth") {
		b.t.Errorf("%s is wider than %d", name, width)
	}
	thorough := *shots != "" || os.Getenv("TAILBELL_CI") != ""
	if !thorough && (width < 500) != (theme == "dark") {
		return
	}
	for _, v := range b.violations() {
		b.t.Errorf("%s, %d wide, %s: %s", name, width, theme, v)
	}
	if *shots == "" {
		return
	}
	picture, err := chromedp.Run(b.ctx, chromedp.FullScreenshot(100))
	if err != nil {
		b.t.Fatal(err)
	}
	if err := os.WriteFile(filepath.Join(*shots, fmt.Sprintf("%s-%d-%s.png", name, width, theme)), picture, 0o644); err != nil {
		b.t.Fatal(err)
	}
}

// freeAddress is an address on loopback that nobody listens at.
func freeAddress(t *testing.T) string {
	t.Helper()
	l, err := net.Listen("tcp", "127.0.0.1:0")
	if err != nil {
		t.Fatal(err)
	}
	address := l.Addr().String()
	if err := l.Close(); err != nil {
		t.Fatal(err)
	}
	return address
}

// servesPage waits until the page answers.
func (s *service) servesPage(address string) {
	s.t.Helper()
	s.await("the page", func() bool {
		req, err := http.NewRequestWithContext(s.t.Context(), http.MethodGet, "http://"+address+"/", nil)
		if err != nil {
			s.t.Fatal(err)
		}
		answer, err := http.DefaultClient.Do(req)
		if err != nil {
			return false
		}
		if err := answer.Body.Close(); err != nil {
			s.t.Error(err)
		}
		return answer.StatusCode == http.StatusOK
	})
}
