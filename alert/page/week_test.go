package page

import (
	"context"
	"fmt"
	"io"
	"net/http"
	"net/http/httptest"
	"runtime"
	"strings"
	"sync"
	"testing"
	"time"

	"github.com/chromedp/cdproto/cdp"
	"github.com/chromedp/cdproto/heapprofiler"
	"github.com/chromedp/cdproto/memory"
	"github.com/chromedp/cdproto/page"
	jsruntime "github.com/chromedp/cdproto/runtime"
	"github.com/chromedp/chromedp"

	"midwatch/configs"
)

// feeder stands in for the stream: the test says what comes and how fast.
const feeder = `window.EventSource = class extends EventTarget {
  constructor() { super(); this.readyState = 1; window.feed = (name, x) => this.dispatchEvent(new MessageEvent(name, { data: JSON.stringify(x) })); }
  close() { this.readyState = 2; }
};
window.pulseAt = (ms, revision) => feed("pulse", { judged: 70 + ms % 7, cannot_judge: 5, not_normal: 1, held: 1, catching_up: 0, sources: 3, alive: 3, age: "data 2 s old", stale: false, now: new Date(ms).toISOString(), now_ms: ms, revision });`

// TestPageOpenForAWeek feeds views as many events as a week brings of changes,
// and tens of thousands of pulses: what the browser holds does not grow.
func TestPageOpenForAWeek(t *testing.T) {
	for name, v := range map[string]struct {
		path, ready string
		round       string // of one round; i is its number
		rounds      int
	}{
		// Half a day of two-second pulses with fresh frames in one round.
		"loop": {"loops/AIC-204?hours=0.5", charted, `(i) => { for (let k = 0; k < 200; k++) { const at = base + (200 * i + k) * 2000; pulseAt(at, 1);
			feed("fresh", { t: [at - 2000, at - 1000], pv: [1 + 0.01 * Math.sin(k), 1], sp: [1, 1], op: [44, 45] }); } }`, 3},
		// Every pulse says that an episode changed: cards and rows come anew.
		"list": {"", "document.body.classList.contains('live')", `(i) => { for (let k = 0; k < 5; k++) pulseAt(base + (5 * i + k) * 2000, 10 + 5 * i + k); }`, 20},
	} {
		t.Run(name, func(t *testing.T) {
			h := newFake()
			h.frozen = true
			h.many(60)
			_, url := serve(t, h, configs.Page{}) // its own: the other view may have used up what an address may ask for
			ctx := tab(t, 1280, 900)
			do(t, ctx, before(feeder), chromedp.Navigate(url+v.path))
			wait(t, ctx, v.ready+" && window.feed")
			do(t, ctx, script("window.base = Number(document.body.dataset.now) || Date.now(); window.round = "+v.round))
			run := func(from, to int) {
				for i := from; i < to; i++ {
					do(t, ctx, script(fmt.Sprintf("round(%d)", i)))
					time.Sleep(20 * time.Millisecond) // answers come in, frames are painted
				}
			}
			run(0, v.rounds) // what is made once is made
			warm := held(t, ctx)
			run(v.rounds, 3*v.rounds)
			after := held(t, ctx)
			// What a last answer brings while it is measured goes again; what leaks does not.
			for end := time.Now().Add(time.Minute); after.beyond(warm) && time.Now().Before(end); {
				after = held(t, ctx)
			}
			t.Logf("heap %.2f MB and %.2f MB after twice as much again; %d and %d nodes, %d and %d listeners", warm.heap/1e6, after.heap/1e6, warm.nodes, after.nodes, warm.listeners, after.listeners)
			if after.beyond(warm) {
				t.Error("what the browser holds grew")
			}
		})
	}
}

type holding struct {
	heap             float64 // bytes
	nodes, listeners int64
}

// beyond: more is held than chance makes.
func (x holding) beyond(warm holding) bool {
	return x.heap > warm.heap*1.1+0.3e6 || x.nodes > warm.nodes+100 || x.listeners > warm.listeners+20
}

// held is what the browser holds of the page once all garbage is gone.
func held(t *testing.T, ctx context.Context) (x holding) {
	t.Helper()
	time.Sleep(300 * time.Millisecond)
	do(t, ctx, func(ctx context.Context, target *chromedp.Target) (chromedp.Void, error) {
		for range 2 {
			if _, err := cdp.Call(ctx, target, heapprofiler.CollectGarbage, cdp.Empty{}); err != nil {
				return chromedp.Void{}, err
			}
		}
		u, err := cdp.Call(ctx, target, jsruntime.GetHeapUsage, cdp.Empty{})
		if err != nil {
			return chromedp.Void{}, err
		}
		d, err := cdp.Call(ctx, target, memory.GetDOMCounters, cdp.Empty{})
		x = holding{u.UsedSize, d.Nodes, d.JsEventListeners}
		return chromedp.Void{}, err
	})
	return x
}

