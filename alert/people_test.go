package alert

import (
	"fmt"
	"slices"
	"strings"
	"testing"
	"time"

	"midwatch/configs"
	"midwatch/detect"
)

// now makes a finding that wakes someone.
func urgent(loop string, minute float64) detect.Finding {
	return f(loop, detect.GrowingOscillation, detect.Raised, minute, measure("time_to_op_limit_s", 1200), measure("amplitude_pct", 3))
}

// night is Monday, 23:00.
var night = start.Add(13 * time.Hour)

func at(t time.Time) float64 { return t.Sub(start).Minutes() }

func TestUrgency(t *testing.T) {
	set, err := makeSettings(Settings{})
	if err != nil {
		t.Fatal(err)
	}
	d := &Desk{set: set}
	averaging := loop("LIC-310", func(l *configs.Loop) { l.Duty = configs.Averaging })
	for _, c := range []struct {
		name string
		f    detect.Finding
		l    *configs.Loop
		want Urgency
	}{
		{"limit before work begins", f("A", detect.GrowingOscillation, detect.Raised, at(night), measure("time_to_op_limit_s", 3600)), nil, Now},
		{"limit after work begins", f("A", detect.GrowingOscillation, detect.Raised, at(night), measure("time_to_op_limit_s", 12*3600)), nil, Morning},
		{"in working hours, a limit in the coming night", f("A", detect.GrowingOscillation, detect.Raised, 300, measure("time_to_op_limit_s", 12*3600)), nil, Now},
		{"in working hours, a limit tomorrow at work", f("A", detect.GrowingOscillation, detect.Raised, 300, measure("time_to_op_limit_s", 20*3600)), nil, Morning},
		{"PV alarm reached", f("A", detect.SustainedOffset, detect.Raised, at(night), measure("time_to_pv_alarm_s", 0)), nil, Now},
		{"the nearer of two limits", f("A", detect.SustainedOffset, detect.Raised, at(night), measure("time_to_op_limit_s", 90000), measure("time_to_pv_alarm_s", 60)), nil, Now},
		{"OP at its limit", f("A", detect.OutputSaturation, detect.Raised, at(night)), nil, Now},
		{"OP of an averaging level at its limit", f("LIC-310", detect.OutputSaturation, detect.Raised, at(night)), averaging, Morning},
		{"frozen", f("A", detect.FrozenPV, detect.Raised, at(night)), nil, Now},
		{"pegged", f("A", detect.PVAtRangeEnd, detect.Raised, at(night)), nil, Now},
		{"not followed", f("A", detect.SustainedOffset, detect.Raised, at(night), func(x *detect.Finding) { x.Cause = detect.FinalElementNotFollowing }), nil, Now},
		{"steady swing", f("A", detect.SustainedOscillation, detect.Raised, at(night)), nil, Morning},
		{"tuning changed", f("A", detect.TuningChanged, detect.Raised, at(night)), nil, Note},
		{"not in normal mode", f("A", detect.NotInNormalMode, detect.Raised, at(night)), nil, Note},
		{"sluggish, however near a limit", f("A", detect.SluggishRecovery, detect.Raised, at(night), measure("time_to_op_limit_s", 1)), nil, Note},
		{"over", f("A", detect.FrozenPV, detect.Cleared, at(night)), nil, Note},
	} {
		if got, _ := urgency(&c.f, c.l, d.workAhead(time.UnixMilli(c.f.At).UTC())); got != c.want {
			t.Errorf("%s: %q, want %q", c.name, got, c.want)
		}
	}
}

