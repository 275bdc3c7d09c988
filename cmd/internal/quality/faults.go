package quality

import (
	"math"
	"math/cmplx"
	"math/rand/v2"

	"midwatch/detect"
)

type kinds = []detect.Kind
type causes = []detect.Cause

// saturating is what a swing may end in.
var saturating = kinds{detect.OutputSaturation, detect.TuningChanged}

// retry draws until the family's own conditions hold.
func retry(f func() *scenario) *scenario {
	for {
		if s := f(); s != nil {
			return s
		}
	}
}

// single is a scenario of one loop.
func single(l *rig, baseline, fault float64, t truth) *scenario {
	t.onset = baseline
	return &scenario{rigs: []*rig{l}, duration: baseline + fault, truth: t}
}

// knobs says by the remedy which knob is at fault in a growing or sustained
// swing: Kc/Ku under 0.5 the reset, over 0.6 the gain, between either.
func knobs(l *rig, kc float64) causes {
	ku, _ := ultimateWithD(l)
	switch q := kc / ku; {
	case q < 0.5:
		return causes{detect.ResetTooShort}
	case q > 0.6:
		return causes{detect.GainTooHigh}
	}
	return causes{detect.ResetTooShort, detect.GainTooHigh}
}

func ultimateWithD(l *rig) (ku, pu float64) {
	g, td := l.plant(), l.law.td
	return ultimate(func(s complex128) complex128 { return g(s) * derivative(s, td) }, l.wScale())
}

func has(c causes, x detect.Cause) bool {
	for _, y := range c {
		if x == y {
			return true
		}
	}
	return false
}

// unstableFor retunes a loop to swing with the growth a cycle, by one knob.
func unstableFor(l *rig, growth float64, byTheReset bool) (kc, ti, period float64, ok bool) {
	if byTheReset {
		ti, period, ok = byReset(l.plant(), l.wScale(), l.law.kc, growth, l.law.td)
		return l.law.kc, ti, period, ok && ti < l.law.ti && ti > 0.6*l.h
	}
	kc, period, ok = byGain(l.plant(), l.wScale(), l.law.ti, growth, l.law.td)
	return kc, l.law.ti, period, ok && kc > l.law.kc
}

// playable says whether a plant would run such a tuning at all: OP not torn by
// noise, integration not coarser than the scan.
func playable(l *rig, kc, ti, period float64) bool {
	return kc <= 30 && kc*l.sensor.sigma < 5 && ti > 5*l.h && period >= 6*l.rec.every && period >= 25*l.h
}

// growing: the tuning is changed (or, for the gain, the process becomes more
// sensitive) so that the loop grows by 4 to 40 % a cycle.
func growing(shapes []shape, byTheReset, young bool) func(*rand.Rand, float64) *scenario {
	return func(r *rand.Rand, _ float64) *scenario {
		return retry(func() *scenario {
			l := drawRig(r, "loop", wish{shapes: shapes})
			growth := math.Exp(between(r, math.Log(1.04), math.Log(1.4)))
			kc, ti, period, ok := unstableFor(l, growth, byTheReset)
			if !ok || !playable(l, kc, ti, period) {
				return nil
			}
			right := knobs(l, kc)
			if byTheReset && !has(right, detect.ResetTooShort) || !byTheReset && !has(right, detect.GainTooHigh) {
				return nil
			}
			base := l.baseline(r)
			if young {
				base = between(r, 3, 8) * l.recovery
			}
			l.setOnset(base, func(l *rig) {
				if !byTheReset && kcRoom(l, kc) && r.Float64() < 0.4 {
					f := kc / l.law.kc // the process got more sensitive instead
					l.proc.k *= f
					return
				}
				l.law.retune(kc, ti, l.law.td)
			})
			cycles := math.Min(math.Max(math.Log(60)/math.Log(growth)+25, 40), 160)
			l.ringLag = int(math.Round(period / 2 / l.h))
			return single(l, base, cycles*period, truth{kinds: kinds{detect.GrowingOscillation},
				also: append(kinds{detect.SustainedOscillation}, saturating...), causes: right, unit: period, cycles: true,
				subtle: ringUnder(3, 2)})
		})
	}
}

