package page

import (
	"context"
	"fmt"
	"html"
	"html/template"
	"math"
	"net/http"
	"strings"
	"time"

	"midwatch/collector"
	"midwatch/configs"
)

// drawing builds an SVG of text and paths. Colours are classes: the sheet of
// the page or of the file gives them, light or dark.
type drawing struct{ strings.Builder }

func (d *drawing) f(format string, args ...any) { fmt.Fprintf(&d.Builder, format, args...) }

func (d *drawing) text(x, y float64, class, anchor, s string) {
	d.f(`<text x="%.1f" y="%.1f" class="%s" text-anchor="%s">%s</text>`, x, y, class, anchor, html.EscapeString(s))
}

func (d *drawing) line(x1, y1, x2, y2 float64, class string) {
	d.f(`<line x1="%.1f" y1="%.1f" x2="%.1f" y2="%.1f" class="%s"/>`, x1, y1, x2, y2, class)
}

// scale maps values to pixels.
type scale struct{ v0, v1, p0, p1 float64 }

func (s scale) at(v float64) float64 { return s.p0 + (v-s.v0)/(s.v1-s.v0)*(s.p1-s.p0) }

// ticks are round values that lie in the scale, about n of them.
func (s scale) ticks(n int) []float64 {
	span := math.Abs(s.v1 - s.v0)
	step := math.Pow(10, math.Floor(math.Log10(span/float64(n))))
	for _, m := range []float64{1, 2, 5, 10} {
		if span/(step*m) <= float64(n) {
			step *= m
			break
		}
	}
	var out []float64
	for v := math.Ceil(min(s.v0, s.v1)/step) * step; v <= max(s.v0, s.v1)+step/1e6; v += step {
		out = append(out, math.Round(v/step)*step)
	}
	return out
}

// bounds of finite values with a margin, at least a given width.
func bounds(least float64, cols ...column) (low, high float64) {
	low, high = math.Inf(1), math.Inf(-1)
	for _, c := range cols {
		for _, v := range c {
			if v == v {
				low, high = min(low, float64(v)), max(high, float64(v))
			}
		}
	}
	if low > high {
		return 0, 1
	}
	if high-low < least {
		m := (low + high) / 2
		low, high = m-least/2, m+least/2
	}
	pad := (high - low) * 0.08
	return low - pad, high + pad
}

// path of a column over time, broken where there is no value.
func (d *drawing) path(times []int64, c column, x, y scale, class string) {
	d.WriteString(`<path class="` + class + `" d="`)
	d.points(times, c, x, y, 1)
	d.WriteString(`"/>`)
}

// points gives those of such a path, with so many digits along the time.
func (d *drawing) points(times []int64, c column, x, y scale, digits int) {
	pen := byte('M')
	for i, v := range c {
		if v != v {
			pen = 'M'
			continue
		}
		d.f("%c%.*f %.1f", pen, digits, x.at(float64(times[i])), y.at(float64(v)))
		pen = 'L'
	}
}

const (
	svgW, svgH          = 1000.0, 470.0
	svgLeft, svgRight   = 60.0, 985.0
	svgTop, svgMid      = 24.0, 278.0
	svgOPTop, svgBottom = 302.0, 436.0
)

