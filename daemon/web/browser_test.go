package web

import (
	"context"
	"fmt"
	"os"
	"os/exec"
	"path/filepath"
	"slices"
	"strings"
	"sync"
	"testing"
	"time"

	"github.com/chromedp/cdproto/accessibility"
	"github.com/chromedp/cdproto/emulation"
	"github.com/chromedp/cdproto/log"
	"github.com/chromedp/cdproto/runtime"
	"github.com/chromedp/chromedp"
)

// browser starts Chromium; every console message, uncaught exception and
// policy violation until the end of the test fails it, but those that say
// one of the expected texts.
func browser(t *testing.T, expected ...string) context.Context {
	t.Helper()
	ctx, faults := chromium(t)
	t.Cleanup(func() {
		for _, f := range faults() {
			if !slices.ContainsFunc(expected, func(e string) bool { return strings.Contains(f, e) }) {
				t.Errorf("browser reports %s", f)
			}
		}
	})
	return ctx
}

// chromium starts the browser and collects what it complains about.
func chromium(t *testing.T) (context.Context, func() []string) {
	t.Helper()
	if testing.Short() {
		t.Skip("starts a browser")
	}
	path, err := exec.LookPath("chromium")
	if err != nil {
		t.Fatal("chromium is missing: apt-get install chromium")
	}
	opts := []chromedp.ExecAllocatorOption{chromedp.ExecPath(path), chromedp.UserDataDir(t.TempDir())}
	for _, flag := range []string{"headless", "no-sandbox", "disable-gpu", "disable-quic", "no-first-run",
		"disable-background-networking", "disable-component-update", "disable-sync", "disable-dev-shm-usage", "hide-scrollbars"} {
		opts = append(opts, chromedp.Flag(flag, true))
	}
	ctx, stop := context.WithTimeout(t.Context(), 4*time.Minute)
	t.Cleanup(stop)
	ctx, cancel := chromedp.NewExecAllocator(ctx, opts...)
	t.Cleanup(cancel)
	ctx, cancel = chromedp.NewContext(ctx)
	t.Cleanup(cancel)

	var mu sync.Mutex // guards faults
	var faults []string
	err = chromedp.Listen(ctx, func(ev any) {
		mu.Lock()
		defer mu.Unlock()
		switch e := ev.(type) {
		case *runtime.EventExceptionThrown:
			faults = append(faults, "exception: "+e.ExceptionDetails.Text)
		case *runtime.EventConsoleAPICalled:
			faults = append(faults, fmt.Sprintf("console: %s", e.Type))
		case *log.EventEntryAdded:
			faults = append(faults, fmt.Sprintf("log: %s %s %s", e.Entry.Level, e.Entry.Text, e.Entry.URL))
		}
	})
	if err != nil {
		t.Fatalf("start chromium: %v", err)
	}
	return ctx, func() []string {
		mu.Lock()
		defer mu.Unlock()
		return slices.Clone(faults)
	}
}

// running serves a fake on a free port until the test ends.
func running(t *testing.T, f *fake) string {
	t.Helper()
	s := serve(t, f, nil)
	if err := s.Listen(t.Context()); err != nil {
		t.Fatal(err)
	}
	ctx, stop := context.WithCancel(context.Background())
	done := make(chan error, 1)
	go func() { done <- s.Run(ctx) }()
	t.Cleanup(func() {
		stop()
		if err := <-done; err != nil {
			t.Errorf("run: %v", err)
		}
	})
	return "http://" + s.Addr()
}

func do(t *testing.T, ctx context.Context, steps ...chromedp.Action[chromedp.Void]) {
	t.Helper()
	if err := chromedp.Do(ctx, steps...); err != nil {
		t.Fatal(err)
	}
}

func eval[T any](t *testing.T, ctx context.Context, js string) T {
	t.Helper()
	v, err := chromedp.Run(ctx, chromedp.Evaluate[T](js))
	if err != nil {
		t.Fatalf("%s: %v", js, err)
	}
	return v
}

// wait polls a condition in the page.
func wait(t *testing.T, ctx context.Context, js string) {
	t.Helper()
	if _, err := chromedp.Run(ctx, chromedp.Poll[bool](js, chromedp.WithPollingTimeout(time.Minute))); err != nil {
		t.Fatalf("never came true: %s: %v", js, err)
	}
}

