package page

import (
	"context"
	"fmt"
	"net"
	"net/http"
	"net/http/httptest"
	"os"
	"path/filepath"
	"strings"
	"testing"
	"time"

	"github.com/chromedp/cdproto/cdp"
	"github.com/chromedp/cdproto/emulation"
	"github.com/chromedp/cdproto/input"
	"github.com/chromedp/chromedp"
	"github.com/chromedp/chromedp/kb"

	"midwatch/alert"
	"midwatch/collector/porttest"
	"midwatch/configs"
	"midwatch/detect"
)

const charted = "document.querySelectorAll('.uplot canvas').length == 2 && document.querySelector('.lay button')"

// allViews are the views that every rule is checked on, and when each is ready.
var allViews = [][2]string{{"", "document.querySelector('.strip')"}, {"loops/AIC-204", charted}, {"loops/AIC-212?hours=12", charted}, {"episodes/20260106-0004-kfen", "document.querySelector('.lanes li')"},
	{"episodes/cascade:AIC-201", "document.querySelector('.lanes li')"}, {"watch", "document.querySelector('table')"}, {"sign-in", "document.querySelector('form')"}, {"loops/none", "document.querySelector('h1')"}}

// TestFiveThousandLoops scrolls through a long list and filters it: what is in
// the document stays bounded, and the way back works.
func TestFiveThousandLoops(t *testing.T) {
	h := newFake()
	h.frozen = true
	h.many(5000)
	_, url := serve(t, h, configs.Page{})
	ctx := tab(t, 1280, 900)
	do(t, ctx, chromedp.Navigate(url))
	wait(t, ctx, "document.body.classList.contains('live')")
	if n := eval[int](t, ctx, "document.querySelectorAll('.strip').length"); n < rowsAtOnce {
		t.Fatalf("%d strips at first", n)
	}
	height := eval[int](t, ctx, "document.documentElement.scrollHeight")
	if want := (5000 + 17) * 46; height < want || height > want+3000 {
		t.Errorf("the page is %d px high, want about %d: the bar of the window says how long the list is", height, want)
	}
	for _, at := range []string{"0.3", "0.7", "1"} {
		do(t, ctx, script(fmt.Sprintf("scrollTo(0, document.documentElement.scrollHeight*%s - innerHeight)", at)))
		wait(t, ctx, "[...document.querySelectorAll('.strip')].some(s => { const r = s.getBoundingClientRect(); return r.top > 0 && r.bottom < innerHeight })")
	}
	wait(t, ctx, "document.querySelectorAll('.strip').length < 500")
	last := eval[string](t, ctx, "[...document.querySelectorAll('.strip .n b')].at(-1).textContent")
	if last == "" {
		t.Error("the last loop has no name")
	}
	if moved := eval[int](t, ctx, "document.documentElement.scrollHeight"); moved != height {
		t.Errorf("the page was %d px high and is %d after scrolling: it jumps", height, moved)
	}
	// By keyboard: "/" goes to the filter, typing narrows.
	do(t, ctx, script("scrollTo(0,0); document.dispatchEvent(new KeyboardEvent('keydown', {key: '/'}))"), chromedp.KeyEvent("PIC-2002"))
	wait(t, ctx, "document.querySelectorAll('.strip').length == 1 && document.getElementById('count').textContent.includes('1 of 5017 loops')")
	if q := eval[string](t, ctx, "location.search"); q != "?q=PIC-2002" {
		t.Errorf("address %q: a filter can be linked to", q)
	}
	do(t, ctx, script("document.querySelector('[name=q]').value='zzz'; document.querySelector('[name=q]').dispatchEvent(new Event('input',{bubbles:true}))"))
	wait(t, ctx, "document.querySelector('.empty')?.textContent.includes('No loop fits')")
	do(t, ctx, chromedp.Navigate(url+"?q=train+7&span=24"))
	wait(t, ctx, "document.getElementById('h-watch').textContent.includes('24 hours') && document.querySelector('[name=q]').value == 'train 7'")
	click(t, ctx, ".spans a")
	wait(t, ctx, "document.getElementById('h-watch').textContent.includes('last 8 hours') && location.search.includes('span=8')")
	do(t, ctx, chromedp.NavigateBack())
	wait(t, ctx, "document.getElementById('h-watch').textContent.includes('24 hours')")
}

