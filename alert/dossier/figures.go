package dossier

import (
	"fmt"
	"html/template"
	"math"
	"slices"
	"time"

	"midwatch/alert/dossier/fit"
)

// figure is a picture with the words below it.
type figure struct {
	Title string
	SVG   template.HTML
	Under string
}

const wide = 720

// Units of a series for drawing: PV and SP in PV units, OP in per cent.
func (d *Dossier) pv(x []float64) []float64 {
	out := make([]float64, len(x))
	for k, v := range x {
		out[k] = d.loop.PVLow + v/100*d.loop.PVSpan()
	}
	return out
}

func (d *Dossier) unit() string { return d.s.unit() }

// timeStep is a round step of time, s, that divides a span into n parts at most.
func timeStep(span float64, n float64) float64 {
	const hour, day = 3600, 86400
	steps := []float64{0.1, 0.2, 0.5, 1, 2, 5, 10, 20, 30, 60, 120, 300, 600, 1200, 1800, hour, 2 * hour, 3 * hour, 6 * hour, 12 * hour, day, 2 * day, 7 * day, 14 * day, 30 * day, 90 * day}
	for _, v := range steps {
		if span/v <= n {
			return v
		}
	}
	return 365 * day
}

// timeTicks are the marks of a span that begins at 0, s.
func timeTicks(span, n float64) []float64 {
	var out []float64
	step := timeStep(span, n)
	for v := 0.0; v <= span*(1+1e-9); v += step {
		out = append(out, v)
	}
	return out
}

// clock gives marks of a stretch of slots and how they are called.
func (d *Dossier) clock(a, b int) (at []float64, name func(float64) string) {
	s := d.s
	span := float64(b-a) * s.dt
	step := timeStep(span, 7)
	t0 := time.UnixMilli(s.at(a)).In(d.zone)
	_, off := t0.Zone()
	first := math.Ceil((float64(s.at(a))/1000+float64(off))/step)*step - float64(off)
	for t := first; t <= float64(s.at(b))/1000; t += step {
		at = append(at, (t-float64(s.t0)/1000)/s.dt)
	}
	form := "15:04"
	switch {
	case step >= 86400:
		form = "2 Jan"
	case span > 86400:
		form = "2 Jan 15:04"
	case step < 60:
		form = "15:04:05"
	}
	return at, func(v float64) string { return time.UnixMilli(s.at(int(math.Round(v)))).In(d.zone).Format(form) }
}

// trend draws PV, SP and OP over slots a to b.
func (d *Dossier) trend(a, b int, label string) template.HTML {
	s := d.s
	g := newDrawing(wide, 330)
	pv, sp := d.pv(s.pv[a:b]), d.pv(s.sp[a:b])
	lo, hi := extent(pv, sp)
	// A stray spike must not flatten the trend; where PV lives outside its listed
	// range, the range is wrong and the trend is shown whole.
	if low, high := d.loop.PVLow-0.02*d.loop.PVSpan(), d.loop.PVHigh+0.02*d.loop.PVSpan(); outside(pv, low, high) < 0.01 {
		lo, hi = math.Max(lo, low), math.Min(hi, high)
	}
	p := g.panel(56, 20, wide-64, 160, float64(a), float64(b), lo, hi)
	ol, oh := extent(s.op[a:b])
	q := g.panel(56, 208, wide-64, 92, float64(a), float64(b), math.Max(ol, -2), math.Min(oh, 102))
	for _, e := range d.Episodes {
		end := float64(b)
		if e.end < math.MaxInt64 {
			end = float64(e.end-s.t0) / 1000 / s.dt
		}
		from := float64(e.since-s.t0) / 1000 / s.dt
		p.shade(from, end, "ep")
		q.shade(from, end, "ep")
	}
	for k := a; k < b; k++ {
		if s.law[k] || s.pv[k] != s.pv[k] {
			continue
		}
		from := k
		for k < b && !s.law[k] && s.pv[k] == s.pv[k] {
			k++
		}
		p.shade(float64(from), float64(k), "man")
		q.shade(float64(from), float64(k), "man")
	}
	p.frame("PV (line), SP (dashed), " + d.unit())
	q.frame("OP, %")
	for _, v := range []float64{d.loop.PVAlarmLow, d.loop.PVAlarmHigh} {
		if v == v {
			p.level(v, "lim", "alarm "+short(v))
		}
	}
	l0, l1 := s.limits()
	q.level(l0, "lim", "low limit")
	q.level(l1, "lim", "high limit")
	full := func(x []float64) []float64 {
		out := slices.Repeat([]float64{math.NaN()}, a)
		return append(out, x...)
	}
	p.envelope(full(sp), a, b, "sp")
	p.envelope(full(pv), a, b, "pv")
	q.envelope(s.op, a, b, "pv")
	at, name := d.clock(a, b)
	q.marks(at, name)
	return g.svg(label)
}

// figures of what was seen.
func (d *Dossier) seenFigures() []figure {
	s := d.s
	return []figure{{"The span", d.trend(0, s.n(), "trend of PV, SP and OP over the span"),
		"Shaded: episodes of the watch. Hatched: the law does not act (manual, tracking, out of service). Where many values fall on one point, the least and the largest are drawn."}}
}

