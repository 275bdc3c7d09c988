package page

import (
	"bytes"
	"compress/gzip"
	"embed"
	"errors"
	"hash/fnv"
	"html/template"
	"io/fs"
	"net/http"
	"strconv"
	"strings"
	"time"

	"midwatch/detect"
)

//go:embed assets
var assetFiles embed.FS

// asset is one embedded file, packed once.
type asset struct {
	plain, packed []byte
	kind, tag     string
}

var assets, assetTag = loadAssets()

func loadAssets() (map[string]asset, string) {
	out := map[string]asset{}
	all := fnv.New64a()
	kinds := map[string]string{".js": "text/javascript; charset=utf-8", ".css": "text/css; charset=utf-8", ".svg": "image/svg+xml"}
	names, _ := fs.Glob(assetFiles, "assets/*")
	for _, name := range names {
		kind, ok := kinds[name[strings.LastIndexByte(name, '.'):]]
		if !ok {
			continue
		}
		b, _ := assetFiles.ReadFile(name)
		all.Write(b)
		h := fnv.New64a()
		h.Write(b)
		out[strings.TrimPrefix(name, "assets/")] = asset{b, pack(b), kind, `"` + strconv.FormatUint(h.Sum64(), 36) + `"`}
	}
	return out, strconv.FormatUint(all.Sum64(), 36)
}

func pack(b []byte) []byte {
	var z bytes.Buffer
	w, _ := gzip.NewWriterLevel(&z, gzip.BestCompression)
	w.Write(b)
	w.Close()
	return z.Bytes()
}

// serveAsset gives an embedded file. Its address carries a tag of the contents,
// so it may be kept for good.
func serveAsset(w http.ResponseWriter, r *http.Request) {
	a, ok := assets[r.PathValue("file")]
	if !ok {
		http.NotFound(w, r)
		return
	}
	h := w.Header()
	h.Set("Content-Type", a.kind)
	h.Set("ETag", a.tag)
	h.Set("Vary", "Accept-Encoding")
	h.Set("Cache-Control", "no-cache")
	if r.URL.Query().Get("v") == assetTag {
		h.Set("Cache-Control", "public, max-age=31536000, immutable")
	}
	if strings.Contains(r.Header.Get("If-None-Match"), a.tag) {
		w.WriteHeader(http.StatusNotModified)
		return
	}
	body := a.plain
	if takesGzip(r) {
		h.Set("Content-Encoding", "gzip")
		body = a.packed
	}
	h.Set("Content-Length", strconv.Itoa(len(body)))
	if r.Method != http.MethodHead {
		w.Write(body)
	}
}

func takesGzip(r *http.Request) bool {
	return strings.Contains(r.Header.Get("Accept-Encoding"), "gzip")
}

// marks are the drawings of all kinds, put into every page once.
var marks = func() template.HTML {
	b, _ := assetFiles.ReadFile("assets/marks.svg")
	return template.HTML(b)
}()

//go:embed views
var viewFiles embed.FS

var views = template.Must(template.New("").Funcs(template.FuncMap{
	"path": pathName, "tag": func() string { return assetTag }, "marks": func() template.HTML { return marks },
	"capital": capital, "glue": glue, "bytes": bytesText, "number": number, "words": func(c detect.Cause) string { return strings.ReplaceAll(string(c), "-", " ") },
	// A query is made by url.Values.Encode: only what must not be encoded again.
	"q": func(s string) template.URL { return template.URL("?" + s) },
}).ParseFS(viewFiles, "views/*.html"))

func capital(s string) string {
	if s == "" {
		return s
	}
	return strings.ToUpper(s[:1]) + s[1:]
}

// shell is what stands around every view.
type shell struct {
	Up       string // relative way to the root
	Title    string
	Site     string
	Sum      Summary
	Total    int
	Now      string
	NowMs    int64
	Zone     string
	Offset   int // of the site's zone, minutes east of UTC, now
	ZoneName string
	Age      string // of the newest value
	AgeS     int
	Stale    bool
	Visitor  Visitor
	Tokens   bool
	Here     string // path and query below the root, for the way back
}