// trendSVG draws PV and SP over OP on one time axis, all marks included.
func trendSVG(t *trend, l *configs.Loop, zone *time.Location) string {
	d := &drawing{}
	d.f(`<svg xmlns="http://www.w3.org/2000/svg" viewBox="0 0 %g %g" role="img" aria-label="%s">`, svgW, svgH+24, html.EscapeString("PV, SP and OP of "+l.Name))
	d.WriteString(`<style>` + svgStyle + `</style><rect width="1000" height="494" class="card"/>`)
	x := scale{float64(t.From), float64(t.To), svgLeft, svgRight}
	low, high := bounds(math.Abs(l.PVSpan())*0.02, t.PV, t.SP)
	y := scale{low, high, svgMid, svgTop}
	olow, ohigh := bounds(math.Abs(l.OPSpan())*0.05, t.OP, t.Pos)
	o := scale{olow, ohigh, svgBottom, svgOPTop}
	clip := func(v float64) float64 { return max(svgLeft, min(svgRight, v)) }
	for _, r := range t.Runs {
		if r.What == "inactive" || r.What == "gap" || r.What == "hidden" {
			d.f(`<rect x="%.1f" y="%g" width="%.1f" height="%g" class="%s"><title>%s</title></rect>`, clip(x.at(float64(r.From))), svgTop,
				max(1, clip(x.at(float64(r.To)))-clip(x.at(float64(r.From)))), svgBottom-svgTop, "run-"+r.What, html.EscapeString(r.Word))
		}
	}
	for _, s := range t.Troubles {
		to := s.To
		if to == 0 {
			to = t.To
		}
		a, b := clip(x.at(float64(s.From))), clip(x.at(float64(to)))
		d.f(`<rect x="%.1f" y="%g" width="%.1f" height="%g" class="shade %s"/>`, a, svgTop, b-a, svgBottom-svgTop, s.Class)
		if s.From >= t.From {
			d.line(a, svgTop, a, svgBottom, "onset "+s.Class)
		}
	}
	for _, v := range y.ticks(6) {
		d.line(svgLeft, y.at(v), svgRight, y.at(v), "grid")
		d.text(svgLeft-8, y.at(v)+4, "lab", "end", number(v, 5))
	}
	for _, v := range o.ticks(6) {
		d.line(svgLeft, o.at(v), svgRight, o.at(v), "grid")
		d.text(svgLeft-8, o.at(v)+4, "lab", "end", number(v, 5))
	}
	for _, k := range t.Lines {
		sc := y
		if k.On == "op" {
			sc = o
		}
		if k.Value > min(sc.v0, sc.v1) && k.Value < max(sc.v0, sc.v1) {
			d.line(svgLeft, sc.at(k.Value), svgRight, sc.at(k.Value), "limit")
			d.text(svgRight-4, sc.at(k.Value)-4, "lab", "end", k.Label)
		}
	}
	d.text(svgLeft, 16, "lab", "start", strings.TrimSpace("PV (full), SP (dashed)  "+l.Unit))
	below := "OP  " + opUnit(l)
	if t.Pos != nil {
		below += ", position (grey)"
		d.path(t.Times, t.Pos, x, o, "pos")
	}
	if t.FF != nil {
		flow, fhigh := bounds(1e-9, t.FF)
		below += ", feed-forward (dotted, " + number(flow, 4) + " to " + number(fhigh, 4) + " over the height)"
		d.path(t.Times, t.FF, x, scale{flow, fhigh, svgBottom, svgOPTop}, "ff")
	}
	d.text(svgLeft, svgOPTop-8, "lab", "start", below)
	for _, m := range timeTicks(t.From, t.To, zone, 6) {
		d.line(x.at(float64(m)), svgBottom, x.at(float64(m)), svgBottom+5, "axis")
		d.text(x.at(float64(m)), svgBottom+19, "lab", "middle", tickText(m, t.To-t.From, zone))
	}
	d.text(svgRight, svgH+10, "lab", "end", "site time, "+zone.String()+"; from "+utc(t.From)+" to "+utc(t.To))
	d.line(svgLeft, svgBottom, svgRight, svgBottom, "axis")
	for _, ov := range t.Overlays {
		if ov.Shown && !ov.Dots && ov.Name != noiseLevel {
			for _, c := range []column{ov.Low, ov.High} {
				d.path(ov.Times, clipTo(c, y), x, y, "over")
			}
		}
	}
	d.path(t.Times, t.SP, x, y, "sp")
	d.path(t.Times, t.PV, x, y, "pv")
	d.path(t.Times, t.OP, x, o, "pv")
	// Words stand above the traces.
	for i, s := range t.Troubles {
		a := clip(x.at(float64(s.From)))
		anchor, tx := "start", a+6
		if a+6+7.5*float64(len(s.Label)) > svgRight && a > svgW/2 {
			anchor, tx = "end", a-6
		}
		d.text(tx, svgTop+12+float64(i%4)*15, "say "+s.Class, anchor, s.Label)
	}
	if len(t.Times) == 0 {
		d.text(svgW/2, svgH/2-80, "lab", "middle", "nothing is kept of this span")
	}
	d.WriteString(`</svg>`)
	return d.String()
}