func TestNightAndDay(t *testing.T) {
	r := newRig(t, func(s *Settings) { s.Advise.Digest.Daily = "07:00" })
	r.run(start)
	r.hear(urgent("AIC-204", at(night)))
	r.run(night)
	if got := r.mail.take(); len(got) != 1 || got[0].Urgency != Now || !strings.Contains(got[0].Subject, "NOW AIC-204") {
		t.Fatalf("%d messages at night, want one that wakes", len(got))
	}
	// One a night: the second is held back, counted and shown in the digest.
	r.hear(urgent("PIC-120", at(night)+60), f("TIC-401", detect.SustainedOscillation, detect.Raised, at(night)+60))
	r.run(night.Add(time.Hour))
	if got := r.mail.take(); len(got) != 0 {
		t.Fatalf("%d more messages in the same night", len(got))
	}
	r.run(start.Add(21*time.Hour - time.Second))
	if got := r.mail.take(); len(got) != 0 {
		t.Fatal("a digest before its time")
	}
	r.run(start.Add(21 * time.Hour))
	got := r.mail.take()
	if len(got) != 1 || got[0].Type != TypeDigest {
		t.Fatalf("%d messages at 07:00, want the digest", len(got))
	}
	for _, want := range []string{"Held back, since the volume for a person was reached (1)", "To look at this morning", "TIC-401: steady swing", "PIC-120", "Open (3)", "I am alive and watch 5 loops."} {
		if !strings.Contains(got[0].Text, want) {
			t.Errorf("the digest lacks %q:\n%s", want, got[0].Text)
		}
	}
	if r.store.count(bucketWaiting) != 0 {
		t.Error("what the digest told still waits")
	}
	// The next night has a page of its own.
	next := night.Add(24 * time.Hour)
	r.hear(urgent("FIC-311", at(next)))
	r.run(next)
	if got := r.mail.take(); len(got) != 1 {
		t.Errorf("%d messages in the next night, want 1", len(got))
	}
	if got := r.hook.take(); len(got) != 4 {
		t.Errorf("the program got %d messages, want all 4", len(got))
	}
}

// TestLimitThatComesSooner: what could wait for the morning wakes someone once it
// cannot.
func TestLimitThatComesSooner(t *testing.T) {
	r := newRig(t, func(s *Settings) { s.Advise.Digest.Daily = "07:00" })
	r.run(start)
	swings := func(minute, hours float64, ev detect.Event) detect.Finding {
		return f("AIC-204", detect.GrowingOscillation, ev, minute, measure("time_to_op_limit_s", hours*3600))
	}
	r.hear(swings(at(night), 20, detect.Raised))
	r.run(night)
	if n := len(r.mail.take()); n != 0 {
		t.Fatalf("%d messages about a limit reached tomorrow at work", n)
	}
	r.hear(swings(at(night)+60, 4, detect.Updated))
	r.run(night.Add(time.Hour))
	if got := r.mail.take(); len(got) != 1 || got[0].Urgency != Now {
		t.Fatalf("%d messages once it is reached in the night, want one that wakes", len(got))
	}
}

// TestDailyAndWeeklyAtOnce: neither digest swallows the other.
func TestDailyAndWeeklyAtOnce(t *testing.T) {
	r := newRig(t, func(s *Settings) { s.Advise.Digest = configs.Digest{Daily: "07:00", Weekly: "mon 07:00"} })
	r.run(start)
	for day := range 7 {
		r.run(start.Add(time.Duration(21+24*day) * time.Hour))
	}
	var daily, weekly int
	for _, m := range r.mail.take() {
		if strings.Contains(m.Subject, "daily digest") {
			daily++
		}
		if strings.Contains(m.Subject, "weekly digest") {
			weekly++
		}
	}
	if daily != 7 || weekly != 1 {
		t.Errorf("%d daily and %d weekly digests in a week, want 7 and 1", daily, weekly)
	}
}

func TestFloodIsOneMessage(t *testing.T) {
	r := newRig(t, func(s *Settings) {
		for i := range 15 {
			s.Loops = append(s.Loops, loop(fmt.Sprintf("FIC-%d", 600+i), func(l *configs.Loop) { l.Area = "filters" }))
		}
	})
	var fs []detect.Finding
	for i := range 15 {
		fs = append(fs, urgent(fmt.Sprintf("FIC-%d", 600+i), 0))
	}
	r.hear(fs...)
	r.run(start.Add(time.Minute))
	got := r.mail.take()
	if len(got) != 1 || got[0].Type != TypeCollected || len(got[0].Items) != 15 {
		t.Fatalf("%d messages, want one collected of 15", len(got))
	}
	if !strings.Contains(got[0].Subject, "15 advisories at once, all of source works, in area filters") {
		t.Errorf("subject %q does not name what is common", got[0].Subject)
	}
	if n := len(r.hook.take()); n != 15 {
		t.Errorf("the program got %d messages, want 15", n)
	}
}