// kcRoom says whether a change of process gain can stand for a change of gain:
// where the process is linear and the change not so large that PV jumps.
func kcRoom(l *rig, kc float64) bool {
	return l.proc.in.kind == straight && l.proc.out.kind == straight && kc < 3*l.law.kc
}

// edge: the loop rings without end, at the border of stability, driven by noise
// and load.
func edge(byTheReset bool) func(*rand.Rand, float64) *scenario {
	return func(r *rand.Rand, _ float64) *scenario {
		return retry(func() *scenario {
			l := drawRig(r, "loop", wish{})
			kc, ti, period, ok := unstableFor(l, between(r, 0.985, 1.004), byTheReset)
			if !ok || !playable(l, kc, ti, period) {
				return nil
			}
			right := knobs(l, kc)
			if byTheReset && !has(right, detect.ResetTooShort) || !byTheReset && !has(right, detect.GainTooHigh) {
				return nil
			}
			base := l.baseline(r)
			l.setOnset(base, func(l *rig) { l.law.retune(kc, ti, l.law.td) })
			l.ringLag = int(math.Round(period / 2 / l.h))
			return single(l, base, 150*period, truth{kinds: kinds{detect.SustainedOscillation, detect.GrowingOscillation},
				also: saturating, causes: right, unit: period, cycles: true, subtle: ringUnder(2.5, 1)})
		})
	}
}

// ringUnder: the swing did not grow by the factor, or stayed within so many noise levels.
func ringUnder(q, noise float64) func(*scenario) bool {
	return func(s *scenario) bool {
		l := s.rigs[max(s.truth.member, 0)]
		return !(l.ringLoud.rms() >= q*l.ringQuiet.rms() && l.ringLoud.rms() >= noise*l.sensor.sigma)
	}
}

func rmsUnder(q float64) func(*scenario) bool {
	return func(s *scenario) bool { return !(s.ratio(s.truth.member) >= q) }
}

// sticking: the valve begins to stick.
func sticking(shapes []shape, deadBand bool) func(*rand.Rand, float64) *scenario {
	return func(r *rand.Rand, _ float64) *scenario {
		return retry(func() *scenario {
			l := drawRig(r, "loop", wish{shapes: shapes})
			s := logBetween(r, 1.5, 8)
			j := s * between(r, 0.35, 1)
			kind := pick(r, twoParam, twoParam, slipping)
			if deadBand {
				j, kind = 0, backlash
			}
			if l.law.kc*l.sensor.sigma > 0.3*s { // noise frees the valve
				return nil
			}
			if l.proc.class == lagging && l.k*j < 6*l.sensor.sigma {
				return nil
			}
			if l.proc.class == integrating && 0.5*s/l.law.kc < math.Max(2.5*l.sensor.sigma, 0.25) {
				return nil
			}
			l.load.ou = math.Min(l.load.ou, 0.15*s)
			base := l.baseline(r)
			l.setOnset(base, func(l *rig) {
				l.valve.kind, l.valve.fs, l.valve.fd = kind, (s+j)/2, (s-j)/2
				if deadBand {
					l.valve.fs, l.valve.fd = s/2, s/2
				}
			})
			if l.rec.position = chance(r, 0.15); l.rec.position {
				l.row.Position = l.name + ".POS"
			}
			period := 4 * l.pu
			if l.proc.class == integrating {
				period = 8 * l.pu
			}
			t := truth{kinds: kinds{detect.ValveStickingKind, detect.SustainedOscillation}, also: kinds{detect.SluggishRecovery},
				causes: causes{detect.ValveSticking}, unit: period, cycles: true, subtle: rmsUnder(1.5)}
			if deadBand {
				t.causes = causes{detect.ValveDeadBand}
				t.soft = causes{detect.ValveSticking}
			} else if l.proc.class == integrating && j < 0.5*s {
				t.soft = causes{detect.ValveDeadBand}
			}
			return single(l, base, 100*period, t)
		})
	}
}