// TestLoopChart goes through spans by drag, keyboard and links; the address
// follows, and back and forward work.
func TestLoopChart(t *testing.T) {
	h := newFake()
	_, url := serve(t, h, configs.Page{})
	ctx := tab(t, 1280, 900)
	do(t, ctx, chromedp.Navigate(url+"loops/AIC-204"))
	wait(t, ctx, charted)
	if q := eval[string](t, ctx, "location.search"); q != "?hours=4" {
		t.Errorf("address %q", q)
	}
	drag(t, ctx, ".u-over", 0.6, 0.8)
	wait(t, ctx, "location.search.startsWith('?from=')")
	span := eval[float64](t, ctx, "(() => { const q = new URLSearchParams(location.search); return (q.get('to')-q.get('from'))/60000 })()")
	if span < 46 || span > 50 {
		t.Errorf("a fifth of four hours is %v min", span)
	}
	wait(t, ctx, "document.querySelector('[data-save=csv]').href.includes('from=')")
	do(t, ctx, chromedp.NavigateBack())
	wait(t, ctx, "location.search == '?hours=4'")
	do(t, ctx, chromedp.NavigateForward())
	wait(t, ctx, "location.search.startsWith('?from=')")
	do(t, ctx, script("document.getElementById('trend').focus()"), chromedp.KeyEvent(kb.Home))
	wait(t, ctx, "location.search.startsWith('?hours=')")
	do(t, ctx, chromedp.KeyEvent("-"))
	wait(t, ctx, "Math.abs(new URLSearchParams(location.search).get('hours') - 1.6) < 0.1")
	do(t, ctx, chromedp.KeyEvent(kb.ArrowLeft))
	wait(t, ctx, "location.search.startsWith('?from=')")
	click(t, ctx, "#spans a:nth-child(3)")
	wait(t, ctx, "location.search == '?hours=12' && document.querySelector('#spans [aria-current]')?.textContent == '12 h'")
	do(t, ctx, chromedp.Navigate(url+"loops/FIC-131?hours=12"))
	wait(t, ctx, charted+" && document.getElementById('changes').textContent.includes('mode manual')")
	if eval[bool](t, ctx, "document.querySelector('.bad:not(:empty)') != null") {
		t.Error("the chart reports a problem: " + eval[string](t, ctx, "document.querySelector('.bad').textContent"))
	}
	do(t, ctx, chromedp.Navigate(url+"loops/AIC-204?from=2026-01-06T01:00:00Z&to=2026-01-06T02:00:00Z"))
	wait(t, ctx, charted)
	if w := eval[string](t, ctx, "document.getElementById('spanword').title"); w != "2026-01-06T01:00:00.000Z to 2026-01-06T02:00:00.000Z" {
		t.Errorf("a link with times shows %q", w)
	}
}

func drag(t *testing.T, ctx context.Context, sel string, from, to float64) {
	t.Helper()
	box := eval[[]float64](t, ctx, fmt.Sprintf("(() => { document.querySelector(%q).scrollIntoView({block:'center'}); const r = document.querySelector(%q).getBoundingClientRect(); return [r.left, r.top, r.width, r.height] })()", sel, sel))
	y := box[1] + box[3]/2
	x := func(share float64) float64 { return box[0] + box[2]*share }
	do(t, ctx, chromedp.MouseEvent(input.DispatchMouseEventTypeMouseMoved, x(from), y), chromedp.MouseEvent(input.DispatchMouseEventTypeMousePressed, x(from), y, chromedp.ButtonLeft),
		chromedp.MouseEvent(input.DispatchMouseEventTypeMouseMoved, x((from+to)/2), y, chromedp.ButtonLeft), chromedp.MouseEvent(input.DispatchMouseEventTypeMouseMoved, x(to), y, chromedp.ButtonLeft),
		chromedp.MouseEvent(input.DispatchMouseEventTypeMouseReleased, x(to), y, chromedp.ButtonLeft))
}