// clipTo leaves out what lies outside the scale.
func clipTo(c column, y scale) column {
	out := make(column, len(c))
	low, high := min(y.v0, y.v1), max(y.v0, y.v1)
	for i, v := range c {
		out[i] = v
		if float64(v) < low || float64(v) > high {
			out[i] = float32(math.NaN())
		}
	}
	return out
}

// percentOf is the unit of OP: per cent, where its range says so.
func percentOf(l *configs.Loop) string {
	if l.OPLow == 0 && l.OPHigh == 100 {
		return "%"
	}
	return ""
}

// opUnit says the unit of OP, or else its range.
func opUnit(l *configs.Loop) string {
	if u := percentOf(l); u != "" {
		return u
	}
	return number(l.OPLow, 4) + " to " + number(l.OPHigh, 4)
}

// timeTicks are round times of the site's clock in a span, at most n.
func timeTicks(from, to int64, zone *time.Location, n int) []int64 {
	steps := []time.Duration{time.Second, 5 * time.Second, 15 * time.Second, time.Minute, 5 * time.Minute, 15 * time.Minute, 30 * time.Minute, time.Hour,
		2 * time.Hour, 4 * time.Hour, 8 * time.Hour, 24 * time.Hour, 48 * time.Hour, 7 * 24 * time.Hour, 14 * 24 * time.Hour, 30 * 24 * time.Hour, 90 * 24 * time.Hour}
	step := steps[len(steps)-1]
	for _, s := range steps {
		if (to-from)/s.Milliseconds() <= int64(n) {
			step = s
			break
		}
	}
	// Whole hours and days are those of the site.
	_, off := time.UnixMilli(from).In(zone).Zone()
	shift := int64(off) * 1000
	var out []int64
	for m := ((from+shift)/step.Milliseconds()+1)*step.Milliseconds() - shift; m < to; m += step.Milliseconds() {
		out = append(out, m)
	}
	return out
}

func tickText(ms, span int64, zone *time.Location) string {
	t := time.UnixMilli(ms).In(zone)
	switch {
	case span < 10*60*1000:
		return t.Format("15:04:05")
	case span < 36*3600*1000:
		return t.Format("15:04")
	case t.Hour() == 0 && t.Minute() == 0:
		return t.Format("2 Jan")
	}
	return t.Format("2 Jan 15:04")
}

// svgStyle gives a saved picture the colours of the page.
const svgStyle = `text{font:12px system-ui,"DejaVu Sans",sans-serif;fill:#5c646b}.card{fill:#fff}.grid{stroke:#d9d8d2;stroke-width:.6}.axis{stroke:#8b939a}
.pv{fill:none;stroke:#1c2024;stroke-width:1.2}.sp{fill:none;stroke:#0072b2;stroke-width:1.4;stroke-dasharray:6 4}.limit{stroke:#5c646b;stroke-dasharray:2 5}
.pos{fill:none;stroke:#8b939a;stroke-width:2}.ff{fill:none;stroke:#5c646b;stroke-width:1.4;stroke-dasharray:1 4}.over{fill:none;stroke:#a84300;stroke-width:1;opacity:.7}.run-inactive,.run-hidden{fill:#8b939a;opacity:.22}.run-gap{fill:#fff;stroke:#8b939a;stroke-dasharray:3 3}
.shade{opacity:.07}.shade.now{fill:#a84300}.shade.morning{fill:#8a5a00}.shade.note{fill:#0072b2}.shade.past,.shade.aside{fill:#5c646b}
.onset{stroke-width:1.4}.onset.now{stroke:#a84300}.onset.morning{stroke:#8a5a00}.onset.note{stroke:#0072b2}.onset.past,.onset.aside{stroke:#5c646b}
.say{font-weight:600}.say,.lab{paint-order:stroke;stroke:#fff;stroke-width:3;stroke-linejoin:round}.say.now{fill:#a84300}.say.morning{fill:#8a5a00}.say.note{fill:#0072b2}`