func TestPileAfterAnOutageIsOneMessage(t *testing.T) {
	r := newRig(t, func(s *Settings) { s.Advise.Day = 1000; s.Advise.Routes[1].Urgency = []string{"now"} })
	r.mail.answer = func(Message) error { return &Failure{ReasonRefused, errDisk} }
	for i := range 12 {
		now := start.Add(time.Duration(i) * 11 * time.Minute)
		r.hear(urgent(fmt.Sprintf("XIC-%d", i), at(now)))
		r.run(now)
	}
	r.mail.answer = nil
	for i := range 20 {
		r.run(start.Add(3*time.Hour + time.Duration(i)*time.Minute))
	}
	got := r.mail.take()
	n := 0
	for _, m := range got {
		n += max(len(m.Items), 1)
	}
	if len(got) > 2 || n != 12 {
		t.Errorf("%d messages about %d advisories, want 12 in one or two", len(got), n)
	}
}

func TestStanding(t *testing.T) {
	r := newRig(t, func(s *Settings) { s.Standing = 14 * 24 * time.Hour })
	if err := r.desk.Begin(ms(start)); err != nil {
		t.Fatal(err)
	}
	swing := func(minute, amplitude float64) detect.Finding {
		return f("AIC-204", detect.SustainedOscillation, detect.Raised, minute, measure("amplitude_pct", amplitude))
	}
	r.hear(swing(10, 2), f("PIC-120", detect.OutputSaturation, detect.Raised, 10))
	r.run(start.Add(time.Hour))
	if got := r.mail.take(); len(got) != 0 {
		t.Fatalf("%d messages about standing troubles, want none", len(got))
	}
	if got := r.hook.take(); len(got) != 2 || !strings.Contains(got[0].Text, "first days of the watch") {
		t.Errorf("the program: %d messages, want 2 marked standing", len(got))
	}
	// Worse: the amplitude doubled, and an alarm is near.
	x := swing(100, 4.1)
	x.Event, x.Measures = detect.Updated, append(x.Measures, detect.Measure{Name: "time_to_pv_alarm_s", Value: 600})
	r.hear(x)
	r.run(start.Add(100 * time.Minute))
	if got := r.mail.take(); len(got) != 1 || got[0].Loop != "AIC-204" {
		t.Fatalf("%d messages after it got worse, want 1", len(got))
	}
	r.run(start.Add(14*24*time.Hour - time.Minute))
	r.mail.take()
	r.run(start.Add(14 * 24 * time.Hour))
	got := slices.DeleteFunc(r.mail.take(), func(m Message) bool { return m.Type != TypeStanding })
	if len(got) != 1 || strings.Index(got[0].Text, "PIC-120") > strings.Index(got[0].Text, "AIC-204") {
		t.Fatalf("want one ranked list, PIC-120 (OP at its limit) first: %+v", got)
	}
	r.open()
	r.run(start.Add(15 * 24 * time.Hour))
	if got := slices.DeleteFunc(r.mail.take(), func(m Message) bool { return m.Type != TypeStanding }); len(got) != 0 {
		t.Error("the list was sent again")
	}
	if items := r.desk.StandingItems(); len(items) != 2 {
		t.Errorf("%d standing, want 2", len(items))
	}
}

