package page

import (
	"encoding/json"
	"fmt"
	"net/http"
	"time"

	"midwatch/collector"
)

const (
	streamEvery = 2 * time.Second
	// A stream ends after an hour and the browser comes again: by then a token
	// may have been taken back.
	streamAge = time.Hour
	// What a reader may be behind before it is given up.
	streamWrite = 10 * time.Second
)

// pulse is what the stream says every two seconds.
type pulse struct {
	Judged      int    `json:"judged"`
	CannotJudge int    `json:"cannot_judge"`
	NotNormal   int    `json:"not_normal"`
	Held        int    `json:"held"`
	CatchingUp  int    `json:"catching_up"`
	Sources     int    `json:"sources"`
	Alive       int    `json:"alive"`
	Age         string `json:"age"`
	Stale       bool   `json:"stale"`
	Now         string `json:"now"`
	NowMs       int64  `json:"now_ms"`
	Revision    uint64 `json:"revision"`
}

// fresh are new frames of the loop that is looked at.
type fresh struct {
	Times []int64 `json:"t"`
	PV    column  `json:"pv"`
	SP    column  `json:"sp"`
	OP    column  `json:"op"`
	Pos   column  `json:"pos,omitempty"`
	FF    column  `json:"ff,omitempty"`
}

// maxFresh bounds the frames of one event; what is beyond is fetched as a span.
const maxFresh = 600

// serveStream sends server-sent events: pulse, and fresh frames of ?loop=.
func (p *Page) serveStream(w http.ResponseWriter, r *http.Request) {
	select {
	case p.streams <- struct{}{}:
		defer func() { <-p.streams }()
	default:
		w.Header().Set("Retry-After", "30")
		p.refuse(w, r, http.StatusServiceUnavailable, "too many pages are open", "close some, or wait")
		return
	}
	loop := r.URL.Query().Get("loop")
	h := w.Header()
	h.Set("Content-Type", "text/event-stream")
	h.Set("X-Accel-Buffering", "no") // proxies hand events on at once
	s := &stream{p: p, r: r, w: w, rc: http.NewResponseController(w), loop: loop, through: p.o.Clock().UnixMilli()}
	if t, err := readTime(r.URL.Query().Get("after")); err == nil {
		s.through = t
	}
	s.rc.SetReadDeadline(time.Time{})
	tick := time.NewTicker(streamEvery)
	defer tick.Stop()
	end := time.NewTimer(streamAge)
	defer end.Stop()
	for {
		if err := s.send(); err != nil {
			return
		}
		select {
		case <-tick.C:
		case <-end.C:
			return
		case <-r.Context().Done():
			return
		}
	}
}

type stream struct {
	p       *Page
	r       *http.Request
	w       http.ResponseWriter
	rc      *http.ResponseController
	loop    string
	through int64 // newest frame sent
	number  int
}

func (s *stream) send() error {
	if err := s.rc.SetWriteDeadline(time.Now().Add(streamWrite)); err != nil {
		return err
	}
	now := s.p.o.Clock()
	sum := s.p.summary(now)
	x := pulse{Judged: sum.Judged, CannotJudge: sum.CannotJudge, NotNormal: sum.NotNormal, Held: sum.Held, CatchingUp: sum.CatchingUp, Sources: sum.Sources,
		Alive: sum.Alive, Revision: sum.Revision, Now: now.In(s.p.o.House.Site().Zone).Format("Mon 2 Jan, 15:04"), NowMs: now.UnixMilli()}
	x.Age, _, x.Stale = dataAge(&sum, now)
	if err := s.event("pulse", x); err != nil {
		return err
	}
	if s.loop == "" {
		return s.rc.Flush()
	}
	var f fresh
	for x, err := range s.p.o.House.Frames(s.r.Context(), s.loop, s.through+1, 1<<50) {
		if err != nil {
			return err
		}
		if len(f.Times) == maxFresh {
			break
		}
		s.through = x.Time
		f.add(&x)
	}
	if len(f.Times) > 0 {
		f.Pos, f.FF = f.Pos.known(), f.FF.known()
		if err := s.event("fresh", f); err != nil {
			return err
		}
	}
	return s.rc.Flush()
}

func (f *fresh) add(x *collector.Frame) {
	f.Times = append(f.Times, x.Time)
	f.PV, f.SP, f.OP = append(f.PV, x.PV), append(f.SP, x.SP), append(f.OP, x.OP)
	f.Pos, f.FF = append(f.Pos, x.Position), append(f.FF, x.Feedforward)
}

func (s *stream) event(name string, v any) error {
	b, err := json.Marshal(v)
	if err != nil {
		return err
	}
	s.number++
	_, err = fmt.Fprintf(s.w, "id: %d\nevent: %s\ndata: %s\n\n", s.number, name, b)
	return err
}
