package alert

import (
	"maps"
	"slices"
	"strconv"
	"strings"
	"testing"
	"time"

	"midwatch/detect"
)

// The loops of a cascade are one episode, the inner one named first wherever they are
// listed, whichever was found first; a cause that is named goes before that.
func TestCascadeIsJudgedFromTheInside(t *testing.T) {
	period := measure("period_s", 300)
	outer := f("LIC-310", detect.SustainedOscillation, detect.Raised, 0, period, func(x *detect.Finding) { x.Cause, x.Confidence = detect.Undetermined, 0.9 })
	inner := f("FIC-311", detect.SustainedOscillation, detect.Raised, 5, period, func(x *detect.Finding) { x.Cause, x.Confidence = detect.Undetermined, 0.5 })
	later := outer
	later.At += 600000
	for name, hear := range map[string][]detect.Finding{"outer first": {outer, inner}, "inner first": {inner, later}} {
		r := newRig(t)
		r.hear(hear...)
		es := live(r.desk.Episodes())
		if len(es) != 1 {
			t.Fatalf("%s: %d episodes", name, len(es))
		}
		if got := es[0].Loops(); !slices.Equal(got, []string{"FIC-311", "LIC-310"}) || es[0].Lead().Loop != "FIC-311" {
			t.Errorf("%s: loops %v, led by %s", name, got, es[0].Lead().Loop)
		}
		r.run(start.Add(time.Hour))
		ms := r.hook.take()
		if len(ms) == 0 {
			t.Fatalf("%s: nothing is told", name)
		}
		if m := ms[len(ms)-1]; m.Loop != "FIC-311" || !strings.Contains(strings.Join(strings.Fields(m.Text), " "), "Judge FIC-311 first, the inner loop") || !strings.Contains(m.Text, "FIC-311, LIC-310") {
			t.Errorf("%s: the message is of %s:\n%s", name, m.Loop, m.Text)
		}
	}
	// What shares an episode but is not above it in the cascade says nothing of it.
	for name, hear := range map[string][]detect.Finding{
		"source down": {source("works", detect.SourceDown, detect.Raised, 1), f("FIC-311", detect.StaleData, detect.Raised, 2),
			f("LIC-310", detect.StaleData, detect.Raised, 2), f("AIC-204", detect.StaleData, detect.Raised, 2)},
		"a group": {f("AIC-204", detect.SustainedOscillation, detect.Raised, 0, period), f("FIC-311", detect.SustainedOscillation, detect.Raised, 5, period),
			f("", detect.SharedOscillation, detect.Raised, 6, period, func(x *detect.Finding) {
				x.Subject, x.Loop, x.Loops = detect.Subject{Part: "group-1"}, "", []string{"AIC-204", "FIC-311"}
			})},
	} {
		r := newRig(t)
		r.hear(hear...)
		r.run(start.Add(time.Hour))
		es := live(r.desk.Episodes())
		if !slices.ContainsFunc(es, func(e Episode) bool { return slices.Contains(e.Loops(), "FIC-311") && len(e.Loops()) > 1 }) {
			t.Fatalf("%s: not one episode: %s", name, describe(es))
		}
		for _, m := range r.hook.take() {
			if strings.Contains(m.Text, "inner loop") {
				t.Errorf("%s: told of a cascade:\n%s", name, m.Text)
			}
		}
	}
	named := outer
	named.Kind, named.Cause = detect.GrowingOscillation, detect.ResetTooShort
	r := newRig(t)
	r.hear(named, inner)
	if e := live(r.desk.Episodes()); len(e) != 1 || e[0].Lead().Loop != "LIC-310" {
		t.Errorf("an outer loop with its own tuning named does not lead: %s", describe(e))
	}
}

