// Package page is the page of the watch and its HTTP interface: which loop,
// since when, why, and whether to get up.
//
// [New] takes a [House], the running daemon behind a small interface. All views
// are HTML made here and can be read with scripts off; a small script adds the
// chart, filters without a reload and live updates. Everything is embedded:
// nothing is fetched from elsewhere. Links are relative, so that the page works
// below any path of a proxy.
//
// The page is for people; programs use the JSON below /api/. Both go through
// the same gate: Host check, tokens, origin check of every POST, limits.
//
//go:generate go run ./web/generate
package page

import (
	"context"
	"errors"
	"fmt"
	"log/slog"
	"net/http"
	"net/url"
	"strings"
	"sync"
	"time"

	"midwatch/configs"
)

// Options of a page.
type Options struct {
	House House
	Page  configs.Page
	API   http.Handler     // what else lies below /api/, /healthz and /metrics; may be nil
	Clock func() time.Time // wall clock; nil: time.Now
	Log   *slog.Logger     // nil: discarded; audit events carry audit=true
	// Sessions keeps who is signed in; nil: until the restart.
	Sessions Sessions
}

// Page serves all views. It is safe for concurrent use and starts no goroutine
// of its own.
type Page struct {
	o       Options
	gate    *gate
	glance  glance
	strips  strips
	sparks  sparks
	reading chan struct{} // bounds how many spans are read at once
	streams chan struct{}
	// dossiers bounds how many are made at once: one.
	dossiers chan struct{}

	mu   sync.Mutex
	said map[string]string
}

// New makes the page. It refuses to stand open: beyond this machine it wants
// TLS and tokens.
func New(o Options) (*Page, error) {
	if o.House == nil {
		return nil, errors.New("page without a house; hint: give Options.House")
	}
	if o.Clock == nil {
		o.Clock = time.Now
	}
	if o.Log == nil {
		o.Log = slog.New(slog.DiscardHandler)
	}
	o.Page.Prefix = strings.TrimSuffix(o.Page.Prefix, "/")
	if err := exposed(o.Page.Listen, o.Page.CertFile != "" && o.Page.KeyFile != "", o.Page.TokensFile != ""); err != nil {
		return nil, err
	}
	p := &Page{o: o, reading: make(chan struct{}, 4), streams: make(chan struct{}, maxStreams), dossiers: make(chan struct{}, 1), said: map[string]string{}}
	var tokens *tokenFile
	if o.Page.TokensFile != "" {
		var err error
		if tokens, err = openTokens(o.Page.TokensFile); err != nil {
			return nil, err
		}
	}
	p.gate = newGate(p, p.routes(), tokens)
	return p, nil
}

// Handler is the page as the network sees it.
func (p *Page) Handler() http.Handler { return p.gate }

func (p *Page) routes() *http.ServeMux {
	m := http.NewServeMux()
	m.HandleFunc("GET /{$}", p.serveList)
	m.HandleFunc("GET /parts/{part}", p.servePart)
	m.HandleFunc("GET /loops.csv", p.serveListCSV)
	m.HandleFunc("GET /strips.svg", p.serveStripsSVG)
	m.HandleFunc("GET /loops/{loop}", p.serveLoop)
	m.HandleFunc("GET /loops/{loop}/trend.csv", p.serveTrendCSV)
	m.HandleFunc("GET /loops/{loop}/trend.svg", p.serveTrendSVG)
	m.HandleFunc("POST /loops/{loop}/shelve", p.shelve)
	m.HandleFunc("POST /loops/{loop}/unshelve", p.unshelve)
	m.HandleFunc("POST /loops/{loop}/note", p.note)
	m.HandleFunc("GET /episodes/{id}", p.serveEpisode)
	m.HandleFunc("GET /episodes/{id}/loops.csv", p.serveLanesCSV)
	m.HandleFunc("GET /episodes/{id}/loops.svg", p.serveLanesSVG)
	m.HandleFunc("POST /episodes/{id}/acknowledge", p.acknowledge)
	m.HandleFunc("GET "+linkPath+"{token}", p.serveLink)
	m.HandleFunc("POST "+linkPath+"{token}", p.acknowledgeByLink)
	m.HandleFunc("GET /watch", p.serveWatch)
	m.HandleFunc("GET /sign-in", func(w http.ResponseWriter, r *http.Request) { p.signInPage(w, r, http.StatusOK, "") })
	m.HandleFunc("GET /assets/{file}", serveAsset)
	m.HandleFunc("GET /api/loops/{loop}/trend", p.serveTrend)
	m.HandleFunc("GET /api/loops/{loop}/dossier", p.serveDossier)
	m.HandleFunc("GET /api/stream", p.serveStream)
	if p.o.API != nil {
		m.Handle("/api/", signed(p.o.API))
		m.Handle("/healthz", p.o.API)
		m.Handle("/metrics", p.o.API)
	}
	m.HandleFunc("/", func(w http.ResponseWriter, r *http.Request) { p.notFound(w, r, "there is no such page") })
	return m
}

// unprefix takes the path in front of all pages off, where a proxy left it on.
func (p *Page) unprefix(r *http.Request) *http.Request {
	pre := p.o.Page.Prefix
	if pre == "" || r.URL.Path != pre && !strings.HasPrefix(r.URL.Path, pre+"/") {
		return r
	}
	c := new(http.Request)
	*c = *r
	c.URL = new(url.URL)
	*c.URL = *r.URL
	c.URL.Path = "/" + strings.TrimPrefix(strings.TrimPrefix(r.URL.Path, pre), "/")
	if r.URL.RawPath != "" {
		c.URL.RawPath = "/" + strings.TrimPrefix(strings.TrimPrefix(r.URL.RawPath, pre), "/")
	}
	return c
}

// up is the relative way from a page to the root.
func up(r *http.Request) string {
	return strings.Repeat("../", strings.Count(strings.TrimPrefix(r.URL.EscapedPath(), "/"), "/"))
}

// pathName is a name as one segment of a path. A dot alone would be taken for
// a folder by browsers, so dots go out as ~2E; what stands before a colon would
// be taken for a scheme.
func pathName(s string) string {
	if s == "." || s == ".." {
		return strings.ReplaceAll(s, ".", "~2E")
	}
	return strings.ReplaceAll(url.PathEscape(s), ":", "%3A")
}

func loopName(r *http.Request) string {
	s := r.PathValue("loop")
	if s == "~2E" || s == "~2E~2E" {
		return strings.ReplaceAll(s, "~2E", ".")
	}
	return s
}

// loop finds a loop of the list.
func (l *look) loop(name string) *LoopState {
	for i := range l.loops {
		if l.loops[i].Loop.Name == name {
			return &l.loops[i]
		}
	}
	return nil
}

// once logs a trouble when it changes, not at every request.
func (p *Page) once(what string, err error) {
	p.mu.Lock()
	defer p.mu.Unlock()
	if p.said[what] != err.Error() {
		p.said[what] = err.Error()
		p.o.Log.Error("page: "+what, "err", err)
	}
}

// read bounds how many long spans are read at once.
func (p *Page) read(ctx context.Context) (done func(), err error) {
	select {
	case p.reading <- struct{}{}:
		return func() { <-p.reading }, nil
	case <-ctx.Done():
		return nil, fmt.Errorf("waiting to read trends: %w", ctx.Err())
	}
}
