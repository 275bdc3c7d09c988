package detect

import (
	"math"

	"midwatch/collector"
	"midwatch/configs"
	"midwatch/detect/num"
)

// Inside detection PV, SP and OP are in % of their range, times in seconds since
// the first frame of the memory, and e is SP - PV.

// maxLevels bounds the octaves of the cascade; level L averages 2^L frames.
const maxLevels = 12

// Limits of the grid.
const (
	learnIntervals = 16   // intervals whose median gives the sample interval when none is configured
	holdPeriodic   = 5    // missing slots filled by holding, periodic reporting
	holdExceptionS = 1900 // s held at most between changes, by exception: half an hour is a usual longest silence (common practice, no source)
)

// input is one slot of the loop's time grid.
type input struct {
	t      float64 // s since T0
	dt     float64 // s
	pv, sp float64 // %
	op     float64 // %
	trim   float64 // %, OP without its feedforward
	pos    float64 // %, actual position of the final element; NaN none
	e      float64 // %
	spStep float64 // change of SP since the last slot, %
	mode   collector.Mode
	hasOP  bool // OP is known
	held   bool // PV was held, not measured
	active bool // the law acts: mode, active_when, not suppressed, PV known
	limit  bool // OP at a limit of its range
	hand   bool // OP stepped by far more than the law explains
	frozen bool // PV stands suspiciously still: it teaches nothing
	first  bool // first slot after a gap or a spell in which the law did not act
}

// grid puts frames on even slots.
type grid struct {
	T0               int64   // ms UTC of the first frame
	At               float64 // s since T0 of the last slot
	DT               float64 // s; 0 while it is learnt
	Guess            [learnIntervals]float32
	N                uint8
	Begun            bool
	Fast, Slow, Seen uint16  // frames faster and slower than the grid, of those seen
	Levels           uint8   // of the cascade
	LastFrame        float64 // s since T0
}

// scale maps units of the source to %.
type scale struct {
	PVLow, PVSpan, OPLow, OPSpan float64
	Guessed                      bool // no range was given and the values do not fit the default
}

// A range that was not given is taken to be twice what the values are where they lie outside
// the default, or in the lowest part of it: a level of 3 m or a residual of 0.8 mg/L is no 3
// or 0.8 %. Loops are set up to work near the middle of their range (common practice, no
// source); from a quarter of the default on the two differ by no more than a factor of two.
const lowInScale = 0.25

// outsideScale is how far outside a range that was not given a value can lie and still fit it,
// spans (common practice, no source).
const outsideScale = 0.2

func (s *scale) init(l *configs.Loop, f *collector.Frame) {
	s.PVLow, s.PVSpan = l.PVLow, l.PVSpan()
	s.OPLow, s.OPSpan = l.OPLow, l.OPSpan()
	if !(s.OPSpan > 0) {
		s.OPLow, s.OPSpan = 0, 100
	}
	pv, sp := float64(f.PV), float64(f.SP)
	outside := func(v float64) bool {
		return v < s.PVLow-outsideScale*s.PVSpan || v > s.PVLow+(1+outsideScale)*s.PVSpan
	}
	ref := max(math.Abs(pv), math.Abs(sp))
	low := sp != 0 && ref < lowInScale*s.PVSpan
	if !(s.PVSpan > 0) || !l.PVRangeGiven && (outside(pv) || outside(sp) || low) {
		if math.IsNaN(ref) || ref == 0 {
			ref = 50
		}
		s.PVLow, s.PVSpan, s.Guessed = 0, 2*ref, true
	}
}

// misjudged: a range that was not given was taken after values at which the loop does not work,
// as those of a plant at rest. SP lies spans beyond it, or was zero until now, and does so in
// two frames that follow each other: one may be broken.
func (w *Watch) misjudged(f *collector.Frame) bool {
	const far = 2 // spans
	if w.loop.PVRangeGiven || !w.s.Grid.Begun {
		return false
	}
	sc, sp := &w.s.Scale, math.Abs(float64(f.SP))
	fits := sp <= far*sc.PVSpan
	if !sc.Guessed {
		fits = max(sp, float64(w.s.Motion.UsedHi)/100*sc.PVSpan) >= lowInScale*sc.PVSpan
	}
	return !fits && within(float64(f.SP/w.s.Last.SP), 1, 1.1)
}

