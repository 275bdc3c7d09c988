package page

import (
	"net/url"
	"strings"
	"testing"
	"time"
)

func TestShifts(t *testing.T) {
	three, two := []int{6 * 60, 14 * 60, 22 * 60}, []int{7 * 60, 19 * 60}
	day := func(d, h, m int) time.Time { return time.Date(2026, 3, d, h, m, 0, 0, london) }
	for _, c := range []struct {
		now, this, before time.Time
		begins            []int
	}{
		{day(10, 14, 0), day(10, 14, 0), day(10, 6, 0), three},
		{day(10, 13, 59), day(10, 6, 0), day(9, 22, 0), three},
		{day(10, 2, 44), day(9, 22, 0), day(9, 14, 0), three},
		{day(10, 3, 0), day(9, 19, 0), day(9, 7, 0), two},
		{day(29, 9, 0), day(29, 7, 0), day(28, 19, 0), two}, // the clocks went forward: a night of eleven hours
		{day(10, 5, 0), day(9, 6, 0), day(8, 6, 0), []int{360}},
	} {
		this, before, ok := shiftsAt(c.now, london, c.begins)
		if !ok || !this.Equal(c.this) || !before.Equal(c.before) {
			t.Errorf("at %s: %s and %s, want %s and %s", c.now, this, before, c.this, c.before)
		}
	}
	if _, _, ok := shiftsAt(day(10, 5, 0), london, nil); ok {
		t.Error("a shift where there are none")
	}
}

// A strip of the shift before shows what was then: what began later is not in
// it, what stood to its end is.
func TestShiftBefore(t *testing.T) {
	h := newFake()
	h.frozen = true
	p := newPage(t, h)
	p.o.Page.Shifts = []int{6 * 60, 14 * 60, 22 * 60}
	_, body := got(t, p, "/?span=before")
	for _, want := range []string{"The watch, the shift before, 14:00 – 22:00", `aria-current="true">shift before`, "this shift", "valve sticking since 21:02"} {
		if !strings.Contains(body, want) {
			t.Errorf("no %q in the shift before", want)
		}
	}
	l := p.look()
	st := l.stretch(shiftBefore)
	rs, err := p.rows(t.Context(), &l, l.pick(filter{Span: shiftBefore}), filter{Span: shiftBefore})
	if err != nil {
		t.Fatal(err)
	}
	marks := map[string]string{}
	for _, b := range rs.Bands {
		if b.Width != 160 {
			t.Errorf("%s: %d buckets in eight hours", b.Name, b.Width)
		}
		for _, s := range b.Spans {
			marks[b.Name] += s.Label + ";"
			if s.To > st.To {
				t.Errorf("%s: %s leads past the end of the shift", b.Name, s.Label)
			}
		}
	}
	if strings.Contains(marks["AIC-204"], "growing") || !strings.Contains(marks["FIC-131"], "in manual 18:5") || !strings.Contains(marks["AIC-212"], "off its set point") {
		t.Errorf("marks %q", marks)
	}
	if st := l.stretch(thisShift); st.Word != "this shift, since 22:00" || !st.Live {
		t.Errorf("%+v", st)
	}
	p.o.Page.Shifts = []int{6 * 60}
	l = p.look()
	if st := l.stretch(shiftBefore); st.Word != "last 12 hours" {
		t.Errorf("a shift that began before the strips: %+v", st)
	}
	if _, body := got(t, p, "/"); strings.Contains(body, "shift before") {
		t.Error("a shift is offered that the strips do not hold")
	}
}

func TestServiceFilter(t *testing.T) {
	h := newFake()
	h.frozen = true
	p := newPage(t, h)
	l := p.look()
	for q, want := range map[string]int{"service=filter+3+outlet+flow": 1, "service=FILTER": 3, "service=none+such": 0, "service=level&area=filters": 1} {
		v, err := url.ParseQuery(q)
		if err != nil {
			t.Fatal(err)
		}
		f := readFilter(v)
		if n := len(l.pick(f)); n != want || !f.Narrowed() || !strings.Contains(f.query(), "service=") {
			t.Errorf("%s gives %d loops, want %d", q, n, want)
		}
	}
	if _, body := got(t, p, "/?service=level"); !strings.Contains(body, `<option value="clear-well level">`) || !strings.Contains(body, `name="service" list="services" value="level"`) {
		t.Error("the services are not proposed")
	}
}
