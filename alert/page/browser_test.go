package page

import (
	"bytes"
	"context"
	"flag"
	"fmt"
	"image"
	"image/color"
	"image/png"
	"io"
	"maps"
	"net"
	"net/http"
	"os"
	"os/exec"
	"path/filepath"
	"slices"
	"strings"
	"sync"
	"testing"
	"time"

	"github.com/chromedp/cdproto/cdp"
	"github.com/chromedp/cdproto/emulation"
	"github.com/chromedp/cdproto/runtime"
	"github.com/chromedp/chromedp"

	"midwatch/configs"
)

var update = flag.Bool("update", false, "write screenshots of the main views (with -run Screens)")

var browser struct {
	once   sync.Once
	ctx    context.Context
	cancel func()
	err    error
}

func TestMain(m *testing.M) {
	flag.Parse()
	code := m.Run()
	if browser.cancel != nil {
		browser.cancel()
	}
	os.Exit(code)
}

// hang is when a test gives up on what must come: far beyond what a browser beside
// the race detector needs on the slowest machine.
const hang = 5 * time.Minute

// findBrowser gives the first headless browser of the usual names.
func findBrowser() string {
	for _, n := range []string{"chromium-headless-shell", "chromium", "chromium-browser", "google-chrome"} {
		if p, err := exec.LookPath(n); err == nil {
			return p
		}
	}
	return ""
}

// tab opens a tab of the one browser all tests share, in a profile of its own.
// What the page's scripts throw or log as an error fails the test.
func tab(t *testing.T, width, height int64) context.Context {
	t.Helper()
	path := findBrowser()
	if path == "" {
		if os.Getenv("MIDWATCH_PEERS") == "1" {
			t.Fatal("no browser found; hint: apt-get install chromium-headless-shell")
		}
		t.Skip("no browser found; hint: apt-get install chromium-headless-shell")
	}
	browser.once.Do(func() {
		opts := append(chromedp.DefaultExecAllocatorOptions[:], chromedp.ExecPath(path))
		if os.Geteuid() == 0 {
			opts = append(opts, chromedp.NoSandbox)
		}
		alloc, stop := chromedp.NewExecAllocator(context.Background(), opts...)
		ctx, close := chromedp.NewContext(alloc)
		// The first call starts the browser; a deadline on it would end it.
		browser.err = chromedp.Do(ctx)
		browser.ctx, browser.cancel = ctx, func() { close(); stop() }
	})
	if browser.err != nil {
		t.Fatal(browser.err)
	}
	ctx, close := chromedp.NewContext(browser.ctx, chromedp.WithNewBrowserContext())
	t.Cleanup(close)
	if err := chromedp.Do(ctx, chromedp.EmulateViewport(width, height)); err != nil {
		t.Fatal(err)
	}
	thrown := chromedp.Events(ctx, runtime.ExceptionThrown)
	go func() {
		for ev, err := range thrown {
			if err != nil {
				return
			}
			t.Errorf("script failed: %s", ev.ExceptionDetails.Text)
			if x := ev.ExceptionDetails.Exception; x != nil {
				t.Error(x.Description)
			}
		}
	}()
	ctx, cancel := context.WithTimeout(ctx, hang)
	t.Cleanup(cancel)
	return ctx
}

func do(t *testing.T, ctx context.Context, steps ...chromedp.Action[chromedp.Void]) {
	t.Helper()
	if err := chromedp.Do(ctx, steps...); err != nil {
		t.Fatal(err)
	}
}

// click clicks on what the page may draw anew at any time: a node that went between being
// found and being clicked on is looked for again.
func click(t *testing.T, ctx context.Context, css string) {
	t.Helper()
	for {
		err := chromedp.Do(ctx, chromedp.Click(chromedp.CSS(css)))
		if err == nil {
			return
		}
		if !strings.Contains(err.Error(), "Could not find node") || ctx.Err() != nil {
			t.Fatalf("clicking on %s: %v", css, err)
		}
	}
}

// script runs a script for what it does.
func script(js string) chromedp.Action[chromedp.Void] {
	return func(ctx context.Context, target *chromedp.Target) (chromedp.Void, error) {
		_, err := cdp.Call(ctx, target, runtime.Evaluate, runtime.EvaluateParams{Expression: js})
		return chromedp.Void{}, err
	}
}

// eval gives the value of an expression in the page.
func eval[T any](t *testing.T, ctx context.Context, js string) T {
	t.Helper()
	v, err := chromedp.Run(ctx, chromedp.Evaluate[T](js))
	if err != nil {
		t.Fatalf("%s: %v", js, err)
	}
	return v
}