// TestLive sees changes come in without a reload, without a jump, and with what
// is being typed left alone.
func TestLive(t *testing.T) {
	h := newFake()
	_, url := serve(t, h, configs.Page{})
	ctx := tab(t, 1280, 900)
	do(t, ctx, chromedp.Navigate(url+"loops/AIC-204?hours=0.05"))
	wait(t, ctx, charted)
	do(t, ctx, script("scrollTo(0, 400); document.querySelector('#act [name=why]').value = 'typed'; window.kept = document.querySelector('.uplot'); window.first = document.getElementById('spanword').title"))
	at := eval[int](t, ctx, "scrollY")
	if err := h.Acknowledge(h.eps[0].ID, "B. Hale", "seen from the gate", time.Time{}); err != nil {
		t.Fatal(err)
	}
	wait(t, ctx, "document.getElementById('journal').textContent.includes('B. Hale') && document.getElementById('said').textContent.includes('acknowledged')")
	wait(t, ctx, "document.getElementById('spanword').title != window.first")
	if !eval[bool](t, ctx, "document.querySelector('#act [name=why]').value == 'typed' && document.querySelector('.uplot') === window.kept") {
		t.Error("what was typed or the chart was lost")
	}
	if now := eval[int](t, ctx, "scrollY"); now != at {
		t.Errorf("the view jumped from %d to %d", at, now)
	}
	// Who looks at the past is left in peace.
	do(t, ctx, chromedp.Navigate(url+"loops/AIC-204?from=2026-01-06T01:00:00Z&to=2026-01-06T02:00:00Z"))
	wait(t, ctx, charted+" && document.querySelector('[data-k=now]')")
	do(t, ctx, script("window.first = document.getElementById('spanword').title"))
	pulses(t, ctx, 3)
	if !eval[bool](t, ctx, "document.getElementById('spanword').title == window.first") {
		t.Error("a span of the past moved")
	}
	// The list: an acknowledged episode changes its card.
	do(t, ctx, chromedp.Navigate(url))
	wait(t, ctx, "document.querySelector('.ep.morning')")
	id := h.Episodes()[1].ID
	pulses(t, ctx, 2) // the page has heard the revision it starts from
	if err := h.Acknowledge(id, "B. Hale", "", time.Time{}); err != nil {
		t.Fatal(err)
	}
	wait(t, ctx, fmt.Sprintf("[...document.querySelectorAll('.ep .foot')].filter(f => f.textContent.includes('%s')).length >= 2", alert.Acknowledged))
}

// TestOpenForLong follows a fast loop for longer than its span: what has left
// the view is let go.
func TestOpenForLong(t *testing.T) {
	h := newFake()
	h.frozen = true
	h.add("PIC-77", "fast", "", "bar", 0, 100, 10, detect.Judged, "", quiet(50, 0.3, 50))
	_, url := serve(t, h, configs.Page{})
	ctx := tab(t, 1280, 900)
	do(t, ctx, before(feeder), chromedp.Navigate(url+"loops/PIC-77?hours=0.001"))
	wait(t, ctx, charted+" && window.feed")
	most, nodes := 0, eval[int](t, ctx, "document.querySelectorAll('*').length")
	for i := range 20 { // pulses, each with two seconds of frames
		do(t, ctx, script(fmt.Sprintf(`{ const at = %d, t = Array.from({ length: 200 }, (_, k) => at - 1990 + 10 * k), all = (x) => t.map(() => x);
			pulseAt(at, 1); feed("fresh", { t, pv: all(50), sp: all(50), op: all(50) }); }`, h.base.UnixMilli()+int64(i)*2000)))
		most = max(most, eval[int](t, ctx, "+document.getElementById('trend').dataset.rows"))
	}
	// 3.6 s at 100 frames a second, a tenth more, and 200 that wait to go, and
	// what a pulse brings.
	if most < 360 || most > 360+36+200+200 {
		t.Errorf("%d rows are held of a span of 360", most)
	}
	if n := eval[int](t, ctx, "document.querySelectorAll('*').length"); n > nodes+20 {
		t.Errorf("the document grew from %d to %d elements", nodes, n)
	}
}

