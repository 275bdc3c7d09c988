package dossier

import (
	"fmt"
	"math"
	"slices"

	"midwatch/configs"
	"midwatch/detect"
)

// element is what OP and PV say of measurement and final element.
func (s *series) element(l *configs.Loop, eps []Episode, cs []Cycle) []Fact {
	var out []Fact
	out = append(out, fact("noise_pv", "noise level of PV", counted(s.pvUnits(s.sigma), s.good, s.unit()),
		fmt.Sprintf("one standard deviation, %s %% of span, from first differences", short(s.sigma))))
	switch {
	case s.quantPV == 0:
		out = append(out, say("resolution_pv", "resolution of PV", "no steps seen in PV"))
	default:
		n := number(s.pvUnits(s.quantPV), s.unit())
		note := fmt.Sprintf("%s %% of span", short(s.quantPV))
		if s.quantPV > 3*s.sigma/0.289 || s.quantPV > 0.25 {
			note += "; coarse: what is smaller cannot be seen by the controller"
		}
		out = append(out, fact("resolution_pv", "resolution of PV", n, note))
	}
	if s.quantOP > 0 {
		out = append(out, fact("resolution_op", "resolution of OP", number(s.quantOP, "% of span"), ""))
	}
	out = append(out, s.filtering(l))
	out = append(out, kindFact(eps, detect.FrozenPV, "frozen", "PV frozen", "PV did not stand to the last bit for longer than is usual for it"))
	out = append(out, kindFact(eps, detect.PVAtRangeEnd, "pegged", "PV at the end of its range", "not seen"))
	out = append(out, s.sticking(eps, cs)...)
	if s.pos != nil {
		out = append(out, s.position()...)
	} else {
		out = append(out, say("position", "position against OP", "no position tag: everything here on the final element is apparent, from OP and PV"))
	}
	return out
}

func kindFact(eps []Episode, k detect.Kind, key, label, none string) Fact {
	n := 0
	first := ""
	for _, e := range eps {
		if e.Kind == k {
			n++
			if first == "" {
				first = e.Since
			}
		}
	}
	if n == 0 {
		return say(key, label, none)
	}
	return say(key, label, fmt.Sprintf("%d episodes, the first since %s", n, first))
}

// filtering looks for noise that hangs together from sample to sample: the mark
// of a filter in transmitter or controller.
func (s *series) filtering(l *configs.Loop) Fact {
	const key, label = "filtering", "filter on PV (apparent)"
	if s.loop.Report == configs.Exception {
		return say(key, label, "reported by exception: the noise is not in the data")
	}
	g := s.noiseLag
	if s.sigma <= 0.0021 || s.quantPV > 0 && s.sigma < 0.3*s.quantPV || g[1] == 0 {
		return say(key, label, "no noise above the resolution: a filter cannot be told from a quiet signal")
	}
	rho := g[1]*g[1] - 1 // variance of differences over two samples over that over one, less one
	if rho < 0.3 {
		return say(key, label, "none seen: the noise does not hang together from sample to sample")
	}
	if rho > 0.9 {
		return say(key, label, "PV moves smoothly from sample to sample: a filter cannot be told from a slow process, and what noise there is lies below what these samples show")
	}
	tau := -s.dt / math.Log(rho)
	f := fact(key, label, number(tau, "s"), "from how the noise hangs together; slow movement of the process itself looks the same")
	if r := l.IdealReset; r > 0 && tau > 0.2*r {
		f.Note += fmt.Sprintf("; heavy against the reset of %s: it adds lag that the tuning must pay for", duration(r))
	}
	return f
}

