package page

import (
	"bytes"
	"errors"
	"io"
	"math"
	"net/http"
	"time"

	"midwatch/alert/dossier"
)

// dossierSpan is what a dossier covers unless the address says otherwise.
const dossierSpan = 14 * 24 * time.Hour

// serveDossier gathers the dossier of a loop: HTML, or with form=json or
// form=csv its parts for programs. from and to choose the span. One is made at a
// time: weeks of frames stand in memory meanwhile.
func (p *Page) serveDossier(w http.ResponseWriter, r *http.Request) {
	l, s, span, err := p.loopAndSpan(r, always(dossierSpan.Hours()))
	if err != nil {
		p.answer(w, r, err)
		return
	}
	select {
	case p.dossiers <- struct{}{}:
		defer func() { <-p.dossiers }()
	case <-r.Context().Done():
		return
	}
	frames := p.o.House.Frames(r.Context(), s.Loop.Name, span.From, span.To)
	past, err := p.o.House.Past([]string{s.Loop.Name}, span.From)
	if err != nil {
		p.fail(w, r, err)
		return
	}
	in := dossier.Input{Loop: s.Loop, Frames: frames, From: span.From, To: span.To, Made: l.now, Zone: l.zone, Site: p.o.House.Site().Name,
		Version: p.o.House.Watch().Version, Source: "the running watch", Partners: p.partners(s, l)}
	in.Told(past)
	readings, err := p.o.House.Tuning(r.Context(), s.Loop.Name, 0)
	if err != nil {
		p.once("tuning", err)
	}
	for _, x := range readings {
		in.Kept = append(in.Kept, dossier.Kept(x))
	}
	d, err := dossier.Build(in)
	if errors.Is(err, dossier.ErrNoFrames) {
		p.notFound(w, r, "nothing is kept of this loop in the last two weeks")
		return
	}
	if err != nil {
		p.fail(w, r, err)
		return
	}
	kind, write := "text/html; charset=utf-8", d.HTML
	switch r.URL.Query().Get("form") {
	case "json":
		kind, write = "application/json", d.JSON
	case "csv":
		kind, write = "text/csv; charset=utf-8", func(w io.Writer) error { return d.Trend(w) }
	}
	var b bytes.Buffer
	if err := write(&b); err != nil {
		p.fail(w, r, err)
		return
	}
	// A dossier is one file with its own sheet, and nothing else.
	w.Header().Set("Content-Security-Policy", "default-src 'none'; style-src 'unsafe-inline'; img-src data:; frame-ancestors 'none'")
	reply(w, r, http.StatusOK, kind, b.Bytes())
}

// partners are the loops above and below in a cascade.
func (p *Page) partners(s *LoopState, l *look) []dossier.Partner {
	var out []dossier.Partner
	add := func(name, relation string) {
		x := dossier.Partner{Loop: name, Relation: relation, RecoveryS: math.NaN()}
		if v, ok := p.o.House.View(name); ok {
			x.RecoveryS = v.TimeScaleS
		}
		out = append(out, x)
	}
	if s.Loop.Inner != "" {
		add(s.Loop.Inner, "inner")
	}
	for i := range l.loops {
		if l.loops[i].Loop.Inner == s.Loop.Name {
			add(l.loops[i].Loop.Name, "outer")
		}
	}
	return out
}