// TestConnectionLostAndFound takes the daemon away and brings it back.
func TestConnectionLostAndFound(t *testing.T) {
	h := newFake()
	p := newPage(t, h)
	addr := fmt.Sprintf("127.0.0.1:%d", porttest.Hold(t)) // nobody else takes it while the daemon is away
	ln, err := net.Listen("tcp", addr)
	if err != nil {
		t.Fatal(err)
	}
	srv := &http.Server{Handler: p.Handler()}
	go srv.Serve(ln)
	ctx := tab(t, 1280, 900)
	do(t, ctx, chromedp.Navigate("http://"+addr+"/"))
	wait(t, ctx, "document.body.classList.contains('live')")
	pulses(t, ctx, 1)
	srv.Close()
	wait(t, ctx, "/The page lost its connection \\d+ s ago. What you see is old/.test(document.getElementById('lost').textContent) && !document.getElementById('lost').hidden")
	if !eval[bool](t, ctx, "document.body.classList.contains('lost')") {
		t.Error("what is old does not look old")
	}
	if ln, err = net.Listen("tcp", addr); err != nil {
		t.Fatal(err)
	}
	srv = &http.Server{Handler: p.Handler()}
	go srv.Serve(ln)
	t.Cleanup(func() { srv.Close() })
	wait(t, ctx, "document.getElementById('lost').hidden && !document.body.classList.contains('lost')")
}

// TestEveryViewFits checks every view for width on a phone, for old browsers'
// script-free reading, in both colours, and by the rules of axe.
func TestEveryViewFits(t *testing.T) {
	h := newFake()
	h.frozen = true
	h.hostile()
	_, url := serve(t, h, configs.Page{})
	axe, err := os.ReadFile(filepath.Join(peer, "node_modules/axe-core/axe.min.js"))
	if err != nil && os.Getenv("MIDWATCH_PEERS") == "1" {
		t.Fatalf("%v; hint: npm ci in %s", err, peer)
	}
	for _, size := range []struct {
		name string
		w, h int64
		dark bool
	}{{"desk", 1280, 900, false}, {"desk in the dark", 1280, 900, true}, {"phone", 360, 740, false}} {
		ctx := tab(t, size.w, size.h)
		do(t, ctx, dark(size.dark))
		for _, v := range allViews {
			do(t, ctx, chromedp.Navigate(url+v[0]))
			wait(t, ctx, v[1])
			if over := eval[int](t, ctx, "document.documentElement.scrollWidth - innerWidth"); over > 0 {
				t.Errorf("%s, /%s: %d px too wide: %s", size.name, v[0], over, eval[string](t, ctx, "[...document.querySelectorAll('body *')].filter(e => e.getBoundingClientRect().right > innerWidth + 1).slice(0, 5).map(e => e.tagName + '.' + e.getAttribute('class')).join(' ')"))
			}
			if eval[bool](t, ctx, "window.harmed === 1") {
				t.Errorf("%s, /%s: a name ran as a script", size.name, v[0])
			}
			if axe == nil {
				continue
			}
			do(t, ctx, script(string(axe)))
			// Asked for in the background: an answer that is waited for by polling
			// does not hold the tab.
			do(t, ctx, script("window.axed = null; axe.run(document, {runOnly: ['wcag2a', 'wcag2aa', 'wcag21a', 'wcag21aa', 'wcag22aa', 'best-practice']}).then(r => { window.axed = r.violations.map(v => v.id + ': ' + v.help + ' ' + v.nodes.slice(0, 3).map(n => n.target + ' ' + (n.any[0]?.message ?? n.all[0]?.message ?? '')).join(' | ')) }, e => { window.axed = [String(e)] }); 0"))
			wait(t, ctx, "window.axed")
			for _, x := range eval[[]string](t, ctx, "window.axed") {
				t.Errorf("%s, /%s: %s", size.name, v[0], x)
			}
		}
	}
	if axe == nil {
		t.Logf("accessibility was not checked; hint: npm ci in %s", peer)
	}
}

