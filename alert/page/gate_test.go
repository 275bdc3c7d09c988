package page

import (
	"bytes"
	"crypto/sha256"
	"encoding/hex"
	"fmt"
	"io"
	"log/slog"
	"net/http"
	"net/http/cookiejar"
	"net/http/httptest"
	"net/url"
	"os"
	"path/filepath"
	"strings"
	"testing"
	"time"

	"midwatch/configs"
)

func hashOf(s string) string {
	h := sha256.Sum256([]byte(s))
	return hex.EncodeToString(h[:])
}

// tokensFile writes a file with a token of each role and one whose time is over.
func tokensFile(t *testing.T) string {
	t.Helper()
	path := filepath.Join(t.TempDir(), "tokens.csv")
	text := "name,role,sha256,expires\n# the wall screen\nwall,view," + hashOf("look-at-it") + ",2026-12-31\nA. Reed,act," + hashOf("may-act") + ",2026-12-31\nold,act," + hashOf("was-good") + ",2026-01-04\n"
	if err := os.WriteFile(path, []byte(text), 0o600); err != nil {
		t.Fatal(err)
	}
	return path
}

func TestReadTokens(t *testing.T) {
	good := hashOf("x")
	for _, c := range []struct{ name, text, want string }{
		{"fine", "name,role,sha256,expires\na,view," + good + ",2027-01-01\n", ""},
		{"role", "name,role,sha256,expires\na,admin," + good + ",2027-01-01\n", `f:2: role "admin" is unknown`},
		{"the token itself", "name,role,sha256,expires\na,view,secret,2027-01-01\n", "f:2: sha256 is 64 hexadecimal digits; the token itself must not stand here"},
		{"no end", "name,role,sha256,expires\na,view," + good + ",\n", `f:2: expires "" is no day`},
		{"twice", "a,view," + good + ",2027-01-01\na,act," + good + ",2027-01-01\n", `f:2: name "a" is there twice`},
		{"columns", "name,role,sha256,expires\na,view\n", "wrong number of fields"},
		{"empty", "name,role,sha256,expires\n", "f: no token in it"},
		{"no name", " ,view," + good + ",2027-01-01\n", "f:1: a name of 1 to 100 bytes is wanted"},
	} {
		t.Run(c.name, func(t *testing.T) {
			list, err := ReadTokens(strings.NewReader(c.text), "f")
			if c.want == "" {
				if err != nil || len(list) != 1 {
					t.Fatalf("%v, %v", list, err)
				}
				return
			}
			if err == nil || !strings.Contains(err.Error(), c.want) {
				t.Errorf("got %v, want %q", err, c.want)
			}
			if err != nil && strings.Contains(err.Error(), "secret") {
				t.Errorf("the error shows the token: %v", err)
			}
		})
	}
}

func TestTokensFileOpenToAll(t *testing.T) {
	path := tokensFile(t)
	if err := os.Chmod(path, 0o644); err != nil {
		t.Fatal(err)
	}
	_, err := New(Options{House: newFake(), Page: configs.Page{Listen: "127.0.0.1:0", TokensFile: path}})
	if err == nil || !strings.Contains(err.Error(), "can be read by everybody") {
		t.Errorf("got %v", err)
	}
}

func TestExposed(t *testing.T) {
	for _, c := range []struct {
		listen      string
		tls, tokens bool
		ok          bool
	}{
		{"127.0.0.1:8420", false, false, true}, {"localhost:8420", false, false, true}, {"[::1]:8420", false, false, true},
		{"0.0.0.0:8420", false, false, false}, {":8420", false, false, false}, {"10.1.0.7:8420", true, false, false},
		{"10.1.0.7:8420", false, true, false}, {"10.1.0.7:8420", true, true, true}, {"box.example:8420", true, false, false},
	} {
		if err := exposed(c.listen, c.tls, c.tokens); (err == nil) != c.ok {
			t.Errorf("%+v: %v", c, err)
		}
	}
}

func TestBackTo(t *testing.T) {
	for in, want := range map[string]string{"": "./", "loops/AIC-204?hours=4": "./loops/AIC-204?hours=4", "//evil.example/x": "./", "https://evil.example": "./",
		"/etc": "./", "\\\\evil.example": "./", "javascript:alert(1)": "./", "loops/A%2FB": "./loops/A%2FB"} {
		if got := backTo(in); got != want {
			t.Errorf("%q: got %q, want %q", in, got, want)
		}
	}
}

