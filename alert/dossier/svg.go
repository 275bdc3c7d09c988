package dossier

import (
	"fmt"
	"html/template"
	"math"
	"strconv"
	"strings"
)

// drawing is one inline picture. Colours are the page's variables, so that print
// and dark screens follow; every line also differs by dash or width.
type drawing struct {
	w, h int
	b    strings.Builder
}

func newDrawing(w, h int) *drawing { return &drawing{w: w, h: h} }

// svg closes the picture; label says what it shows to those who cannot see it.
func (d *drawing) svg(label string) template.HTML {
	return template.HTML(fmt.Sprintf(`<svg viewBox="0 0 %d %d" role="img" aria-label="%s">`, d.w, d.h, template.HTMLEscapeString(label)) + d.b.String() + "</svg>")
}

func (d *drawing) add(format string, a ...any) { fmt.Fprintf(&d.b, format, a...) }

func (d *drawing) text(x, y float64, anchor, class, s string) {
	d.add(`<text x="%s" y="%s" text-anchor="%s" class="%s">%s</text>`, px(x), px(y), anchor, class, template.HTMLEscapeString(s))
}

func px(v float64) string { return strconv.FormatFloat(math.Round(v*10)/10, 'f', -1, 64) }

// panel is a rectangle with its axes; x and y map values to points.
type panel struct {
	d                   *drawing
	left, top, wid, hei float64
	x0, x1, y0, y1      float64
}

func (d *drawing) panel(left, top, wid, hei, x0, x1, y0, y1 float64) *panel {
	if !(x1 > x0) {
		x1 = x0 + 1
	}
	if !(y1 > y0) {
		y0, y1 = y0-1, y0+1
	}
	return &panel{d, left, top, wid, hei, x0, x1, y0, y1}
}

func (p *panel) x(v float64) float64 { return p.left + (v-p.x0)/(p.x1-p.x0)*p.wid }
func (p *panel) y(v float64) float64 {
	v = math.Min(math.Max(v, p.y0-(p.y1-p.y0)), p.y1+(p.y1-p.y0))
	return p.top + (p.y1-v)/(p.y1-p.y0)*p.hei
}

// frame draws the base line, the marks of y and a title.
func (p *panel) frame(title string) {
	p.d.add(`<line x1="%s" x2="%s" y1="%s" y2="%s" class="ax"/>`, px(p.left), px(p.left+p.wid), px(p.top+p.hei), px(p.top+p.hei))
	for _, v := range ticks(p.y0, p.y1, int(math.Max(2, p.hei/34))) {
		p.d.add(`<line x1="%s" x2="%s" y1="%s" y2="%s" class="grid"/>`, px(p.left), px(p.left+p.wid), px(p.y(v)), px(p.y(v)))
		p.d.text(p.left-5, p.y(v)+4, "end", "lab", tick(v))
	}
	p.d.text(p.left, p.top-5, "start", "lab", title)
}

// marks writes the marks of x below the panel.
func (p *panel) marks(at []float64, name func(float64) string) {
	for i, v := range at {
		anchor := "middle"
		if i == 0 && p.x(v) < p.left+14 {
			anchor = "start"
		} else if p.x(v) > p.left+p.wid-18 {
			anchor = "end"
		}
		p.d.text(p.x(v), p.top+p.hei+15, anchor, "lab", name(v))
		p.d.add(`<line x1="%s" x2="%s" y1="%s" y2="%s" class="ax"/>`, px(p.x(v)), px(p.x(v)), px(p.top+p.hei), px(p.top+p.hei+4))
	}
}

// path draws y over x as a line; NaN breaks it.
func (p *panel) path(x func(int) float64, y []float64, class string) {
	var b strings.Builder
	up := true
	for k, v := range y {
		if v != v {
			up = true
			continue
		}
		c := byte('L')
		if up {
			c, up = 'M', false
		}
		b.WriteByte(c)
		b.WriteString(px(p.x(x(k))))
		b.WriteByte(' ')
		b.WriteString(px(p.y(v)))
	}
	if b.Len() > 0 {
		p.d.add(`<path d="%s" class="%s"/>`, b.String(), class)
	}
}

// envelope draws a long series as least and largest value of each point's share,
// or as a line where it has few.
func (p *panel) envelope(y []float64, a, b int, class string) {
	points := int(p.wid * 1.2)
	if b-a <= 2*points {
		p.path(func(k int) float64 { return float64(a + k) }, y[a:b], class)
		return
	}
	share := float64(b-a) / float64(points)
	var s strings.Builder
	up := true
	for i := range points {
		lo, hi := math.Inf(1), math.Inf(-1)
		i0, i1 := a+int(float64(i)*share), a+int(float64(i+1)*share)
		for k := i0; k < i1 && k < b; k++ {
			if v := y[k]; v == v {
				lo, hi = math.Min(lo, v), math.Max(hi, v)
			}
		}
		if hi < lo {
			up = true
			continue
		}
		c := "L"
		if up {
			c, up = "M", false
		}
		x := px(p.x(float64(i0+i1) / 2))
		s.WriteString(c + x + " " + px(p.y(lo)) + "L" + x + " " + px(p.y(hi)))
	}
	if s.Len() > 0 {
		p.d.add(`<path d="%s" class="%s"/>`, s.String(), class)
	}
}

// shade marks a stretch of x.
func (p *panel) shade(a, b float64, class string) {
	a, b = math.Max(a, p.x0), math.Min(b, p.x1)
	if b <= a {
		return
	}
	p.d.add(`<rect x="%s" y="%s" width="%s" height="%s" class="%s"/>`, px(p.x(a)), px(p.top), px(math.Max(1, p.x(b)-p.x(a))), px(p.hei), class)
}

// level draws a horizontal line with its name at the right end.
func (p *panel) level(v float64, class, name string) {
	if v < p.y0 || v > p.y1 {
		return
	}
	p.d.add(`<line x1="%s" x2="%s" y1="%s" y2="%s" class="%s"/>`, px(p.left), px(p.left+p.wid), px(p.y(v)), px(p.y(v)), class)
	if name != "" {
		p.d.text(p.left+p.wid-3, p.y(v)-4, "end", "lab", name)
	}
}

// ticks are about n round values from a to b.
func ticks(a, b float64, n int) []float64 {
	raw := (b - a) / float64(n)
	if !(raw > 0) || math.IsInf(raw, 0) {
		return nil
	}
	e := math.Pow(10, math.Floor(math.Log10(raw)))
	step := 10 * e
	for _, m := range []float64{1, 2, 5} {
		if m*e >= raw {
			step = m * e
			break
		}
	}
	var out []float64
	for v := math.Ceil(a/step-1e-9) * step; v <= b+step*1e-9; v += step {
		if math.Abs(v) < step*1e-6 {
			v = 0
		}
		out = append(out, v)
	}
	return out
}

func tick(v float64) string {
	r, err := strconv.ParseFloat(strconv.FormatFloat(v, 'g', 7, 64), 64)
	if err != nil {
		return ""
	}
	return strconv.FormatFloat(r, 'f', -1, 64)
}

// extent is the range of values with a little room, NaN left out.
func extent(ys ...[]float64) (lo, hi float64) {
	lo, hi = math.Inf(1), math.Inf(-1)
	for _, y := range ys {
		for _, v := range y {
			if v == v {
				lo, hi = math.Min(lo, v), math.Max(hi, v)
			}
		}
	}
	if hi < lo {
		return 0, 1
	}
	room := 0.06 * (hi - lo)
	if room == 0 {
		room = math.Max(1e-6, math.Abs(hi)*0.02)
	}
	return lo - room, hi + room
}
