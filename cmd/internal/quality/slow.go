package quality

import (
	"math"
	"math/rand/v2"

	"midwatch/detect"
)

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
			if young && !byTheReset {
				// The closed loop is slower than its process by no more than sound lambda
				// tunings of dead-time processes are (three dead times: 3). Nobody could tell.
				r := l.law.ti / (l.law.kc * l.k) / (l.tau + l.theta)
				t.subtle = func(*scenario) bool { return r < 3 }
			}
			return single(l, base, 25*l.load.stepEvery, t)
		})
	}
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
		causes: causes{detect.FinalElementNotFollowing}, unit: l.recovery})
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
				also: kinds{detect.SluggishRecovery, detect.SustainedOffset, detect.SustainedOscillation}, unit: l.recovery})
		})
	}
}