func TestBrowserHealthLineFollowsEvents(t *testing.T) {
	ctx := browser(t)
	f := newFake()
	do(t, ctx, chromedp.Navigate(running(t, f)+"/"))
	if got := eval[string](t, ctx, `document.querySelector("#condition").textContent`); got != "keeping up" {
		t.Fatalf("condition is %q, want keeping up", got)
	}
	// The focus must outlive the exchange of the part it is in.
	do(t, ctx, chromedp.Evaluate[chromedp.Void](`window.mark = 1; document.querySelector('#first h3 a').focus()`))
	f.set(func(f *fake) {
		f.snap.Queue = Queue{Waiting: 41, Running: 2, Oldest: 6 * time.Minute, Slots: 2, PerShot: 40 * time.Second}
		f.snap.Recent = append([]Shot(nil), f.snap.Recent...)
		f.snap.Recent[0].Pass, f.snap.Recent[0].Verdict = "full", "doubtful"
		f.snap.Attention = nil
	})
	wait(t, ctx, `document.querySelector("#condition").textContent === "falling behind"`)
	wait(t, ctx, `document.querySelector("#first .chip").textContent === "doubtful"`)
	if got := eval[string](t, ctx, `document.querySelector("#detail").textContent`); got != "41 waiting, oldest 6 min, about 14 min of work, 2 running" {
		t.Errorf("detail is %q", got)
	}
	if !eval[bool](t, ctx, `window.mark === 1`) {
		t.Error("the page was loaded anew, want only its parts exchanged")
	}
	if got := eval[string](t, ctx, `document.activeElement.getAttribute("href") || ""`); got != "/shot/70" {
		t.Errorf("focus is on %q after the exchange, want the link /shot/70", got)
	}
	if got := eval[string](t, ctx, `document.title`); !strings.HasPrefix(got, "(1) ") {
		t.Errorf("title is %q, want the number of things that need a person in front", got)
	}
}

// TestBrowserNotices proves that the listener above sees what it is there
// for: a foreign style, a foreign script, an exception and a missing file.
func TestBrowserNotices(t *testing.T) {
	ctx, faults := chromium(t)
	do(t, ctx, chromedp.Navigate(running(t, newFake())+"/"))
	if got := faults(); len(got) != 0 {
		t.Fatalf("complaints before anything is wrong: %q", got)
	}
	for _, c := range []struct{ js, want string }{
		{`document.body.insertAdjacentHTML("beforeend", '<p style="color:red">')`, "style-src"},
		{`document.body.append(Object.assign(document.createElement("script"), {textContent: "1"}))`, "script-src"},
		{`document.body.append(Object.assign(new Image(), {src: "https://example.org/x.png"}))`, "img-src"},
		{`document.body.append(Object.assign(new Image(), {src: "/shot/1/file/none.png"}))`, "404"},
		{`console.log("made up")`, "console"},
		{`setTimeout(() => { throw new Error("made up") })`, "exception"},
	} {
		do(t, ctx, chromedp.Evaluate[chromedp.Void](c.js))
		seen := func() bool {
			return slices.ContainsFunc(faults(), func(f string) bool { return strings.Contains(f, c.want) })
		}
		for range 100 {
			if seen() {
				break
			}
			do(t, ctx, chromedp.Sleep(50*time.Millisecond))
		}
		if !seen() {
			t.Errorf("%s: no complaint about %s in %q", c.js, c.want, faults())
		}
	}
}

// TestBrowserContrastCheckBites adds a text that is hard to read.
func TestBrowserContrastCheckBites(t *testing.T) {
	ctx := browser(t)
	do(t, ctx, chromedp.Navigate(running(t, newFake())+"/"))
	do(t, ctx, chromedp.Evaluate[chromedp.Void](`(() => {
		const p = document.createElement("p");
		p.textContent = "faint";
		p.style.color = "#777";
		p.style.backgroundColor = "#eee"; // 3.86
		document.body.append(p);
	})()`))
	if got := eval[[]string](t, ctx, contrastJS); len(got) != 1 || !strings.HasPrefix(got[0], "3.86 ") {
		t.Errorf("found %q, want the one faint text with its contrast of 3.86", got)
	}
}