// outside: a regular disturbance from elsewhere.
func outside(square bool) func(*rand.Rand, float64) *scenario {
	return func(r *rand.Rand, _ float64) *scenario {
		return retry(func() *scenario {
			l := drawRig(r, "loop", wish{})
			period := l.pu * logBetween(r, 1.5, 20)
			if period < 8*l.rec.every {
				return nil
			}
			want := math.Max(between(r, 0.6, 4), 5*l.sensor.sigma)
			a := want / loadGain(l, period)
			if a > 20 {
				return nil
			}
			base := l.baseline(r)
			l.setOnset(base, func(l *rig) { l.load.wave = wave{amplitude: a, period: period, square: square} })
			if chance(r, 0.3) { // operators show that it goes on without the controller
				l.spells = spells{every: 40 * period, last: 4 * period, move: 1}
			}
			return single(l, base, 80*period, truth{kinds: kinds{detect.SustainedOscillation}, also: kinds{detect.SharedOscillation},
				causes: causes{detect.OutsideDisturbance}, unit: period, cycles: true, subtle: rmsUnder(1.5)})
		})
	}
}

// loadGain is the gain from a load at the process input to PV at a period.
func loadGain(l *rig, period float64) float64 {
	s := complex(0, 2*math.Pi/period)
	g := l.plant()(s)
	c := complex(l.law.kc, 0) * (1 + 1/(s*complex(l.law.ti, 0)) + s*complex(l.law.td, 0))
	return cmplx.Abs(g / (1 + g*c))
}

// sluggish: reset made too long or gain too low.
func sluggish(byTheReset, young bool) func(*rand.Rand, float64) *scenario {
	return func(r *rand.Rand, _ float64) *scenario {
		return retry(func() *scenario {
			sh := selfRegulating
			if byTheReset {
				sh = anyShape
			}
			l := drawRig(r, "loop", wish{shapes: sh})
			f := logBetween(r, 4, 10)
			kc, ti := l.law.kc, l.law.ti
			if byTheReset {
				ti *= f
			} else {
				kc /= f
			}
			slow := l.recovery * f
			if l.rec.every < l.recovery/1500 {
				return nil
			}
			l.load.stepEvery = slow * between(r, 2.5, 5)
			l.load.ou *= 0.5
			l.sp.every = l.load.stepEvery * between(r, 2, 5)
			if l.sp.reach == 0 || young && l.law.spWeight == 0 {
				return nil
			}
			base := math.Max(l.baseline(r), 15*l.load.stepEvery)
			if young {
				base = 0
				l.law.kc, l.law.ti = kc, ti
			} else {
				l.setOnset(base, func(l *rig) { l.law.retune(kc, ti, l.law.td) })
			}
			right := causes{detect.GainTooLow}
			if byTheReset {
				right = causes{detect.ResetTooLong}
			}
			t := truth{kinds: kinds{detect.SluggishRecovery}, also: kinds{detect.TuningChanged, detect.SustainedOffset},
				causes: right, unit: slow}
			if !byTheReset && l.theta > 0.8*l.tau { // only Kc/Ti matters there
				t.soft = causes{detect.ResetTooLong}
			}
			return single(l, base, 25*l.load.stepEvery, t)
		})
	}
}

// slowSwing: an integrating loop with the gain too low for its reset swings
// slowly; the remedy is more gain or a longer reset.
func slowSwing(r *rand.Rand, _ float64) *scenario {
	return retry(func() *scenario {
		l := drawRig(r, "loop", wish{shapes: []shape{level, levelWithLag}})
		ki := between(r, 0.08, 0.3) // k*Kc*Ti; 4 is critical
		kc := ki / (l.k * l.law.ti)
		if kc > l.law.kc/2 {
			return nil
		}
		period := 2 * math.Pi / math.Sqrt(l.k*kc/l.law.ti)
		ti := l.law.ti
		base := l.baseline(r)
		l.setOnset(base, func(l *rig) { l.law.retune(kc, ti, l.law.td) })
		l.load.stepEvery = period * between(r, 2, 5)
		l.load.stepSize = math.Min(l.load.stepSize, 6*kc)
		l.load.ou = math.Min(l.load.ou, 0.6*kc)
		l.load.stepMax = 1.4 * l.load.stepSize
		return single(l, base, 50*period, truth{kinds: kinds{detect.SustainedOscillation, detect.SluggishRecovery},
			also: kinds{detect.TuningChanged, detect.GrowingOscillation}, causes: causes{detect.GainTooLow, detect.ResetTooShort}, unit: period, cycles: true,
			subtle: rmsUnder(1.8)})
	})
}

