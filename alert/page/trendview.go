package page

import (
	"encoding/json"
	"errors"
	"fmt"
	"math"
	"net/http"
	"net/url"
	"strconv"
	"strings"
	"time"

	"midwatch/configs"
)

// span of time that is wanted, as it stands in the address.
type wanted struct {
	From, To int64
	Hours    float64 // > 0: it ends now and goes on with the time
}

// longest is the longest span that is read at once.
const longest = 400 * 24 * time.Hour

// readSpan reads from= and to= (RFC 3339 or ms UTC), or hours= up to now.
func readSpan(q url.Values, now time.Time, hours float64) (wanted, error) {
	if q.Get("from") == "" && q.Get("to") == "" {
		if s := q.Get("hours"); s != "" {
			h, err := strconv.ParseFloat(s, 64)
			if err != nil || !(h > 0 && h <= longest.Hours()) {
				return wanted{}, fmt.Errorf("hours=%q; hint: a number above 0 and up to %g", cutText(s, 20), longest.Hours())
			}
			hours = h
		}
		return wanted{now.UnixMilli() - int64(hours*3600e3), now.UnixMilli() + 1, hours}, nil
	}
	from, err := readTime(q.Get("from"))
	if err != nil {
		return wanted{}, fmt.Errorf("from: %w", err)
	}
	to := now.UnixMilli() + 1
	if q.Get("to") != "" {
		if to, err = readTime(q.Get("to")); err != nil {
			return wanted{}, fmt.Errorf("to: %w", err)
		}
	}
	if to <= from || to-from > longest.Milliseconds() {
		return wanted{}, errors.New("the span is empty or longer than 400 days; hint: from lies before to")
	}
	return wanted{From: from, To: to}, nil
}

func readTime(s string) (int64, error) {
	if n, err := strconv.ParseInt(s, 10, 64); err == nil && n >= 0 && n < 1<<45 {
		return n, nil
	}
	t, err := time.Parse(time.RFC3339Nano, s)
	if err != nil || t.UnixMilli() < 0 || t.UnixMilli() >= 1<<45 {
		return 0, fmt.Errorf("%q is no time; hint: RFC 3339 such as 2026-01-06T02:44:00Z, or ms since 1970", cutText(s, 40))
	}
	return t.UnixMilli(), nil
}

// usualHours is the span of a loop's trend where the address names none.
const usualHours = 4

// loopAndSpan looks up the loop and the span that an address names. Where it
// names no span, hours says how long it is up to now.
func (p *Page) loopAndSpan(r *http.Request, hours func(*look, *LoopState) float64) (*look, *LoopState, wanted, error) {
	l := p.look()
	s := l.loop(loopName(r))
	if s == nil {
		return &l, nil, wanted{}, ErrUnknownLoop
	}
	w, err := readSpan(r.URL.Query(), l.now, hours(&l, s))
	if err != nil {
		return &l, s, w, badRequest{err}
	}
	return &l, s, w, nil
}

func always(hours float64) func(*look, *LoopState) float64 {
	return func(*look, *LoopState) float64 { return hours }
}

// spanTrend is what every form of a loop's trend starts from.
func (p *Page) spanTrend(r *http.Request, points int) (*trend, *LoopState, *look, error) {
	l, s, w, err := p.loopAndSpan(r, always(usualHours))
	if err != nil {
		return nil, s, l, err
	}
	done, err := p.read(r.Context())
	if err != nil {
		return nil, s, l, err
	}
	defer done()
	t, err := readTrend(r.Context(), p.o.House, s.Loop, w.From, w.To, points)
	if err != nil {
		return nil, s, l, err
	}
	p.annotate(t, s, l)
	return t, s, l, nil
}

type badRequest struct{ error }

// answer turns the errors of a loop's views into answers.
func (p *Page) answer(w http.ResponseWriter, r *http.Request, err error) {
	if bad, ok := errors.AsType[badRequest](err); ok {
		what, hint, _ := strings.Cut(bad.Error(), "; hint: ")
		p.refuse(w, r, http.StatusBadRequest, what, hint)
		return
	}
	if errors.Is(err, ErrUnknownLoop) {
		p.notFound(w, r, err.Error())
		return
	}
	p.fail(w, r, err)
}

// annotate adds limits, alarms, troubles and the evidence.
func (p *Page) annotate(t *trend, s *LoopState, l *look) {
	lp := s.Loop
	if lp.OPLimitHigh != lp.OPHigh || lp.OPLimitLow != lp.OPLow {
		t.Lines = append(t.Lines, level{"op", lp.OPLimitLow, "low limit " + quantity(lp.OPLimitLow, "%")}, level{"op", lp.OPLimitHigh, "high limit " + quantity(lp.OPLimitHigh, "%")})
	}
	for _, a := range []struct {
		v float64
		w string
	}{{lp.PVAlarmLow, "low alarm "}, {lp.PVAlarmHigh, "high alarm "}} {
		if !math.IsNaN(a.v) {
			t.Lines = append(t.Lines, level{"pv", a.v, a.w + quantity(a.v, lp.Unit)})
		}
	}
	ts := l.found[lp.Name]
	t.tuningChanges(ts)
	for i := range ts {
		x := &ts[i]
		if x.Since > t.To || x.Until != 0 && x.Until < t.From {
			continue
		}
		label, _ := x.say(l.now, l.zone)
		t.Troubles = append(t.Troubles, span{string(x.Kind), x.class(), label, x.Since, x.Until})
	}
	v, _ := p.o.House.View(lp.Name)
	pic := p.o.House.Picture(lp.Name)
	t.Overlays = overlays(t, ts, &v, &pic)
}

func (p *Page) serveTrend(w http.ResponseWriter, r *http.Request) {
	points := 1200
	if n, err := strconv.Atoi(r.URL.Query().Get("points")); err == nil {
		points = max(10, min(n, 5000))
	}
	t, _, _, err := p.spanTrend(r, points)
	if err != nil {
		p.answer(w, r, err)
		return
	}
	b, err := json.Marshal(t)
	if err != nil {
		p.fail(w, r, err)
		return
	}
	reply(w, r, http.StatusOK, "application/json", b)
}

// serveTrendCSV exports every frame of the span in the form of the trend CSV.
func (p *Page) serveTrendCSV(w http.ResponseWriter, r *http.Request) {
	_, s, span, err := p.loopAndSpan(r, always(usualHours))
	if err != nil {
		p.answer(w, r, err)
		return
	}
	p.writeFrames(w, r, "trend.csv", []*configs.Loop{s.Loop}, span)
}
