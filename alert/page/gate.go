package page

import (
	"bytes"
	"context"
	"crypto/rand"
	"crypto/sha256"
	"crypto/subtle"
	"errors"
	"maps"
	"net"
	"net/http"
	"net/url"
	"os"
	"strings"
	"sync"
	"time"

	"golang.org/x/time/rate"
)

// Visitor is who makes a request.
type Visitor struct {
	Name string // of the token; empty where no token is needed
	Act  bool   // may acknowledge, shelve and leave notes
}

type visitorKey struct{}

// VisitorOf tells who makes a request that came through the gate.
func VisitorOf(ctx context.Context) Visitor {
	v, _ := ctx.Value(visitorKey{}).(Visitor)
	return v
}

const (
	cookieName = "midwatch"
	sessionAge = 30 * 24 * time.Hour
	maxBody    = 64 << 10
	maxStreams = 256
	// More than 1000 sessions are no people: the one that would end first goes.
	maxSessions = 1000
	// A page asks for a dozen things at once and then for little.
	perSecond, burst = 60, 300
)

// gate stands before every request: headers, Host, rates, tokens, origin.
type gate struct {
	p       *Page
	next    http.Handler
	tokens  *tokenFile // nil: none needed
	origins *http.CrossOriginProtection
	hosts   map[string]bool

	mu       sync.Mutex
	rates    map[string]*rate.Limiter
	tries    map[string]*rate.Limiter // signing in
	sessions map[[sha256.Size]byte]Session
}

// Session is one who is signed in. Token is the hash of the token, which must
// still be in the tokens file.
type Session struct {
	Token   [sha256.Size]byte
	Expires time.Time
}

// Sessions keeps who is signed in over a restart, so that nobody is asked for a
// token at night because the box was updated. An id is the hash of a cookie:
// what is kept signs nobody in.
type Sessions interface {
	Sessions() (map[[sha256.Size]byte]Session, error)
	KeepSession(id [sha256.Size]byte, s Session) error
	DropSession(id [sha256.Size]byte) error
}

func newGate(p *Page, next http.Handler, tokens *tokenFile) *gate {
	g := &gate{p: p, next: next, tokens: tokens, origins: http.NewCrossOriginProtection(),
		hosts: map[string]bool{"localhost": true}, rates: map[string]*rate.Limiter{}, tries: map[string]*rate.Limiter{}, sessions: map[[sha256.Size]byte]Session{}}
	if h, err := os.Hostname(); err == nil {
		g.hosts[strings.ToLower(h)] = true
	}
	if u, err := url.Parse(p.o.Page.URL); err == nil && u.Host != "" {
		g.hosts[strings.ToLower(u.Hostname())] = true
	}
	if h, _, err := net.SplitHostPort(p.o.Page.Listen); err == nil && h != "" {
		g.hosts[strings.ToLower(h)] = true
	}
	if tokens != nil && p.o.Sessions != nil {
		kept, err := p.o.Sessions.Sessions()
		if err != nil {
			p.once("sessions", err)
		}
		maps.Copy(g.sessions, kept)
	}
	return g
}

// secure sets what every answer carries. Strict-Transport-Security is not among
// it: it would bind every port of the box's name, also those of other programs,
// and what listens here with a certificate answers nothing in plain.
func secure(h http.Header) {
	h.Set("Content-Security-Policy", "default-src 'none'; script-src 'self'; style-src 'self'; img-src 'self' data:; connect-src 'self'; form-action 'self'; base-uri 'none'; frame-ancestors 'none'")
	h.Set("X-Content-Type-Options", "nosniff")
	h.Set("X-Frame-Options", "DENY")
	h.Set("Referrer-Policy", "same-origin")
	h.Set("Cross-Origin-Opener-Policy", "same-origin")
	h.Set("Cross-Origin-Resource-Policy", "same-origin")
	h.Set("Permissions-Policy", "camera=(), geolocation=(), microphone=()")
	h.Set("Cache-Control", "no-store")
}