// offset: the integral action is off, or works only outside a gap.
func offset(gap bool) func(*rand.Rand, float64) *scenario {
	return func(r *rand.Rand, _ float64) *scenario {
		return retry(func() *scenario {
			l := drawRig(r, "loop", wish{plainLaw: true, shapes: selfRegulating})
			base := l.baseline(r)
			l.load.daily = 0
			need := math.Max(1.2, 6*l.sensor.sigma) // % of PV left
			d := need * (1 + l.k*l.law.kc) / l.k
			if d > 25 {
				return nil
			}
			l.load.stepSize, l.load.stepMax = math.Min(l.load.stepSize, d/5), d/5
			l.setOnset(base, func(l *rig) {
				if gap {
					l.law.gap = need * between(r, 1.2, 2)
				} else {
					l.law.ti = math.Inf(1)
				}
				l.load.bias += math.Copysign(d, between(r, -1, 1))
			})
			return single(l, base, math.Max(60*l.recovery, 4*3600), truth{kinds: kinds{detect.SustainedOffset},
				also: kinds{detect.TuningChanged, detect.SluggishRecovery}, causes: causes{detect.IntegralMissing}, unit: l.recovery})
		})
	}
}

// elementStuck: the final element stops following.
func elementStuck(r *rand.Rand, _ float64) *scenario {
	l := drawRig(r, "loop", wish{shapes: selfRegulating})
	base := l.baseline(r)
	d := math.Max(1.5, 6*l.sensor.sigma) / l.k
	l.setOnset(base, func(l *rig) {
		l.valve.kind = stuck
		l.load.bias += math.Copysign(math.Min(d, 30), between(r, -1, 1))
	})
	l.law.anti = pick(r, clamped, tracking)
	return single(l, base, math.Max(60*l.recovery, 4*3600), truth{kinds: kinds{detect.SustainedOffset, detect.OutputSaturation},
		also:   kinds{detect.ValveStickingKind, detect.SluggishRecovery, detect.PVAtRangeEnd},
		causes: causes{detect.FinalElementNotFollowing}, soft: causes{detect.OutputLimit}, unit: l.recovery})
}

// saturation: the load is more than the element can give.
func saturation(r *rand.Rand, _ float64) *scenario {
	return retry(func() *scenario {
		l := drawRig(r, "loop", wish{shapes: selfRegulating})
		base := l.baseline(r)
		if chance(r, 0.4) { // limits set in the controller
			l.law.lo, l.law.hi = between(r, 2, 15), between(r, 80, 95)
			if chance(r, 0.6) {
				l.row.OPLimitLow, l.row.OPLimitHigh = l.law.lo, l.law.hi
			}
		}
		up := chance(r, 0.6)
		room := l.law.hi - l.proc.u0
		if !up {
			room = l.proc.u0 - l.law.lo
		}
		over := math.Max(between(r, 1.5, 6), 8*l.sensor.sigma) / l.k
		ramp := between(r, 0.5, 30) * l.recovery
		l.load.stepMax = math.Min(l.load.stepMax, over/2)
		l.load.stepSize = math.Min(l.load.stepSize, over/2)
		l.setOnset(base, func(l *rig) {
			l.load.rampRate = (room + over) / ramp
			if up {
				l.load.rampRate = -l.load.rampRate
			}
			l.at(base+ramp, func(l *rig) { l.load.rampRate = 0 })
		})
		if l.proc.in.kind != straight {
			return nil // there the room differs
		}
		t := truth{kinds: kinds{detect.OutputSaturation, detect.SustainedOffset}, also: kinds{detect.SluggishRecovery, detect.PVAtRangeEnd},
			causes: causes{detect.OutputLimit}, soft: causes{detect.OutsideDisturbance}, unit: l.recovery}
		s := single(l, base, ramp+math.Max(50*l.recovery, 4*3600), t)
		s.truth.early = ramp * room / (room + over)
		s.truth.onset = base + s.truth.early // from when OP is at its limit
		return s
	})
}

