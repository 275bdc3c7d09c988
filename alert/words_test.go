package alert

import (
	"os"
	"path/filepath"
	"strings"
	"testing"
	"time"
	"unicode/utf8"

	"midwatch/configs"
	"midwatch/detect"
)

func hours(days string, from, to int) configs.Hours {
	h := configs.Hours{From: from, To: to}
	for i := range h.Days {
		h.Days[i] = strings.Contains(days, weekdays[i])
	}
	return h
}

func TestHoursOverChangesOfTheClock(t *testing.T) {
	zone := func(name string) *time.Location {
		z, err := time.LoadLocation(name)
		if err != nil {
			t.Fatal(err)
		}
		return z
	}
	london, howe := zone("Europe/London"), zone("Australia/Lord_Howe") // half an hour of summer time
	everyDay := "sun mon tue wed thu fri sat"
	for _, c := range []struct {
		name string
		h    configs.Hours
		utc  string
		zone *time.Location
		want bool
	}{
		{"winter", hours("mon", 7*60, 16*60), "2026-01-05T07:00:00Z", london, true},
		{"winter, before", hours("mon", 7*60, 16*60), "2026-01-05T06:59:59Z", london, false},
		{"summer, an hour earlier in UTC", hours("mon", 7*60, 16*60), "2026-07-06T06:00:00Z", london, true},
		{"summer, end is not in it", hours("mon", 7*60, 16*60), "2026-07-06T15:00:00Z", london, false},
		{"over midnight, evening", hours("fri", 22*60, 6*60), "2026-01-09T23:00:00Z", london, true},
		{"over midnight, next morning", hours("fri", 22*60, 6*60), "2026-01-10T05:59:00Z", london, true},
		{"over midnight, morning of the same day", hours("fri", 22*60, 6*60), "2026-01-09T05:00:00Z", london, false},
		{"spring, last minute before the jump", hours(everyDay, 90, 150), "2026-03-29T00:59:00Z", london, false},
		{"spring, the skipped hour is no time", hours(everyDay, 90, 150), "2026-03-29T01:00:00Z", london, true},
		{"autumn, first 01:45", hours(everyDay, 90, 120), "2026-10-25T00:45:00Z", london, true},
		{"autumn, second 01:45", hours(everyDay, 90, 120), "2026-10-25T01:45:00Z", london, true},
		{"half-hour zone, summer +11:00", hours(everyDay, 7*60, 8*60), "2026-01-05T20:00:00Z", howe, true},
		{"half-hour zone, winter +10:30", hours(everyDay, 7*60, 8*60), "2026-07-05T20:30:00Z", howe, true},
		{"half-hour zone, winter, before", hours(everyDay, 7*60, 8*60), "2026-07-05T20:29:00Z", howe, false},
	} {
		u, err := time.Parse(time.RFC3339, c.utc)
		if err != nil {
			t.Fatal(err)
		}
		if got := within([]configs.Hours{c.h}, u.In(c.zone)); got != c.want {
			t.Errorf("%s: %v at %s, want %v", c.name, got, u.In(c.zone), c.want)
		}
	}
	for _, c := range []struct {
		name, at, from, want string
		zone                 *time.Location
	}{
		{"plain", "07:00", "2026-01-05T10:00:00Z", "2026-01-06T07:00:00Z", london},
		{"over the spring change: 23 hours", "07:00", "2026-03-28T07:00:00Z", "2026-03-29T06:00:00Z", london},
		{"over the autumn change: 25 hours", "07:00", "2026-10-24T06:00:00Z", "2026-10-25T07:00:00Z", london},
		{"in the skipped hour", "01:30", "2026-03-28T12:00:00Z", "2026-03-29T01:30:00Z", london},
		{"in the doubled hour", "01:30", "2026-10-25T00:00:00Z", "2026-10-25T01:30:00Z", london},
		{"in the doubled hour, once", "01:30", "2026-10-25T01:30:00Z", "2026-10-26T01:30:00Z", london},
		{"half-hour change", "07:00", "2026-04-03T20:00:00Z", "2026-04-04T20:30:00Z", howe},
	} {
		k, err := parseClock(c.at, false)
		if err != nil {
			t.Fatal(err)
		}
		from, _ := time.Parse(time.RFC3339, c.from)
		if got := k.next(from.In(c.zone)).UTC().Format(time.RFC3339); got != c.want {
			t.Errorf("%s: %s, want %s", c.name, got, c.want)
		}
	}
	w, err := parseClock("mon 07:00", true)
	if err != nil {
		t.Fatal(err)
	}
	if got := w.next(start.In(london)); got.Sub(start) != 7*24*time.Hour-3*time.Hour {
		t.Errorf("weekly: %s", got)
	}
	for _, bad := range []string{"7", "25:00", "xyz 07:00"} {
		if _, err := parseClock(bad, strings.Contains(bad, " ")); err == nil {
			t.Errorf("%q was taken", bad)
		}
	}
}