// call sends one request through the gate.
func call(t *testing.T, h http.Handler, method, target, body string, head ...string) *httptest.ResponseRecorder {
	t.Helper()
	r := httptest.NewRequest(method, target, strings.NewReader(body))
	r.Host = "127.0.0.1:8420"
	for i := 0; i < len(head); i += 2 {
		if head[i] == "Host" {
			r.Host = head[i+1]
		} else {
			r.Header.Set(head[i], head[i+1])
		}
	}
	w := httptest.NewRecorder()
	h.ServeHTTP(w, r)
	return w
}

const formType = "application/x-www-form-urlencoded"

func TestGate(t *testing.T) {
	h := newFake()
	h.frozen = true
	var log bytes.Buffer
	p, err := New(Options{House: h, Page: configs.Page{Listen: "127.0.0.1:0", TokensFile: tokensFile(t), URL: "https://watch.kestrel-fen.example/midwatch/", Prefix: "/midwatch"},
		Clock: h.clock, Log: slog.New(slog.NewTextHandler(&log, nil)), API: http.HandlerFunc(func(w http.ResponseWriter, r *http.Request) {
			b, _ := io.ReadAll(r.Body)
			fmt.Fprintf(w, "%s%s %v", b, VisitorOf(r.Context()).Name, VisitorOf(r.Context()).Act)
		})})
	if err != nil {
		t.Fatal(err)
	}
	g := p.Handler()
	for _, c := range []struct {
		name, method, path, body string
		head                     []string
		code                     int
		want                     string
	}{
		{"no token, a program", "GET", "/api/status", "", nil, 401, "a token is needed"},
		{"no token, a person", "GET", "/loops/AIC-204", "", []string{"Accept", "text/html"}, 401, "Your token"},
		{"wrong token", "GET", "/api/status", "", []string{"Authorization", "Bearer nonsense"}, 401, "a token is needed"},
		{"token over", "GET", "/api/status", "", []string{"Authorization", "Bearer was-good"}, 401, "a token is needed"},
		{"good token", "GET", "/api/status", "", []string{"Authorization", "Bearer look-at-it"}, 200, "wall false"},
		{"its hash is no token", "GET", "/api/status", "", []string{"Authorization", "Bearer " + hashOf("look-at-it")}, 401, ""},
		{"health needs none", "GET", "/healthz", "", []string{"Host", "anything.example"}, 200, ""},
		{"metrics need one", "GET", "/metrics", "", nil, 401, ""},
		{"below a prefix", "GET", "/midwatch/api/status", "", []string{"Authorization", "Bearer may-act"}, 200, "A. Reed true"},
		{"another name", "GET", "/api/status", "", []string{"Host", "evil.example", "Authorization", "Bearer may-act"}, 421, "not served here"},
		{"the name in page.url", "GET", "/api/status", "", []string{"Host", "watch.kestrel-fen.example", "Authorization", "Bearer may-act"}, 200, ""},
		{"an address", "GET", "/api/status", "", []string{"Host", "10.1.0.7:8420", "Authorization", "Bearer may-act"}, 200, ""},
		{"from another site", "POST", "/loops/AIC-204/shelve", "why=x&hours=8", []string{"Authorization", "Bearer may-act", "Content-Type", formType, "Sec-Fetch-Site", "cross-site"}, 403, "another site"},
		{"from another origin", "POST", "/loops/AIC-204/shelve", "why=x&hours=8", []string{"Authorization", "Bearer may-act", "Content-Type", formType, "Origin", "https://evil.example"}, 403, "another site"},
		{"may look only", "POST", "/loops/AIC-204/shelve", "why=x&hours=8", []string{"Authorization", "Bearer look-at-it", "Content-Type", formType}, 403, "may only look"},
		{"may look only, by the interface", "POST", "/api/loops/AIC-204/shelve", "{}", []string{"Authorization", "Bearer look-at-it"}, 403, "may only look"},
		{"signs as itself", "POST", "/api/episodes/1/acknowledge", `{"who":"the boss","Who":"the boss","why":"x"}`, []string{"Authorization", "Bearer may-act"}, 200, `{"who":"A. Reed","why":"x"}A. Reed true`},
		{"no body", "POST", "/api/reload", "", []string{"Authorization", "Bearer may-act"}, 200, "A. Reed true"},
		{"too large", "POST", "/loops/AIC-204/shelve", strings.Repeat("x", maxBody+1), []string{"Authorization", "Bearer may-act", "Content-Type", formType}, 413, "too large"},
		{"no such method", "DELETE", "/loops/AIC-204", "", []string{"Authorization", "Bearer may-act"}, 404, ""},
		{"acts", "POST", "/loops/AIC-204/shelve", "why=pump+exchange&hours=8", []string{"Authorization", "Bearer may-act", "Content-Type", formType, "Sec-Fetch-Site", "same-origin"}, 303, ""},
		{"an asset needs none", "GET", "/assets/page.css", "", nil, 200, "--paper"},
		{"a link from a mail", "GET", "/loops/AIC-204", "", []string{"Accept", "text/html", "Sec-Fetch-Site", "cross-site", "Sec-Fetch-Mode", "navigate"}, 200, "http-equiv=\"refresh\""},
	} {
		t.Run(c.name, func(t *testing.T) {
			w := call(t, g, c.method, c.path, c.body, c.head...)
			if w.Code != c.code || !strings.Contains(w.Body.String(), c.want) {
				t.Errorf("got %d %.300s, want %d %q", w.Code, w.Body, c.code, c.want)
			}
			if csp := w.Header().Get("Content-Security-Policy"); strings.Contains(csp, "unsafe") || !strings.Contains(csp, "default-src 'none'") || !strings.Contains(csp, "frame-ancestors 'none'") {
				t.Errorf("policy %q", csp)
			}
		})
	}
	if len(h.acts) != 1 || h.acts[0] != "shelve AIC-204" || h.shelves[0].Who != "A. Reed" {
		t.Errorf("acts %q, shelves %+v: only one request was allowed to act, under the name of its token", h.acts, h.shelves)
	}
	for _, want := range []string{`msg=shelved audit=true who="A. Reed"`, `msg="request from another site refused" audit=true`} {
		if !strings.Contains(log.String(), want) {
			t.Errorf("no audit event %s in\n%s", want, log.String())
		}
	}
}