// pulses waits until n pulses of the stream came to a listener of the test's own:
// the page has heard about as many.
func pulses(t *testing.T, ctx context.Context, n int) {
	t.Helper()
	do(t, ctx, script("window.pulses = 0; window.tested = new EventSource((document.body.dataset.up || '') + 'api/stream'); tested.addEventListener('pulse', () => pulses++)"))
	wait(t, ctx, fmt.Sprintf("window.pulses >= %d", n))
	do(t, ctx, script("window.tested.close()"))
}

// wait waits until an expression is true in the page. What fails meanwhile (a
// page on its way) is not true.
func wait(t *testing.T, ctx context.Context, js string) {
	t.Helper()
	said := ""
	for {
		ok, err := chromedp.Run(ctx, chromedp.Evaluate[bool]("(() => { try { return !!("+js+") } catch { return false } })()"))
		if ok {
			return
		}
		if ctx.Err() != nil {
			t.Fatalf("never true: %s (%v)\n%.300s", js, err, said)
		}
		if text, err := chromedp.Run(ctx, chromedp.Evaluate[string]("document.body?.innerText ?? ''")); err == nil {
			said = text
		}
		time.Sleep(30 * time.Millisecond)
	}
}

func media(name, value string) chromedp.Action[chromedp.Void] {
	return func(ctx context.Context, target *chromedp.Target) (chromedp.Void, error) {
		_, err := cdp.Call(ctx, target, emulation.SetEmulatedMedia, emulation.SetEmulatedMediaParams{Features: []*emulation.MediaFeature{{Name: name, Value: value}}})
		return chromedp.Void{}, err
	}
}

func dark(on bool) chromedp.Action[chromedp.Void] {
	v := "light"
	if on {
		v = "dark"
	}
	return media("prefers-color-scheme", v)
}

// house serves a page over a fake house and gives its address.
func serve(t *testing.T, h *fakeHouse, c configs.Page) (*Page, string) {
	t.Helper()
	ln, err := net.Listen("tcp", "127.0.0.1:0")
	if err != nil {
		t.Fatal(err)
	}
	if c.Listen == "" {
		c.Listen = "127.0.0.1:0"
	}
	p, err := New(Options{House: h, Page: c, Clock: h.clock})
	if err != nil {
		t.Fatal(err)
	}
	srv := &http.Server{Handler: p.Handler()}
	go srv.Serve(ln)
	t.Cleanup(func() { srv.Close() })
	return p, "http://" + ln.Addr().String() + "/"
}

// fewColours packs a picture with the 256 colours it uses most.
func fewColours(t *testing.T, b []byte) []byte {
	t.Helper()
	in, err := png.Decode(bytes.NewReader(b))
	if err != nil {
		t.Fatal(err)
	}
	count := map[color.Color]int{}
	r := in.Bounds()
	for y := r.Min.Y; y < r.Max.Y; y++ {
		for x := r.Min.X; x < r.Max.X; x++ {
			count[in.At(x, y)]++
		}
	}
	all := slices.SortedFunc(maps.Keys(count), func(a, b color.Color) int { return count[b] - count[a] })
	out := image.NewPaletted(r, color.Palette(all[:min(256, len(all))]))
	index := map[color.Color]uint8{}
	for y := r.Min.Y; y < r.Max.Y; y++ {
		for x := r.Min.X; x < r.Max.X; x++ {
			c := in.At(x, y)
			i, ok := index[c]
			if !ok {
				i = uint8(out.Palette.Index(c))
				index[c] = i
			}
			out.SetColorIndex(x, y, i)
		}
	}
	var z bytes.Buffer
	if err := (&png.Encoder{CompressionLevel: png.BestCompression}).Encode(&z, out); err != nil {
		t.Fatal(err)
	}
	return z.Bytes()
}

// picture saves an exported picture, to be opened as a file.
func picture(t *testing.T, url string) string {
	t.Helper()
	resp, err := http.Get(url)
	if err != nil {
		t.Fatal(err)
	}
	defer resp.Body.Close()
	b, err := io.ReadAll(resp.Body)
	if err != nil {
		t.Fatal(err)
	}
	path := filepath.Join(t.TempDir(), "picture.svg")
	if err := os.WriteFile(path, b, 0o644); err != nil {
		t.Fatal(err)
	}
	return "file://" + path
}

