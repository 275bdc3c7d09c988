package detect

import (
	"math"
	"math/rand/v2"
	"regexp"
	"strings"
	"testing"
	"unicode/utf8"

	"midwatch/collector"
	"midwatch/configs"
)

var (
	textSpoilt  = regexp.MustCompile(`NaN|Inf\b|%!|-0 |--|  |±[^0-9]|±$|(^|[^0-9]) %| [,;:.]|\( ?\)|\b(by|about|for|every|than|to|from|of) ?[,;.:)]`)
	percentSure = regexp.MustCompile(`[0-9]+ ?% (sure|likely|probab|confiden)|confidence|probab`)
)

// anyState is a watch whose numbers are of every sort, known and unknown.
func anyState(rnd *rand.Rand, l *configs.Loop) *Watch {
	w := New(l, 0, Options{})
	v := func() float64 {
		switch rnd.IntN(9) {
		case 0:
			return math.NaN()
		case 1:
			return math.Inf(1 - 2*rnd.IntN(2))
		case 2:
			return 0
		case 3:
			return 1e12 * rnd.NormFloat64()
		case 4:
			return 1e-12 * rnd.NormFloat64()
		}
		return math.Exp(4 * rnd.NormFloat64())
	}
	p := func() float64 { return math.Abs(v()) }
	s := &w.s
	s.Grid.Begun, s.Grid.DT, s.Grid.T0 = true, 1, 1767225600000
	s.Through = s.Grid.T0 + 3*86400000
	w.in.t = 3 * 86400
	s.Scale = scale{PVLow: 0, PVSpan: 100, OPSpan: 100}
	s.Motion.OP, s.Motion.SP, s.Motion.Mode = v(), v(), collector.Mode(rnd.IntN(8))
	s.Last.PV, s.Last.SP, s.Last.OP = float32(v()), float32(v()), float32(v())
	s.Osc = oscState{Grow: rnd.IntN(2) == 0, Sus: rnd.IntN(2) == 0, P: p(), Amp: p(), Growth: p(), Kc: v(), Ti: v(), PhiDeg: v(), Regular: v(), Evals: 20}
	s.OffPast.Offset, s.OffPast.Sat = stand{On: rnd.IntN(2) == 0, Mean: v(), Since: 1}, stand{On: rnd.IntN(2) == 0, Mean: v(), Since: 1}
	s.Sat.WindUp, s.Sat.Over, s.Sat.Peak = rnd.IntN(2) == 0, p(), p()
	s.Recov.Now, s.Recov.Was, s.Recov.By = float32(p()), float32(p()), uint8(rnd.IntN(4))
	s.Misc.OPTravel, s.Misc.StillFrom, s.Misc.EndHigh = p(), 1, rnd.IntN(2) == 0
	s.Change = tuneChange{Seen: 86400 * 2, At: 86400 * 2, What: uint8(rnd.IntN(4)), GainWas: float32(v()), GainNow: float32(v()), ResetWas: float32(v()), ResetNow: float32(v())}
	s.Tune.LimitAt = p()
	for k := range s.Marks {
		s.Marks[k] = [2]mark{{momentOf(float64(2*86400 + 60*rnd.IntN(1000))), float32(math.Exp(4 * rnd.NormFloat64()))}, {momentOf(float64(86400 + 600*rnd.IntN(100))), float32(-math.Exp(3 * rnd.NormFloat64()))}}
		if k == markLimit || k == markGap {
			s.Marks[k][1].Size *= -1
		}
		if k == markMode {
			s.Marks[k][0].Size, s.Marks[k][1].Size = float32(1+(1+rnd.IntN(7))*16+1+rnd.IntN(7)), 0
		}
	}
	s.Spell.OfP, s.Spell.At = float32(s.Osc.P), momentOf(w.in.t)
	s.Spell.WentOn, s.Spell.Died = uint8(rnd.IntN(2)), uint8(rnd.IntN(2))
	if rnd.IntN(2) == 0 { // the track holds a few samples, or none
		s.Track.On, s.Track.N, s.Track.Looks = true, uint8(rnd.IntN(trackLen)), uint32(rnd.IntN(3))
		for i := range s.Track.OP {
			s.Track.OP[i] = int16(rnd.IntN(20000) - 10000)
		}
	}
	return w
}