func (p *Page) shell(r *http.Request, up string, l *look) shell {
	site := p.o.House.Site()
	now := p.o.Clock()
	local := now.In(site.Zone)
	s := shell{Up: up, Site: site.Name, Title: site.Name, Now: local.Format("Mon 2 Jan, 15:04"), NowMs: now.UnixMilli(),
		Zone: local.Format("MST"), ZoneName: site.Zone.String(), Visitor: VisitorOf(r.Context()), Tokens: p.gate != nil && p.gate.tokens != nil,
		Here: strings.TrimPrefix(r.URL.RequestURI(), "/")}
	_, off := local.Zone()
	s.Offset = off / 60
	if s.Site == "" {
		s.Site, s.Title = "midwatch", "midwatch"
	}
	if l != nil {
		s.Sum, s.Total = p.summary(now), len(l.loops)
		s.Age, s.AgeS, s.Stale = dataAge(&s.Sum, now)
	}
	return s
}

// dataAge says how old the newest value is, and whether that is too old.
func dataAge(s *Summary, now time.Time) (string, int, bool) {
	if s.Newest == 0 {
		return "no data yet", 0, true
	}
	age := max(0, float64(now.UnixMilli()-s.Newest)/1000)
	return "data " + seconds(float64(int(age))) + " old", int(age), age > 60 || s.Alive < s.Sources
}

// show writes a view. It is made whole before the first byte goes out.
func (p *Page) show(w http.ResponseWriter, r *http.Request, view string, data any) {
	p.showAs(w, r, http.StatusOK, view, data)
}

func (p *Page) showAs(w http.ResponseWriter, r *http.Request, code int, view string, data any) {
	var b bytes.Buffer
	if err := views.ExecuteTemplate(&b, view, data); err != nil {
		p.once("view "+view, err)
		http.Error(w, "this view could not be made; hint: see the log of the daemon", http.StatusInternalServerError)
		return
	}
	reply(w, r, code, "text/html; charset=utf-8", b.Bytes())
}

// reply writes a body, packed where that is wanted.
func reply(w http.ResponseWriter, r *http.Request, code int, kind string, b []byte) {
	h := w.Header()
	h.Set("Content-Type", kind)
	h.Add("Vary", "Accept-Encoding")
	if takesGzip(r) && len(b) > 1000 {
		var z bytes.Buffer
		g, _ := gzip.NewWriterLevel(&z, 5)
		g.Write(b)
		g.Close()
		b = z.Bytes()
		h.Set("Content-Encoding", "gzip")
	}
	h.Set("Content-Length", strconv.Itoa(len(b)))
	w.WriteHeader(code)
	if r.Method != http.MethodHead {
		w.Write(b)
	}
}

// problemPage is what an error looks like.
type problemPage struct {
	shell
	Code       int
	What, Hint string
}

// refuse answers with an error: a page for people, a line for programs.
func (p *Page) refuse(w http.ResponseWriter, r *http.Request, code int, what, hint string) {
	if !wantsHTML(r) {
		w.Header().Set("Content-Type", "text/plain; charset=utf-8")
		w.WriteHeader(code)
		w.Write([]byte(what + "; hint: " + hint + "\n"))
		return
	}
	p.showAs(w, r, code, "problem", problemPage{shell: p.shell(r, up(r), nil), Code: code, What: what, Hint: hint})
}

func (p *Page) notFound(w http.ResponseWriter, r *http.Request, what string) {
	p.refuse(w, r, http.StatusNotFound, what, "go back to the list of loops")
}

// fail reports an error of the house.
func (p *Page) fail(w http.ResponseWriter, r *http.Request, err error) {
	if r.Context().Err() != nil {
		return // nobody waits for it any more
	}
	p.once("reading", err)
	what, hint, ok := strings.Cut(err.Error(), "; hint: ")
	if !ok {
		hint = "see the log of the daemon, then try again"
	}
	code := http.StatusInternalServerError
	if tooLarge, ok := errors.AsType[*http.MaxBytesError](err); ok {
		code, what = http.StatusRequestEntityTooLarge, "the form is larger than "+strconv.FormatInt(tooLarge.Limit, 10)+" bytes"
	}
	p.refuse(w, r, code, what, hint)
}

// signInView asks for a token.
type signInView struct {
	shell
	Problem string
	To      string
}

func (p *Page) signInPage(w http.ResponseWriter, r *http.Request, code int, problem string) {
	v := signInView{shell: p.shell(r, up(r), nil), Problem: problem, To: r.PostFormValue("to")}
	if v.To == "" && r.Method == http.MethodGet && !strings.HasPrefix(v.Here, "sign-in") {
		v.To = v.Here
	}
	p.showAs(w, r, code, "sign-in", v)
}
