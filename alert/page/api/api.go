// Package api is the interface of the running watch for programs: JSON over
// HTTP. The verbs use it over a Unix socket; the page may stand beside it on a
// TCP address. It does not guard itself: a Unix socket is guarded by its mode,
// a TCP address by whoever serves it.
//
// Times in requests and answers are RFC 3339, UTC. Numbers that are not known
// are absent. Readers ignore fields they do not know.
package api

import (
	"context"
	"encoding/json"
	"errors"
	"fmt"
	"io"
	"iter"
	"log/slog"
	"net/http"
	"strings"
	"time"

	"midwatch/alert"
	"midwatch/collector"
	"midwatch/configs"
	"midwatch/detect"
)

// House is what the handlers look at. All methods are safe for concurrent use.
type House interface {
	Status() Status
	// Loops gives all loops in the order of the loop list.
	Loops() []LoopState
	// View is what the watch of a loop knows now; false for an unknown loop.
	View(loop string) (detect.View, bool)
	// Explain gives the evidence held of a loop, a line each; false for an
	// unknown loop.
	Explain(loop string) ([]string, bool)
	Frames(ctx context.Context, loop string, from, to int64) iter.Seq2[collector.Frame, error]
	// Tuning gives readings of the tuning in service since a time (ms UTC),
	// oldest first; nil where none are kept.
	Tuning(ctx context.Context, loop string, from int64) ([]TuningReading, error)
	// Health says whether the watch is well, and what is not.
	Health() (well bool, why []string)
	// Reload reads the configuration anew and puts it in force.
	Reload(ctx context.Context) error
	// Export writes what is asked for.
	Export(ctx context.Context, w io.Writer, e Export) error
}

// Desk is the part of [alert.Desk] that the handlers use.
type Desk interface {
	Episodes() []alert.Episode
	Episode(id string) (alert.Episode, []alert.Entry, error)
	Urgency(e *alert.Episode) (alert.Urgency, string)
	Acknowledge(id, who, why string, until time.Time) error
	Shelve(loop, who, why string, until time.Time) error
	Unshelve(loop, who, why string) error
	Shelves() []alert.Shelf
	Note(loop, who, text string) error
	Past(loops []string, from int64) (alert.Past, error)
}

// LoopState is a loop and the state of its watch in a word.
type LoopState struct {
	Loop  *configs.Loop
	State detect.State
	Why   string   // where State is not Judged
	Blind []string // what keeps the watch from seeing, in words
}

// Export says what to write. From and To are ms UTC, To is not included.
type Export struct {
	What     string // ExportTrend, ExportLoops or ExportMemory
	Loops    []string
	From, To int64
	// AfterMemory begins the trend of each loop behind the memory that
	// ExportMemory gives of it for the same From, so that the two fit.
	AfterMemory bool
}

// What an export can be of.
const (
	ExportTrend  = "trend"  // trend CSV
	ExportLoops  = "loops"  // the effective loop list, CSV
	ExportMemory = "memory" // memories as of From, JSON lines
)

// Options of the handlers.
type Options struct {
	House   House
	Desk    Desk
	Clock   func() time.Time
	Metrics http.Handler // of /metrics; nil: none
	Log     *slog.Logger // nil: discarded
}

type handler struct{ Options }

// New makes the handlers.
func New(o Options) http.Handler {
	if o.Log == nil {
		o.Log = slog.New(slog.DiscardHandler)
	}
	h := handler{o}
	m := http.NewServeMux()
	m.HandleFunc("GET /healthz", h.health)
	m.HandleFunc("GET /api/status", h.status)
	m.HandleFunc("GET /api/loops", h.loops)
	m.HandleFunc("GET /api/loops/{loop}", h.loop)
	m.HandleFunc("GET /api/loops/{loop}/frames", h.frames)
	m.HandleFunc("GET /api/loops/{loop}/explain", h.explain)
	m.HandleFunc("GET /api/loops/{loop}/tuning", h.tuning)
	m.HandleFunc("GET /api/episodes", h.episodes)
	m.HandleFunc("GET /api/episodes/{id}", h.episode)
	m.HandleFunc("GET /api/past", h.past)
	m.HandleFunc("GET /api/export", h.export)
	m.HandleFunc("POST /api/episodes/{id}/acknowledge", h.acknowledge)
	m.HandleFunc("POST /api/loops/{loop}/shelve", h.shelve)
	m.HandleFunc("POST /api/loops/{loop}/unshelve", h.unshelve)
	m.HandleFunc("POST /api/loops/{loop}/note", h.note)
	m.HandleFunc("POST /api/reload", h.reload)
	if o.Metrics != nil {
		m.Handle("GET /metrics", o.Metrics)
	}
	return m
}