func TestRates(t *testing.T) {
	h := newFake()
	h.frozen = true
	p, err := New(Options{House: h, Page: configs.Page{Listen: "127.0.0.1:0", TokensFile: tokensFile(t)}, Clock: h.clock})
	if err != nil {
		t.Fatal(err)
	}
	codes := map[int]int{}
	for range burst + 20 {
		codes[call(t, p.Handler(), "GET", "/assets/icon.svg", "").Code]++
	}
	if codes[200] != burst || codes[429] != 20 {
		t.Errorf("answers %v, want %d good and 20 refused", codes, burst)
	}
	h.base = h.base.Add(time.Minute)
	codes = map[int]int{}
	for range 12 {
		codes[call(t, p.Handler(), "POST", "/sign-in", "token=guess", "Content-Type", formType, "Accept", "text/html").Code]++
	}
	if codes[401] != 10 || codes[429] != 2 {
		t.Errorf("tries at signing in %v, want 10 answered and 2 held off", codes)
	}
}

func TestSignInAndOut(t *testing.T) {
	h := newFake()
	h.frozen = true
	tokens := tokensFile(t)
	_, addr := serve(t, h, configs.Page{TokensFile: tokens})
	jar, err := cookiejar.New(nil)
	if err != nil {
		t.Fatal(err)
	}
	c := &http.Client{Jar: jar}
	get := func(path string) (int, string) {
		r, _ := http.NewRequest("GET", addr+path, nil)
		r.Header.Set("Accept", "text/html")
		resp, err := c.Do(r)
		if err != nil {
			t.Fatal(err)
		}
		defer resp.Body.Close()
		b, _ := io.ReadAll(resp.Body)
		return resp.StatusCode, string(b)
	}
	if code, _ := get("watch"); code != 401 {
		t.Fatalf("answer %d without a token", code)
	}
	resp, err := c.PostForm(addr+"sign-in", url.Values{"token": {"may-act"}, "to": {"loops/AIC-204?hours=4"}})
	if err != nil {
		t.Fatal(err)
	}
	resp.Body.Close()
	if resp.StatusCode != 200 || resp.Request.URL.Path != "/loops/AIC-204" || resp.Request.URL.RawQuery != "hours=4" {
		t.Fatalf("sign-in led to %s with %d", resp.Request.URL, resp.StatusCode)
	}
	if code, body := get("watch"); code != 200 || !strings.Contains(body, "signed in as <bdi>A. Reed</bdi>") {
		t.Fatalf("signed in, answer %d", code)
	}
	// A token that is taken back ends the session.
	b, err := os.ReadFile(tokens)
	if err != nil {
		t.Fatal(err)
	}
	if err := os.WriteFile(tokens, bytes.ReplaceAll(b, []byte(hashOf("may-act")), []byte(hashOf("another one"))), 0o600); err != nil {
		t.Fatal(err)
	}
	if err := os.Chtimes(tokens, time.Time{}, time.Now().Add(time.Second)); err != nil {
		t.Fatal(err)
	}
	if code, _ := get("watch"); code != 401 {
		t.Errorf("answer %d with a token taken back", code)
	}
	if err := os.WriteFile(tokens, b, 0o600); err != nil {
		t.Fatal(err)
	}
	if err := os.Chtimes(tokens, time.Time{}, time.Now().Add(2*time.Second)); err != nil {
		t.Fatal(err)
	}
	if code, _ := get("watch"); code != 200 {
		t.Errorf("answer %d with the token back", code)
	}
	if resp, err = c.PostForm(addr+"sign-out", nil); err != nil {
		t.Fatal(err)
	}
	resp.Body.Close()
	if code, _ := get("watch"); code != 401 {
		t.Errorf("answer %d after signing out", code)
	}
}