// hostOK refuses names that are not ours: a page elsewhere cannot make a
// browser call us by its own name. Addresses cannot be bent that way.
func (g *gate) hostOK(host string) bool {
	if h, _, err := net.SplitHostPort(host); err == nil {
		host = h
	}
	host = strings.ToLower(strings.TrimSuffix(strings.Trim(host, "[]"), "."))
	return net.ParseIP(host) != nil || g.hosts[host]
}

func remote(r *http.Request) string {
	h, _, err := net.SplitHostPort(r.RemoteAddr)
	if err != nil {
		return r.RemoteAddr
	}
	return h
}

// allow spends one of who's requests. The table is begun anew when full: what
// is forgotten is at most one burst.
func (g *gate) allow(table map[string]*rate.Limiter, who string, every rate.Limit, burst int) bool {
	g.mu.Lock()
	defer g.mu.Unlock()
	l := table[who]
	if l == nil {
		if len(table) >= 4096 {
			clear(table)
		}
		l = rate.NewLimiter(every, burst)
		table[who] = l
	}
	return l.AllowN(g.p.o.Clock(), 1)
}

func (g *gate) ServeHTTP(w http.ResponseWriter, r *http.Request) {
	secure(w.Header())
	r = g.p.unprefix(r)
	path := r.URL.Path
	if path != "/healthz" && !g.hostOK(r.Host) {
		g.p.refuse(w, r, http.StatusMisdirectedRequest, "this name is not served here", "call the page by its address, localhost, or the name in page.url")
		return
	}
	if !g.allow(g.rates, remote(r), perSecond, burst) {
		w.Header().Set("Retry-After", "2")
		g.p.refuse(w, r, http.StatusTooManyRequests, "too many requests", "wait two seconds")
		return
	}
	if r.ContentLength > maxBody {
		g.p.refuse(w, r, http.StatusRequestEntityTooLarge, "the request is too large", "forms of this page are small")
		return
	}
	r.Body = http.MaxBytesReader(w, r.Body, maxBody)
	limitTime(w, r)
	if err := g.origins.Check(r); err != nil {
		g.p.o.Log.Warn("request from another site refused", "audit", true, "path", spare(path), "from", remote(r), "origin", r.Header.Get("Origin"))
		g.p.refuse(w, r, http.StatusForbidden, "this request came from another site", "use the forms of the page itself")
		return
	}
	v, ok := g.visitor(r)
	switch {
	case path == "/sign-in" && r.Method == http.MethodPost:
		g.signIn(w, r)
		return
	case path == "/sign-out" && r.Method == http.MethodPost:
		g.signOut(w, r, v)
		return
	case strings.HasPrefix(path, linkPath):
		// The link itself says what it is good for; guessing is made slow.
		if !g.allow(g.tries, "link "+remote(r), rate.Every(6*time.Second), 10) {
			w.Header().Set("Retry-After", "6")
			g.p.refuse(w, r, http.StatusTooManyRequests, "too many links were opened from your address", "wait a minute, then try again")
			return
		}
	case path == "/healthz", strings.HasPrefix(path, "/assets/"), path == "/sign-in":
	case !ok:
		g.askToken(w, r)
		return
	case r.Method != http.MethodGet && r.Method != http.MethodHead && !v.Act:
		g.p.refuse(w, r, http.StatusForbidden, "this token may only look", "sign in with a token of the role act")
		return
	}
	g.next.ServeHTTP(w, r.WithContext(context.WithValue(r.Context(), visitorKey{}, v)))
}