// windUp: no anti-windup, and overloads that come and go.
func windUp(r *rand.Rand, _ float64) *scenario {
	return retry(func() *scenario {
		l := drawRig(r, "loop", wish{shapes: selfRegulating})
		l.law.velocity, l.law.anti = false, unbounded
		if l.proc.in.kind != straight {
			return nil
		}
		base := l.baseline(r)
		up := chance(r, 0.6)
		room := 100 - l.proc.u0
		if !up {
			room = l.proc.u0
		}
		over := math.Max(between(r, 2, 6), 10*l.sensor.sigma) / l.k
		size := room + over
		if up {
			size = -size
		}
		l.load.stepSize, l.load.stepMax, l.load.daily = l.load.stepSize/4, l.load.stepMax/4, 0
		l.sp.every = 0
		on, off := l.recovery*between(r, 3, 6), l.recovery*between(r, 12, 20)
		t0 := base
		for range 8 {
			l.at(t0, func(l *rig) { l.load.bias += size })
			l.at(t0+on, func(l *rig) { l.load.bias -= size })
			t0 += on + off
		}
		return single(l, base, t0-base, truth{kinds: kinds{detect.OutputSaturation, detect.SustainedOffset, detect.SluggishRecovery},
			also: kinds{detect.SustainedOscillation, detect.PVAtRangeEnd}, causes: causes{detect.WindUp}, soft: causes{detect.OutputLimit, detect.OutsideDisturbance}, unit: on + off, cycles: true})
	})
}

// frozen: the measurement stands still; pegged: it sits at an end of its range.
func frozen(r *rand.Rand, _ float64) *scenario {
	l := drawRig(r, "loop", wish{})
	l.rec.heldRows = true // the source lives
	base := l.baseline(r)
	l.setOnset(base, func(l *rig) { l.sensor.frozen = true })
	return single(l, base, math.Max(40*l.recovery, 6*3600), truth{kinds: kinds{detect.FrozenPV},
		also:   kinds{detect.OutputSaturation, detect.SustainedOffset, detect.NotInNormalMode},
		causes: causes{detect.MeasurementCause}, unit: l.recovery})
}

func pegged(r *rand.Rand, _ float64) *scenario {
	l := drawRig(r, "loop", wish{})
	l.rec.heldRows = true // the source lives
	base := l.baseline(r)
	l.setOnset(base, func(l *rig) { l.sensor.pegged = pick(r, 0, 100.0) })
	return single(l, base, math.Max(20*l.recovery, 4*3600), truth{kinds: kinds{detect.PVAtRangeEnd},
		also:   kinds{detect.OutputSaturation, detect.SustainedOffset, detect.FrozenPV},
		causes: causes{detect.MeasurementCause}, soft: causes{detect.OutputLimit, detect.FinalElementNotFollowing, detect.OutsideDisturbance}, unit: l.recovery})
}

// stale: the data end, or have no PV any more, for hours.
func stale(bad bool) func(*rand.Rand, float64) *scenario {
	return func(r *rand.Rand, _ float64) *scenario {
		l := drawRig(r, "loop", wish{})
		l.rec.heldRows = true
		base := l.baseline(r)
		out := math.Max(3*3600, 600*l.rec.every)
		l.setOnset(base, func(l *rig) {
			if bad {
				l.rec.badPV = true
			} else {
				l.rec.outUntil = base + out
				l.rec.silentAfter = math.Max(60, 5*l.rec.every)
			}
		})
		l.at(base+out, func(l *rig) { l.rec.badPV = false })
		return single(l, base, out+10*l.recovery, truth{kinds: kinds{detect.StaleData},
			also: kinds{detect.FrozenPV, detect.NotInNormalMode}, unit: out})
	}
}