func TestRoutes(t *testing.T) {
	set, err := makeSettings(Settings{Loops: []*configs.Loop{loop("AIC-204"), loop("LIC-310", func(l *configs.Loop) { l.Area = "south" }), loop("A[1]/B")}})
	if err != nil {
		t.Fatal(err)
	}
	it := Item{Finding: f("AIC-204", detect.SustainedOffset, detect.Raised, 0), Loops: []string{"AIC-204"}, Kinds: []detect.Kind{detect.SustainedOffset}, Urgency: Now}
	src := Item{Finding: source("works", detect.SourceDown, detect.Raised, 0), Kinds: []detect.Kind{detect.SourceDown}, Urgency: Morning}
	odd := Item{Finding: f("A[1]/B", detect.SustainedOffset, detect.Raised, 0), Loops: []string{"A[1]/B"}}
	for _, c := range []struct {
		name string
		r    configs.Route
		it   Item
		want bool
	}{
		{"everything", configs.Route{}, it, true},
		{"area", configs.Route{Areas: []string{"north"}}, it, true},
		{"other area", configs.Route{Areas: []string{"south"}}, it, false},
		{"area of a loop of the source", configs.Route{Areas: []string{"south"}}, src, true},
		{"service", configs.Route{Services: []string{"chlorine residual"}}, it, true},
		{"pattern", configs.Route{Loops: []string{"AIC-*"}}, it, true},
		{"pattern of one character", configs.Route{Loops: []string{"AIC-20?"}}, it, true},
		{"other pattern", configs.Route{Loops: []string{"LIC-*", "AIC-3*"}}, it, false},
		{"brackets and slashes are letters", configs.Route{Loops: []string{"A[1]*"}}, odd, true},
		{"area and pattern of different loops", configs.Route{Areas: []string{"south"}, Loops: []string{"AIC-*"}}, it, false},
		{"kind", configs.Route{Kinds: []string{"sustained-offset"}}, it, true},
		{"other kind", configs.Route{Kinds: []string{"frozen-pv"}}, it, false},
		{"urgency", configs.Route{Urgency: []string{"now", "morning"}}, it, true},
		{"other urgency", configs.Route{Urgency: []string{"note"}}, it, false},
		{"hours", configs.Route{Hours: []configs.Hours{hours("mon", 9*60, 11*60)}}, it, true},
		{"other hours", configs.Route{Hours: []configs.Hours{hours("tue", 9*60, 11*60)}}, it, false},
	} {
		if got := set.matches(&c.r, &c.it, start); got != c.want {
			t.Errorf("%s: %v, want %v", c.name, got, c.want)
		}
	}
	if _, err := makeSettings(Settings{Advise: configs.Advise{Routes: []configs.Route{{To: []string{"nobody"}}}}}); err == nil {
		t.Error("a route to a sender that is not there was taken")
	}
}

