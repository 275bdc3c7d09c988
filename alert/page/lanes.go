package page

import (
	"cmp"
	"errors"
	"math"
	"math/cmplx"
	"net/http"
	"slices"
	"time"

	record "midwatch/collector/trend"
	"midwatch/configs"
)

// lane is one loop of a group.
type lane struct {
	Name, Path, Service, Word string
	Lag                       string // behind the first, in words
	PV, SP                    string // SVG paths over 1000 x 60
	OnsetX, OnsetW            string
	phase                     float64
	known                     bool
}

// maxLanes bounds the loops that are drawn.
const maxLanes = 24

// lanes reads the loops of a set, in order of phase where they share a swing.
func (p *Page) lanes(r *http.Request, t *together, l *look) ([]lane, error) {
	done, err := p.read(r.Context())
	if err != nil {
		return nil, err
	}
	defer done()
	from, to := t.span.From, t.span.To
	var out []lane
	for _, name := range t.loops[:min(len(t.loops), maxLanes)] {
		s := l.loop(name)
		if s == nil {
			continue
		}
		tr, err := readTrend(r.Context(), p.o.House, s.Loop, from, to, 500)
		if err != nil {
			return nil, err
		}
		x := laneOf(tr, s.Loop, from, to, t.sp)
		if t.onset > from && t.onset < to {
			a := float64(t.onset-from) / float64(to-from) * 100
			x.OnsetX, x.OnsetW = percent(a), percent(100-a)
		}
		if t.periodS > 0 {
			x.phase, x.known = phase(tr, t.periodS)
		}
		out = append(out, x)
	}
	if t.periodS > 0 {
		orderByPhase(out, t.periodS)
	}
	return out, nil
}

func (t *together) axis(l *look) (out []string) {
	for i := range int64(5) {
		out = append(out, tickText(t.span.From+(t.span.To-t.span.From)*i/4, t.span.To-t.span.From, l.zone))
	}
	return out
}

// word of the span.
func (t *together) word(l *look) string {
	return clock(t.span.From, l.now, l.zone) + " – " + clock(t.span.To, l.now, l.zone)
}

func laneOf(t *trend, lp *configs.Loop, from, to int64, sp bool) lane {
	x := lane{Name: lp.Name, Path: pathName(lp.Name), Service: lp.Service}
	low, high := bounds(math.Abs(lp.PVSpan())*0.01, t.PV)
	if sp { // as wide as a strip: noise looks like noise
		low, high = bounds(math.Abs(lp.PVSpan())*leastBand/100, t.PV, t.SP)
	}
	sx, sy := scale{float64(from), float64(to), 0, 1000}, scale{low, high, 60, 0}
	x.PV = onlyPath(t.Times, t.PV, sx, sy)
	if sp {
		x.SP = onlyPath(t.Times, t.SP, sx, sy)
	}
	x.Word = number(low, 4) + " to " + quantity(high, lp.Unit)
	return x
}

func onlyPath(times []int64, c column, x, y scale) string {
	d := &drawing{}
	d.points(times, c, x, y, 0)
	return d.String()
}

// phase of PV at the common period: the angle of its Fourier coefficient over
// whole cycles. It is not known where PV hardly swings at that period.
func phase(t *trend, periodS float64) (float64, bool) {
	var sum complex128
	var mean, power float64
	n := 0
	for i := range t.Times {
		if v := float64(t.PV[i]); v == v {
			mean += v
			n++
		}
	}
	if n < 8 {
		return 0, false
	}
	mean /= float64(n)
	for i, at := range t.Times {
		if v := float64(t.PV[i]) - mean; v == v {
			a := 2 * math.Pi * float64(at-t.From) / 1000 / periodS
			sum += complex(v, 0) * cmplx.Exp(complex(0, -a))
			power += v * v
		}
	}
	amp := 2 * cmplx.Abs(sum) / float64(n)
	if power == 0 || amp*amp/2 < 0.1*power/float64(n) {
		return 0, false
	}
	return cmplx.Phase(sum), true
}

// orderByPhase puts the leading loop first and says how far others lag. The
// first is chosen so that the largest step of phase lies before it.
func orderByPhase(lanes []lane, periodS float64) {
	slices.SortStableFunc(lanes, func(a, b lane) int {
		return cmp.Or(boolOrder(!a.known, !b.known), cmp.Compare(b.phase, a.phase))
	})
	n := 0
	for n < len(lanes) && lanes[n].known {
		n++
	}
	best, gap := 0, -1.0
	for i := range n {
		g := math.Mod(lanes[(i+n-1)%n].phase-lanes[i].phase+4*math.Pi, 2*math.Pi)
		if g > gap {
			best, gap = i, g
		}
	}
	turned := append(slices.Clone(lanes[best:n]), lanes[:best]...)
	copy(lanes, turned)
	for i := range lanes {
		switch {
		case !lanes[i].known:
			lanes[i].Lag = "swings little at this cycle"
		case i == 0:
			lanes[i].Lag = "first"
		default:
			lag := math.Mod(lanes[0].phase-lanes[i].phase+4*math.Pi, 2*math.Pi)
			lanes[i].Lag = number(math.Round(lag*180/math.Pi), 3) + "° later, " + seconds(lag/2/math.Pi*periodS)
		}
	}
}

