package alert

import (
	"fmt"
	"slices"
	"strings"
	"testing"
	"time"

	"midwatch/detect"
)

// group makes a finding of loops that swing together; the first is the root where a cause is
// named, and the finding is about it.
func group(event detect.Event, minute float64, cause detect.Cause, loops ...string) detect.Finding {
	return f(loops[0], detect.SharedOscillation, event, minute, measure("period_s", 120), func(x *detect.Finding) {
		x.Loops, x.Cause, x.Confidence = slices.Sorted(slices.Values(loops)), cause, 0.7
		if event == detect.Cleared {
			if x.Reason = detect.Over; minute == 90 {
				x.Reason = detect.Rejudged
			}
		}
	})
}

func swing(loop string, event detect.Event, minute float64, edit ...func(*detect.Finding)) detect.Finding {
	return f(loop, detect.SustainedOscillation, event, minute, append([]func(*detect.Finding){measure("period_s", 120)}, edit...)...)
}

// tellAll plays findings to a desk that waits for groups and wakes whenever it wants, for six
// hours; it gives what the program is told: minute, event, loops.
func tellAll(t *testing.T, fs ...detect.Finding) (out []string) {
	t.Helper()
	r := newRig(t)
	r.swing = 0
	r.open()
	now := start
	take := func() {
		for _, m := range r.hook.take() {
			root := ""
			if m.Finding.Kind == detect.SharedOscillation && named(m.Finding.Cause) {
				root = " from " + m.Finding.Loop
			}
			out = append(out, fmt.Sprintf("%.0f %s %s%s", now.Sub(start).Minutes(), m.Event, strings.Join(loopsIn(m), ","), root))
		}
	}
	for end := start.Add(6 * time.Hour); now.Before(end); now = now.Add(time.Minute) {
		r.clock.set(now)
		for _, x := range fs {
			if x.At == ms(now) {
				r.hear(x)
			}
		}
		r.run(now)
		take()
		if int(now.Sub(start).Minutes())%7 == 0 {
			r.open() // a restart changes nothing
		}
	}
	return
}

func loopsIn(m Message) []string {
	if len(m.Finding.Loops) > 0 {
		return m.Finding.Loops
	}
	return []string{m.Loop}
}

