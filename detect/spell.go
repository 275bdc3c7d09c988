package detect

import (
	"math"

	"midwatch/collector"
	"midwatch/configs"
)

// Natural manual spells: the trade's own test (methods section 14). An operator puts
// a cycling loop into manual; a cycle that goes on with its period while OP rests
// comes from outside this loop, one that stops was made by its tuning or its final
// element. Nothing is asked for: the watch looks when it happens. Outer loops of a
// cascade are left out, since there the inner loop may go on by itself.

// spell follows PV in manual at the period that was seen before.
type spell struct {
	Begun    float64 // s, of the running period
	P, Amp   float32 // s, %, of the cycle before; P 0: no spell
	Re, Im   float32 // sums of PV against cosine and sine over the running period
	Sum      float32 // of PV, less Base
	Base     float32 // %, PV at the begin
	OP       float32 // %, as it rests
	N        uint32  // slots in the running period
	WasRe    float32 // %, fundamental of the period before
	WasIm    float32
	WasMean  float32 // %
	At       moment  // of the last verdict
	OfP      float32 // s, the period it is about
	Periods  uint8   // whole ones with OP at rest
	On, Gone uint8   // periods on end with the cycle, and without
	WentOn   uint8   // spells in which it went on
	Died     uint8   // and in which it died
	Told     bool    // this spell has its verdict
}

// Limits: the fundamental of PV against that of the cycle before. The first period
// is left to what the switch itself sets off.
const (
	spellOn      = 0.5
	spellGone    = 0.25
	spellNeed    = 2    // periods on end beside the first
	spellPhase   = 60.0 // degrees from period to period: the same period within a sixth
	spellAmpMost = 2.0  // ratio of the fundamental from period to period
	spellOPMoves = 0.5  // %, OP moved by hand: begin again
)

// found is what earlier spells showed, without the one that runs: it counts slots, which
// must follow each other.
func (p spell) found() spell {
	return spell{At: p.At, OfP: p.OfP, WentOn: p.WentOn, Died: p.Died}
}

// stepSpell is called in every slot.
func (w *Watch) stepSpell(flags collector.Flags) {
	s, in := &w.s, &w.in
	p := &s.Spell
	hand := in.mode == collector.Manual || in.mode == collector.ModeUnknown && s.Motion.Manual
	if in.active || !hand || in.frozen || flags&(collector.Suppressed|collector.Inactive|collector.Unconfirmed) != 0 {
		p.P = 0
		return
	}
	o := &s.Osc
	if p.P == 0 {
		if !(o.Grow || o.Sus) || o.Evals < 4 || !(o.P > 8*in.dt) || !(o.Amp > 0) || w.loop.Inner != "" || !in.hasOP {
			return
		}
		p.P, p.Amp, p.Told = float32(o.P), float32(o.Amp), false
		p.begin(in)
		return
	}
	if math.Abs(in.op-float64(p.OP)) > spellOPMoves {
		p.begin(in)
		return
	}
	if p.Told {
		return
	}
	x, a := in.pv-float64(p.Base), 2*math.Pi*(in.t-p.Begun)/float64(p.P)
	p.Re += float32(x * math.Cos(a))
	p.Im += float32(x * math.Sin(a))
	p.Sum += float32(x)
	if p.N++; in.t-p.Begun >= float64(p.P)-in.dt/2 {
		p.endPeriod(in.t, w.loop.Process == configs.Integrating)
	}
}

// begin starts at a rest of OP.
func (p *spell) begin(in *input) {
	p.Begun, p.Base, p.OP = in.t, float32(in.pv), float32(in.op)
	p.Re, p.Im, p.Sum, p.N, p.Periods, p.On, p.Gone = 0, 0, 0, 0, 0, 0, 0
}

