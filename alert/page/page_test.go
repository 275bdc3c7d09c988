package page

import (
	"compress/gzip"
	"context"
	"encoding/csv"
	"encoding/xml"
	"io"
	"math"
	"net/http"
	"net/url"
	"regexp"
	"strings"
	"testing"
	"time"

	"midwatch/alert"
	"midwatch/configs"
	"midwatch/detect"
)

func newPage(t *testing.T, h *fakeHouse) *Page {
	t.Helper()
	p, err := New(Options{House: h, Page: configs.Page{Listen: "127.0.0.1:0"}, Clock: h.clock})
	if err != nil {
		t.Fatal(err)
	}
	return p
}

// inside is the page behind its gate, for a visitor who may act.
func inside(p *Page) http.Handler {
	return http.HandlerFunc(func(w http.ResponseWriter, r *http.Request) {
		p.gate.next.ServeHTTP(w, r.WithContext(context.WithValue(r.Context(), visitorKey{}, Visitor{Act: true})))
	})
}

// got asks for a view as a person's browser with scripts off would.
func got(t *testing.T, p *Page, path string) (int, string) {
	t.Helper()
	w := call(t, inside(p), "GET", path, "", "Accept", "text/html")
	return w.Code, w.Body.String()
}

func TestReadableWithoutScripts(t *testing.T) {
	h := newFake()
	h.frozen = true
	p := newPage(t, h)
	for path, wants := range map[string][]string{
		"/": {"judged <strong data-k=\"judged\">14</strong>", "What needs a look", "swinging ±0.08\u00a0mg/l", "growing since 01:12", "OP limit about 04:10", "swinging together since 21:32",
			"tuning changed at 23:09", "was off its set point 17:08 – 20:14", "in manual 18:5", "no data 00:", "cannot judge: sampled every 5 min", "held since 02:08: manual", "data 2 s old", "3 of 3 sources alive",
			`href="loops/AIC-204?from=`, "2026-01-06 01:12:12 UTC"},
		"/loops/AIC-204": {"chlorine residual", "swinging ±0.08\u00a0mg/l", "reset too short, likely", "gain too high", "1.16 times a cycle", "66°", "24.6\u00a0s (23.4 to 25.9)", "told to on-call by mail", "lag of the controller 66 degrees",
			"AIC-204/trend.svg?hours=4", "Acknowledge", "Shelve", "0.004\u00a0mg/l", "api/loops/AIC-204/dossier"},
		"/loops/TIC-224":                  {"not in normal mode: in manual", "it is not judged now"},
		"/loops/AIC-201":                  {"episodes/cascade:AIC-201"},
		"/loops/FIC-131?hours=12":         {"mode manual", "mode auto"},
		"/episodes/20260106-0004-kfen":    {"FIC-118", "PIC-107", "FIC-119", "later", "in order of phase"},
		"/episodes/cascade:AIC-201":       {"AIC-201 → FIC-202", "outer over inner"},
		"/watch":                          {"gateway", "looks like a wrong time zone", "the relay refuses: 421 try later", "password_file: opcua.pass", "8.12\u00a0GB", "does not know this node", "0.0.0-test"},
		"/sign-in":                        {"Your token"},
		"/loops/AIC-204?from=nonsense":    {"Is no time", "Answer 400"},
		"/loops/AIC-204?hours=1e9":        {"Answer 400"},
		"/loops/AIC-204?from=1000&to=999": {"The span is empty"},
		"/loops/XX-1":                     {"There is no loop of this name"},
		"/episodes/none":                  {"not known"},
		"/nowhere":                        {"There is no such page"},
		"/?q=no+such+loop":                {"No loop fits"},
		"/?span=24&kind=valve-sticking":   {"The watch, last 24 hours", "1 of 17 loops"},
	} {
		code, body := got(t, p, path)
		if code >= 500 {
			t.Errorf("%s: answer %d", path, code)
		}
		for _, w := range wants {
			if !strings.Contains(body, w) && !strings.Contains(strings.ToLower(body), strings.ToLower(w)) {
				t.Errorf("%s does not say %q", path, w)
			}
		}
	}
}

// What the policy forbids must not be written, or the view breaks silently.
var forbidden = regexp.MustCompile(`(?i)<script>|<style|\sstyle="|\son[a-z]+="|javascript:|(src|href)="(https?:)?//`)