func TestAcknowledgeAndShelve(t *testing.T) {
	r := newRig(t)
	r.hear(urgent("AIC-204", 0))
	e := only(t, r.desk.Episodes())
	for name, err := range map[string]error{
		"no name":            r.desk.Acknowledge(e.ID, " ", "seen", time.Time{}),
		"unknown":            r.desk.Acknowledge("nothing", "Jo", "seen", time.Time{}),
		"in the past":        r.desk.Acknowledge(e.ID, "Jo", "seen", start.Add(-time.Hour)),
		"shelf without end":  r.desk.Shelve("AIC-204", "Jo", "works on the valve", time.Time{}),
		"shelf too long":     r.desk.Shelve("AIC-204", "Jo", "works on the valve", start.Add(15*24*time.Hour)),
		"shelf, no reason":   r.desk.Shelve("AIC-204", "Jo", "", start.Add(time.Hour)),
		"shelf of a unknown": r.desk.Shelve("XIC-1", "Jo", "x", start.Add(time.Hour)),
		"not shelved":        r.desk.Unshelve("AIC-204", "Jo", ""),
	} {
		if err == nil || !strings.Contains(err.Error(), "hint:") {
			t.Errorf("%s: %v, want an error with a hint", name, err)
		}
	}
	if err := r.desk.Acknowledge(e.ID, "Jo\r\nBcc: x", "seen", start.Add(2*time.Hour)); err != nil {
		t.Fatal(err)
	}
	r.run(start)
	r.mail.take()
	if e = only(t, r.desk.Episodes()); e.State() != Acknowledged || e.Ack.Who != "Jo Bcc: x" {
		t.Errorf("state %q by %q", e.State(), e.Ack.Who)
	}
	r.run(start.Add(2 * time.Hour))
	if got := r.mail.take(); len(got) != 1 || !strings.Contains(got[0].Text, "acknowledgement ended") {
		t.Errorf("%d messages when the acknowledgement ended, want a reminder", len(got))
	}
	if err := r.desk.Shelve("AIC-204", "Jo", "valve is being repaired", start.Add(4*time.Hour)); err != nil {
		t.Fatal(err)
	}
	r.open()
	x := urgent("AIC-204", 150)
	x.Event, x.Measures = detect.Updated, detect.Measures{{Name: "time_to_op_limit_s", Value: 60}, {Name: "amplitude_pct", Value: 9}}
	r.hear(x)
	r.run(start.Add(3 * time.Hour))
	if got := r.mail.take(); len(got) != 0 {
		t.Errorf("%d messages about a shelved loop", len(got))
	}
	if s := r.desk.Shelves(); len(s) != 1 || s[0].Why != "valve is being repaired" {
		t.Errorf("shelves %+v", s)
	}
	r.run(start.Add(4 * time.Hour))
	if got := r.mail.take(); len(got) != 1 || !strings.Contains(got[0].Text, "No longer shelved") {
		t.Errorf("%d messages when shelving ended, want one", len(got))
	}
	_, js, err := r.desk.Episode(e.ID)
	if err != nil {
		t.Fatal(err)
	}
	var what []string
	for i, j := range js {
		if j.Number != uint32(i+1) || j.Wall == 0 {
			t.Errorf("line %d of the journal: %+v", i, j)
		}
		what = append(what, j.What)
	}
	for _, w := range []string{"raised", "acknowledged", "told hook", "acknowledgement ended", "shelved", "updated", "unshelved"} {
		if !slices.Contains(what, w) {
			t.Errorf("the journal lacks %q: %q", w, what)
		}
	}
	n := 0
	for j, err := range r.desk.Journal() {
		if err != nil || j.Episode != e.ID {
			t.Fatal(j, err)
		}
		n++
	}
	if n != len(js) {
		t.Errorf("export has %d lines, the journal %d", n, len(js))
	}
}

func TestNamesAreForgotten(t *testing.T) {
	r := newRig(t, func(s *Settings) { s.Names = 30 * 24 * time.Hour })
	r.hear(urgent("AIC-204", 0))
	id := r.desk.Episodes()[0].ID
	if err := r.desk.Acknowledge(id, "Jo", "seen", time.Time{}); err != nil {
		t.Fatal(err)
	}
	for _, c := range []struct {
		after time.Duration
		want  string
	}{{time.Hour, "Jo"}, {31 * 24 * time.Hour, "(name no longer kept)"}} {
		r.clock.set(start.Add(c.after))
		_, js, err := r.desk.Episode(id)
		if err != nil || js[len(js)-1].Who != c.want {
			t.Errorf("after %v: %q, %v; want %q", c.after, js[len(js)-1].Who, err, c.want)
		}
	}
}

func TestEscalation(t *testing.T) {
	chief := &fakeSender{}
	r := newRig(t, func(s *Settings) {
		s.Advise.Senders = append(s.Advise.Senders, configs.Sender{Name: "chief", Mail: &configs.Mail{}})
		s.Senders["chief"] = chief
		s.Advise.Escalate = []configs.Escalate{{After: 20 * time.Minute, To: []string{"chief"}}}
	})
	r.hear(urgent("AIC-204", 0), urgent("PIC-120", 0))
	r.run(start)
	for _, e := range r.desk.Episodes() {
		if e.Subject.Loop == "PIC-120" {
			if err := r.desk.Acknowledge(e.ID, "Jo", "on it", time.Time{}); err != nil {
				t.Fatal(err)
			}
		}
	}
	r.run(start.Add(20*time.Minute - time.Second))
	if n := len(chief.take()); n != 0 {
		t.Fatal("escalated too early")
	}
	r.run(start.Add(20 * time.Minute))
	r.open()
	r.run(start.Add(40 * time.Minute))
	got := chief.take()
	if len(got) != 1 || got[0].Loop != "AIC-204" || !strings.Contains(got[0].Text, "Not acknowledged for 20 min") {
		t.Errorf("%d escalations, want one, of what nobody acknowledged: %+v", len(got), got)
	}
}