func (p *spell) endPeriod(t float64, integrating bool) {
	n := float32(p.N)
	re, im, mean := 2*p.Re/n, 2*p.Im/n, p.Sum/n
	// PV may drift in manual: a ramp of b a period has the fundamental -b/pi in the
	// sine, and its b is the difference of the means. Where it only settles that is too
	// much, and the smaller fundamental counts.
	if level := im + (mean-p.WasMean)/math.Pi; p.Periods > 0 && (integrating || math.Abs(float64(level)) < math.Abs(float64(im))) {
		im = level
	}
	a, was := math.Hypot(float64(re), float64(im)), math.Hypot(float64(p.WasRe), float64(p.WasIm))
	if p.Periods > 0 {
		same := true
		if p.Periods > 1 {
			turn := math.Atan2(float64(im*p.WasRe-re*p.WasIm), float64(re*p.WasRe+im*p.WasIm))
			same = math.Abs(turn) < spellPhase*math.Pi/180 && a < spellAmpMost*was && was < spellAmpMost*a
		}
		switch {
		case a > spellOn*float64(p.Amp) && same:
			p.On, p.Gone = p.On+1, 0
		case a < spellGone*float64(p.Amp):
			p.On, p.Gone = 0, p.Gone+1
		default:
			p.On, p.Gone = 0, 0
		}
	}
	if p.On >= spellNeed || p.Gone >= spellNeed {
		if p.OfP == 0 || math.Abs(math.Log(float64(p.P/p.OfP))) > 0.25 { // the verdicts before were on another cycle
			p.WentOn, p.Died = 0, 0
		}
		p.At, p.OfP, p.Told = momentOf(t), p.P, true
		if p.On > 0 {
			p.WentOn = min(p.WentOn+1, 9)
		} else {
			p.Died = min(p.Died+1, 9)
		}
	}
	p.WasRe, p.WasIm, p.WasMean = re, im, mean
	p.Periods = min(p.Periods+1, 250)
	p.Re, p.Im, p.Sum, p.N, p.Begun = 0, 0, 0, 0, t
}

// spellVerdict is how often the live cycle went on in manual and how often it died;
// none where spells contradict each other.
func (w *Watch) spellVerdict() (wentOn, died int) {
	p, o := &w.s.Spell, &w.s.Osc
	if p.OfP == 0 || !(o.P > 0) || math.Abs(math.Log(o.P/float64(p.OfP))) > 0.25 || w.in.t-p.At.s() > max(86400, 100*o.P) ||
		p.WentOn > 0 && p.Died > 0 {
		return 0, 0
	}
	return int(p.WentOn), int(p.Died)
}

// spellSays lets the spells bear on the claim of a cycle. Confidences are odds: a
// cycle from outside pauses by itself just then in perhaps one spell of three, a cycle
// of the own loop cannot go on at its size.
func (w *Watch) spellSays(k int, c *claim) {
	if k != kGrowing && k != kSustained && k != kSticking {
		return
	}
	wentOn, died := w.spellVerdict()
	o := &w.s.Osc
	switch {
	case wentOn > 0:
		if k == kSticking {
			c.On = false // no valve makes a cycle with OP at rest
			return
		}
		if k == kSustained && o.Sticking && !o.Grow {
			c.On = o.Sus && w.leadKnown()
		}
		c.Cause, c.Also = causeIndex(OutsideDisturbance), [2]uint8{causeIndex(MeasurementCause)}
		c.Conf = 0.88
		if wentOn > 1 {
			c.Conf = 0.94
		}
	case died > 0 && causes[c.Cause] == OutsideDisturbance:
		by := ResetTooShort
		if o.PhiDeg < (phiGain+phiReset)/2 {
			by = GainTooHigh
		}
		c.Cause, c.Also, c.Conf = causeIndex(Undetermined), [2]uint8{causeIndex(by), causeIndex(ValveSticking)}, 0.6
	case died > 0 && (causes[c.Cause] == Undetermined || c.Cause == 0):
		for i, a := range c.Also {
			if causes[a] == OutsideDisturbance {
				if c.Also[i] = causeIndex(ValveSticking); c.Also[1-i] == c.Also[i] {
					c.Also[i] = 0
				}
			}
		}
	case died > 0:
		doubt := float64(1 - c.Conf)
		for range min(died, 2) {
			doubt /= doubt + 3*(1-doubt) // odds times three
		}
		c.Conf = float32(min(0.97, 1-doubt))
	}
}

// spellSentence says what the spells showed.
func (w *Watch) spellSentence(k int) string {
	if k != kGrowing && k != kSustained && k != kSticking {
		return ""
	}
	switch wentOn, died := w.spellVerdict(); {
	case wentOn > 0:
		return " The cycle went on while the loop was in manual: it is not made by this loop."
	case died > 0:
		return " The cycle died away while the loop was in manual: it is made in this loop, by its tuning or its final element."
	}
	return ""
}