func TestNothingThePolicyForbids(t *testing.T) {
	h := newFake()
	h.frozen = true
	p := newPage(t, h)
	for _, path := range []string{"/", "/loops/AIC-204", "/episodes/20260106-0004-kfen", "/watch", "/sign-in", "/nowhere", "/parts/rows", "/parts/need"} {
		if _, body := got(t, p, path); forbidden.MatchString(body) {
			t.Errorf("%s: %q", path, forbidden.FindString(body))
		}
	}
}

func TestCalmAndEmpty(t *testing.T) {
	h := newFake()
	h.frozen = true
	h.eps = nil
	if _, body := got(t, newPage(t, h), "/"); !strings.Contains(body, "Nothing needs a look.") || !strings.Contains(body, "the 14 loops that are judged") || !strings.Contains(body, "nothing can be said of the 1") {
		t.Error("the calm view does not say of which loops it speaks")
	}
	h = newFake()
	h.frozen = true
	h.eps, h.loops = nil, nil
	if _, body := got(t, newPage(t, h), "/"); !strings.Contains(body, "No loop is judged yet") || !strings.Contains(body, "The loop list is empty") || strings.Contains(body, "Nothing needs a look.") {
		t.Error("an empty list reads as if all were well")
	}
	h = newFake()
	h.down = true
	if _, body := got(t, newPage(t, h), "/"); !strings.Contains(body, `class="stale">data 14 min old · 2 of 3 sources alive`) {
		t.Error("old data are not marked")
	}
}

func TestHostileText(t *testing.T) {
	h := newFake()
	h.frozen = true
	h.hostile()
	p := newPage(t, h)
	paths := []string{"/", "/watch", "/parts/rows", "/parts/need"}
	_, list := got(t, p, "/")
	links := regexp.MustCompile(`class="n" href="(loops/[^"]+)"`).FindAllStringSubmatch(list, -1)
	if len(links) != len(h.loops) {
		t.Fatalf("%d links to %d loops", len(links), len(h.loops))
	}
	for _, m := range links {
		paths = append(paths, "/"+strings.ReplaceAll(m[1], "&#39;", "'"))
	}
	for _, path := range paths {
		path = strings.ReplaceAll(path, "&amp;", "&")
		code, body := got(t, p, path)
		if code != 200 {
			t.Errorf("%s: answer %d", path, code)
		}
		for _, bad := range []string{"<script>w", "<img src=x", "<svg onload", "<b>area", "<u>unit", "ZgotmplZ"} {
			if strings.Contains(body, bad) {
				t.Errorf("%s holds %q", path, bad)
			}
		}
		if strings.HasPrefix(path, "/loops/") {
			if w := call(t, p.gate.next, "GET", path+"/trend.svg", ""); w.Code != 200 || strings.Contains(w.Body.String(), "<script>w") {
				t.Errorf("%s/trend.svg: %d", path, w.Code)
			}
		}
	}
	if w := call(t, inside(p), "GET", "/strips.svg?span=24", ""); w.Code != 200 || xmlProblem(w.Body.String()) != nil || !strings.Contains(w.Body.String(), "growing since") {
		t.Errorf("strips.svg: %d, %v", w.Code, xmlProblem(w.Body.String()))
	}
	if w := call(t, inside(p), "GET", "/loops/AIC-204/trend.svg", ""); xmlProblem(w.Body.String()) != nil {
		t.Error(xmlProblem(w.Body.String()))
	}
	rows, err := csv.NewReader(strings.NewReader(call(t, p.gate.next, "GET", "/loops.csv", "").Body.String())).ReadAll()
	if err != nil || len(rows) < len(h.loops) {
		t.Fatalf("%d rows, %v", len(rows), err)
	}
	for _, r := range rows {
		for _, cell := range r {
			if strings.HasPrefix(cell, "=") {
				t.Errorf("a spreadsheet takes %q for a formula", cell)
			}
		}
	}
}

// xmlProblem says why a picture is no well-formed XML.
func xmlProblem(s string) error {
	d := xml.NewDecoder(strings.NewReader(s))
	for {
		if _, err := d.Token(); err == io.EOF {
			return nil
		} else if err != nil {
			return err
		}
	}
}