// TestScreens makes pictures of the main views: go test ./alert/page -run
// Screens -update. They go into a folder under the temporary one, and three
// small ones into screens/ for the README.
func TestScreens(t *testing.T) {
	if !*update {
		t.Skip("pictures are made with -update")
	}
	dir := filepath.Join(os.TempDir(), "midwatch-screens")
	if err := os.MkdirAll(dir, 0o755); err != nil {
		t.Fatal(err)
	}
	h := newFake()
	h.frozen = true
	h.many(60)
	shifts := configs.Page{Shifts: []int{6 * 60, 14 * 60, 22 * 60}}
	_, url := serve(t, h, shifts)
	calm := newFake()
	calm.frozen, calm.eps = true, nil
	_, calmURL := serve(t, calm, shifts)
	bad := newFake()
	bad.frozen, bad.down = true, true
	_, badURL := serve(t, bad, shifts)
	_, tokensURL := serve(t, bad, configs.Page{TokensFile: tokensFile(t)})
	empty := newFake()
	empty.frozen, empty.loops, empty.eps = true, nil, nil
	_, emptyURL := serve(t, empty, shifts)
	shot := func(name, url string, w, hgt int64, night bool, ready string) {
		ctx := tab(t, w, hgt)
		do(t, ctx, dark(night), chromedp.Navigate(url))
		if ready != "" {
			wait(t, ctx, ready)
		}
		time.Sleep(250 * time.Millisecond) // the last paint
		b, err := chromedp.Run(ctx, chromedp.CaptureScreenshot())
		if err != nil {
			t.Fatal(err)
		}
		if err := os.WriteFile(filepath.Join(dir, name+".png"), b, 0o644); err != nil {
			t.Fatal(err)
		}
		if small, ok := strings.CutPrefix(name, "readme-"); ok {
			b = fewColours(t, b)
			if len(b) > 120<<10 {
				t.Errorf("%s has %d bytes", name, len(b))
			}
			if err := os.WriteFile(filepath.Join("screens", small+".png"), b, 0o644); err != nil {
				t.Fatal(err)
			}
		}
	}
	chart := "document.querySelectorAll('.uplot').length == 2"
	shot("list", url, 1440, 1400, false, "")
	shot("list-dark", url, 1440, 1100, true, "")
	shot("list-phone-strips", url+"#filter", 390, 1400, true, "")
	shot("list-phone", url, 390, 1800, false, "")
	shot("list-wall", url, 2560, 1440, true, "")
	shot("calm", calmURL, 1440, 900, false, "")
	shot("loop", url+"loops/AIC-204", 1440, 1700, false, chart)
	shot("loop-dark", url+"loops/AIC-204", 1440, 1200, true, chart)
	shot("loop-phone", url+"loops/AIC-204", 390, 2000, false, chart)
	shot("loop-sluggish", url+"loops/LIC-310", 1440, 900, false, chart)
	shot("loop-offset", url+"loops/AIC-212?hours=12", 1440, 900, false, chart)
	shot("loop-manual", url+"loops/FIC-131?hours=12", 1440, 900, false, chart)
	shot("group", url+"episodes/20260106-0004-kfen", 1440, 900, false, "")
	shot("cascade", url+"episodes/cascade:AIC-201", 1440, 800, false, "")
	shot("watch", url+"watch", 1440, 1400, false, "")
	shot("trend-svg", url+"loops/AIC-204/trend.svg?hours=4", 1000, 500, false, "")
	shot("strips-svg", picture(t, url+"strips.svg"), 1280, 900, false, "")
	shot("list-before", url+"?span=before", 1440, 1400, false, "")
	shot("list-none", url+"?q=no+such", 1440, 900, false, "")
	shot("loop-sticking", url+"loops/FIC-118?hours=1", 1440, 1700, false, chart)
	shot("loop-phone-dark", url+"loops/AIC-204", 390, 3600, true, chart)
	shot("group-phone", url+"episodes/20260106-0004-kfen", 390, 1300, false, "")
	shot("group-dark", url+"episodes/20260106-0004-kfen", 1440, 800, true, "")
	shot("watch-phone", url+"watch", 390, 2400, true, "")
	shot("watch-down", badURL+"watch", 1440, 1100, false, "")
	shot("sign-in", tokensURL, 1000, 500, false, "")
	shot("empty", emptyURL, 1440, 700, false, "")
	shot("lanes-svg", picture(t, url+"episodes/20260106-0004-kfen/loops.svg"), 1280, 360, false, "")
	shot("cascade-svg", picture(t, url+"episodes/cascade:AIC-201/loops.svg?hours=4"), 1280, 300, false, "")
	shot("none", url+"loops/XX-1", 1000, 500, false, "")
	shot("readme-list", url, 1200, 1140, false, "")
	shot("readme-loop", url+"loops/AIC-204", 1000, 640, false, chart)
	shot("readme-phone", url, 390, 760, true, "")
	t.Log("pictures are in", dir)
}