// before runs a script in every new document before its own.
func before(js string) chromedp.Action[chromedp.Void] {
	return func(ctx context.Context, target *chromedp.Target) (chromedp.Void, error) {
		_, err := cdp.Call(ctx, target, page.AddScriptToEvaluateOnNewDocument, page.AddScriptToEvaluateOnNewDocumentParams{Source: js})
		return chromedp.Void{}, err
	}
}

// TestPNG draws the pictures that are saved: one of the list, one of several
// loops.
func TestPNG(t *testing.T) {
	h := newFake()
	h.frozen = true
	_, url := serve(t, h, configs.Page{})
	ctx := tab(t, 1280, 900)
	do(t, ctx, before(`HTMLAnchorElement.prototype.click = function () { window.saved = this.download; };
		const make = URL.createObjectURL; URL.createObjectURL = (b) => { window.blob = b; return make.call(URL, b); };`))
	for _, path := range []string{"", "episodes/20260106-0004-kfen", "episodes/cascade:AIC-201"} {
		do(t, ctx, chromedp.Navigate(url+path))
		wait(t, ctx, "document.querySelector('[data-png] + button')")
		do(t, ctx, script("document.querySelector('[data-png] + button').click()"))
		wait(t, ctx, "window.saved || document.querySelector('[data-png] + button').textContent != 'PNG'")
		if s := eval[string](t, ctx, "document.querySelector('[data-png] + button').textContent"); s != "PNG" {
			t.Fatalf("/%s: %s", path, s)
		}
		do(t, ctx, script(`createImageBitmap(blob).then((b) => { const c = document.createElement("canvas"); c.width = b.width; c.height = b.height; const g = c.getContext("2d"); g.drawImage(b, 0, 0);
			const d = g.getImageData(0, 0, b.width, b.height).data; const seen = new Set(); for (let i = 0; i < d.length; i += 4) seen.add(d[i] << 16 | d[i + 1] << 8 | d[i + 2]); window.drawn = [b.width, b.height, seen.size]; })`))
		wait(t, ctx, "window.drawn")
		d := eval[[]int](t, ctx, "window.drawn")
		if name := eval[string](t, ctx, "window.saved"); !strings.HasSuffix(name, ".png") || d[0] != 2560 || d[1] < 300 || d[2] < 50 {
			t.Errorf("/%s: %s of %d x %d pixels with %d colours", path, name, d[0], d[1], d[2])
		}
	}
}

// BenchmarkFiftyPages is what fifty open pages cost the daemon for a second of
// their time: half of them show the list, half a loop.
func BenchmarkFiftyPages(b *testing.B) {
	h := newFake()
	h.many(983)
	p, err := New(Options{House: h, Page: configs.Page{Listen: "127.0.0.1:0"}, Clock: h.clock})
	if err != nil {
		b.Fatal(err)
	}
	srv := httptest.NewServer(inside(p))
	defer srv.Close()
	ctx, cancel := context.WithCancel(b.Context())
	defer cancel()
	var all sync.WaitGroup
	for i := range 50 {
		path := "/api/stream"
		if i%2 == 0 {
			path += fmt.Sprintf("?loop=AIC-204&after=%d", h.clock().UnixMilli())
		}
		all.Go(func() {
			r, _ := http.NewRequestWithContext(ctx, "GET", srv.URL+path, nil)
			resp, err := http.DefaultClient.Do(r)
			if err != nil {
				return
			}
			defer resp.Body.Close()
			buf := make([]byte, 64<<10)
			for {
				if _, err := resp.Body.Read(buf); err != nil {
					return
				}
			}
		})
	}
	// Once a minute a list takes its rows anew and a loop its facts.
	all.Go(func() {
		for i := 0; ; i++ {
			select {
			case <-ctx.Done():
				return
			case <-time.After(60 * time.Second / 75):
			}
			r, _ := http.NewRequestWithContext(ctx, "GET", srv.URL+[]string{"/parts/rows", "/parts/need", "/loops/AIC-204?hours=4"}[i%3], nil)
			if resp, err := http.DefaultClient.Do(r); err == nil {
				io.Copy(io.Discard, resp.Body)
				resp.Body.Close()
			}
		}
	})
	time.Sleep(5 * time.Second)
	runtime.GC()
	begin, spent := time.Now(), processTime(b)
	for b.Loop() {
		time.Sleep(time.Second)
	}
	b.ReportMetric(100*(processTime(b)-spent).Seconds()/time.Since(begin).Seconds(), "%core")
	b.ReportMetric(0, "ns/op")
	cancel()
	all.Wait()
}
