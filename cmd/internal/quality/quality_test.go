package quality

import (
	"cmp"
	"fmt"
	"os"
	"reflect"
	"runtime"
	"slices"
	"strings"
	"testing"

	"midwatch/collector"
	"midwatch/configs"
	"midwatch/detect"
)

// The full bench (command bench) is what is reported.
const (
	shortLoops         = 2   // scenarios per family
	shortDays          = 1.5 // of a healthy loop recorded at 10 s
	minRecordedFound   = 6   // of those that must be found: all
	maxRecordedFalse   = 1
	maxForbiddenCauses = 0
)

var shortBounds = Bounds{Missed: 0.10, WrongOfNamed: 0.06, Named: 0.80, FalsePerLoopYear: 6, GainError: 0.06, ResetError: 0.08, Read: 0.8}

func TestQuality(t *testing.T) {
	if testing.Short() {
		t.Skip("a minute of simulation")
	}
	results := Run(Options{Loops: shortLoops, Days: shortDays, Seed: 1})
	for _, broken := range shortBounds.Broken(results) {
		t.Error(broken)
	}
	if t.Failed() || testing.Verbose() {
		var b strings.Builder
		Details(&b, results)
		Table(&b, results)
		t.Log("\n" + b.String())
	}
}

func TestRecordedRuns(t *testing.T) {
	dir := "../../../testdata/te"
	if _, err := os.Stat(dir); err != nil {
		t.Fatalf("%v; hint: the recorded runs belong to the repository", err)
	}
	sc, err := Recorded(dir)
	if err != nil {
		t.Fatal(err)
	}
	if sc.Expected != 6 || sc.HealthyLoopDays < 20 {
		t.Errorf("%d labelled faults and %.1f healthy loop-days read, want 6 and more than 20", sc.Expected, sc.HealthyLoopDays)
	}
	if sc.Found < minRecordedFound || sc.False > maxRecordedFalse || sc.ForbiddenCauses > maxForbiddenCauses || sc.CauseWrong > sc.CauseRight {
		var b strings.Builder
		if err := ScoreRecorded(&b, dir); err != nil {
			t.Fatal(err)
		}
		t.Errorf("recorded runs out of bounds:\n%s", b.String())
	}
}

// The score is a pure function of seed, family and index: cores do not matter.
func TestSameOnAnyNumberOfCores(t *testing.T) {
	o := Options{Loops: 2, Days: 0.3, Seed: 7, Match: func(f string) bool {
		return f == "growing by gain" || f == "shared, outside" || f == "operators" || f == "flow-paced dosing"
	}}
	a := Run(o)
	before := runtime.GOMAXPROCS(1)
	b := Run(o)
	runtime.GOMAXPROCS(before)
	if len(a) != 8 || len(b) != 8 {
		t.Fatalf("%d and %d results, want 8", len(a), len(b))
	}
	for i := range a {
		if fmt.Sprintf("%+v", a[i]) != fmt.Sprintf("%+v", b[i]) {
			t.Errorf("%s #%d differs between one core and more:\n%+v\n%+v", a[i].Family, a[i].Index, a[i], b[i])
		}
	}
}

func TestSpacesOfSeedsDiffer(t *testing.T) {
	f := &faultFamilies[0]
	a, b := describe(f.make(1, false, 0, 1)), describe(f.make(1, true, 0, 1))
	if a == b || a != describe(f.make(1, false, 0, 1)) {
		t.Error("the held-back scenario equals the open one, or a scenario is not repeatable")
	}
}

// Every fault family must show in most of its scenarios, else its score means
// nothing; and every healthy loop must come to rest after its largest upset.
func TestLabelsHold(t *testing.T) {
	if testing.Short() {
		t.Skip("half a minute of simulation")
	}
	for i := range faultFamilies {
		f := &faultFamilies[i]
		subtle, n := 0, 4
		for k := range n {
			s := f.make(3, false, k, 1)
			if s.truth.subtle == nil {
				continue
			}
			s.run(func(int, *frame) {})
			if s.truth.subtle(s) {
				subtle++
			}
		}
		if subtle > n/2 {
			t.Errorf("%s: %d of %d scenarios hardly show their fault", f.name, subtle, n)
		}
	}
	for i := range healthyFamilies {
		f := &healthyFamilies[i]
		for k := range 3 {
			s := f.make(3, false, k, 1)
			l := s.rigs[0]
			if l.hook == nil && len(s.rigs) == 1 && !l.settles() {
				t.Errorf("%s #%d does not come to rest:\n%s", f.name, k, describe(s))
			}
		}
	}
}

