package plant

import (
	"fmt"
	"slices"
	"strings"
	"time"

	"midwatch/collector"
)

// FaultKind is what goes wrong.
type FaultKind string

// Kinds of faults, each with the meaning of Factor.
const (
	ResetTooShort FaultKind = "reset-too-short" // reset time times Factor
	ResetTooLong  FaultKind = "reset-too-long"  // reset time times Factor
	GainTooHigh   FaultKind = "gain-too-high"   // gain times Factor
	GainTooLow    FaultKind = "gain-too-low"    // gain times Factor
	IntegralOff   FaultKind = "integral-off"    // no integral action; OP would have to rise by Factor %
	StickingValve FaultKind = "sticking-valve"  // S = Factor %, J = half of it
	DeadBand      FaultKind = "dead-band"       // S = Factor %, J = 0
	OutputLimited FaultKind = "output-limited"  // OP would have to rise by Factor %
	WindUp        FaultKind = "wind-up"         // no guard against wind-up, and spells of Factor % load
	SharedSine    FaultKind = "shared-sine"     // swing of Factor % on the raw water header; no loop
	FrozenPV      FaultKind = "frozen-pv"
	PVPegged      FaultKind = "pv-pegged" // at Factor % of span
	ElementStuck  FaultKind = "element-stuck"
	ManualSpell   FaultKind = "manual-spell"
	DataStop      FaultKind = "data-stop"
	TuningChange  FaultKind = "tuning-change" // gain times Factor, reset time too
)

// HeaderPeriodS is the period of the swing on the raw water header, s.
const HeaderPeriodS = 150

// The spells of load that wind up a loop without a guard.
const (
	windupEvery = 2400 // s
	windupFor   = 420  // s
)

// Fault is one fault of one loop.
type Fault struct {
	Loop   string
	At     time.Duration // plant time since the start
	For    time.Duration // 0 = for good
	Kind   FaultKind
	Factor float64
}

// event is the beginning or the end of a fault.
type event struct {
	second int64
	fault  int
	end    bool
}

// truths says which finding each kind should lead to, and why, in the words of
// findings; an empty kind asks for none.
var truths = map[FaultKind][2]string{
	ResetTooShort: {"growing-oscillation", "reset-too-short"},
	ResetTooLong:  {"sluggish-recovery", "reset-too-long"},
	GainTooHigh:   {"growing-oscillation", "gain-too-high"},
	GainTooLow:    {"sluggish-recovery", "gain-too-low"},
	IntegralOff:   {"sustained-offset", "integral-missing"},
	StickingValve: {"valve-sticking", "valve-sticking"},
	DeadBand:      {"sustained-oscillation", "valve-dead-band"},
	OutputLimited: {"output-saturation", "output-limit"},
	WindUp:        {"output-saturation", "wind-up"},
	SharedSine:    {"shared-oscillation", "outside-disturbance"},
	FrozenPV:      {"frozen-pv", "measurement"},
	PVPegged:      {"pv-at-range-end", "measurement"},
	ElementStuck:  {"sustained-offset", "final-element-not-following"},
	ManualSpell:   {"not-in-normal-mode", ""},
	DataStop:      {"stale-data", ""},
	TuningChange:  {"tuning-changed", ""},
}

// Add puts faults into the script of the works. It refuses unknown loops and
// kinds, and times that have passed.
func (p *Plant) Add(faults ...Fault) error {
	for _, f := range faults {
		if _, ok := truths[f.Kind]; !ok {
			return fmt.Errorf("fault of %s: kind %q is unknown", f.Loop, f.Kind)
		}
		if f.Kind != SharedSine && p.index(f.Loop) < 0 {
			return fmt.Errorf("fault %s: loop %q is unknown; hint: loops are %s", f.Kind, f.Loop, strings.Join(p.names(), ", "))
		}
		at := int64(f.At / time.Second)
		if at <= p.seconds && p.seconds > 0 {
			return fmt.Errorf("fault %s of %s: %v has passed already", f.Kind, f.Loop, f.At)
		}
		p.faults = append(p.faults, f)
		n := len(p.faults) - 1
		p.events = append(p.events, event{second: max(at, 1), fault: n})
		if f.For > 0 {
			p.events = append(p.events, event{second: max(at, 1) + int64(f.For/time.Second), fault: n, end: true})
		}
	}
	slices.SortStableFunc(p.events, func(a, b event) int { return int(a.second - b.second) })
	return nil
}

func (p *Plant) names() []string {
	var s []string
	for _, l := range p.loops {
		s = append(s, l.name)
	}
	return s
}

func (p *Plant) runEvents() {
	for len(p.events) > 0 && p.events[0].second <= p.seconds {
		e := p.events[0]
		p.events = p.events[1:]
		f := p.faults[e.fault]
		if f.Kind == SharedSine {
			p.headerAmp = f.Factor
			if e.end {
				p.headerAmp = 0
			}
			continue
		}
		p.loops[p.index(f.Loop)].fault(f, !e.end)
	}
}

// fault switches a fault on or off.
func (l *loop) fault(f Fault, on bool) {
	times := f.Factor
	amount := f.Factor
	if !on {
		times, amount = 1/f.Factor, 0
	}
	c := &l.ctrl
	switch f.Kind {
	case ResetTooShort, ResetTooLong:
		c.Ti *= times
	case GainTooHigh, GainTooLow:
		c.Kc *= times
		c.Begin(l.sp, l.pv, l.trim)
	case TuningChange:
		c.Kc *= times
		c.Ti *= times
		c.Begin(l.sp, l.pv, l.trim)
	case IntegralOff:
		l.extra = amount
		if c.Ti = 0; !on {
			_, c.Ti, _ = l.tuning()
		}
	case OutputLimited:
		l.extra = amount
	case WindUp:
		l.overload = amount
		c.Windup = on || l.noWindupGuard
	case StickingValve, DeadBand:
		l.valve.S, l.valve.J = l.s, l.j
		if on {
			l.valve.S, l.valve.J = f.Factor, 0
			if f.Kind == StickingValve {
				l.valve.J = f.Factor / 2
			}
		}
	case FrozenPV:
		l.frozen = on
	case PVPegged:
		l.pegged, l.pegAt = on, f.Factor
	case ElementStuck:
		l.valve.Stuck = on
	case ManualSpell:
		l.handHeld = on
		l.mode = collector.Manual
		if !on {
			l.mode = l.usualMode()
		}
	case DataStop:
		l.stopped = on
	}
}

// Truth is what a perfect watch would say of a fault.
type Truth struct {
	Loop     string
	Fault    FaultKind
	Kind     string // of the finding
	Cause    string // empty where none is asked for
	From, To int64  // ms UTC; To is 0 while the fault lasts
}

// Truth lists the faults in the script and what they should lead to. A swing on
// the header gives one line for each loop that it reaches.
func (p *Plant) Truth() []Truth {
	var out []Truth
	for _, f := range p.faults {
		w := truths[f.Kind]
		t := Truth{Loop: f.Loop, Fault: f.Kind, Kind: w[0], Cause: w[1], From: p.start + f.At.Milliseconds()}
		if f.For > 0 {
			t.To = t.From + f.For.Milliseconds()
		}
		if f.Kind != SharedSine {
			out = append(out, t)
			continue
		}
		for _, l := range p.loops {
			if l.header > 0 {
				t.Loop = l.name
				out = append(out, t)
			}
		}
	}
	return out
}