// leftInManual: nobody switched back.
func leftInManual(known bool) func(*rand.Rand, float64) *scenario {
	return func(r *rand.Rand, _ float64) *scenario {
		l := drawRig(r, "loop", wish{})
		l.rec.modeKnown = known
		l.rec.heldRows = true
		l.row.ModeTag = ""
		if known {
			l.row.ModeTag = l.name + ".MODE"
		}
		base := l.baseline(r)
		l.spTrack = known && chance(r, 0.3)
		l.setOnset(base, (*rig).toManual)
		if l.proc.class != lagging { // a level runs away in manual: operators hold it
			l.spells = spells{}
			l.load.steps, l.load.stepMax, l.load.daily = 0, l.load.stepMax/5, 0
			l.load.stepSize /= 5
		}
		span := math.Max(80*l.recovery, 24*3600)
		for i := range 6 {
			l.at(base+span*(float64(i)+0.5)/7, func(l *rig) {
				if l.law.manual {
					l.law.u = min(max(l.law.u+between(r, -3, 3), 0), 100)
				}
			})
		}
		return single(l, base, span, truth{kinds: kinds{detect.NotInNormalMode},
			also: kinds{detect.SustainedOffset, detect.PVAtRangeEnd}, unit: l.recovery})
	}
}

// retuned: the tuning was changed, the loop is still sound.
func retuned(theReset bool) func(*rand.Rand, float64) *scenario {
	return func(r *rand.Rand, _ float64) *scenario {
		return retry(func() *scenario {
			l := drawRig(r, "loop", wish{})
			f := logBetween(r, 1.6, 5)
			if chance(r, 0.5) {
				f = 1 / f
			}
			kc, ti := l.law.kc, l.law.ti
			if theReset {
				ti *= f
			} else {
				kc *= f
			}
			if maxSensitivity(l.plant(), l.wScale(), kc, ti, l.law.td) > 2.6 {
				return nil
			}
			base := l.baseline(r)
			l.load.stepEvery = math.Min(l.load.stepEvery, 25*l.recovery)
			l.setOnset(base, func(l *rig) { l.law.retune(kc, ti, l.law.td) })
			return single(l, base, math.Max(80*l.recovery, 20*l.load.stepEvery), truth{kinds: kinds{detect.TuningChanged},
				also: kinds{detect.SluggishRecovery, detect.SustainedOscillation}, unit: l.recovery})
		})
	}
}

// shared: several loops swing together, from an outside wave or from a loop
// whose valve sticks.
func shared(stickyRoot bool) func(*rand.Rand, float64) *scenario {
	return func(r *rand.Rand, _ float64) *scenario {
		return retry(func() *scenario {
			n := 3 + r.IntN(4)
			tau := logBetween(r, 15, 600)
			var rigs []*rig
			base := 0.0
			for i := range n {
				w := wish{minS: tau * 0.5, maxS: tau * 2, shapes: []shape{lagShape, twoLags, deadTime, highOrder}}
				if i > 0 {
					w.shapes = append(w.shapes, level)
				}
				rigs = append(rigs, drawRig(r, "loop"+string(rune('a'+i)), w))
				base = math.Max(base, rigs[i].baseline(r))
			}
			h := math.Inf(1)
			for _, l := range rigs {
				h = math.Min(h, l.h)
			}
			for _, l := range rigs { // one clock for all
				l.h = h
				l.measure()
			}
			root := rigs[0]
			t := truth{kinds: kinds{detect.SharedOscillation}, also: kinds{detect.SustainedOscillation, detect.ValveStickingKind},
				cycles: true, member: -1, forbid: noTuningCause}
			s := &scenario{rigs: rigs, truth: t}
			s.truth.onset = base
			if stickyRoot {
				st := logBetween(r, 3, 8)
				j := st * between(r, 0.4, 1)
				if root.law.kc*root.sensor.sigma > 0.2*st || root.k*j < 10*root.sensor.sigma {
					return nil
				}
				root.load.ou = math.Min(root.load.ou, 0.08*st)
				root.load.stepEvery *= 4
				root.setOnset(base, func(l *rig) { l.valve.kind, l.valve.fs, l.valve.fd = twoParam, (st+j)/2, (st-j)/2 })
				gains := make([]float64, n)
				for i := range gains {
					gains[i] = between(r, 0.6, 2) * rigs[i].perPV * pick(r, -1.0, 1)
				}
				s.couple = func(_ float64, rigs []*rig) {
					d := rigs[0].y - rigs[0].spNow
					for i := 1; i < len(rigs); i++ {
						rigs[i].load.extra = gains[i] * d
					}
				}
				s.truth.unit = 4 * root.pu
				s.truth.causes = causes{detect.ValveSticking}
				s.truth.forbid = func(s *scenario, loop string, c detect.Cause) bool {
					return noTuningCause(s, loop, c) || c == detect.ValveSticking && loop != "" && loop != s.rigs[0].name
				}
				s.truth.soft = causes{detect.OutsideDisturbance}
				s.truth.subtle = rmsUnder(1.8)
			} else {
				period := 0.0
				for _, l := range rigs {
					period = math.Max(period, l.pu*between(r, 1.5, 5))
				}
				for _, l := range rigs {
					if period < 8*l.rec.every {
						return nil
					}
					a := math.Max(between(r, 0.6, 3), 5*l.sensor.sigma) / loadGain(l, period)
					if a > 20 {
						return nil
					}
					ph := between(r, 0, 6.28)
					l.setOnset(base, func(l *rig) { l.load.wave = wave{amplitude: a, period: period, phase: ph} })
				}
				s.truth.unit = period
				s.truth.causes = causes{detect.OutsideDisturbance}
			}
			s.duration = base + 80*s.truth.unit
			return s
		})
	}
}