func TestFolding(t *testing.T) {
	group := func(x *detect.Finding) {
		x.Subject, x.Loop, x.Loops = detect.Subject{Part: "group-1"}, "", []string{"AIC-204", "PIC-120", "FIC-311"}
	}
	period := func(s float64) func(*detect.Finding) { return measure("period_s", s) }
	for _, c := range []struct {
		name  string
		hear  []detect.Finding
		want  int      // episodes that were not folded away
		lead  string   // subject of the first, by time
		loops []string // of the one that leads
	}{
		{"saturation and the offset it leaves", []detect.Finding{
			f("AIC-204", detect.OutputSaturation, detect.Raised, 0),
			f("AIC-204", detect.SustainedOffset, detect.Raised, 5, func(x *detect.Finding) { x.Cause = detect.WindUp })}, 1, "AIC-204", []string{"AIC-204"}},
		{"sustained then growing", []detect.Finding{
			f("AIC-204", detect.SustainedOscillation, detect.Raised, 0, period(300)),
			f("AIC-204", detect.GrowingOscillation, detect.Raised, 5, period(310))}, 1, "AIC-204", []string{"AIC-204"}},
		{"a swing and an offset are two", []detect.Finding{
			f("AIC-204", detect.SustainedOscillation, detect.Raised, 0),
			f("AIC-204", detect.SustainedOffset, detect.Raised, 5)}, 2, "AIC-204", nil},
		{"cascade, outer first", []detect.Finding{
			f("LIC-310", detect.SustainedOscillation, detect.Raised, 0, period(300)),
			f("FIC-311", detect.SustainedOscillation, detect.Raised, 5, period(280))}, 1, "LIC-310", []string{"LIC-310", "FIC-311"}},
		{"cascade, other pace", []detect.Finding{
			f("LIC-310", detect.SustainedOscillation, detect.Raised, 0, period(3000)),
			f("FIC-311", detect.SustainedOscillation, detect.Raised, 5, period(12))}, 2, "LIC-310", nil},
		{"strangers do not fold", []detect.Finding{
			f("AIC-204", detect.SustainedOscillation, detect.Raised, 0, period(300)),
			f("PIC-120", detect.SustainedOscillation, detect.Raised, 5, period(300))}, 2, "AIC-204", nil},
		{"group takes in what was there and what comes", []detect.Finding{
			f("AIC-204", detect.SustainedOscillation, detect.Raised, 0, period(300)),
			f("", detect.SharedOscillation, detect.Raised, 5, period(300), group),
			f("PIC-120", detect.SustainedOscillation, detect.Raised, 6, period(300))}, 1, "group-1", []string{"AIC-204", "PIC-120", "FIC-311"}},
		{"group leaves a swing at another pace alone", []detect.Finding{
			f("AIC-204", detect.SustainedOscillation, detect.Raised, 0, period(10)),
			f("", detect.SharedOscillation, detect.Raised, 5, period(300), group)}, 2, "", nil},
		{"dead source takes in its loops", []detect.Finding{
			f("AIC-204", detect.StaleData, detect.Raised, 0),
			source("works", detect.SourceDown, detect.Raised, 1),
			f("PIC-120", detect.StaleData, detect.Raised, 2),
			f("TIC-401", detect.StaleData, detect.Raised, 2)}, 2, "", nil},
	} {
		t.Run(c.name, func(t *testing.T) {
			r := newRig(t)
			r.hear(c.hear...)
			es := live(r.desk.Episodes())
			if len(es) != c.want {
				t.Fatalf("%d episodes, want %d:%s", len(es), c.want, describe(es))
			}
			if c.loops != nil {
				got := es[0].Loops()
				slices.Sort(got)
				want := slices.Clone(c.loops)
				slices.Sort(want)
				if !slices.Equal(got, want) {
					t.Errorf("loops %v, want %v", got, want)
				}
			}
			// One by one gives the same as all at once, and so does a restart in between.
			one := newRig(t)
			for _, x := range c.hear {
				one.hear(x)
				one.open()
			}
			if got, want := describe(sortByID(one.desk.Episodes())), describe(sortByID(r.desk.Episodes())); got != want {
				t.Errorf("one by one with restarts:%s\nwant:%s", got, want)
			}
		})
	}
}

func sortByID(es []Episode) []Episode {
	slices.SortFunc(es, func(a, b Episode) int { return strings.Compare(a.ID, b.ID) })
	return es
}