func TestCookie(t *testing.T) {
	h := newFake()
	p, err := New(Options{House: h, Page: configs.Page{Listen: "127.0.0.1:0", TokensFile: tokensFile(t), URL: "https://watch.example/", Prefix: "/midwatch/"}, Clock: h.clock})
	if err != nil {
		t.Fatal(err)
	}
	w := call(t, p.Handler(), "POST", "/midwatch/sign-in", "token=may-act", "Content-Type", formType)
	cs := w.Result().Cookies()
	if w.Code != 303 || len(cs) != 1 {
		t.Fatalf("%d, %v", w.Code, cs)
	}
	if c := cs[0]; !c.HttpOnly || !c.Secure || c.SameSite != http.SameSiteStrictMode || c.Path != "/midwatch" || len(c.Value) < 20 {
		t.Errorf("cookie %+v", c)
	}
	if loc := w.Header().Get("Location"); loc != "./" {
		t.Errorf("sent to %q", loc)
	}
}

// countingSessions counts what is written of sessions.
type countingSessions struct{ kept, dropped int }

func (c *countingSessions) Sessions() (map[[sha256.Size]byte]Session, error) { return nil, nil }
func (c *countingSessions) KeepSession([sha256.Size]byte, Session) error     { c.kept++; return nil }
func (c *countingSessions) DropSession([sha256.Size]byte) error              { c.dropped++; return nil }

// Sessions are bounded, the one that would end first makes room; and who is not
// signed in makes nothing be written, whatever cookie is sent.
func TestSessionsAreBounded(t *testing.T) {
	h := newFake()
	kept := &countingSessions{}
	p, err := New(Options{House: h, Page: configs.Page{Listen: "127.0.0.1:0", TokensFile: tokensFile(t)}, Clock: h.clock, Sessions: kept})
	if err != nil {
		t.Fatal(err)
	}
	for range 3 {
		if w := call(t, p.Handler(), "POST", "/sign-out", "", "Content-Type", formType, "Cookie", cookieName+"=made-up"); w.Code != 303 {
			t.Fatalf("answer %d", w.Code)
		}
	}
	if kept.dropped != 0 {
		t.Errorf("signing out by a made-up cookie wrote %d times", kept.dropped)
	}
	now := h.clock()
	g := &gate{sessions: map[[sha256.Size]byte]Session{}}
	for i := range maxSessions {
		g.sessions[[sha256.Size]byte{byte(i), byte(i >> 8), 1}] = Session{Expires: now.Add(time.Duration(i+1) * time.Hour)}
	}
	if gone := g.endSessions(now); len(gone) != 1 || gone[0] != [sha256.Size]byte{0, 0, 1} || len(g.sessions) != maxSessions-1 {
		t.Errorf("%d ended, %d are left", len(gone), len(g.sessions))
	}
	if gone := g.endSessions(now.Add(90 * time.Minute)); len(gone) != 0 {
		t.Errorf("%d ended with room left", len(gone))
	}
	if gone := g.endSessions(now.Add(100*time.Hour + time.Minute)); len(gone) != 99 {
		t.Errorf("%d of 99 ended whose time was over", len(gone))
	}
}