// noTuningCause: nobody's tuning is at fault.
func noTuningCause(_ *scenario, _ string, c detect.Cause) bool {
	switch c {
	case detect.ResetTooShort, detect.GainTooHigh, detect.ResetTooLong, detect.GainTooLow:
		return true
	}
	return false
}

// standing is a fault that was there before the watch began.
func standing(draw func(*rand.Rand, float64) *scenario) func(*rand.Rand, float64) *scenario {
	return func(r *rand.Rand, days float64) *scenario {
		s := draw(r, days)
		shift := s.truth.onset - 3*s.rigs[0].recovery
		for _, l := range s.rigs {
			for i := range l.happens {
				l.happens[i].at -= shift
			}
		}
		s.duration -= shift
		s.truth.onset -= shift
		if s.truth.subtle != nil { // there is no before to compare with
			s.truth.subtle = func(s *scenario) bool {
				l := s.rigs[0]
				return l.valve.kind != free && l.turns < 20 || l.ringLag > 0 && l.ringLoud.rms() < 2*l.sensor.sigma
			}
		}
		return s
	}
}

// nonlinearSwing: an S-shaped measurement with the gain too high cycles between
// its flat ends; the valve is perfect.
func nonlinearSwing(r *rand.Rand, _ float64) *scenario {
	return retry(func() *scenario {
		l := drawRig(r, "loop", wish{shapes: []shape{titrationShape}, plainLaw: true})
		kc, ti, period, ok := unstableFor(l, between(r, 1.1, 1.6), false)
		if !ok || !playable(l, kc, ti, period) || !has(knobs(l, kc), detect.GainTooHigh) {
			return nil
		}
		base := l.baseline(r)
		l.setOnset(base, func(l *rig) { l.law.retune(kc, ti, 0) })
		return single(l, base, 80*period, truth{kinds: kinds{detect.GrowingOscillation, detect.SustainedOscillation},
			also: saturating, causes: causes{detect.GainTooHigh, detect.ProcessNonlinear}, unit: period, cycles: true,
			forbid: func(_ *scenario, _ string, c detect.Cause) bool { return c == detect.ValveSticking }})
	})
}

// runawaySwing: a mildly runaway process with too little gain swings.
func runawaySwing(r *rand.Rand, _ float64) *scenario {
	return retry(func() *scenario {
		l := drawRig(r, "loop", wish{shapes: []shape{unstable}, plainLaw: true})
		kc, ti, period, ok := unstableFor(l, math.Exp(between(r, 0.05, 0.3)), true)
		if !ok || !playable(l, kc, ti, period) {
			return nil
		}
		base := l.baseline(r)
		l.setOnset(base, func(l *rig) { l.law.retune(kc, ti, l.law.td) })
		return single(l, base, 60*period, truth{kinds: kinds{detect.GrowingOscillation, detect.SustainedOscillation},
			also: saturating, causes: causes{detect.ResetTooShort}, unit: period, cycles: true})
	})
}

