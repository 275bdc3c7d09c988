package dossier_test

import (
	"iter"
	"math"
	"math/rand/v2"

	"midwatch/alert/dossier"
	"midwatch/alert/dossier/process"
	"midwatch/collector"
	"midwatch/configs"
)

// works makes the record of a simulated loop of Kestrel Fen: a PI law with scan
// and limits on a linear process, white noise, load, and what operators do.
type works struct {
	loop    *configs.Loop
	model   process.Model
	kc, ti  float64 // in service
	dt      float64 // s
	days    float64
	noise   float64 // % of span
	wander  float64 // %, of load at the process input, slow
	loads   bool    // load steps
	steps   float64 // s between set-point steps; 0: none
	sizePct float64
	sp, op  float64                                   // %, at the start
	retune  func(t float64) (kc, ti float64, ok bool) // a new tuning from some time on
	hand    func(t float64) (op float64, ok bool)     // OP by hand
	tags    bool                                      // gain and reset are read
	stick   float64                                   // %, the valve holds until OP is so far away, then jumps to it
	outside func(t float64) float64                   // % added to PV at the process output
	play    float64                                   // %, between OP and the valve
	onPV    bool                                      // P acts on PV
	windsUp bool                                      // no anti-wind-up
	seed    uint64
}

const startMs = 1_767_571_200_000 // 2026-01-05 00:00 UTC

func (w works) frames() []collector.Frame {
	r := rand.New(rand.NewPCG(w.seed, 3))
	p := process.NewPlant(w.model.Abs(), w.dt)
	n := int(w.days * 86400 / w.dt)
	out := make([]collector.Frame, 0, n)
	sp, pv, op, sum, slow, load, valve := w.sp, 0.0, w.op, w.op, 0.0, 0.0, w.op
	s := w.loop.Sign()
	if s == 0 {
		s = 1
	}
	kc, ti := w.kc, w.ti
	auto := true
	for k := range n {
		t := float64(k) * w.dt
		if w.steps > 0 && k > 0 && math.Mod(t, w.steps) < w.dt {
			if int(t/w.steps)%2 == 1 {
				sp += w.sizePct
			} else {
				sp -= w.sizePct
			}
		}
		if w.retune != nil {
			if a, b, ok := w.retune(t); ok && (a != kc || b != ti) {
				e := s * (sp - pv - w.sp)
				sum += (kc - a) * e // bumpless
				kc, ti = a, b
			}
		}
		if w.loads && r.Float64() < w.dt/5400 {
			load += []float64{-6, 6}[r.IntN(2)]
			load = math.Max(-12, math.Min(12, load))
		}
		slow += -slow*w.dt/600 + w.wander*math.Sqrt(2*w.dt/600)*r.NormFloat64()
		out0 := 0.0
		if w.outside != nil {
			out0 = w.outside(t)
		}
		seen := pv + w.sp + out0 + w.noise*r.NormFloat64()
		e := s * (sp - seen)
		mode := collector.Auto
		if w.hand != nil {
			if u, ok := w.hand(t); ok {
				mode, op = collector.Manual, u
				auto = false
			}
		}
		if mode == collector.Auto {
			if !auto {
				sum, auto = op-kc*e, true
			}
			add := kc * e * w.dt / ti
			pe := e
			if w.onPV {
				pe = s * (w.sp - seen)
			}
			u := kc*pe + sum + add
			switch {
			case u > 100:
				op = 100
				if add < 0 || w.windsUp {
					sum += add
				}
			case u < 0:
				op = 0
				if add > 0 || w.windsUp {
					sum += add
				}
			default:
				op, sum = u, sum+add
			}
		}
		f := collector.Frame{Time: startMs + int64(math.Round(t*1000)), Mode: mode,
			PV: collector.Clean32(w.loop.PVLow + seen/100*w.loop.PVSpan()), SP: collector.Clean32(w.loop.PVLow + sp/100*w.loop.PVSpan()),
			OP: collector.Clean32(w.loop.OPLow + op/100*w.loop.OPSpan()), Feedforward: collector.NaN32, Position: collector.NaN32}
		if w.tags {
			f.Gain, f.Reset = float32(kc), float32(ti)
		}
		out = append(out, f)
		was := valve
		if math.Abs(op-valve) > w.stick {
			valve = op
		}
		if w.play > 0 { // width of the play; the valve stands within it
			valve = math.Max(op-w.play/2, math.Min(op+w.play/2, was))
		}
		pv = p.Step(s * (valve - w.op + load + slow))
	}
	return out
}

func each(fs []collector.Frame) iter.Seq2[collector.Frame, error] {
	return func(yield func(collector.Frame, error) bool) {
		for _, f := range fs {
			if !yield(f, nil) {
				return
			}
		}
	}
}

// analyser is a loop of the works as the list has it.
func analyser() *configs.Loop {
	l := configs.NewLoop("AIC-204")
	l.Service, l.Area, l.Unit = "chlorine residual", "contact tank", "mg/l"
	l.PVLow, l.PVHigh, l.PVRangeGiven = 0, 2, true
	l.SPLimitLow, l.SPLimitHigh = 0.2, 1.8
	l.Action, l.Gain, l.Reset = configs.Reverse, 1.0, 240
	l.GainPct, l.IdealReset, l.ResetS = 1.0, 240, 240
	l.ScanS, l.SampleS = 1, 1
	l.Element = "pump"
	return l
}

// quietWeek is a week at 1 s of a loop whose set point is stepped every 6 h.
func quietWeek() works {
	return works{loop: analyser(), model: process.Model{Gain: 1.4, LagsS: []float64{150}, ThetaS: 40}, kc: 1.0, ti: 240, dt: 1, days: 7,
		noise: 0.15, wander: 0.2, loads: true, steps: 6 * 3600, sizePct: 6, sp: 50, op: 45, seed: 4}
}

func build(w works) (*dossier.Dossier, error) {
	return dossier.Build(dossier.Input{Loop: w.loop, Frames: each(w.frames()), Site: "Kestrel Fen", Version: "test", Source: "simulated"})
}