// perList is the factor from a gain in %/% of this scale to one in %/% of the range that the loop
// list gives or, where it has none, stands for. Gains that are entered, read from tags or told
// are of that range.
func (w *Watch) perList() float64 {
	if l := w.loop.PVSpan(); l > 0 && w.s.Scale.PVSpan > 0 {
		return l / w.s.Scale.PVSpan
	}
	return 1
}

// listedGain is the gain of the loop list, %/% of this scale; NaN where none is entered.
func (w *Watch) listedGain() float64 { return w.loop.GainPct / w.perList() }

// motion is what PV, SP and OP have been doing: stillness, steps, extremes.
type motion struct {
	PV, SP, OP, E       float64 // of the last slot, %
	Trim                float64 // of the last slot, %
	Astray              float64 // %, mean distance of the final element from OP (lag of 100 slots)
	AstrayUsual         float64 // %, of days
	PosN                uint32  // positions seen
	Mode                collector.Mode
	ModeSince           float64 // s
	PVSame, OPSame      float64 // s, since when the value has not changed
	PVRunMax, OPRunMax  float64 // s, longest still run in the past
	Changes             uint32  // of PV
	SPStep              float64 // s, last step of SP over 0.3 %
	SPPrevStep          float64 // s, the one before
	SPBusy              float32 // share of slots in which SP moved, slow mean
	SPMoves             float32 // the same over days, from 0 on
	SPRamp              moment  // when an SP that rests for most of the time was last on a ramp
	Active              bool
	LawSeen             bool // OP was seen answering e
	ActiveSince         float64
	EF                  float64    // e through a lag of three slots
	OPMin, OPMax        float32    // while active
	UsedLo, UsedHi      float32    // extremes of PV and SP, %, where no range is given
	HalfLo, HalfHi      [2]float32 // OP extremes of the running and the last half hour (or 60 slots)
	SPLo, SPHi          [2]float32
	ELo, EHi            [2]float32
	HalfAt              float64 // s, when the running half window began
	EStillLo, EStillHi  float32
	EStill0, EStillInt  float32      // %, % s: smoothed e when OP came to rest, and its integral since
	Update              num.Quantile // median interval between changes of PV, slots
	Frozen              bool
	Manual              bool    // inferred from OP, where there is no mode tag
	OPBusy, OPBusyUsual float32 // share of slots in which OP moved: last 20 slots, and usual
}

// noise is the noise level of PV, learnt from differences (methods: blind to
// level and slow drift).
type noise struct {
	Ring       [4]float32 // last PVs, %
	N          uint32
	D1, DD, D4 num.Quantile // medians of first, second and fourth-lag differences, %
	Least      num.Quantile // low quantile of the non-zero first differences: the resolution
	Long       num.Quantile // 30 % quantile of the running estimate: robust against spells of trouble
	Step       num.Quantile // median of the non-zero first differences
	ByChange   bool         // PV stands between the values of an analyser: only changes count
	OPLeast    num.Quantile // resolution of OP, %
}

// White noise: 1.0484 * median|d| is one standard deviation (1.4826/sqrt 2, Rousseeuw &
// Croux 1993 for the factor of the median deviation); a second difference has sqrt 3 times the
// deviation of a first one.
const (
	sigmaOfD1 = 1.0484
	sigmaOfDD = 1.0484 / 1.7320508
)

// The smallest noise level taken for true, %: below the resolution of any
// transmitter (common practice, no source).
const leastNoise = 0.005