// cycleFigures show the last cycles of up to three swings.
func (d *Dossier) cycleFigures() []figure {
	s := d.s
	var out []figure
	shown := 0
	for _, c := range d.Cycles {
		if shown == 3 {
			break
		}
		b := min(s.n(), s.slot(c.to))
		a := max(0, b-int(6*c.periodS/s.dt))
		if b-a < 12 {
			continue
		}
		shown++
		out = append(out, figure{fmt.Sprintf("Last cycles of the swing of %s", duration(c.periodS)), d.trend(a, b, "trend of the last cycles"), "Amplitude " + c.Amplitude.String() + "; period " + c.Period.String() + "."})
		out = append(out, figure{"PV against OP, the same cycles", d.loopPicture(a, b), "An ellipse: linear. Corners, or flat sides along OP: look at the final element. The form alone proves nothing."})
	}
	return out
}

// loopPicture draws PV against OP.
func (d *Dossier) loopPicture(a, b int) template.HTML {
	s := d.s
	g := newDrawing(wide, 240)
	pv := d.pv(s.pv[a:b])
	y0, y1 := extent(pv)
	x0, x1 := extent(s.op[a:b])
	p := g.panel(56, 20, 420, 180, x0, x1, y0, y1)
	p.frame("PV, " + d.unit())
	p.path(func(k int) float64 { return s.op[a+k] }, pv, "pv")
	p.marks(ticks(p.x0, p.x1, 6), tick)
	g.text(56+420, 234, "end", "lab", "OP, %")
	return g.svg("PV against OP")
}

// readingFigures draw gain and reset in service over time.
func (d *Dossier) readingFigures() []figure {
	if len(d.Readings) < 2 {
		return nil
	}
	s := d.s
	g := newDrawing(wide, 320)
	draw := func(top float64, title string, get func(Reading) Number, list float64) *panel {
		var v []float64
		for _, r := range d.Readings {
			if n := get(r); n.Known() {
				v = append(v, n.Value, n.Low, n.High)
			}
		}
		if list > 0 {
			v = append(v, list)
		}
		lo, hi := extent(v)
		p := g.panel(56, top, wide-64, 110, 0, float64(s.n()), math.Max(0, lo), hi)
		if list > 0 {
			title += ", list " + short(list)
		}
		p.frame(title)
		if list > 0 {
			p.level(list, "list", "")
		}
		for _, r := range d.Readings {
			n := get(r)
			if !n.Known() {
				continue
			}
			x := p.x(float64(r.at-s.t0) / 1000 / s.dt)
			if n.Low == n.Low {
				g.add(`<line x1="%s" x2="%s" y1="%s" y2="%s" class="bar"/>`, px(x), px(x), px(p.y(n.Low)), px(p.y(n.High)))
			}
			g.add(`<circle cx="%s" cy="%s" r="2.6" class="dot"/>`, px(x), px(p.y(n.Value)))
		}
		return p
	}
	draw(20, "gain, %/%", func(r Reading) Number { return r.Gain }, d.loop.GainPct)
	p := draw(164, "reset, s", func(r Reading) Number { return r.Reset }, d.loop.IdealReset)
	at, name := d.clock(0, s.n())
	p.marks(at, name)
	out := []figure{{"Tuning in service over the span", g.svg("gain and reset in service over time"), "Dots: readings, with their range. Dashed: the list."}}
	if len(d.Scheduled) > 1 {
		var x, y []float64
		for _, r := range d.Readings {
			if r.Gain.Known() {
				x, y = append(x, r.atPV), append(y, r.Gain.Value)
			}
		}
		out = append(out, figure{"Gain in service against PV", d.scatter(x, y, "gain, %/%", "PV, "+d.unit()), "A curve that repeats is a schedule, not a change."})
	}
	return out
}

// scatter draws y against x.
func (d *Dossier) scatter(x, y []float64, name, under string) template.HTML {
	g := newDrawing(wide, 240)
	x0, x1 := extent(x)
	y0, y1 := extent(y)
	p := g.panel(56, 20, 420, 180, x0, x1, y0, y1)
	p.frame(name)
	for i := range x {
		if x[i] == x[i] && y[i] == y[i] {
			g.add(`<circle cx="%s" cy="%s" r="2.6" class="dot"/>`, px(p.x(x[i])), px(p.y(y[i])))
		}
	}
	p.marks(ticks(p.x0, p.x1, 6), tick)
	g.text(56+420, 234, "end", "lab", under)
	return g.svg(name + " against " + under)
}