func TestHearIsIdempotent(t *testing.T) {
	r := newRig(t)
	batch := []detect.Finding{
		f("AIC-204", detect.SustainedOffset, detect.Raised, 0, measure("offset_pct", 2)),
		f("AIC-204", detect.SustainedOffset, detect.Updated, 10, measure("offset_pct", 5)),
		f("PIC-120", detect.GrowingOscillation, detect.Raised, 3),
		f("PIC-120", detect.GrowingOscillation, detect.Cleared, 30),
	}
	r.hear(batch...)
	before := maps.Clone(r.store.data)
	r.hear(batch...)
	r.open()
	r.hear(batch[1], batch[0])
	r.hear(f("PIC-120", detect.GrowingOscillation, detect.Raised, 29))
	if len(before) != len(r.store.data) {
		t.Errorf("hearing it again changed the store: %d records, before %d", len(r.store.data), len(before))
	}
	for k, v := range before {
		if r.store.data[k] != v {
			t.Errorf("%q changed from %s to %s", k, v, r.store.data[k])
		}
	}
}

func TestClearsAndComesBack(t *testing.T) {
	r := newRig(t)
	r.hear(f("AIC-204", detect.SustainedOffset, detect.Raised, 0))
	first := only(t, r.desk.Episodes())
	// Only a cleared finding clears, and one of another kind does not.
	r.hear(f("AIC-204", detect.GrowingOscillation, detect.Cleared, 5))
	if e := only(t, r.desk.Episodes()); !e.Open() {
		t.Fatal("cleared by a finding of another kind")
	}
	r.hear(f("AIC-204", detect.SustainedOffset, detect.Cleared, 60, func(x *detect.Finding) { x.Reason = detect.Over }))
	if e := only(t, r.desk.Episodes()); e.State() != ReturnedToNormal {
		t.Fatalf("state %q, want %q", e.State(), ReturnedToNormal)
	}
	r.hear(f("AIC-204", detect.SustainedOffset, detect.Raised, 60+23*60))
	if e := only(t, r.desk.Episodes()); e.ID != first.ID || e.Count != 2 || !e.Open() {
		t.Fatalf("back within a day: %s count %d open %v, want the same episode, 2, true", e.ID, e.Count, e.Open())
	}
	r.hear(f("AIC-204", detect.SustainedOffset, detect.Cleared, 2000))
	r.hear(f("AIC-204", detect.SustainedOffset, detect.Raised, 2000+24*60+1))
	if es := r.desk.Episodes(); len(es) != 2 || es[0].Count != 1 {
		t.Fatalf("back after more than a day: want a second episode with count 1:%s", describe(es))
	}
}

// TestComesAndGoes: an OP that meets its limit at every peak of a slow swing is one
// trouble. Who is on call hears of it, that it is over, that it is back; then of neither
// until a day has gone, or it gets worse, and of the end in the digest.
func TestComesAndGoes(t *testing.T) {
	r := newRig(t, func(s *Settings) { s.Advise.Digest.Daily = "07:00" })
	r.run(start)
	var told []string
	wake := func(minute float64) {
		r.run(start.Add(time.Duration(minute * float64(time.Minute))))
		for _, m := range r.mail.take() {
			if m.Type == TypeAdvisory {
				told = append(told, m.Subject)
				if m.Count == 2 && !strings.Contains(strings.Join(strings.Fields(m.Text), " "), "2nd time since it was first seen; it comes and goes within a day. While it does, people are told again after a day") {
					t.Errorf("what is back does not say how it is told on:\n%s", m.Text)
				}
			} else if m.Type == TypeDigest {
				told = append(told, "digest, over "+strconv.Itoa(strings.Count(m.Text, "over:")))
			}
		}
	}
	come := func(minute, offset float64) {
		r.hear(f("AIC-204", detect.OutputSaturation, detect.Raised, minute, measure("offset_pct", offset)))
		wake(minute)
	}
	go1 := func(minute float64) {
		r.hear(f("AIC-204", detect.OutputSaturation, detect.Cleared, minute, func(x *detect.Finding) { x.Reason = detect.Over }))
		wake(minute)
	}
	for i := range 7 { // every 72 minutes from 10:00 on
		come(float64(i)*72, 3)
		go1(float64(i)*72 + 30)
	}
	wake(21*60 + 1) // 07:01
	want := []string{"[Kestrel Fen] NOW AIC-204: OP at its limit", "[Kestrel Fen] AIC-204: over: OP at its limit",
		"[Kestrel Fen] NOW AIC-204: back (2nd time): OP at its limit", "digest, over 1"}
	if !slices.Equal(told, want) {
		t.Errorf("told in a day:\n%q, want\n%q", told, want)
	}
	if e := only(t, r.desk.Episodes()); e.Count != 7 {
		t.Errorf("%d times", e.Count)
	}
	told = nil
	come(22*60, 3) // 08:00, not yet a day
	go1(22*60 + 30)
	if len(told) > 0 {
		t.Errorf("told again within a day: %q", told)
	}
	come(23*60, 7) // worse by more than twice
	go1(23*60 + 30)
	come(28*60, 7)
	if want := []string{"[Kestrel Fen] NOW AIC-204: back (9th time): OP at its limit"}; !slices.Equal(told, want) {
		t.Errorf("told %q of what got worse, want %q", told, want)
	}
	if n := r.store.count(bucketWaiting); n != 0 {
		t.Errorf("the end of what is back waits for the digest: %d", n)
	}
	told = nil
	go1(28*60 + 30)
	wake(45*60 + 1)
	come(48*60, 7) // a day after
	if want := []string{"digest, over 1", "[Kestrel Fen] NOW AIC-204: back (11th time): OP at its limit"}; !slices.Equal(told, want) {
		t.Errorf("told %q a day later, want %q", told, want)
	}
}