// TestFirstViewIsLight holds the first view to 100 kB, packed, with the sheet
// and the script.
func TestFirstViewIsLight(t *testing.T) {
	h := newFake()
	h.frozen = true
	h.many(5000)
	p := newPage(t, h)
	for _, v := range [][]string{{"/", "page.css", "page.js", "icon.svg"}, {"/loops/AIC-204", "page.css", "loop.js", "icon.svg"}} {
		w := call(t, p.gate.next, "GET", v[0], "", "Accept", "text/html", "Accept-Encoding", "gzip")
		sum := w.Body.Len()
		for _, a := range v[1:] {
			sum += len(assets[a].packed)
		}
		t.Logf("%s: %d bytes, %d with its assets", v[0], w.Body.Len(), sum)
		if w.Header().Get("Content-Encoding") != "gzip" || sum > 100_000 {
			t.Errorf("%s: %d bytes, want at most 100000", v[0], sum)
		}
		z, err := gzip.NewReader(w.Body)
		if err != nil {
			t.Fatal(err)
		}
		if b, err := io.ReadAll(z); err != nil || !strings.Contains(string(b), "</html>") {
			t.Errorf("%s does not unpack: %v", v[0], err)
		}
	}
}

func TestDossier(t *testing.T) {
	h := newFake()
	h.frozen = true
	p := newPage(t, h)
	for form, want := range map[string]string{"": "AIC-201", "json": `"relation": "outer"`, "csv": "time,loop,pv,sp,op"} {
		w := call(t, inside(p), "GET", "/api/loops/FIC-202/dossier?hours=12&form="+form, "")
		if body := w.Body.String(); w.Code != 200 || !strings.Contains(body, want) && !strings.Contains(strings.ReplaceAll(body, ":", ": "), want) {
			t.Errorf("form %q: %d, %.200s", form, w.Code, body)
		}
		if csp := w.Header().Get("Content-Security-Policy"); strings.Contains(csp, "script-src") {
			t.Errorf("policy %q", csp)
		}
	}
	// What the watch found elsewhere counts: a loop that swings is not alone.
	if body := call(t, inside(p), "GET", "/api/loops/FIC-118/dossier?hours=12&form=json", "").Body.String(); !strings.Contains(body, "FIC-119 (the watch sees them swing together)") {
		t.Error("the dossier does not name the loops that swing with it")
	}
	for path, code := range map[string]int{"/api/loops/none/dossier": 404, "/api/loops/AIC-204/dossier?from=x": 400, "/api/loops/AIC-204/dossier?from=1000&to=2000": 404} {
		if w := call(t, inside(p), "GET", path, ""); w.Code != code {
			t.Errorf("%s: %d, want %d", path, w.Code, code)
		}
	}
}

func TestPhaseOrder(t *testing.T) {
	lanes := []lane{{Name: "c", phase: -2.5, known: true}, {Name: "a", phase: 0.9, known: true}, {Name: "x"}, {Name: "b", phase: 0.2, known: true}}
	orderByPhase(lanes, 36)
	var names []string
	for _, l := range lanes {
		names = append(names, l.Name)
	}
	if got := strings.Join(names, ""); got != "abcx" && got != "cabx" {
		t.Errorf("order %s", got)
	}
	if !strings.Contains(lanes[1].Lag, "° later") || !strings.Contains(lanes[3].Lag, "little") {
		t.Errorf("words %q, %q", lanes[1].Lag, lanes[3].Lag)
	}
}

