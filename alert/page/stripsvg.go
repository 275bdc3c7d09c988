package page

import (
	"html"
	"net/http"
	"strings"
	"time"
)

// serveStripsSVG exports what is seen of the list, one stretch of rows, as a
// picture.
func (p *Page) serveStripsSVG(w http.ResponseWriter, r *http.Request) {
	l := p.look()
	f := readFilter(r.URL.Query())
	rs, err := p.rows(r.Context(), &l, l.pick(f), f)
	if err != nil {
		p.fail(w, r, err)
		return
	}
	savePicture(w, r, "watch.svg", stripsSVG(p.o.House.Site().Name, &rs, axis(l.stretch(f.Span), l.zone), l.now.In(l.zone)))
}

// symbols are the marks alone, for a file of its own.
var symbols = func() string {
	s := string(marks)
	return s[strings.Index(s, "<defs>") : strings.Index(s, "</defs>")+len("</defs>")]
}()

const stripsStyle = svgStyle + `.b-base{fill:#eceae4}.b-off{fill:url(#hatch)}.hatch{stroke:#5c646b;opacity:.5}.b-gone{fill:#fff;stroke:#5c646b;stroke-dasharray:4 4}.b-limit{fill:#5c646b}
.shade.b-now,.b-now{fill:#d55e00}.b-morning{fill:#b37400}.b-note{fill:#0072b2}.b-past,.b-aside{fill:#7b838a}.b-now.shade,.b-morning.shade,.b-note.shade,.b-past.shade,.b-aside.shade{opacity:.17}
.blind{stroke:#5c646b;stroke-width:1.5;stroke-dasharray:2 7}.tr{fill:#5c646b;fill-opacity:.5;stroke:#5c646b;vector-effect:non-scaling-stroke}.b{font-weight:600;fill:#1c2024}use{fill:none;stroke:currentColor;stroke-width:1.7}.k-now{color:#a84300}.k-morning{color:#865700}.k-note{color:#00639b}.k-past,.k-aside,.k-off,.k-gone{color:#5c646b}`

func stripsSVG(site string, rs *rows, ticks []string, now time.Time) string {
	const left, width, step = 190, 760, 46
	d := &drawing{}
	height := 70 + step*len(rs.Bands)
	d.f(`<svg xmlns="http://www.w3.org/2000/svg" viewBox="0 0 1280 %d" width="1280" height="%d"><style>%s</style>%s<rect width="1280" height="%d" class="card"/>`, height, height, stripsStyle, symbols, height)
	d.text(12, 22, "b", "start", site+": the watch, "+rs.Word+", drawn "+now.Format("Mon 2 Jan 2006 15:04 -07:00"))
	for i := range rs.Bands {
		b := &rs.Bands[i]
		y := float64(40 + step*i)
		d.text(12, y+14, "b", "start", shortText(b.Name, 24))
		d.text(12, y+29, "lab", "start", shortText(b.Service, 28))
		d.f(`<svg x="%d" y="%g" width="%d" height="34"><rect y="5" width="100%%" height="24" class="b-base"/>`, left, y, width)
		for _, s := range b.Spans {
			switch {
			case s.Class == "limit":
				d.f(`<rect x="%s" y="5" width="%s" height="2.5" class="b-limit"/>`, s.X, s.W)
			case s.Class == "off" || s.Class == "gone":
				d.f(`<rect x="%s" y="5" width="%s" height="24" class="b-%s"/>`, s.X, s.W, s.Class)
			case !s.Moment:
				d.f(`<rect x="%s" y="5" width="%s" height="24" class="b-%s shade"/><rect x="%s" y="27" width="%s" height="2.5" class="b-%s"/>`, s.X, s.W, s.Class, s.X, s.W, s.Class)
			}
		}
		d.f(`<svg viewBox="0 0 %d 60" preserveAspectRatio="none" y="5" width="100%%" height="24"><path d="%s" class="tr"%s/></svg>`, b.Width, b.Trace, map[bool]string{true: ` opacity=".35"`}[b.Blind])
		if b.Blind {
			d.WriteString(`<line x2="100%" y1="17" y2="17" class="blind"/>`)
		}
		for _, s := range b.Spans {
			if s.Mark != "" {
				d.f(`<svg x="%s" width="18" height="18" overflow="visible" class="k-%s"><rect x="1" width="17" height="17" rx="2" class="card"/><use href="#m-%s" x="2" y="1" width="15" height="15"/><title>%s</title></svg>`, s.MarkX, s.Class, s.Mark, html.EscapeString(s.Label))
			}
		}
		d.WriteString(`</svg>`)
		if b.Strong != "" {
			d.text(left+width+14, y+14, "b", "start", shortText(b.Strong, 40))
			y += 15
		}
		d.text(left+width+14, y+14, "lab", "start", shortText(b.Rest, 46))
	}
	for i, t := range ticks {
		d.text(left+float64(i)*width/4, float64(height-14), "lab", "middle", t)
	}
	d.WriteString(`</svg>`)
	return d.String()
}

// shortText shortens a text to n characters and says so.
func shortText(s string, n int) string {
	if r := []rune(s); len(r) > n {
		return string(r[:n-1]) + "…"
	}
	return s
}