func TestPartOfAnEpisodeClears(t *testing.T) {
	r := newRig(t)
	r.hear(f("AIC-204", detect.OutputSaturation, detect.Raised, 0), f("AIC-204", detect.SustainedOffset, detect.Raised, 5))
	r.hear(f("AIC-204", detect.OutputSaturation, detect.Cleared, 10))
	if e := only(t, r.desk.Episodes()); !e.Open() || e.Lead().Kind != detect.SustainedOffset {
		t.Fatalf("open %v, lead %s; want the offset to stand on", e.Open(), e.Lead().Kind)
	}
	r.hear(f("AIC-204", detect.SustainedOffset, detect.Cleared, 12))
	if e := only(t, r.desk.Episodes()); e.Open() {
		t.Fatal("still open")
	}
}

func TestHeld(t *testing.T) {
	r := newRig(t)
	r.hear(f("AIC-204", detect.SustainedOffset, detect.Raised, 0))
	at := ms(start.Add(40 * time.Minute))
	if err := r.desk.Visible(Sight{"AIC-204", at, "manual"}); err != nil {
		t.Fatal(err)
	}
	check := func(want State, why string) {
		t.Helper()
		e := only(t, live(r.desk.Episodes()))
		got := ""
		if e.Hold != nil {
			got = e.Hold.Why
		}
		if e.State() != want || got != why {
			t.Errorf("state %q because %q, want %q because %q", e.State(), got, want, why)
		}
	}
	check(Held, "manual")
	r.open()
	check(Held, "manual")
	// An older word about its sight changes nothing.
	if err := r.desk.Visible(Sight{"AIC-204", at - 1, ""}); err != nil {
		t.Fatal(err)
	}
	check(Held, "manual")
	if err := r.desk.Visible(Sight{"AIC-204", at + 1, WhySuppressed}); err != nil {
		t.Fatal(err)
	}
	check(SuppressedByDesign, WhySuppressed)
	if err := r.desk.Visible(Sight{"AIC-204", at + 2, WhyOutOfService}); err != nil {
		t.Fatal(err)
	}
	check(OutOfService, WhyOutOfService)
	if err := r.desk.Visible(Sight{"AIC-204", at + 3, ""}); err != nil {
		t.Fatal(err)
	}
	check(Unacknowledged, "")
}