// fitFigures draw the model over the windows it was fitted to.
func (d *Dossier) fitFigures() []figure {
	f := d.fitted
	if f == nil || !f.ok {
		return nil
	}
	var order []int
	for i := range f.windows {
		if !slices.Contains(f.result.LeftOut, i) {
			order = append(order, i)
		}
	}
	slices.SortStableFunc(order, func(a, b int) int {
		return int(sign(math.Abs(f.windows[b].MovePct) - math.Abs(f.windows[a].MovePct)))
	})
	order = order[:min(6, len(order))]
	slices.Sort(order)
	rows := (len(order) + 1) / 2
	g := newDrawing(wide, rows*190)
	for i, k := range order {
		w := f.windows[k]
		left, top := 56+float64(i%2)*(wide/2), 20+float64(i/2)*190
		d.fitPanel(g, w, f, left, top, f.starts[k])
	}
	out := []figure{{"The model over the moves it was fitted to", g.svg("model over the data of the events"), "Line: PV. Blue dashed: the model, answering the recorded OP. Thin line below: OP, in its own scale."}}
	if len(d.Process.points) >= 4 {
		var x, y []float64
		for _, p := range d.Process.points {
			x, y = append(x, p[0]), append(y, p[1])
		}
		out = append(out, figure{"Process gain of single events against PV", d.scatter(x, y, "process gain of the event", "PV in the middle of it, "+d.unit()), "Lag and dead time are those of the common model."})
	}
	return out
}

func (d *Dossier) fitPanel(g *drawing, w fit.Window, f *fitted, left, top float64, at0 int64) {
	y := d.pv(fitMeans(w.Y))
	m := d.pv(fit.Answer(w, f.result.Model, f.options))
	lo, hi := extent(y, m)
	span := float64(len(w.Y)) * w.DT
	p := g.panel(left, top, wide/2-70, 96, 0, span, lo, hi)
	p.frame(time.UnixMilli(at0).In(d.zone).Format("2 Jan 15:04:05") + ", " + d.unit())
	at := func(n int) func(int) float64 {
		return func(k int) float64 { return (float64(k) + 0.5) / float64(max(1, n)) * span }
	}
	p.path(at(len(y)), y, "pv")
	p.path(at(len(m)), m, "model")
	u := fitMeans(w.U)
	ul, uh := extent(u)
	q := g.panel(left, top+102, wide/2-70, 34, 0, span, ul, uh)
	q.path(at(len(u)), u, "thin")
	q.d.text(left-5, top+124, "end", "lab", "OP")
	q.marks(timeTicks(span, 4), duration)
}

// fitMeans thins a window to what can be drawn.
func fitMeans(x []float64) []float64 {
	q := max(1, len(x)/400)
	var out []float64
	for k := 0; k+q <= len(x); k += q {
		out = append(out, mean(x, k, k+q))
	}
	return out
}

// adviceFigures draw the simulated responses.
func (d *Dossier) adviceFigures() []figure {
	a := &d.Advice
	cs := slices.Clone(a.Candidates)
	if a.InService != nil {
		cs = append([]Candidate{*a.InService}, cs...)
	}
	if len(cs) == 0 {
		return nil
	}
	classes := []string{"c0", "c1", "c2", "c3"}
	draw := func(load bool) template.HTML {
		g := newDrawing(wide, 330)
		var pv, op [][]float64
		for _, c := range cs {
			t := c.sp
			if load {
				t = c.load
			}
			q := max(1, len(t.PV)/700)
			var y, u []float64
			for k := 0; k < len(t.PV); k += q {
				y, u = append(y, d.s.pvUnits(t.PV[k])), append(u, t.OP[k])
			}
			pv, op = append(pv, y), append(op, u)
		}
		y0, y1 := extent(pv...)
		u0, u1 := extent(op...)
		if !load { // a tuning that does not hold would flatten all others
			y0, y1 = math.Max(y0, -d.s.pvUnits(a.spStep)), math.Min(y1, 2.2*d.s.pvUnits(a.spStep))
		}
		p := g.panel(56, 20, wide-64, 160, 0, a.span, y0, y1)
		q := g.panel(56, 208, wide-64, 92, 0, a.span, u0, u1)
		p.frame("PV from rest, " + d.unit())
		q.frame("OP from rest, %")
		for i := range cs {
			at := func(k int) float64 { return float64(k) / float64(max(1, len(pv[i])-1)) * a.span }
			p.path(at, pv[i], classes[i%4])
			q.path(at, op[i], classes[i%4])
		}
		q.marks(timeTicks(a.span, 6), duration)
		x := 200.0
		for i, c := range cs {
			g.add(`<line x1="%s" x2="%s" y1="11" y2="11" class="%s"/>`, px(x), px(x+26), classes[i%4])
			g.text(x+31, 15, "start", "lab", c.Name)
			x += 50 + 7.2*float64(len(c.Name))
		}
		return g.svg("simulated responses")
	}
	return []figure{
		{"Simulated: set-point step of " + short(d.s.pvUnits(a.spStep)) + " " + d.unit(), draw(false), "On the fitted model, with limits and scan."},
		{"Simulated: load step of " + short(a.load) + " % of OP at the process input", draw(true), ""},
	}
}

// outside is the share of x below low or above high.
func outside(x []float64, low, high float64) float64 {
	n := 0
	for _, v := range x {
		if v < low || v > high {
			n++
		}
	}
	return float64(n) / math.Max(1, float64(len(x)))
}