// sticking is the apparent stick or dead band: how far OP goes between reversals
// while the cycle has the form of a triangle, or while PV stands.
func (s *series) sticking(eps []Episode, cs []Cycle) []Fact {
	var swing, shape []float64
	for _, e := range eps {
		if e.Kind == detect.ValveStickingKind || e.Cause == detect.ValveSticking || e.Cause == detect.ValveDeadBand {
			if v, ok := e.Measures.Get("op_swing_pct"); ok {
				swing = append(swing, v)
			}
			if v, ok := e.Measures.Get("shape_index"); ok {
				shape = append(shape, v)
			}
		}
	}
	var out []Fact
	var turns []float64
	for _, c := range cs {
		if c.Shape.Known() && c.Shape.Value > 0.55 {
			turns = append(turns, s.reversals(max(0, s.slot(c.from)), min(s.n(), s.slot(c.to)), c.OP.Value)...)
		}
	}
	const label = "sticking or dead band, apparent, from OP and PV"
	switch {
	case len(turns) >= 4 && (len(swing) > 0 || len(shape) > 0):
		out = append(out, fact("stick_band_pct", label, spreadOf(turns, "% of OP", ""),
			"OP from reversal to reversal while the cycle had the form of a triangle; the true band is at most this; a standard test (ANSI/ISA-75.25.01) tells"))
	case len(swing) > 0:
		out = append(out, fact("stick_band_pct", label, spreadOf(swing, "% of OP", ""), "OP swing of the episodes; the true band is at most this"))
	default:
		out = append(out, say("stick_band_pct", label, fmt.Sprintf("not seen. A band smaller than about %s %% of OP would not show in these data", short(math.Max(0.3, 4*s.quantOP)))))
	}
	n, size := s.standing()
	switch {
	case n >= 5:
		out = append(out, fact("op_before_pv_pct", "OP moved while PV stood, before PV jumped", spreadOf(size, "% of OP", ""), "apparent; five or more such moves are a second sign of sticking"))
	case n > 0:
		out = append(out, fact("op_before_pv_pct", "OP moved while PV stood, before PV jumped", spreadOf(size, "% of OP", ""), "apparent; fewer than five say nothing"))
	default:
		out = append(out, say("op_before_pv_pct", "OP moved while PV stood, before PV jumped", "not seen"))
	}
	return out
}

// reversals are the ways of OP from one turn to the next, %.
func (s *series) reversals(a, b int, amp float64) []float64 {
	var out []float64
	if !(amp > 0) {
		return nil
	}
	turn, dir, ext, last := 0.6*amp, 0.0, math.NaN(), math.NaN()
	for k := a; k < b; k++ {
		u := s.op[k]
		if u != u {
			dir, ext, last = 0, math.NaN(), math.NaN()
			continue
		}
		if ext != ext {
			ext = u
			continue
		}
		d := u - ext
		switch {
		case dir*d > 0:
			ext = u
		case math.Abs(d) > turn:
			if dir != 0 {
				if last == last {
					out = append(out, math.Abs(ext-last))
				}
				last = ext
			}
			dir, ext = sign(d), u
		}
	}
	return out
}

// standing counts moves of OP in one direction during which PV stayed within its
// noise, that ended in a jump of PV within a few samples.
func (s *series) standing() (int, []float64) {
	var size []float64
	least := math.Max(0.4, 4*s.quantOP)
	// Per cent of PV for a jump: well above noise.
	jump := math.Max(6*s.sigma, 0.3)
	k0 := 0
	for k := 8; k+6 < s.n(); k++ {
		if !s.law[k] || s.pv[k] != s.pv[k] || s.op[k] != s.op[k] || s.sp[k] != s.sp[k-1] {
			k0 = k
			continue
		}
		if k-k0 > 4000 {
			k0 = k - 4000
		}
		if math.Abs(s.pv[k+2]-s.pv[k-2]) < jump || math.Abs(mean(s.pv, k+2, k+6)-mean(s.pv, k-6, k-2)) < jump {
			continue
		}
		j := k - 3
		base := s.pv[j]
		for j > k0 && math.Abs(s.pv[j]-base) < 3.5*s.sigma {
			j--
		}
		moved := s.op[k-2] - s.op[j]
		way := 0.0
		for i := j + 1; i <= k-2; i++ {
			way += math.Abs(s.op[i] - s.op[i-1])
		}
		after := math.Abs(s.op[k+4] - s.op[k-2])
		if k-3-j >= 8 && math.Abs(moved) > least && math.Abs(moved) > 0.8*way && after < 0.5*math.Abs(moved) {
			size = append(size, math.Abs(moved))
		}
		k0, k = k+6, k+6
	}
	return len(size), size
}