// Problem is the body of every answer that is an error.
type Problem struct {
	Error string `json:"error"` // what; hint: how to mend it
}

func fail(w http.ResponseWriter, code int, err error) {
	w.Header().Set("Content-Type", "application/json")
	w.WriteHeader(code)
	_ = json.NewEncoder(w).Encode(Problem{err.Error()}) // the other side is gone: nobody to tell
}

func answer(w http.ResponseWriter, v any) {
	w.Header().Set("Content-Type", "application/json")
	e := json.NewEncoder(w)
	e.SetEscapeHTML(false)
	_ = e.Encode(v) // the other side is gone: nobody to tell
}

func (h handler) health(w http.ResponseWriter, _ *http.Request) {
	well, why := h.House.Health()
	w.Header().Set("Content-Type", "text/plain; charset=utf-8")
	if well {
		fmt.Fprintln(w, "well")
		return
	}
	w.WriteHeader(http.StatusServiceUnavailable)
	fmt.Fprintln(w, strings.Join(why, "\n"))
}

func (h handler) status(w http.ResponseWriter, _ *http.Request) {
	answer(w, h.House.Status())
}

func (h handler) loops(w http.ResponseWriter, _ *http.Request) {
	answer(w, Loops(h.House.Loops()))
}

var errNoLoop = errors.New("no such loop; hint: `midwatch status --loops` or /api/loops lists them")

func (h handler) loop(w http.ResponseWriter, r *http.Request) {
	name := r.PathValue("loop")
	v, ok := h.House.View(name)
	if !ok {
		fail(w, http.StatusNotFound, errNoLoop)
		return
	}
	answer(w, newLoopView(name, &v))
}

func (h handler) explain(w http.ResponseWriter, r *http.Request) {
	lines, ok := h.House.Explain(r.PathValue("loop"))
	if !ok {
		fail(w, http.StatusNotFound, errNoLoop)
		return
	}
	answer(w, lines)
}

// frames writes the frames of a loop as a trend CSV.
func (h handler) frames(w http.ResponseWriter, r *http.Request) {
	name := r.PathValue("loop")
	if _, ok := h.House.View(name); !ok {
		fail(w, http.StatusNotFound, errNoLoop)
		return
	}
	e, err := readExport(r)
	if err != nil {
		fail(w, http.StatusBadRequest, err)
		return
	}
	e.What, e.Loops = ExportTrend, []string{name}
	h.write(w, r, e)
}

func (h handler) export(w http.ResponseWriter, r *http.Request) {
	e, err := readExport(r)
	if err != nil {
		fail(w, http.StatusBadRequest, err)
		return
	}
	for _, name := range e.Loops {
		if _, ok := h.House.View(name); !ok {
			fail(w, http.StatusNotFound, fmt.Errorf("loop %q: %w", name, errNoLoop))
			return
		}
	}
	h.write(w, r, e)
}

func (h handler) write(w http.ResponseWriter, r *http.Request, e Export) {
	kind := "text/csv; charset=utf-8"
	if e.What == ExportMemory {
		kind = "application/x-ndjson"
	}
	w.Header().Set("Content-Type", kind)
	if err := h.House.Export(r.Context(), w, e); err != nil {
		h.Log.Warn("an export was cut short", "err", err)
		// The status is sent: an abort is the only way to say that it is not whole.
		panic(http.ErrAbortHandler)
	}
}

func readExport(r *http.Request) (Export, error) {
	q := r.URL.Query()
	e := Export{What: q.Get("what"), Loops: q["loop"], AfterMemory: q.Get("after_memory") != ""}
	if e.What == "" {
		e.What = ExportTrend
	}
	switch e.What {
	case ExportTrend, ExportLoops, ExportMemory:
	default:
		return e, fmt.Errorf("what=%q; hint: trend, loops or memory", e.What)
	}
	for _, t := range []struct {
		key string
		to  *int64
		def int64
	}{{"from", &e.From, 0}, {"to", &e.To, 253402300800000}} {
		*t.to = t.def
		if s := q.Get(t.key); s != "" {
			at, err := time.Parse(time.RFC3339Nano, s)
			if err != nil {
				return e, fmt.Errorf("%s=%q is no time; hint: write 2026-01-04T02:31:10Z", t.key, s)
			}
			*t.to = at.UnixMilli()
		}
	}
	return e, nil
}