// What several loops swing with is told as one: what others say waits for their group, as long
// as it takes to show, and then for its root.
func TestSharedSwingIsToldOnce(t *testing.T) {
	und, sticks := detect.Undetermined, detect.ValveSticking
	limit := func(s float64) func(*detect.Finding) {
		return func(x *detect.Finding) {
			x.Kind = detect.GrowingOscillation
			measure("time_to_op_limit_s", s)(x)
		}
	}
	for name, c := range map[string]struct {
		hear []detect.Finding
		want []string
	}{
		"a group": {[]detect.Finding{swing("PIC-120", detect.Raised, 0), swing("AIC-204", detect.Raised, 2), swing("TIC-401", detect.Raised, 3),
			group(detect.Raised, 15, und, "AIC-204", "PIC-120", "TIC-401")},
			[]string{"0 raised PIC-120", "26 updated AIC-204,PIC-120,TIC-401"}},
		"a root in the next slot": {[]detect.Finding{swing("PIC-120", detect.Raised, 0), swing("AIC-204", detect.Raised, 2),
			group(detect.Raised, 15, und, "AIC-204", "PIC-120"), group(detect.Raised, 20, sticks, "PIC-120", "AIC-204"),
			swing("AIC-204", detect.Updated, 30, func(x *detect.Finding) { x.Cause = detect.ResetTooShort })},
			[]string{"0 raised PIC-120", "20 updated AIC-204,PIC-120 from PIC-120"}},
		"another root": {[]detect.Finding{swing("PIC-120", detect.Raised, 0), group(detect.Raised, 15, sticks, "PIC-120", "AIC-204"),
			group(detect.Raised, 90, sticks, "AIC-204", "PIC-120"), group(detect.Cleared, 90, sticks, "PIC-120", "AIC-204")},
			[]string{"0 raised PIC-120", "15 updated AIC-204,PIC-120 from PIC-120", "90 updated AIC-204,PIC-120 from AIC-204"}},
		"no group": {[]detect.Finding{swing("PIC-120", detect.Raised, 0), swing("AIC-204", detect.Raised, 2)},
			[]string{"0 raised PIC-120", "27 raised AIC-204"}},
		"over while it waits": {[]detect.Finding{swing("PIC-120", detect.Raised, 0), swing("AIC-204", detect.Raised, 2), swing("AIC-204", detect.Cleared, 9)},
			[]string{"0 raised PIC-120", "9 raised AIC-204", "9 cleared AIC-204"}},
		"named while it waits": {[]detect.Finding{swing("PIC-120", detect.Raised, 0), swing("AIC-204", detect.Raised, 2),
			swing("AIC-204", detect.Updated, 9, func(x *detect.Finding) { x.Cause = detect.GainTooHigh })},
			[]string{"0 raised PIC-120", "27 raised AIC-204"}},
		"another pace":    {[]detect.Finding{swing("PIC-120", detect.Raised, 0), f("AIC-204", detect.SustainedOscillation, detect.Raised, 2, measure("period_s", 400))}, []string{"0 raised PIC-120", "2 raised AIC-204"}},
		"long after":      {[]detect.Finding{swing("PIC-120", detect.Raised, 0), swing("AIC-204", detect.Raised, 50)}, []string{"0 raised PIC-120", "50 raised AIC-204"}},
		"a limit is near": {[]detect.Finding{swing("PIC-120", detect.Raised, 0), swing("AIC-204", detect.Raised, 2, limit(600))}, []string{"0 raised PIC-120", "7 raised AIC-204"}},
		"at its limit":    {[]detect.Finding{swing("PIC-120", detect.Raised, 0), swing("AIC-204", detect.Raised, 2, limit(0))}, []string{"0 raised PIC-120", "2 raised AIC-204"}},
		"a loop of the group says more after its end": {[]detect.Finding{swing("PIC-120", detect.Raised, 0), swing("AIC-204", detect.Raised, 2),
			group(detect.Raised, 15, sticks, "PIC-120", "AIC-204"), group(detect.Cleared, 60, sticks, "PIC-120", "AIC-204"),
			f("PIC-120", detect.ValveStickingKind, detect.Raised, 70, measure("period_s", 120), func(x *detect.Finding) { x.Cause = sticks }),
			group(detect.Raised, 80, und, "AIC-204", "PIC-120"), group(detect.Raised, 100, sticks, "PIC-120", "AIC-204")},
			[]string{"0 raised PIC-120", "15 updated AIC-204,PIC-120 from PIC-120"}},
		"a group that comes back": {[]detect.Finding{group(detect.Raised, 0, sticks, "PIC-120", "AIC-204"), group(detect.Cleared, 60, sticks, "PIC-120", "AIC-204"),
			swing("AIC-204", detect.Raised, 200), group(detect.Raised, 215, sticks, "PIC-120", "AIC-204")},
			[]string{"0 raised AIC-204,PIC-120 from PIC-120", "60 cleared AIC-204,PIC-120 from PIC-120", "215 raised AIC-204,PIC-120 from PIC-120"}},
	} {
		if got := tellAll(t, c.hear...); !slices.Equal(got, c.want) {
			t.Errorf("%s:\n got %q\nwant %q", name, got, c.want)
		}
	}
}