var faultFamilies = []family{
	{name: "growing by reset", what: "reset too short: grows 4 to 40 % a cycle", draw: growing(anyShape, true, false)},
	{name: "growing by gain", what: "gain too high: grows 4 to 40 % a cycle", draw: growing(anyShape, false, false)},
	{name: "growing from the start", what: "as both, no baseline", draw: func(r *rand.Rand, d float64) *scenario {
		return growing(anyShape, chance(r, 0.5), true)(r, d)
	}},
	{name: "growing runaway", what: "mildly runaway process, reset too short", draw: runawaySwing},
	{name: "edge by reset", what: "at the border of stability, reset", draw: edge(true)},
	{name: "edge by gain", what: "at the border of stability, gain", draw: edge(false)},
	{name: "cycling on a titration curve", what: "gain too high on an S-shaped measurement", draw: nonlinearSwing},
	{name: "cascade, outer growing", what: "outer reset too short", draw: cascadeGrowing},
	{name: "cascade, inner sticking", what: "valve of the inner loop sticks", draw: cascadeSticking},
	{name: "standing swing", what: "sticking or outside sine from the start", draw: func(r *rand.Rand, d float64) *scenario {
		return standing(pick(r, sticking(selfRegulating, false), outside(false), edge(false)))(r, d)
	}},
	{name: "standing offset", what: "integral off from the start", draw: standing(offset(false))},
	{name: "sticking, self-regulating", what: "valve sticks 1.5 to 8 %", draw: sticking(selfRegulating, false)},
	{name: "sticking, integrating", what: "valve sticks 1.5 to 8 %", draw: sticking([]shape{level, levelWithLag}, false)},
	{name: "dead band, integrating", what: "dead band 1.5 to 8 %", draw: sticking([]shape{level, levelWithLag}, true)},
	{name: "outside sine", what: "sine from outside, 1.5 to 20 ultimate periods", draw: outside(false)},
	{name: "outside square", what: "square wave from outside", draw: outside(true)},
	{name: "shared, outside", what: "3 to 6 loops, one outside sine", draw: shared(false)},
	{name: "shared, sticking root", what: "3 to 6 loops driven by one sticking valve", draw: shared(true)},
	{name: "sluggish by reset", what: "reset 4 to 10 times too long", draw: sluggish(true, false)},
	{name: "sluggish by gain", what: "gain 4 to 10 times too low", draw: sluggish(false, false)},
	{name: "sluggish from the start", what: "as both, no baseline", draw: func(r *rand.Rand, d float64) *scenario {
		return sluggish(chance(r, 0.5), true)(r, d)
	}},
	{name: "slow swing, integrating", what: "k*Kc*Ti 0.08 to 0.3", draw: slowSwing},
	{name: "offset, integral off", what: "reset switched off, load changed", draw: offset(false)},
	{name: "offset, integral gap", what: "integral rests inside a gap", draw: offset(true)},
	{name: "element stuck", what: "final element does not move", draw: elementStuck},
	{name: "saturation", what: "load beyond capacity", draw: saturation},
	{name: "wind-up", what: "no anti-windup, overloads that come and go", draw: windUp},
	{name: "frozen PV", what: "measurement stands still", draw: frozen},
	{name: "PV at range end", what: "measurement sits at 0 or full range", draw: pegged},
	{name: "stale, silence", what: "nothing arrives for hours", draw: stale(false)},
	{name: "stale, bad quality", what: "PV bad for hours", draw: stale(true)},
	{name: "manual, mode known", what: "left in manual, with a mode column", draw: leftInManual(true)},
	{name: "manual, inferred", what: "left in manual, no mode column", draw: leftInManual(false)},
	{name: "gain changed", what: "gain times or over 1.6 to 5, still sound", draw: retuned(false)},
	{name: "reset changed", what: "reset times or over 1.6 to 5, still sound", draw: retuned(true)},
}