func TestForms(t *testing.T) {
	h := newFake()
	h.frozen = true
	p := newPage(t, h)
	post := func(path string, v url.Values) (int, string, string) {
		w := call(t, p.Handler(), "POST", path, v.Encode(), "Content-Type", formType, "Accept", "text/html", "Sec-Fetch-Site", "same-origin")
		return w.Code, w.Header().Get("Location"), w.Body.String()
	}
	id := h.eps[0].ID
	for _, c := range []struct {
		path string
		form url.Values
		code int
		want string
	}{
		{"/episodes/" + id + "/acknowledge", url.Values{"to": {"loops/AIC-204"}}, 400, "No name was given"},
		{"/episodes/" + id + "/acknowledge", url.Values{"who": {"A. Reed"}, "hours": {"-3"}}, 400, "For how long"},
		{"/episodes/none/acknowledge", url.Values{"who": {"A. Reed"}}, 404, "not known"},
		{"/loops/AIC-204/shelve", url.Values{"who": {"A. Reed"}, "hours": {"8"}}, 400, "No reason given"},
		{"/loops/AIC-204/shelve", url.Values{"who": {"A. Reed"}, "hours": {"99999"}, "why": {"x"}}, 400, "For how long"},
	} {
		if code, _, body := post(c.path, c.form); code != c.code || !strings.Contains(body, c.want) {
			t.Errorf("%s %v: %d, want %d %q", c.path, c.form, code, c.code, c.want)
		}
	}
	if len(h.acts) > 0 {
		t.Fatalf("acts %q", h.acts)
	}
	code, to, _ := post("/episodes/"+id+"/acknowledge", url.Values{"who": {"A. Reed"}, "why": {"on my way"}, "to": {"loops/AIC-204"}})
	if code != 303 || to != "../../loops/AIC-204?done=acknowledged" {
		t.Errorf("%d, sent to %q", code, to)
	}
	if _, body := got(t, p, "/loops/AIC-204?done=acknowledged"); !strings.Contains(body, "acknowledged by A. Reed: on my way") || !strings.Contains(body, "Done: acknowledged") {
		t.Error("the loop does not say who acknowledged")
	}
	if code, _, _ := post("/loops/AIC-204/shelve", url.Values{"who": {"A. Reed"}, "hours": {"8"}, "why": {"analyser service"}, "to": {"loops/AIC-204"}}); code != 303 {
		t.Errorf("shelving: %d", code)
	}
	if _, body := got(t, p, "/loops/AIC-204"); !strings.Contains(body, "Shelved until 10:44") || !strings.Contains(body, "analyser service") {
		t.Error("the loop does not say that it is shelved")
	}
	if _, body := got(t, p, "/"); strings.Contains(body, `<article class="ep now"`) {
		t.Error("a shelved loop still stands in what needs a look")
	}
	if code, _, _ := post("/loops/AIC-204/unshelve", url.Values{"who": {"A. Reed"}}); code != 303 || len(h.shelves) != 0 {
		t.Errorf("taking it off the shelf: %d", code)
	}
	if code, _, _ := post("/loops/AIC-204/note", url.Values{"who": {"A. Reed"}, "why": {""}}); code != 400 {
		t.Errorf("an empty note: %d", code)
	}
	if code, to, _ := post("/loops/AIC-204/note", url.Values{"who": {"A. Reed"}, "why": {"as left: reset 240 s <b>"}, "to": {"loops/AIC-204"}}); code != 303 || to != "../../loops/AIC-204?done=noted" {
		t.Errorf("a note: %d, sent to %q", code, to)
	}
	_, body := got(t, p, "/loops/AIC-204")
	for _, want := range []string{"note: as left: reset 240 s &lt;b&gt;, <bdi>A. Reed</bdi>", "note: reset 42 to 60 s, valve greased, <bdi>Jo</bdi>", "What changed before</h3>", "<dd>reset time from about 4 min to 24.6 s</dd>",
		"Before and after a change</h3>", "So far, the loop swings since the change"} {
		if !strings.Contains(body, want) {
			t.Errorf("the loop does not say %q", want)
		}
	}
	_, body = got(t, p, "/loops/FIC-118")
	for _, want := range []string{"4.2\u00a0s: OP logged late, or PV filtered", "the gain goes with PV", "<dt>at PV 30\u00a0m³/h</dt><dd>0.8\u00a0%/% (5 readings)</dd>", "(1 reading)"} {
		if !strings.Contains(body, want) {
			t.Errorf("the loop does not say %q", want)
		}
	}
}

func TestEpisodeLinks(t *testing.T) {
	h := newFake()
	h.frozen = true
	p := newPage(t, h)
	w := call(t, p.gate.next, "GET", "/episodes/"+h.eps[0].ID, "")
	if to := w.Header().Get("Location"); w.Code != 303 || !strings.HasPrefix(to, "../loops/AIC-204?from=") {
		t.Errorf("%d, %q: an episode of one loop is the loop at its span", w.Code, to)
	}
	h.eps[0].Into = h.eps[1].ID
	if w := call(t, p.gate.next, "GET", "/episodes/"+h.eps[0].ID, ""); w.Header().Get("Location") != h.eps[1].ID {
		t.Errorf("a folded episode leads to %q", w.Header().Get("Location"))
	}
}

func TestOrderOfNeed(t *testing.T) {
	h := newFake()
	h.frozen = true
	p := newPage(t, h)
	l := p.look()
	var names []string
	for _, s := range l.pick(filter{Span: usualSpan}) {
		names = append(names, s.Loop.Name)
	}
	want := "AIC-204 LIC-310 FIC-118 FIC-119 PIC-107 FIC-140 TIC-221 AIC-212 TIC-224 AIC-230 AIC-201 FIC-102 FIC-131 FIC-202 LIC-301 LIC-305 PIC-101"
	if got := strings.Join(names, " "); got != want {
		t.Errorf("order of need\n%s\nwant\n%s", got, want)
	}
	for q, want := range map[string]int{"q=chlorine": 2, "q=FILTER+sticking": 1, "area=filters": 4, "see=1": 9, "kind=shared-oscillation": 3, "q=manual": 0, "q=not+in+normal": 1, "source=gateway": 0} {
		v, err := url.ParseQuery(q)
		if err != nil {
			t.Fatal(err)
		}
		if n := len(l.pick(readFilter(v))); n != want {
			t.Errorf("%s gives %d loops, want %d", q, n, want)
		}
	}
}