// limitTime keeps a slow client from holding anything for long, whatever server
// we stand in. Streams move the limit on for themselves. Only a body has a read
// limit: a read that ends in time would end the request of who sent none.
func limitTime(w http.ResponseWriter, r *http.Request) {
	rc := http.NewResponseController(w)
	most := time.Minute
	if strings.HasSuffix(r.URL.Path, "/export") || strings.HasSuffix(r.URL.Path, "/dossier") {
		most = 15 * time.Minute
	}
	// A writer that knows no deadlines is none of the network.
	_ = rc.SetWriteDeadline(time.Now().Add(most))
	if r.ContentLength != 0 {
		_ = rc.SetReadDeadline(time.Now().Add(30 * time.Second))
	}
}

// visitor finds out who asks: by cookie or by Authorization: Bearer.
func (g *gate) visitor(r *http.Request) (Visitor, bool) {
	if g.tokens == nil {
		return Visitor{Act: true}, true
	}
	if t, ok := strings.CutPrefix(r.Header.Get("Authorization"), "Bearer "); ok {
		return g.byHash(sha256.Sum256([]byte(t)))
	}
	c, err := r.Cookie(cookieName)
	if err != nil {
		return Visitor{}, false
	}
	g.mu.Lock()
	s, ok := g.sessions[sha256.Sum256([]byte(c.Value))]
	g.mu.Unlock()
	if !ok || g.p.o.Clock().After(s.Expires) {
		return Visitor{}, false
	}
	return g.byHash(s.Token)
}

// byHash looks through all tokens: how long it takes says nothing.
func (g *gate) byHash(h [sha256.Size]byte) (v Visitor, ok bool) {
	list, err := g.tokens.tokens()
	if err != nil {
		g.p.once("tokens", err)
	}
	now := g.p.o.Clock()
	for _, t := range list {
		if subtle.ConstantTimeCompare(t.Hash[:], h[:]) == 1 && now.Before(t.Expires) {
			v, ok = Visitor{t.Name, t.Role == RoleAct}, true
		}
	}
	return
}

// askToken sends people to the sign-in page and programs away. The cookie is
// strict: a link in a mail arrives without it, so the browser is asked to
// come again from here.
func (g *gate) askToken(w http.ResponseWriter, r *http.Request) {
	if !wantsHTML(r) {
		w.Header().Set("WWW-Authenticate", `Bearer realm="midwatch"`)
		g.p.refuse(w, r, http.StatusUnauthorized, "a token is needed", "send Authorization: Bearer TOKEN")
		return
	}
	if r.Method == http.MethodGet && r.Header.Get("Sec-Fetch-Site") == "cross-site" && r.Header.Get("Sec-Fetch-Mode") == "navigate" {
		g.p.show(w, r, "again", g.p.shell(r, up(r), nil))
		return
	}
	g.p.signInPage(w, r, http.StatusUnauthorized, "")
}

func (g *gate) signIn(w http.ResponseWriter, r *http.Request) {
	if g.tokens == nil {
		seeOther(w, "./")
		return
	}
	if !g.allow(g.tries, remote(r), rate.Every(6*time.Second), 10) {
		w.Header().Set("Retry-After", "6")
		g.p.signInPage(w, r, http.StatusTooManyRequests, "Too many tries from your address. Wait a minute, then try again.")
		return
	}
	token := strings.TrimSpace(r.PostFormValue("token"))
	h := sha256.Sum256([]byte(token))
	v, ok := g.byHash(h)
	if !ok {
		g.p.o.Log.Warn("sign-in refused", "audit", true, "from", remote(r))
		g.p.signInPage(w, r, http.StatusUnauthorized, "This token is not known here, or its time is over. Ask who keeps the tokens file.")
		return
	}
	id := rand.Text()
	now := g.p.o.Clock()
	g.mu.Lock()
	gone := g.endSessions(now)
	key, s := sha256.Sum256([]byte(id)), Session{h, now.Add(sessionAge)}
	g.sessions[key] = s
	g.mu.Unlock()
	g.keep(func(k Sessions) error {
		for _, old := range gone {
			if err := k.DropSession(old); err != nil {
				return err
			}
		}
		return k.KeepSession(key, s)
	})
	g.p.o.Log.Info("signed in", "audit", true, "who", v.Name, "from", remote(r))
	http.SetCookie(w, g.cookie(r, id, int(sessionAge.Seconds())))
	seeOther(w, backTo(r.PostFormValue("to")))
}