// A group goes on in the episode of the loop that was found first, whichever it is about, and
// nothing of its loops stays open beside it.
func TestGroupGoesOnInTheFirstEpisode(t *testing.T) {
	r := newRig(t)
	r.hear(swing("PIC-120", detect.Raised, 0))
	first := only(t, r.desk.Episodes()).ID
	r.hear(swing("AIC-204", detect.Raised, 2))
	r.hear(group(detect.Raised, 15, detect.Undetermined, "AIC-204", "PIC-120"))
	r.hear(swing("AIC-204", detect.Updated, 20), swing("PIC-120", detect.Updated, 20))
	e := only(t, live(r.desk.Episodes()))
	if e.ID != first || e.Subject.Loop != "PIC-120" || e.Lead().Kind != detect.SharedOscillation || len(e.Members) != 3 {
		t.Errorf("%s of %d members, led by %s", describe([]Episode{e}), len(e.Members), e.Lead().Kind)
	}
}

// A group whose loops grow is as urgent as the loop that meets its limit first.
func TestGroupTellsOfTheNearestLimit(t *testing.T) {
	limit := func(s float64) func(*detect.Finding) {
		return func(x *detect.Finding) {
			x.Kind = detect.GrowingOscillation
			measure("time_to_op_limit_s", s)(x)
		}
	}
	for _, soon := range []bool{true, false} {
		r := newRig(t)
		r.run(start)
		at := 120.0 // s
		if !soon {
			at = 3 * 86400
		}
		r.hear(swing("PIC-120", detect.Raised, 0, limit(4*86400)), swing("AIC-204", detect.Raised, 0, limit(at)))
		r.hear(group(detect.Raised, 1, detect.GainTooHigh, "PIC-120", "AIC-204"))
		r.run(start.Add(time.Minute))
		ms := r.hook.take()
		m := ms[len(ms)-1]
		if said := strings.Contains(m.Text, "AIC-204 meets its OP limit first"); m.Finding.Kind != detect.SharedOscillation || (m.Urgency == Now) != soon || !said {
			t.Errorf("in %v s: %s %s:\n%s", at, m.Finding.Kind, m.Urgency, m.Text)
		}
		if v, ok := m.Finding.Measures.Get("time_to_op_limit_s"); !ok || v != at-60 {
			t.Errorf("%v s are left, want %v", v, at-60)
		}
	}
}

// That the loops of one cascade swing together is no news beside what one of them has told.
func TestGroupOfOneCascadeTellsNothingNew(t *testing.T) {
	for other, told := range map[string]bool{"FIC-311": false, "AIC-204": true} {
		r := newRig(t)
		r.hear(swing("LIC-310", detect.Raised, 0, func(x *detect.Finding) { x.Cause = detect.ResetTooShort }))
		r.run(start)
		r.hook.take()
		r.hear(group(detect.Raised, 20, detect.Undetermined, "LIC-310", other), group(detect.Raised, 30, detect.ResetTooShort, "LIC-310", other))
		r.run(start.Add(30 * time.Minute))
		n := 0
		for _, m := range r.hook.take() {
			if m.Event == detect.Updated {
				n++
			}
		}
		e := only(t, live(r.desk.Episodes()))
		lead := e.Lead()
		if (n > 0) != told || (lead.Kind == detect.SharedOscillation) != told {
			t.Errorf("with %s: %d updates, led by %s", other, n, lead.Kind)
		}
	}
}

// Who took notice on the page of what waits is not told of it again.
func TestAcknowledgedWhileItWaits(t *testing.T) {
	for _, seen := range []bool{true, false} {
		r := newRig(t, func(s *Settings) { s.Advise.Routes[1].Urgency = []string{"morning"} })
		r.swing = 0
		r.open()
		r.run(start)
		r.hear(swing("PIC-120", detect.Raised, 0), swing("AIC-204", detect.Raised, 0))
		r.run(start.Add(time.Minute))
		r.mail.take()
		for _, e := range r.desk.Episodes() {
			if seen {
				if err := r.desk.Acknowledge(e.ID, "Jo", "seen", time.Time{}); err != nil {
					t.Fatal(err)
				}
			}
		}
		r.run(start.Add(time.Hour))
		if told := len(r.mail.take()) > 0; told == seen {
			t.Errorf("acknowledged %v: told %v", seen, told)
		}
	}
}