// update is the usual number of slots between changes of PV.
func (n *noise) step(pv float64, exception bool, update float64, learn bool) {
	pv = float64(float32(pv)) // as the ring keeps it, or its rounding is taken for a change
	// Values that stand for slots are those of an analyser where the changes are of many
	// sizes, and a coarse resolution where all are alike.
	if analyser := update > 3 && n.Step.N > 20 && n.Step.Value() > 2.5*n.Least.Value(); analyser != n.ByChange {
		*n = noise{Least: n.Least, Step: n.Step, OPLeast: n.OPLeast, ByChange: analyser}
	}
	exception = exception || n.ByChange
	if exception && n.N > 0 && n.Ring[0] == float32(pv) {
		return
	}
	if n.N >= 4 && learn {
		d1 := math.Abs(pv - float64(n.Ring[0]))
		dd := math.Abs(pv - 2*float64(n.Ring[0]) + float64(n.Ring[1]))
		d4 := math.Abs(pv - float64(n.Ring[3]))
		n.D1.Add(d1, 0.5, 0.02, leastNoise/4)
		n.DD.Add(dd, 0.5, 0.02, leastNoise/4)
		n.D4.Add(d4, 0.5, 0.02, leastNoise/4)
		if d1 > 1e-9 {
			n.Least.Add(d1, 0.1, 0.02, 1e-6)
			n.Step.Add(d1, 0.5, 0.02, 1e-6)
		}
		if n.N%128 == 0 {
			n.Long.Add(n.now(), 0.3, 0.03, leastNoise)
		}
	}
	n.Ring[3], n.Ring[2], n.Ring[1], n.Ring[0] = n.Ring[2], n.Ring[1], n.Ring[0], float32(pv)
	n.N++
}

// now is the running estimate, %.
func (n *noise) now() float64 { return n.level(n.D1.Value(), n.DD.Value(), n.D4.Value()) }

// level is the noise level, %, that the medians of the differences say. The first
// difference sees a fast oscillation as noise, the second does so less; the fourth lag
// sees noise that is correlated.
func (n *noise) level(d1, dd, d4 float64) float64 {
	s := min(sigmaOfD1*d1, 1.5*sigmaOfDD*dd)
	s = max(s, min(sigmaOfD1*d4, 2*s))
	// Quantised data: a uniform error of one step has q/sqrt 12.
	if n.Least.N > 20 {
		s = max(s, min(0.289*n.Least.Value(), 2*sigmaOfD1*max(d4, d1)+leastNoise))
	}
	return max(s, leastNoise)
}

// beside is the noise level, %, left where a cycle of amplitude amp, %, and period,
// slots, is taken out of the differences. That of a sine over k slots is a sine of
// 2 sin(pi k/period) times its amplitude, the second one of that squared; their median
// is 1/sqrt 2 of it (von Neumann 1941 takes differences against a trend for the same
// end: the slower it is, the less they are fed). Never more than sigma.
func (n *noise) beside(amp, period float64) float64 {
	s1, s4 := 2*math.Sin(math.Pi/period), 2*math.Sin(4*math.Pi/period)
	left := func(d, by float64) float64 { return math.Sqrt(max(d*d-amp*amp*by*by/2, 0)) }
	return min(n.sigma(), n.level(left(n.D1.Value(), s1), left(n.DD.Value(), s1*s1), left(n.D4.Value(), s4)))
}

// sigma is the noise level, % of range, one standard deviation.
func (n *noise) sigma() float64 {
	if n.Long.N >= 3 {
		s := max(n.Long.Value(), leastNoise)
		if n.Least.N > 20 && n.Step.Value() < 1.5*n.Least.Value() {
			s = max(s, 0.289*n.Least.Value()) // all changes are alike: one step of the resolution
		}
		return s
	}
	if n.N > 60 {
		return n.now()
	}
	return 0.3
}

// resolution is the step, %, in which PV comes: its dead band or that of its digits; under
// noise little of that.
func (n *noise) resolution() float64 {
	if n.Least.N > 20 {
		return n.Least.Value()
	}
	return 0
}

// known says whether the noise level rests on enough data.
func (n *noise) known() bool { return n.Long.N >= 3 }