func (p *Page) serveTrendSVG(w http.ResponseWriter, r *http.Request) {
	t, s, l, err := p.spanTrend(r, 900)
	if err != nil {
		p.answer(w, r, err)
		return
	}
	// The file's own sheet is the only thing it may use.
	w.Header().Set("Content-Security-Policy", "default-src 'none'; style-src 'unsafe-inline'; frame-ancestors 'none'; sandbox")
	if r.URL.Query().Get("save") == "1" {
		w.Header().Set("Content-Disposition", `attachment; filename="trend.svg"`)
	}
	reply(w, r, http.StatusOK, "image/svg+xml; charset=utf-8", []byte(trendSVG(t, s.Loop, l.zone)))
}

// xySpan is what PV against OP is drawn over: the last three cycles of a swing,
// else the last half hour of the span.
func xySpan(ts []trouble, t *trend) (from int64, word string) {
	end := t.Newest
	for i := range ts {
		if p, ok := ts[i].Finding.Measures.Get("period_s"); ok && ts[i].open() && p > 0 {
			return end - int64(3000*p), "last three cycles"
		}
	}
	return max(t.From, end-30*60*1000), "last half hour"
}

// xyPoints bounds the points of PV against OP.
const xyPoints = 600

// readXY gives pairs of OP and PV as they were, evenly left out where there are
// too many: least and greatest values would belong to different moments.
func readXY(ctx context.Context, frames collector.FrameReader, loop string, from, to int64) (pairs [2]column, err error) {
	every, n := 1, 0
	for f, err := range frames.Frames(ctx, loop, from, to) {
		if err != nil {
			return pairs, err
		}
		if f.PV != f.PV || f.OP != f.OP {
			continue
		}
		if n++; n%every != 0 {
			continue
		}
		pairs[0], pairs[1] = append(pairs[0], f.OP), append(pairs[1], f.PV)
		if len(pairs[0]) == 2*xyPoints {
			for i := range xyPoints {
				pairs[0][i], pairs[1][i] = pairs[0][2*i+1], pairs[1][2*i+1]
			}
			pairs[0], pairs[1] = pairs[0][:xyPoints], pairs[1][:xyPoints]
			every *= 2
		}
	}
	return pairs, nil
}

// xySVG draws PV against OP.
func xySVG(pairs [2]column, l *configs.Loop, word string) template.HTML {
	xs, ys := pairs[0], pairs[1]
	d := &drawing{}
	d.f(`<svg viewBox="0 0 400 240" role="img" aria-label="PV against OP, %s">`, word)
	if len(xs) < 2 {
		d.text(200, 120, "lab", "middle", "nothing to draw in this span")
		d.WriteString("</svg>")
		return template.HTML(d.String())
	}
	x0, x1 := bounds(0.5, xs)
	y0, y1 := bounds(math.Abs(l.PVSpan())*0.005, ys)
	x, y := scale{x0, x1, 48, 392}, scale{y0, y1, 200, 14}
	for _, v := range x.ticks(5) {
		d.line(x.at(v), 200, x.at(v), 204, "axis")
		d.text(x.at(v), 217, "lab", "middle", number(v, 4))
	}
	for _, v := range y.ticks(5) {
		d.line(48, y.at(v), 392, y.at(v), "grid")
		d.text(42, y.at(v)+4, "lab", "end", number(v, 4))
	}
	d.line(48, 200, 392, 200, "axis")
	d.line(48, 14, 48, 200, "axis")
	d.WriteString(`<path class="pv" d="`)
	pen := byte('M')
	for i := range xs {
		d.f("%c%.1f %.1f", pen, x.at(float64(xs[i])), y.at(float64(ys[i])))
		pen = 'L'
	}
	d.WriteString(`"/>`)
	d.text(392, 234, "lab", "end", strings.TrimSpace("OP "+opUnit(l)))
	d.text(54, 12, "lab", "start", strings.TrimSpace("PV "+l.Unit))
	d.text(392, 12, "lab", "end", word)
	d.WriteString("</svg>")
	return template.HTML(d.String())
}
