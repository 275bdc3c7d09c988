package quality

import (
	"math"
	"math/cmplx"
	"math/rand/v2"
	"slices"

	"midwatch/detect"
)

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
			if byTheReset && !slices.Contains(right, detect.ResetTooShort) || !byTheReset && !slices.Contains(right, detect.GainTooHigh) {
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
			if byTheReset && !slices.Contains(right, detect.ResetTooShort) || !byTheReset && !slices.Contains(right, detect.GainTooHigh) {
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
			also := kinds{detect.SharedOscillation}
			if chance(r, 0.3) { // operators show that it goes on without the controller
				l.spells = spells{every: 40 * period, last: 4 * period, move: 1}
				also = append(also, detect.NotInNormalMode) // which may take them more than half a shift
			}
			return single(l, base, 80*period, truth{kinds: kinds{detect.SustainedOscillation}, also: also,
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
		if !ok || !playable(l, kc, ti, period) || !slices.Contains(knobs(l, kc), detect.GainTooHigh) {
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