// TestHostileNamesInTheBrowser opens loops whose names try to do harm.
func TestHostileNamesInTheBrowser(t *testing.T) {
	h := newFake()
	h.frozen = true
	h.hostile()
	_, url := serve(t, h, configs.Page{})
	ctx := tab(t, 1280, 900)
	do(t, ctx, chromedp.Navigate(url))
	wait(t, ctx, "document.body.classList.contains('live')")
	links := eval[[]string](t, ctx, "[...document.querySelectorAll('.strip .n')].map(a => a.href)")
	names := eval[[]string](t, ctx, "[...document.querySelectorAll('.strip .n b')].map(a => a.textContent)")
	n := 0
	for i, name := range names {
		if strings.ContainsAny(name, "<\"/=:\u202eW") || name == ".." {
			n++
			do(t, ctx, chromedp.Navigate(links[i]))
			wait(t, ctx, charted)
			if got := eval[string](t, ctx, "document.querySelector('h1').textContent"); got != name {
				t.Errorf("the link of %q leads to %q", name, got)
			}
			if eval[bool](t, ctx, "window.harmed === 1") {
				t.Errorf("%q ran as a script", name)
			}
		}
	}
	if n != 8 {
		t.Errorf("%d of 8 hostile loops were opened", n)
	}
}

// TestKeyboardOnly reaches a loop, its chart and its forms with keys alone, and
// sees where the focus is.
func TestKeyboardOnly(t *testing.T) {
	h := newFake()
	h.frozen = true
	_, url := serve(t, h, configs.Page{})
	ctx := tab(t, 1280, 900)
	do(t, ctx, chromedp.Navigate(url))
	wait(t, ctx, "document.body.classList.contains('live')")
	do(t, ctx, chromedp.KeyEvent(kb.Tab))
	if got := eval[string](t, ctx, "document.activeElement.textContent"); got != "skip to the view" {
		t.Errorf("the first stop is %q", got)
	}
	if !eval[bool](t, ctx, "document.activeElement.getBoundingClientRect().left >= 0") {
		t.Error("the way past the head cannot be seen")
	}
	tabTo(t, ctx, "document.activeElement.matches('.ep h3 a')", 10)
	if !eval[bool](t, ctx, "getComputedStyle(document.activeElement).outlineStyle == 'solid'") {
		t.Error("the focus cannot be seen")
	}
	tabTo(t, ctx, "document.activeElement.matches('.band a')", 60)
	if got := eval[string](t, ctx, "document.activeElement.getAttribute('aria-label')"); !strings.HasPrefix(got, "AIC-204: growing since 01:12") {
		t.Errorf("the first mark is called %q", got)
	}
	do(t, ctx, chromedp.KeyEvent(kb.Enter))
	wait(t, ctx, "location.pathname.endsWith('/loops/AIC-204') && "+charted)
	tabTo(t, ctx, "document.activeElement.id == 'trend'", 40)
	tabTo(t, ctx, "document.activeElement.matches('#act [name=who]')", 60)
	do(t, ctx, chromedp.KeyEvent("A. Reed"), chromedp.KeyEvent(kb.Enter))
	wait(t, ctx, "document.querySelector('.done')?.textContent.includes('acknowledged')")
	if len(h.acts) != 1 || h.acts[0] != "acknowledge A. Reed" {
		t.Errorf("acts %q", h.acts)
	}
}

func tabTo(t *testing.T, ctx context.Context, js string, most int) {
	t.Helper()
	for range most {
		if eval[bool](t, ctx, js) {
			return
		}
		do(t, ctx, chromedp.KeyEvent(kb.Tab))
	}
	t.Fatalf("%d tabs did not lead to %s", most, js)
}

// TestScriptsOff reads and acts without any script.
func TestScriptsOff(t *testing.T) {
	h := newFake()
	h.frozen = true
	h.many(60)
	_, url := serve(t, h, configs.Page{})
	ctx := tab(t, 1280, 900)
	do(t, ctx, func(ctx context.Context, target *chromedp.Target) (chromedp.Void, error) {
		_, err := cdp.Call(ctx, target, emulation.SetScriptExecutionDisabled, emulation.SetScriptExecutionDisabledParams{Value: true})
		return chromedp.Void{}, err
	}, chromedp.Navigate(url))
	text := func() string {
		v, err := chromedp.Run(ctx, chromedp.Text(chromedp.CSS("main")))
		if err != nil {
			t.Fatal(err)
		}
		return v
	}
	if s := text(); !strings.Contains(s, "growing since 01:12") || !strings.Contains(s, "next rows") {
		t.Error("the list cannot be read without scripts")
	}
	do(t, ctx, chromedp.Click(chromedp.CSS(".pages a")), chromedp.WaitVisible(chromedp.CSS(".pages a[href*='?']")))
	if s := text(); !strings.Contains(s, "from 40 on") {
		t.Error("the next rows do not come without scripts")
	}
	do(t, ctx, chromedp.Navigate(url+"loops/AIC-204"))
	if s := text(); !strings.Contains(s, "reset too short, likely") {
		t.Error("a loop cannot be read without scripts")
	}
	do(t, ctx, chromedp.Click(chromedp.CSS("#act details:has(form[action*=shelve]) summary")), chromedp.SendKeys(chromedp.CSS("#act form[action*=shelve] [name=who]"), "A. Reed"), chromedp.SendKeys(chromedp.CSS("#act form[action*=shelve] [name=why]"), "analyser service"),
		chromedp.Click(chromedp.CSS("#act form[action*=shelve] button")), chromedp.WaitVisible(chromedp.CSS(".done")))
	if len(h.acts) != 1 || h.acts[0] != "shelve AIC-204" {
		t.Errorf("acts %q", h.acts)
	}
}