// Whatever the state holds, whatever the cause named: no text has a number that is
// none, a sign or unit without its number, a gap, or a confidence in per cent; the
// short one keeps 160 characters and its caution for the longest tags and units.
func TestTextsAreWhole(t *testing.T) {
	rnd := rand.New(rand.NewPCG(11, 11))
	long := strings.Repeat("測定-AIC ", 11)[:64]
	for !utf8.ValidString(long) {
		long = long[:len(long)-1]
	}
	names := []string{"FIC-1", long, strings.Repeat("W", 64)}
	units := []string{"", "mg/l", "Nm³/h at 15 °C and 1013 mbar, dry gas", "%"}
	for range 600 {
		l := configs.NewLoop(names[rnd.IntN(len(names))])
		l.Unit = units[rnd.IntN(len(units))]
		l.Process, l.Duty, l.Action = configs.Process(rnd.IntN(4)), configs.Duty(rnd.IntN(8)), configs.Action(rnd.IntN(3))
		if rnd.IntN(2) == 0 {
			l.StrokeS, l.PVFilterS, l.SPRamp = math.Exp(4*rnd.NormFloat64()), math.Exp(4*rnd.NormFloat64()), 0.1
			l.PVAlarmHigh, l.GainPct, l.IdealReset = 80, 1, 30
		}
		w := anyState(rnd, l)
		for k := range table {
			w.s.Open[k] = openFinding{On: true, Cause: uint8(rnd.IntN(len(causes))), Conf: rnd.Float32(), Since: float64(rnd.IntN(3 * 86400))}
			for _, e := range []Event{Raised, Cleared} {
				f := w.finding(k, e, w.in.t, []string{Over, Rejudged}[rnd.IntN(2)])
				for _, x := range []string{f.Text, f.TextShort} {
					if bad := textSpoilt.FindString(x); bad != "" || x == "" || !utf8.ValidString(x) {
						t.Fatalf("%s, cause %s: %q in %q", f.Kind, f.Cause, bad, x)
					}
					if percentSure.MatchString(x) {
						t.Fatalf("%s: a confidence as a number in %q", f.Kind, x)
					}
				}
				if n := utf8.RuneCountInString(f.TextShort); n > 160 || !strings.HasSuffix(f.TextShort, shortTail) {
					t.Fatalf("%s: %d characters: %q", f.Kind, n, f.TextShort)
				}
			}
		}
	}
}

// Less gain is advised nowhere but on a fast swing of a process that is not runaway,
// with the cause named; on an integrating process a slow swing says the contrary.
func TestLessGainIsNeverTheAdviceOnASlowSwing(t *testing.T) {
	rnd := rand.New(rand.NewPCG(12, 12))
	lower := regexp.MustCompile(`(?i)(less|lower|reduce|decrease|smaller)( the)? gain`)
	never := "never cured by less gain"
	advised := 0
	for range 100 {
		l := configs.NewLoop("LIC-310")
		l.Process = configs.Process(rnd.IntN(4))
		w := anyState(rnd, l)
		w.s.Osc.P, w.s.Osc.Amp = 600, 3
		w.s.Osc.Kc, w.s.Osc.PhiDeg = []float64{0, 1}[rnd.IntN(2)], []float64{5, 20, 50, 80, math.NaN()}[rnd.IntN(5)]
		for k := range table {
			for c := range causes {
				w.s.Open[k] = openFinding{On: true, Cause: uint8(c), Conf: 0.9, Since: 10}
				f := w.finding(k, Raised, w.in.t, "")
				rest := strings.ReplaceAll(f.Text, never, "")
				says := lower.MatchString(rest) || lower.MatchString(f.TextShort)
				fast := w.s.Osc.Kc != 0 && w.s.Osc.PhiDeg < phiGain
				swing := k == kGrowing || k == kSustained || k == kSticking
				if says && (f.Cause != GainTooHigh || l.Process == configs.Runaway || swing && !fast) {
					t.Fatalf("%s, %s, process %d, lag %.0f: %q", f.Kind, f.Cause, l.Process, w.s.Osc.PhiDeg, f.Text)
				}
				if says {
					advised++
				}
				if swing && !fast && l.Process == configs.Integrating && (f.Cause == GainTooHigh || f.Cause == ResetTooShort) && !strings.Contains(f.Text, never) {
					t.Fatalf("a slow swing of an integrating process: %q", f.Text)
				}
			}
		}
	}
	if advised == 0 {
		t.Error("less gain was never advised: the test proves nothing")
	}
}