// TestTextsHoldNothingHarmful: names and texts come from people and plants.
func TestTextsHoldNothingHarmful(t *testing.T) {
	evil := "AIC-204\r\nBcc: all@a.example\x00\x1b[31m\u202egpj.<script>alert(1)</script>"
	r := newRig(t, func(s *Settings) {
		s.Site = "Kestrel\r\nFen"
		s.PageURL = "https://10.1.0.9/midwatch/"
		s.Loops = append(s.Loops, loop(evil, func(l *configs.Loop) { l.Service, l.Area, l.Unit = evil, evil, evil }))
	})
	x := urgent(evil, 0)
	x.Text, x.TextShort = evil, strings.Repeat(evil, 20)
	x.Measures = append(x.Measures, detect.Measure{Name: "amplitude_pv", Value: 1})
	r.hear(x, f("PIC-120", detect.SustainedOffset, detect.Raised, 0))
	r.run(start)
	for _, m := range append(r.hook.take(), r.mail.take()...) {
		if strings.ContainsAny(m.Subject+m.TextShort+m.Key, "\r\n\x00\x1b\u202e") {
			t.Errorf("control characters in a line: %q, %q", m.Subject, m.TextShort)
		}
		if strings.ContainsAny(m.Text, "\r\x00\x1b\u202e") || strings.ContainsAny(m.HTML, "\r\x00\x1b\u202e") {
			t.Errorf("control characters in the body: %q", m.Text)
		}
		if strings.Contains(strings.ToLower(m.HTML), "<script") {
			t.Errorf("script in the HTML: %s", m.HTML)
		}
		if n := utf8.RuneCountInString(m.TextShort); n > 160 {
			t.Errorf("short text of %d characters", n)
		}
		if !strings.Contains(strings.ToLower(m.TextShort), "advisory only") {
			t.Errorf("short text without the caution: %q", m.TextShort)
		}
		for _, c := range Cautions {
			if flat := strings.Join(strings.Fields(m.Text), " "); !strings.Contains(flat, c) {
				t.Errorf("the foot lacks %q", c)
			}
		}
	}
}

// TestMessageHelpsTheWoken holds what the message must say.
func TestMessageHelpsTheWoken(t *testing.T) {
	r := newRig(t, func(s *Settings) { s.PageURL = "https://10.1.0.9/midwatch" })
	x := f("AIC-204", detect.GrowingOscillation, detect.Raised, at(night), func(x *detect.Finding) {
		x.Cause, x.Confidence, x.AlsoPossible = detect.ResetTooShort, 0.93, []detect.Cause{detect.GainTooHigh}
		x.Since = x.At - 79*60000
		x.Text, x.TextShort = "AIC-204 swings with a period of 6 min, and each swing is a quarter larger than the last.", ""
		x.Measures = detect.Measures{{Name: "period_s", Value: 372}, {Name: "growth_per_cycle", Value: 1.23}, {Name: "amplitude_pct", Value: 1.9},
			{Name: "amplitude_pv", Value: 0.038}, {Name: "pi_lag_deg", Value: 66}, {Name: "time_to_op_limit_s", Value: 5400}}
	})
	r.hear(x)
	r.run(night)
	m := r.mail.take()[0]
	flat := strings.Join(strings.Fields(m.Text), " ")
	for _, want := range []string{"swings with a period", "chlorine residual (north)", "Why now: OP limit expected before the next working hour",
		"Mon 5 Jan 2026 21:41 +00:00 (estimated onset)", "period 6.2 min", "growth 1.23 per cycle", "amplitude 1.9 % of range", "amplitude 0.038 mg/l", "lag of the controller 66°",
		"about 1.5 h until OP limit (6 Jan 00:30 +00:00)", "Likely cause: the reset time is too short. Also possible: the gain is too high.",
		"First check:", "final element and the measurement first", "https://10.1.0.9/midwatch/loops/AIC-204"} {
		if !strings.Contains(flat, want) {
			t.Errorf("the text lacks %q", want)
		}
	}
	if want := "[Kestrel Fen] NOW AIC-204: swing that grows"; m.Subject != want {
		t.Errorf("subject %q, want %q", m.Subject, want)
	}
	if !strings.Contains(m.TextShort, "AIC-204") || !strings.Contains(m.TextShort, "1.5 h until OP limit") {
		t.Errorf("short text %q", m.TextShort)
	}
	if m.Picture == nil || m.Picture.Onset != x.Since || m.Picture.From >= x.Since || m.Picture.To <= x.At {
		t.Errorf("picture %+v", m.Picture)
	}
	if t.Failed() {
		t.Log(m.Text)
	}
	if dir := os.Getenv("MIDWATCH_TEST_OUT"); dir != "" {
		_ = os.WriteFile(filepath.Join(dir, "advisory.txt"), []byte(m.Subject+"\n\n"+m.Text+"\n"+m.TextShort+"\n"), 0o600)
		_ = os.WriteFile(filepath.Join(dir, "advisory.html"), []byte(m.HTML), 0o600)
	}
}