// position compares the actual position with OP.
func (s *series) position() []Fact {
	var up, down, off []float64
	moved, d := 0.0, 0.0
	travel, pos := 0.0, 0.0
	for k := 1; k < s.n(); k++ {
		a, b := s.op[k]-s.op[k-1], s.pos[k]-s.pos[k-1]
		if a != a || b != b {
			moved = 0
			continue
		}
		travel += math.Abs(a)
		pos += math.Abs(b)
		if a*d < 0 {
			moved = 0
		}
		if a != 0 {
			d = sign(a)
			moved += a
		}
		x := s.op[k] - s.pos[k]
		off = append(off, x)
		switch { // steadily moving one way for long enough to have taken up any play
		case moved > 1:
			up = append(up, x)
		case moved < -1:
			down = append(down, x)
		}
	}
	if len(off) == 0 {
		return []Fact{say("position", "position against OP", "a position tag is named, but no value came")}
	}
	out := []Fact{fact("position_offset_pct", "OP less position", spreadOf(off, "%", ""), "")}
	if len(up) > 20 && len(down) > 20 {
		slices.Sort(up)
		slices.Sort(down)
		band := quantile(up, 0.5) - quantile(down, 0.5)
		lo := quantile(up, 0.25) - quantile(down, 0.75)
		hi := quantile(up, 0.75) - quantile(down, 0.25)
		n := counted(math.Max(0, band), len(up)+len(down), "% of OP")
		n.Low, n.High, n.Kind = math.Max(0, lo), math.Max(0, hi), "middle half"
		out = append(out, fact("position_dead_band_pct", "dead band by position", n, "OP less position while moving up, less the same while moving down; includes the lag of the actuator"))
	} else {
		out = append(out, say("position_dead_band_pct", "dead band by position", "OP did not move one way by more than 1 % often enough"))
	}
	if travel > 0 {
		out = append(out, fact("position_travel_ratio", "travel of position over travel of OP", number(pos/travel, ""), "well below 1: small moves do not arrive"))
	}
	return out
}

// byHand lists what to check on the spot, common practice, no source.
func byHand(l *configs.Loop, eps []Episode) []string {
	var out []string
	has := func(k ...detect.Kind) bool {
		return slices.ContainsFunc(eps, func(e Episode) bool { return slices.Contains(k, e.Kind) })
	}
	cause := func(c ...detect.Cause) bool {
		return slices.ContainsFunc(eps, func(e Episode) bool { return slices.Contains(c, e.Cause) })
	}
	out = append(out, "Measurement: compare PV with a second reading on the spot; look at range, damping and, for an analyser, at sample flow and its last calibration.")
	switch l.Element {
	case "valve", "":
		out = append(out, "Valve: with operations' agreement, in manual, move OP in small steps both ways (0.5, 1, 2 %) and watch stem and PV: when does it move, does it move the same both ways; supply air, positioner, packing.")
	case "pump", "drive":
		out = append(out, "Pump or drive: compare speed feedback with OP over the range; look for a minimum speed, a ramp in the drive, a skip band.")
	case "actuator":
		out = append(out, "Actuator: time a stroke both ways; look at its dead band setting and at how it is pulsed.")
	case "heater":
		out = append(out, "Heater: check that it answers over the whole range of OP, and that it can only heat: the loop cannot cool.")
	case "inner-loop":
		out = append(out, "Inner loop: judge it first; this loop can only be as good.")
	}
	if has(detect.ValveStickingKind, detect.SustainedOscillation) || cause(detect.ValveSticking, detect.ValveDeadBand) {
		out = append(out, "Cycle: with operations' agreement, two or three cycles in manual. A cycle that stops is valve or tuning of this loop, one that goes on comes from outside.")
	}
	if has(detect.FrozenPV, detect.PVAtRangeEnd) {
		out = append(out, "PV stood or was pegged in the span: find out why before anything is read from these data.")
	}
	if cause(detect.FinalElementNotFollowing) {
		out = append(out, "The final element seemed not to follow: compare its real position with OP.")
	}
	return out
}