func TestWords(t *testing.T) {
	now := time.Date(2026, 3, 29, 3, 30, 0, 0, london) // an hour after the clocks went forward
	for _, c := range []struct {
		at   time.Time
		want string
	}{{now.Add(-2 * time.Hour), "00:30"}, {now.Add(-20 * time.Hour), "28 Mar 06:30"}, {time.Date(2025, 12, 1, 8, 0, 0, 0, london), "1 Dec 2025 08:00"}, {now.Add(90 * time.Minute), "05:00"}} {
		if got := clock(c.at.UnixMilli(), now, london); got != c.want {
			t.Errorf("%s: %q, want %q", c.at, got, c.want)
		}
	}
	for v, want := range map[float64]string{math.NaN(): "–", 0: "0", 1234.56: "1235", 0.00012: "0.00012", -3.10: "-3.1", 1e9: "1e+09"} {
		if got := number(v, 4); got != want {
			t.Errorf("%v: %q, want %q", v, got, want)
		}
	}
	for ms, want := range map[int64]string{300: "within a second", 3600400: "60 min behind: looks like a wrong time zone", -5400100: "1.5 h ahead: looks like a wrong time zone", 42000: "42 s behind"} {
		if got := offsetWord(ms); !strings.HasPrefix(got, want[:5]) || strings.Contains(got, "zone") != strings.Contains(want, "zone") || strings.Contains(got, "ahead") != strings.Contains(want, "ahead") {
			t.Errorf("%d ms: %q, want %q", ms, got, want)
		}
	}
	x := trouble{Finding: detect.Finding{At: now.UnixMilli(), Measures: detect.Measures{{Name: "time_to_op_limit_s", Value: 600}, {Name: "time_to_pv_alarm_s", Value: 60}}}}
	if at, what, _ := x.meets(); what != "PV alarm" || at != now.UnixMilli()+60000 {
		t.Errorf("what comes first: %s at %d", what, at)
	}
	if _, rest := x.say(now.Add(time.Hour), london); rest != "PV alarm was due about 03:31" {
		t.Errorf("an hour later: %q", rest)
	}
	// What was met when it was said is no forecast, and old numbers are said to be old.
	x = trouble{Finding: detect.Finding{At: now.UnixMilli(), Measures: detect.Measures{{Name: "time_to_op_limit_s", Value: 0}}}}
	if _, rest := x.say(now.Add(time.Hour), london); rest != "OP limit reached by 03:30" {
		t.Errorf("a limit that was reached: %q", rest)
	}
	for later, want := range map[time.Duration]string{time.Minute: "", time.Hour: "numbers as of 03:30"} {
		if got := asOf(&x.Finding, now.Add(later), london); got != want {
			t.Errorf("%s later: %q, want %q", later, got, want)
		}
	}
	for _, k := range kindLooks {
		if !strings.Contains(string(marks), `id="m-`+k.Mark+`"`) {
			t.Errorf("%s has no drawing", k.Kind)
		}
	}
	if urgencyOrder(alert.Now) >= urgencyOrder(alert.Morning) {
		t.Error("now stands before morning")
	}
}

func TestTimeTicksFollowTheSite(t *testing.T) {
	kolkata := time.FixedZone("+05:30", 5*3600+1800)
	from := time.Date(2026, 1, 5, 0, 0, 0, 0, time.UTC).UnixMilli()
	for _, m := range timeTicks(from, from+4*3600*1000, kolkata, 6) {
		if at := time.UnixMilli(m).In(kolkata); at.Minute() != 0 {
			t.Errorf("a tick at %s, want whole hours of the site", at)
		}
	}
}

func BenchmarkFirstRows(b *testing.B) {
	h := newFake()
	h.frozen = true
	h.many(5000)
	p, err := New(Options{House: h, Page: configs.Page{Listen: "127.0.0.1:0"}, Clock: h.clock})
	if err != nil {
		b.Fatal(err)
	}
	l := p.look()
	for b.Loop() {
		if _, err := p.rows(b.Context(), &l, l.pick(filter{Span: usualSpan}), filter{Span: usualSpan}); err != nil {
			b.Fatal(err)
		}
	}
}
