package reports

import (
	"context"
	"fmt"
	"os"
	"path/filepath"
	"strings"
	"sync"
	"testing"
	"time"

	"github.com/chromedp/cdproto/cdp"
	"github.com/chromedp/cdproto/emulation"
	"github.com/chromedp/cdproto/log"
	"github.com/chromedp/cdproto/network"
	"github.com/chromedp/cdproto/runtime"
	"github.com/chromedp/chromedp"
)

// browser starts a headless Chromium, or skips the test where there is none
// (BATTEN_BROWSER=1 makes that a failure).
func browser(t *testing.T) context.Context {
	t.Helper()
	path := ""
	for _, p := range []string{"/usr/bin/chromium", "/usr/bin/chromium-browser", "/usr/bin/google-chrome"} {
		if _, err := os.Stat(p); err == nil {
			path = p
			break
		}
	}
	if path == "" {
		if os.Getenv("BATTEN_BROWSER") == "1" {
			t.Fatal("no browser")
		}
		t.Skip("no browser; set BATTEN_BROWSER=1 to make this a failure")
	}
	opts := append(chromedp.DefaultExecAllocatorOptions[:], chromedp.ExecPath(path), chromedp.NoSandbox,
		chromedp.Flag("disable-quic", true), chromedp.Flag("disable-component-update", true))
	ctx, cancel := chromedp.NewExecAllocator(context.Background(), opts...)
	t.Cleanup(cancel)
	ctx, cancel = context.WithTimeout(ctx, 2*time.Minute)
	t.Cleanup(cancel)
	ctx, cancel = chromedp.NewContext(ctx)
	t.Cleanup(cancel)
	return ctx
}

// TestBrowser opens the page from disk in a real browser: nothing is asked
// for, nothing complains, nothing sticks out at 1280 or 390 wide, in light and
// dark; all parts are there and can be reached by keyboard.
func TestBrowser(t *testing.T) {
	ctx := browser(t)
	file := filepath.Join(t.TempDir(), "page.html")
	if err := os.WriteFile(file, HTML(document()), 0o666); err != nil {
		t.Fatal(err)
	}
	var mu sync.Mutex
	var asked, complaints []string
	err := chromedp.Listen(ctx, func(ev any) {
		mu.Lock()
		defer mu.Unlock()
		switch e := ev.(type) {
		case *network.EventRequestWillBeSent:
			if !strings.HasPrefix(e.Request.URL, "file://") || !strings.HasSuffix(e.Request.URL, "page.html") {
				asked = append(asked, e.Request.URL)
			}
		case *runtime.EventExceptionThrown:
			complaints = append(complaints, e.ExceptionDetails.Text)
		case *log.EventEntryAdded:
			complaints = append(complaints, e.Entry.Text)
		}
	})
	if err != nil {
		t.Fatal(err)
	}
	if _, err := chromedp.Call(ctx, network.Enable, network.EnableParams{}); err != nil {
		t.Fatal(err)
	}
	if _, err := chromedp.Call(ctx, log.Enable, cdp.Empty{}); err != nil {
		t.Fatal(err)
	}
	for _, width := range []int64{1280, 390} {
		for _, scheme := range []string{"light", "dark"} {
			look(t, ctx, file, width, scheme)
		}
	}
	mu.Lock()
	defer mu.Unlock()
	if len(asked) > 0 {
		t.Errorf("the page asked for %v", asked)
	}
	if len(complaints) > 0 {
		t.Errorf("the browser complains: %v", complaints)
	}
}

// look opens the page at one width and scheme.
func look(t *testing.T, ctx context.Context, file string, width int64, scheme string) {
	t.Helper()
	at := fmt.Sprintf("%d wide, %s", width, scheme)
	if _, err := chromedp.Call(ctx, emulation.SetEmulatedMedia, emulation.SetEmulatedMediaParams{
		Features: []*emulation.MediaFeature{{Name: "prefers-color-scheme", Value: scheme}}}); err != nil {
		t.Fatal(err)
	}
	if err := chromedp.Do(ctx, chromedp.EmulateViewport(width, 900), chromedp.Navigate("file://"+file)); err != nil {
		t.Fatalf("%s: %v", at, err)
	}
	number := func(js string) int { return ask[int](t, ctx, js) }
	if n := number(`document.querySelectorAll('details').forEach(d => d.open = true); document.documentElement.scrollWidth - window.innerWidth`); n > 0 {
		t.Errorf("%s: the page is %d pixels too wide", at, n)
	}
	if ground := ask[string](t, ctx, `getComputedStyle(document.body).backgroundColor`); (ground == "rgb(22, 25, 29)") != (scheme == "dark") {
		t.Errorf("%s: the ground is %s", at, ground)
	}
	ink := ask[string](t, ctx, `getComputedStyle(document.querySelector('figure svg path[style*="--curve"]')).stroke`)
	if want := map[string]string{"light": "rgb(31, 95, 139)", "dark": "rgb(121, 184, 230)"}[scheme]; ink != want {
		t.Errorf("%s: curves are drawn in %s, want %s", at, ink, want)
	}
	tables, captions := number(`document.querySelectorAll('table').length`), number(`document.querySelectorAll('table caption').length`)
	figures, labelled := number(`document.querySelectorAll('figure svg').length`), number(`document.querySelectorAll('figure svg[role=img] > title').length`)
	focus := number(`document.querySelectorAll('.scroll[tabindex="0"], a[href], summary').length`)
	if tables < 7 || captions != tables || figures < 9 || labelled != figures || focus < 10 {
		t.Errorf("%s: %d tables (%d captions), %d figures (%d labelled), %d to focus", at, tables, captions, figures, labelled, focus)
	}
	if h := ask[string](t, ctx, `document.querySelector('h1').textContent`); h != "Pears, week by week" {
		t.Errorf("%s: the heading is %q", at, h)
	}
}

func ask[T any](t *testing.T, ctx context.Context, js string) T {
	t.Helper()
	v, err := chromedp.Run(ctx, chromedp.Evaluate[T](js))
	if err != nil {
		t.Fatalf("%s: %v", js, err)
	}
	return v
}