func (h handler) episodes(w http.ResponseWriter, _ *http.Request) {
	answer(w, Episodes(h.Desk))
}

func (h handler) episode(w http.ResponseWriter, r *http.Request) {
	e, journal, err := h.Desk.Episode(r.PathValue("id"))
	if err != nil {
		fail(w, statusOf(err), err)
		return
	}
	answer(w, struct {
		Episode
		Journal []alert.Entry `json:"journal"`
	}{newEpisode(h.Desk, &e), journal})
}

// Act is the body of the requests that change something.
type Act struct {
	Who string `json:"who"`
	Why string `json:"why,omitempty"`
	For string `json:"for,omitempty"` // a duration such as 4h or 2d; of an acknowledgement empty: for good
}

func (h handler) act(w http.ResponseWriter, r *http.Request, do func(a Act, until time.Time) error) {
	var a Act
	d := json.NewDecoder(http.MaxBytesReader(w, r.Body, 16<<10))
	if err := d.Decode(&a); err != nil {
		fail(w, http.StatusBadRequest, fmt.Errorf("the request cannot be read: %w; hint: JSON with who, why and for", err))
		return
	}
	var until time.Time
	if a.For != "" {
		length, err := configs.ParseDuration(a.For)
		if err != nil || length <= 0 {
			fail(w, http.StatusBadRequest, fmt.Errorf("for=%q is no duration; hint: write 4h or 2d", a.For))
			return
		}
		until = h.Clock().Add(length)
	}
	if err := do(a, until); err != nil {
		fail(w, statusOf(err), err)
		return
	}
	answer(w, struct {
		Done bool `json:"done"`
	}{true})
}

func (h handler) acknowledge(w http.ResponseWriter, r *http.Request) {
	h.act(w, r, func(a Act, until time.Time) error {
		return h.Desk.Acknowledge(r.PathValue("id"), a.Who, a.Why, until)
	})
}

func (h handler) shelve(w http.ResponseWriter, r *http.Request) {
	h.act(w, r, func(a Act, until time.Time) error {
		if until.IsZero() {
			return errors.New("no time given; hint: shelving always ends: for=4h")
		}
		return h.Desk.Shelve(r.PathValue("loop"), a.Who, a.Why, until)
	})
}

func (h handler) unshelve(w http.ResponseWriter, r *http.Request) {
	h.act(w, r, func(a Act, _ time.Time) error { return h.Desk.Unshelve(r.PathValue("loop"), a.Who, a.Why) })
}

// note keeps the reason of the act as a remark on the loop.
func (h handler) note(w http.ResponseWriter, r *http.Request) {
	h.act(w, r, func(a Act, _ time.Time) error {
		err := h.Desk.Note(r.PathValue("loop"), a.Who, a.Why)
		if err == nil {
			h.Log.Info("noted", "audit", true, "who", a.Who, "loop", r.PathValue("loop"))
		}
		return err
	})
}

// past gives what the desk knows of the past of loops: loop=... as often as
// wanted, from= a time.
func (h handler) past(w http.ResponseWriter, r *http.Request) {
	e, err := readExport(r)
	if err != nil {
		fail(w, http.StatusBadRequest, err)
		return
	}
	p, err := h.Desk.Past(e.Loops, e.From)
	if err != nil {
		fail(w, http.StatusInternalServerError, err)
		return
	}
	answer(w, p)
}

func (h handler) reload(w http.ResponseWriter, r *http.Request) {
	if err := h.House.Reload(r.Context()); err != nil {
		fail(w, http.StatusConflict, err)
		return
	}
	answer(w, struct {
		Done bool `json:"done"`
	}{true})
}

func statusOf(err error) int {
	if errors.Is(err, alert.ErrUnknown) {
		return http.StatusNotFound
	}
	return http.StatusUnprocessableEntity
}