// serveLanesCSV exports all frames of a view of several loops, one loop after
// the other.
func (p *Page) serveLanesCSV(w http.ResponseWriter, r *http.Request) {
	l := p.look()
	t, _, _, err := p.togetherOf(r, &l)
	if err != nil {
		p.answerTogether(w, r, err)
		return
	}
	var in []*configs.Loop
	for _, name := range t.loops[:min(len(t.loops), maxLanes)] {
		if s := l.loop(name); s != nil {
			in = append(in, s.Loop)
		}
	}
	p.writeFrames(w, r, "loops.csv", in, t.span)
}

// writeFrames answers with the frames of loops in a span as trend CSV.
func (p *Page) writeFrames(w http.ResponseWriter, r *http.Request, file string, loops []*configs.Loop, span wanted) {
	done, err := p.read(r.Context())
	if err != nil {
		p.answer(w, r, err)
		return
	}
	defer done()
	w.Header().Set("Content-Type", "text/csv; charset=utf-8")
	w.Header().Set("Content-Disposition", `attachment; filename="`+file+`"`)
	rc := http.NewResponseController(w)
	columns := record.Columns{Mode: true, Flags: true}
	for _, lp := range loops {
		columns.Position, columns.Feedforward = columns.Position || lp.Position != "", columns.Feedforward || lp.Feedforward != ""
	}
	out := record.NewWriter(w, columns)
	n := 0
	for _, lp := range loops {
		for f, err := range p.o.House.Frames(r.Context(), lp.Name, span.From, span.To) {
			if err != nil {
				p.once("reading", err)
				panic(http.ErrAbortHandler) // the header is out: only a broken answer tells
			}
			if n%10000 == 0 {
				// A long export is no slow client: it may go on while it moves.
				rc.SetWriteDeadline(time.Now().Add(time.Minute))
			}
			n++
			if out.Write(lp.Name, &f) != nil {
				return // the reader is gone
			}
		}
	}
	out.Flush()
}

func (p *Page) answerTogether(w http.ResponseWriter, r *http.Request, err error) {
	if errors.Is(err, errNotTogether) {
		p.notFound(w, r, err.Error())
		return
	}
	p.refused(w, r, err)
}

// serveLanesSVG exports a view of several loops as a picture.
func (p *Page) serveLanesSVG(w http.ResponseWriter, r *http.Request) {
	l := p.look()
	t, e, _, err := p.togetherOf(r, &l)
	if err != nil {
		p.answerTogether(w, r, err)
		return
	}
	lanes, err := p.lanes(r, &t, &l)
	if err != nil {
		p.answer(w, r, err)
		return
	}
	class, title := "past", p.o.House.Site().Name+": "+t.title
	if e != nil {
		f := e.Lead()
		u, _ := p.o.House.Urgency(e)
		if title += ", " + lookOf(f.Kind).Word + " since " + clock(f.Since, l.now, l.zone); e.Open() {
			class = string(u)
		}
	}
	savePicture(w, r, "loops.svg", lanesSVG(title+"; "+t.word(&l), class, lanes, t.axis(&l), l.zone.String()))
}

// savePicture answers with an SVG to be saved. Its own sheet is the only thing
// it may use.
func savePicture(w http.ResponseWriter, r *http.Request, file, svg string) {
	w.Header().Set("Content-Security-Policy", "default-src 'none'; style-src 'unsafe-inline'; frame-ancestors 'none'; sandbox")
	w.Header().Set("Content-Disposition", `attachment; filename="`+file+`"`)
	reply(w, r, http.StatusOK, "image/svg+xml; charset=utf-8", []byte(svg))
}

func lanesSVG(title, class string, lanes []lane, ticks []string, zone string) string {
	const left, width, step = 190.0, 760.0, 84
	d := &drawing{}
	height := 76 + step*len(lanes)
	d.f(`<svg xmlns="http://www.w3.org/2000/svg" viewBox="0 0 1280 %d" width="1280" height="%d"><style>%s</style><rect width="1280" height="%d" class="card"/>`, height, height, stripsStyle, height)
	d.text(12, 22, "b", "start", title)
	for i, x := range lanes {
		y := float64(36 + step*i)
		d.line(12, y, 1268, y, "grid")
		d.text(12, y+34, "b", "start", shortText(x.Name, 24))
		d.text(12, y+50, "lab", "start", shortText(x.Service, 28))
		d.f(`<svg x="%g" y="%g" width="%g" height="%d">`, left, y+6, width, step-12)
		if x.OnsetX != "" {
			d.f(`<rect x="%s" width="%s" height="100%%" class="shade %s"/>`, x.OnsetX, x.OnsetW, class)
		}
		d.WriteString(`<svg viewBox="0 -3 1000 66" preserveAspectRatio="none" width="100%" height="100%">`)
		if x.SP != "" {
			d.f(`<path d="%s" class="sp" vector-effect="non-scaling-stroke"/>`, x.SP)
		}
		d.f(`<path d="%s" class="pv" vector-effect="non-scaling-stroke"/></svg></svg>`, x.PV)
		d.text(left+width+14, y+34, "lab", "start", shortText(x.Word, 46))
		d.text(left+width+14, y+50, "lab", "start", shortText(x.Lag, 46))
	}
	for i, t := range ticks {
		d.text(left+float64(i)*width/4, float64(height-24), "lab", "middle", t)
	}
	d.text(1268, float64(height-6), "lab", "end", "PV full"+map[bool]string{true: ", SP dashed"}[len(lanes) > 0 && lanes[0].SP != ""]+"; site time, "+zone)
	d.WriteString(`</svg>`)
	return d.String()
}