// What is heard becomes episodes: raised again within a day is the same one.
func TestEpisodes(t *testing.T) {
	hour := int64(3600_000)
	h := newListener()
	say := func(at int64, k detect.Kind, e detect.Event, c detect.Cause) {
		h.hear(&detect.Finding{Loop: "a", Kind: k, Event: e, At: at, Cause: c})
	}
	say(1*hour, detect.GrowingOscillation, detect.Raised, detect.Undetermined)
	say(2*hour, detect.GrowingOscillation, detect.Updated, detect.ResetTooShort)
	say(3*hour, detect.GrowingOscillation, detect.Cleared, "")
	say(10*hour, detect.GrowingOscillation, detect.Raised, detect.Undetermined)
	say(11*hour, detect.GrowingOscillation, detect.Cleared, "")
	say(5*hour, detect.SustainedOffset, detect.Raised, "")
	say(60*hour, detect.GrowingOscillation, detect.Raised, detect.GainTooHigh)
	type ep struct {
		kind   detect.Kind
		raised int64
		named  detect.Cause
	}
	var got []ep
	for _, e := range h.episodes() {
		got = append(got, ep{e.last.Kind, e.raised / hour, e.named})
	}
	want := []ep{{detect.GrowingOscillation, 1, detect.ResetTooShort}, {detect.SustainedOffset, 5, ""}, {detect.GrowingOscillation, 60, detect.GainTooHigh}}
	if !reflect.DeepEqual(got, want) {
		t.Errorf("episodes %v, want %v", got, want)
	}
}

// A family scored by hand.
func TestScoreCounts(t *testing.T) {
	mk := func(findings ...detect.Finding) Result {
		c := &Case{Rows: []*configs.Loop{configs.NewLoop("a")}, Clipped: func(string, detect.Kind) bool { return false }}
		truth := &Truth{Kinds: kinds{detect.GrowingOscillation}, Also: kinds{detect.SustainedOscillation}, Causes: causes{detect.ResetTooShort},
			Soft: causes{detect.GainTooHigh}, OnsetS: 100, EndS: 1000, UnitS: 10}
		h := newListener()
		for i := range findings {
			findings[i].Loop, findings[i].Event = "a", cmp.Or(findings[i].Event, detect.Raised)
			h.hear(&findings[i])
		}
		res := Result{}
		scoreFindings(c, truth, h, &res)
		return res
	}
	g := func(at int64, c detect.Cause) detect.Finding {
		return detect.Finding{Kind: detect.GrowingOscillation, At: at * 1000, Cause: c, Confidence: 0.9}
	}
	for _, c := range []struct {
		what         string
		r            Result
		found        bool
		cause        string
		extra, early int
	}{
		{"right", mk(g(150, detect.ResetTooShort)), true, "right", 0, 0},
		{"wrong", mk(g(150, detect.ValveSticking)), true, "wrong", 0, 0},
		{"defensible", mk(g(150, detect.GainTooHigh)), true, "undetermined", 0, 0},
		{"open", mk(g(150, detect.Undetermined)), true, "undetermined", 0, 0},
		{"too early", mk(g(50, detect.ResetTooShort)), false, "", 1, 1},
		{"allowed besides", mk(detect.Finding{Kind: detect.SustainedOscillation, At: 150_000}), false, "", 0, 0},
		{"another kind", mk(detect.Finding{Kind: detect.FrozenPV, At: 150_000}), false, "", 1, 0},
		{"after the end", mk(g(1500, detect.ResetTooShort)), false, "", 0, 0},
		{"about the data", mk(detect.Finding{Kind: detect.SamplesLost, At: 150_000}), false, "", 0, 0},
	} {
		if c.r.Found != c.found || c.r.Cause != c.cause || len(c.r.Extra) != c.extra || c.r.Early != c.early {
			t.Errorf("%s: found %v cause %q extra %d early %d, want %v %q %d %d", c.what, c.r.Found, c.r.Cause, len(c.r.Extra), c.r.Early, c.found, c.cause, c.extra, c.early)
		}
	}
	if d := mk(g(150, detect.ResetTooShort)).DelayUnits; d != 5 {
		t.Errorf("delay %g units, want 5", d)
	}
}

// A growth that the limits of OP have ended is a steady swing from then on, and rightly told
// as one; one that goes on inside the limits is not.
func TestClippedGrowthIsSteady(t *testing.T) {
	for index, want := range map[int]bool{3: true, 0: false} {
		for i := range faultFamilies {
			if f := &faultFamilies[i]; f.name == "growing by gain" {
				s := f.make(4, false, index, 1)
				s.run(func(int, *collector.Frame) {})
				c := s.asCase()
				if got := slices.Contains(c.Truth().Kinds, detect.SustainedOscillation); got != want {
					t.Errorf("#%d: clipped for %.0f s of periods of %.0f s: steady %v", index, s.rigs[0].clipLoud, c.Truth().UnitS, got)
				}
			}
		}
	}
}