// TestOneFirstCheck: a text that says what to look at first gets no second one beside it.
func TestOneFirstCheck(t *testing.T) {
	r := newRig(t)
	for i, own := range []string{"", " First check the measurement and the final element, then the reset time.", " First stroke the final element when operations agree; compare stem with OP."} {
		r.hear(f("AIC-204", detect.GrowingOscillation, detect.Raised, at(night.Add(time.Duration(i)*48*time.Hour)), func(x *detect.Finding) {
			x.Cause, x.Confidence = detect.ResetTooShort, 0.93
			x.Text = "AIC-204 swings, and each swing is larger than the last." + own
			x.Measures = detect.Measures{{Name: "time_to_op_limit_s", Value: 5400}}
		}))
		r.run(night.Add(time.Duration(i) * 48 * time.Hour))
		ms := r.mail.take()
		if len(ms) == 0 {
			t.Fatal("no mail")
		}
		for _, body := range []string{ms[0].Text, ms[0].HTML} {
			if got := strings.Contains(body, "First check:") || strings.Contains(body, ">First check<"); got != (own == "") {
				t.Errorf("own check %q, a second one: %v", own, got)
			}
		}
		r.hear(f("AIC-204", detect.GrowingOscillation, detect.Cleared, at(night.Add(time.Duration(i)*48*time.Hour))+60))
	}
}

func TestCut(t *testing.T) {
	for _, c := range []struct {
		in   string
		n    int
		want string
	}{{"short", 10, "short"}, {"a word too much", 11, "a word too…"}, {"ΩΩΩΩΩΩΩΩ", 4, "ΩΩΩ…"}} {
		if got := cut(c.in, c.n); got != c.want {
			t.Errorf("%q to %d: %q, want %q", c.in, c.n, got, c.want)
		}
	}
}

func FuzzClean(f *testing.F) {
	f.Add("AIC-204\r\n\x00\u202e")
	f.Fuzz(func(t *testing.T, s string) {
		c := clean(s)
		if !utf8.ValidString(c) || strings.ContainsAny(c, "\r\n\t\x00\x1b\u202e\u2028\u0085") || clean(c) != c {
			t.Errorf("%q became %q", s, c)
		}
	})
}

// The short text of every event keeps 160 characters and its caution, for the longest
// names and whatever the finding says.
func TestShortTextKeepsItsCaution(t *testing.T) {
	long := strings.Repeat("Ж", 64)
	for _, loop := range []string{"AIC-204", long} {
		for _, say := range []string{"", "PV cycles.", strings.Repeat("swings and ", 20), loop + ": growing swing ±3.6 " + strings.Repeat("mg/l ", 7) + "; likely the reset time is too short for this process"} {
			if say != "" {
				say += ". Advisory only."
			}
			for _, ev := range []detect.Event{detect.Raised, detect.Updated, detect.Cleared} {
				for _, old := range []bool{false, true} {
					d := &Desk{set: settings{Settings: Settings{Zone: time.UTC}}}
					it := &Item{Event: ev, Count: 3, Finding: detect.Finding{Loop: loop, Kind: detect.GrowingOscillation, Event: ev, TextShort: say}}
					s := d.textShort(it, loop, old)
					if n := utf8.RuneCountInString(s); n > 160 || !strings.HasSuffix(s, " Advisory only.") || strings.Count(s, "dvisory") != 1 {
						t.Errorf("%d characters: %q", n, s)
					}
				}
			}
		}
	}
}

// Silence is looked for first where the data come from, whatever cause is named; and
// mail and text have one scale of words for how sure a cause is.
func TestFirstCheckOfSilenceAndWordsOfCauses(t *testing.T) {
	x := f("AIC-204", detect.StaleData, detect.Raised, 0)
	x.Cause = detect.MeasurementCause
	if s := firstCheck(&x); !strings.Contains(s, "server or broker") {
		t.Error(s)
	}
	for _, conf := range []float64{0.6, 0.8, 0.84, 0.86, 0.97} {
		x.Confidence = conf
		if says := strings.HasPrefix(causeLine(&x), "Likely"); says != (detect.Likely(conf) == "likely") {
			t.Errorf("%g: %s", conf, causeLine(&x))
		}
	}
}