// TestBrowserWithoutScript reads the page as a browser that runs none.
func TestBrowserWithoutScript(t *testing.T) {
	ctx := browser(t)
	if _, err := chromedp.Call(ctx, emulation.SetScriptExecutionDisabled, emulation.SetScriptExecutionDisabledParams{Value: true}); err != nil {
		t.Fatal(err)
	}
	do(t, ctx, chromedp.Navigate(running(t, newFake())+"/"))
	html, err := chromedp.Run(ctx, chromedp.OuterHTML(chromedp.CSS("html")))
	if err != nil {
		t.Fatal(err)
	}
	for _, want := range []string{`<meta http-equiv="refresh" content="10">`, "keeping up", "S_20310304T140211.250"} {
		if !strings.Contains(html, want) {
			t.Errorf("no %q in the page", want)
		}
	}
}

// TestBrowserTree reads the page as a screen reader does: landmarks, the
// live region and the table with its headers, at phone width too.
func TestBrowserTree(t *testing.T) {
	ctx := browser(t)
	base := running(t, newFake())
	for _, width := range []int64{390, 1280} {
		do(t, ctx, chromedp.EmulateViewport(width, 900), chromedp.Navigate(base+"/shots"))
		tree, err := chromedp.Call(ctx, accessibility.GetFullAXTree, accessibility.GetFullAXTreeParams{})
		if err != nil {
			t.Fatal(err)
		}
		count := map[string]int{}
		for _, n := range tree.Nodes {
			if !n.Ignored && n.Role != nil {
				count[strings.Trim(string(n.Role.Value), `"`)]++
			}
		}
		for role, want := range map[string]int{"banner": 1, "navigation": 1, "main": 1, "contentinfo": 1, "status": 1,
			"search": 1, "table": 1, "columnheader": 6, "rowheader": 9, "row": 10} {
			if count[role] != want {
				t.Errorf("%d px: %d nodes of role %s, want %d", width, count[role], role, want)
			}
		}
	}
}

func TestBrowserFilter(t *testing.T) {
	ctx := browser(t)
	do(t, ctx, chromedp.Navigate(running(t, newFake())+"/shots"))
	const rows = `document.querySelectorAll("table.shots tbody tr").length`
	if got := eval[int](t, ctx, rows); got != 9 {
		t.Fatalf("%d rows before filtering, want 9", got)
	}
	do(t, ctx, chromedp.SetValue(chromedp.CSS(`select[name=verdict]`), "doubtful"))
	if _, err := chromedp.RunResponse(ctx, chromedp.Click(chromedp.CSS(".filter button"))); err != nil {
		t.Fatal(err)
	}
	if got := eval[int](t, ctx, rows); got != 1 {
		t.Errorf("%d rows of verdict doubtful, want 1", got)
	}
	if got := eval[string](t, ctx, `document.querySelector("select[name=verdict]").value + location.search`); !strings.HasPrefix(got, "doubtful?") || !strings.Contains(got, "verdict=doubtful") {
		t.Errorf("form and address say %q", got)
	}
	if got := eval[string](t, ctx, `getComputedStyle(document.querySelector("table.shots tr")).display`); got != "table-row" {
		t.Errorf("a row is shown as %q on a wide page", got)
	}
}

func TestBrowserLostService(t *testing.T) {
	ctx := browser(t, "net::ERR_") // the browser says that it cannot connect
	s := serve(t, newFake(), nil)
	if err := s.Listen(t.Context()); err != nil {
		t.Fatal(err)
	}
	run, stop := context.WithCancel(t.Context())
	defer stop()
	done := make(chan error, 1)
	go func() { done <- s.Run(run) }()
	do(t, ctx, chromedp.Navigate("http://"+s.Addr()+"/"))
	if eval[bool](t, ctx, `!document.getElementById("lost").hidden`) {
		t.Error("the page says lost while the service runs")
	}
	stop()
	if err := <-done; err != nil {
		t.Errorf("run: %v", err)
	}
	wait(t, ctx, `!document.getElementById("lost").hidden`)
	if got := eval[string](t, ctx, `document.getElementById("lost").textContent`); !strings.Contains(got, "what you see is old") {
		t.Errorf("the notice says %q", got)
	}
}