// TestSignInInTheBrowser tries a wrong token, then a right one, comes from
// another site with a link, and has a form of another site refused.
func TestSignInInTheBrowser(t *testing.T) {
	h := newFake()
	h.frozen = true
	_, url := serve(t, h, configs.Page{TokensFile: tokensFile(t)})
	ctx := tab(t, 1280, 900)
	do(t, ctx, chromedp.Navigate(url+"loops/AIC-204"), chromedp.SendKeys(chromedp.CSS("#token"), "nonsense"), chromedp.Click(chromedp.CSS("main button")))
	wait(t, ctx, "document.querySelector('[role=alert]')?.textContent.includes('not known here')")
	do(t, ctx, chromedp.SendKeys(chromedp.CSS("#token"), "may-act"), chromedp.Click(chromedp.CSS("main button")))
	wait(t, ctx, "location.pathname == '/loops/AIC-204' && "+charted)
	if c := eval[string](t, ctx, "document.cookie"); c != "" {
		t.Errorf("scripts can read the cookie: %q", c)
	}
	// Another site: localhost is not 127.0.0.1.
	other := httptest.NewServer(http.HandlerFunc(func(w http.ResponseWriter, r *http.Request) {
		w.Header().Set("Content-Type", "text/html")
		fmt.Fprintf(w, `<a id="link" href="%swatch">link</a><form id="f" method="post" action="%sloops/AIC-204/shelve"><input name="why" value="x"><input name="hours" value="8"><button id="b">go</button></form>`, url, url)
	}))
	t.Cleanup(other.Close)
	evil := strings.Replace(other.URL, "127.0.0.1", "localhost", 1)
	do(t, ctx, chromedp.Navigate(evil), chromedp.Click(chromedp.CSS("#link")))
	wait(t, ctx, "location.pathname == '/watch' && document.querySelector('h1')?.textContent == 'The watch itself'")
	do(t, ctx, chromedp.Navigate(evil), chromedp.Click(chromedp.CSS("#b")))
	wait(t, ctx, "document.body?.textContent.includes('came from another site')")
	if len(h.acts) != 0 {
		t.Errorf("a form of another site acted: %q", h.acts)
	}
}

// TestPrintAndMotion checks the sheet for paper and for who wants no motion.
func TestPrintAndMotion(t *testing.T) {
	h := newFake()
	h.frozen = true
	_, url := serve(t, h, configs.Page{})
	ctx := tab(t, 1280, 900)
	do(t, ctx, media("prefers-reduced-motion", "reduce"), chromedp.Navigate(url+"loops/AIC-204"))
	wait(t, ctx, charted)
	if s := eval[string](t, ctx, "getComputedStyle(document.documentElement).scrollBehavior"); s != "auto" {
		t.Errorf("scrolling is %q for who wants no motion", s)
	}
	do(t, ctx, func(ctx context.Context, target *chromedp.Target) (chromedp.Void, error) {
		_, err := cdp.Call(ctx, target, emulation.SetEmulatedMedia, emulation.SetEmulatedMediaParams{Media: "print"})
		return chromedp.Void{}, err
	})
	if !eval[bool](t, ctx, "getComputedStyle(document.getElementById('act')).display == 'none' && document.querySelector('.uplot').offsetHeight > 100") {
		t.Error("on paper: forms go, the trend stays")
	}
}