func TestDeadSourceHoldsAndClearsNothing(t *testing.T) {
	r := newRig(t)
	r.hear(f("AIC-204", detect.SustainedOffset, detect.Raised, 0), f("TIC-401", detect.SustainedOffset, detect.Raised, 0))
	r.hear(source("works", detect.SourceDown, detect.Raised, 10))
	state := func(loop string) State {
		for _, e := range r.desk.Episodes() {
			if e.Subject.Loop == loop && e.Family == familyLimit {
				return e.State()
			}
		}
		return "gone"
	}
	if a, b := state("AIC-204"), state("TIC-401"); a != Held || b != Unacknowledged {
		t.Errorf("loop of the dead source %q, of the other %q; want held, unacknowledged", a, b)
	}
	r.hear(source("works", detect.SourceDown, detect.Cleared, 20))
	if a := state("AIC-204"); a != Unacknowledged {
		t.Errorf("after the source came back: %q, want unacknowledged", a)
	}
}

func TestFailingStoreTakesNothing(t *testing.T) {
	for _, committed := range []bool{false, true} {
		r := newRig(t)
		r.hear(f("PIC-120", detect.SustainedOffset, detect.Raised, 0))
		n := r.store.updates
		r.store.fail = func(i int, after bool) error {
			if i == n+1 && after == committed {
				return errDisk
			}
			return nil
		}
		batch := []detect.Finding{f("AIC-204", detect.SustainedOffset, detect.Raised, 1)}
		if err := r.desk.Hear(batch); err == nil || !strings.Contains(err.Error(), "hint:") {
			t.Fatalf("error %v, want one with a hint", err)
		}
		want := 1
		if committed {
			want = 2 // the store kept it although it said otherwise
		}
		if err := r.desk.Hear(batch); err != nil {
			t.Fatal(err)
		}
		if es := r.desk.Episodes(); len(es) != 2 {
			t.Fatalf("after the second try: %d episodes, want 2 (%d before)", len(es), want)
		}
		if n := r.store.count(bucketSteps); n != 2 {
			t.Errorf("%d steps to be told, want 2", n)
		}
	}
}

func TestMalformedFindingDoesNotStopTheBatch(t *testing.T) {
	r := newRig(t)
	r.hear(detect.Finding{Kind: detect.SustainedOffset, At: 5, Event: detect.Raised}, f("AIC-204", detect.SustainedOffset, detect.Raised, 1))
	only(t, r.desk.Episodes())
}

func TestTenThousandFindingsAtOnce(t *testing.T) {
	r := newRig(t)
	var fs []detect.Finding
	for i := range 10000 {
		fs = append(fs, f("XIC-"+time.Duration(i).String(), detect.SustainedOffset, detect.Raised, 0))
	}
	r.hear(fs...)
	r.run(start.Add(time.Minute))
	keys := map[string]int{}
	for _, m := range r.hook.take() {
		keys[m.Key]++
	}
	if len(keys) != 10000 {
		t.Errorf("%d messages to the program, want 10000", len(keys))
	}
	for k, n := range keys {
		if n != 1 {
			t.Errorf("%s sent %d times", k, n)
		}
	}
	if n := len(r.mail.take()); n > 1 {
		t.Errorf("%d messages to the person, want at most one", n)
	}
}

// A cycle that is judged anew goes on as another kind at the same moment: one episode
// stays open through it, with who took notice of it, and nothing is told to be over.
func TestJudgedAnewIsOneEpisode(t *testing.T) {
	r := newRig(t)
	r.hear(f("AIC-204", detect.SustainedOscillation, detect.Raised, 0))
	r.run(start.Add(time.Minute))
	id := live(r.desk.Episodes())[0].ID
	if err := r.desk.Acknowledge(id, "Jo", "seen", time.Time{}); err != nil {
		t.Fatal(err)
	}
	r.hear(f("AIC-204", detect.SustainedOscillation, detect.Cleared, 30, func(x *detect.Finding) { x.Reason = detect.Rejudged }),
		f("AIC-204", detect.ValveStickingKind, detect.Raised, 30, func(x *detect.Finding) { x.Cause = detect.ValveSticking }))
	r.run(start.Add(time.Hour))
	es := live(r.desk.Episodes())
	if len(es) != 1 || es[0].ID != id || !es[0].Open() || es[0].Count != 1 || es[0].Ack == nil || es[0].Lead().Kind != detect.ValveStickingKind {
		t.Errorf("not one episode: %s", describe(es))
	}
	for _, m := range r.hook.take() {
		if m.Event == detect.Cleared {
			t.Errorf("told to be over: %s", m.Subject)
		}
	}
}