// contrastJS lists the texts whose contrast to the ground they stand on is
// below 4.5, by the definitions of relative luminance and contrast ratio in
// WCAG 2.2, success criterion 1.4.3.
const contrastJS = `(() => {
	const rgba = (c) => c.match(/[\d.]+/g).map(Number);
	const lum = (c) => {
		const [r, g, b] = c.map((v) => v / 255).map((v) => v <= 0.04045 ? v / 12.92 : ((v + 0.055) / 1.055) ** 2.4);
		return 0.2126 * r + 0.7152 * g + 0.0722 * b;
	};
	const ground = (e) => {
		for (; e; e = e.parentElement) {
			const c = rgba(getComputedStyle(e).backgroundColor);
			if (c.length === 3 || c[3] === 1) return c.slice(0, 3);
		}
		return [255, 255, 255];
	};
	const out = [];
	let seen = 0;
	for (const e of document.body.querySelectorAll("*")) {
		if (![...e.childNodes].some((n) => n.nodeType === 3 && n.data.trim()) || !e.checkVisibility()) continue;
		seen++;
		const pair = [lum(rgba(getComputedStyle(e).color).slice(0, 3)), lum(ground(e))].sort((a, b) => b - a);
		const ratio = (pair[0] + 0.05) / (pair[1] + 0.05);
		if (!(ratio >= 4.5)) out.push(ratio.toFixed(2) + " " + e.outerHTML.slice(0, 80));
	}
	if (seen < 8) out.push("only " + seen + " texts were looked at");
	return out;
})()`

// TestBrowserPictures keeps the pages in range of the widths and schemes they
// are made for, and leaves screenshots to look at.
func TestBrowserPictures(t *testing.T) {
	ctx := browser(t)
	dir := os.Getenv("UNSHEARD_SHOTS")
	if dir == "" {
		dir = t.ArtifactDir()
	}
	base := running(t, newFake())
	full := newFake()
	full.snap.Queue = Queue{Waiting: 41, Oldest: 19 * time.Minute, Slots: 2, Stopped: "the disk for results is full"}
	full.snap.Fault = "The table of shots is being rebuilt: numbers of earlier days are missing."
	empty := newFake()
	empty.snap = Snapshot{Time: start, Stations: empty.snap.Stations[:1]}
	for _, p := range []struct{ name, url string }{{"now", base + "/"}, {"shots", base + "/shots"}, {"shot", base + "/shot/68"},
		{"none", base + "/shots?after=p0&text=nothing-has-this-name"}, {"full", running(t, full) + "/"}, {"empty", running(t, empty) + "/"}} {
		for _, width := range []int64{390, 1280, 1920} {
			for _, scheme := range []string{"light", "dark"} {
				name := fmt.Sprintf("%s-%d-%s.png", p.name, width, scheme)
				height := width * 9 / 16
				if width == 390 {
					height = 844
				}
				if _, err := chromedp.Call(ctx, emulation.SetEmulatedMedia, emulation.SetEmulatedMediaParams{
					Features: []*emulation.MediaFeature{{Name: "prefers-color-scheme", Value: scheme}}}); err != nil {
					t.Fatal(err)
				}
				do(t, ctx, chromedp.EmulateViewport(width, height), chromedp.Navigate(p.url))
				do(t, ctx, chromedp.Evaluate[chromedp.Void](`document.querySelectorAll("img").forEach((i) => { i.loading = "eager"; })`))
				wait(t, ctx, `[...document.images].every((i) => i.complete)`)
				if broken := eval[int](t, ctx, `[...document.images].filter((i) => !i.naturalWidth).length`); broken > 0 {
					t.Errorf("%s: %d pictures do not load", name, broken)
				}
				if over := eval[int](t, ctx, `document.documentElement.scrollWidth - innerWidth`); over > 0 {
					t.Errorf("%s: %d px wider than the window", name, over)
				}
				if small := eval[float64](t, ctx, `Math.min(...[...document.querySelectorAll("main *")].filter((e) => e.textContent.trim() && e.checkVisibility()).map((e) => parseFloat(getComputedStyle(e).fontSize)))`); small < 13 {
					t.Errorf("%s: text of %.1f px, want at least 13", name, small)
				}
				for _, faint := range eval[[]string](t, ctx, contrastJS) {
					t.Errorf("%s: contrast below 4.5: %s", name, faint)
				}
				b, err := chromedp.Run(ctx, chromedp.FullScreenshot(100))
				if err != nil {
					t.Fatal(err)
				}
				if err := os.WriteFile(filepath.Join(dir, name), b, 0o644); err != nil {
					t.Fatal(err)
				}
			}
		}
	}
}