// endSessions ends those whose time is over, and makes room for one more. g.mu is held.
func (g *gate) endSessions(now time.Time) (gone [][sha256.Size]byte) {
	for k, s := range g.sessions {
		if now.After(s.Expires) {
			delete(g.sessions, k)
			gone = append(gone, k)
		}
	}
	for len(g.sessions) >= maxSessions {
		var first [sha256.Size]byte
		var ends time.Time
		for k, s := range g.sessions {
			if c := s.Expires.Compare(ends); ends.IsZero() || c < 0 || c == 0 && bytes.Compare(k[:], first[:]) < 0 {
				first, ends = k, s.Expires
			}
		}
		delete(g.sessions, first)
		gone = append(gone, first)
	}
	return gone
}

// keep writes a change of the sessions down. Where that fails they last until a
// restart.
func (g *gate) keep(change func(Sessions) error) {
	if g.p.o.Sessions == nil {
		return
	}
	if err := change(g.p.o.Sessions); err != nil {
		g.p.once("sessions", err)
	}
}

func (g *gate) signOut(w http.ResponseWriter, r *http.Request, v Visitor) {
	if c, err := r.Cookie(cookieName); err == nil {
		key := sha256.Sum256([]byte(c.Value))
		g.mu.Lock()
		_, had := g.sessions[key]
		delete(g.sessions, key)
		g.mu.Unlock()
		if had { // who was never signed in makes nothing be written
			g.keep(func(k Sessions) error { return k.DropSession(key) })
			g.p.o.Log.Info("signed out", "audit", true, "who", v.Name, "from", remote(r))
		}
	}
	http.SetCookie(w, g.cookie(r, "", -1))
	seeOther(w, "./sign-in")
}

// seeOther sends on by a relative way: http.Redirect would make it absolute, and
// the path a proxy serves us under would be lost.
func seeOther(w http.ResponseWriter, to string) {
	w.Header().Set("Location", to)
	w.WriteHeader(http.StatusSeeOther)
}

func (g *gate) cookie(r *http.Request, value string, age int) *http.Cookie {
	path := g.p.o.Page.Prefix
	if path == "" {
		path = "/"
	}
	return &http.Cookie{Name: cookieName, Value: value, Path: path, MaxAge: age, HttpOnly: true, SameSite: http.SameSiteStrictMode,
		Secure: r.TLS != nil || g.p.o.Page.CertFile != "" || strings.HasPrefix(g.p.o.Page.URL, "https:")}
}

// backTo keeps a way back below the page: relative, never another site.
func backTo(to string) string {
	u, err := url.Parse(to)
	if err != nil || to == "" || u.IsAbs() || u.Host != "" || strings.HasPrefix(u.Path, "/") || strings.Contains(to, "\\") {
		return "./"
	}
	return "./" + to
}

func wantsHTML(r *http.Request) bool {
	return !strings.HasPrefix(r.URL.Path, "/api/") && strings.Contains(r.Header.Get("Accept"), "text/html")
}

// exposed checks that a page others can reach is guarded.
func exposed(listen string, tls, tokens bool) error {
	host, _, err := net.SplitHostPort(listen)
	if err != nil {
		return nil // configs says what is wrong with it
	}
	if ip := net.ParseIP(host); host == "localhost" || ip != nil && ip.IsLoopback() || tls && tokens {
		return nil
	}
	return errors.New("page.listen " + listen + " can be reached from other machines, but " +
		map[bool]string{true: "nobody needs a token", false: "there is no TLS"}[tls] +
		"; hint: give page.cert_file, page.key_file and page.tokens_file, or listen on 127.0.0.1")
}
