package detect

import (
	"math"

	"midwatch/detect/num"
)

// The tuning in service is read from OP = c + Kc e + Ki Int e, which holds
// whatever the process does while the law acts off its limits. e, Int e and OP
// pass the same band pass (low pass twice with Tl, high pass with Th), so the
// relation survives and the constant dies; least squares on what comes out.
// Six time scales T, a factor of 4 apart, on every second level of the cascade;
// with h the sample interval of the level, Tl = h, Th = 6.5 h, T = 5 h.

const (
	fitBanks = 6
	fitTh    = 6.5 // high pass, samples of the level
	fitTl    = 1.0 // low pass, samples
	fitScale = 5.0 // T, samples
	fitRing  = 5
)

var (
	fitAL = 1 - math.Exp(-1/fitTl)
	fitAH = 1 - math.Exp(-1/fitTh)
	// Signal over sampled noise in the integral regressor (excitation), closed
	// form for this filter: X = Var(I_f) / (sigma^2 dt Th^2/(2 (Tl+Th))).
	fitNoise = fitTh * fitTh / (2 * (fitTl + fitTh))
)

// Gates of a fit: R2 is not validity, so excitation counts more.
const (
	fitX      = 20.0
	fitR2     = 0.9
	fitBlock  = 10 * fitTh // samples at least in a block
	fitBlockX = 60 * fitTh // samples after which a block without excitation is dropped
)

// leastOP is the least movement of OP, % rms, from which a tuning is read.
const leastOP = 0.02

// fit is one estimate of the tuning in service.
type fit struct {
	Kc float32 // %/%, signed: positive for reverse action
	Ti float32 // s; negative or huge: no integral action seen
	R2 float32
	X  float32
	At float32 // s
	T0 float32 // s, begin of its block
}

func (f *fit) ok() bool { return f.R2 > fitR2 && f.X > fitX }

// hasReset: integral action was seen. noReset: reset times over so many time scales T of a fit mean that OP is a scaled
// copy of e; PI loops stay under 2.3 (99 %), P-only ones are over 800 (methods
// section 3).
const noReset = 30.0

func (f *fit) hasReset() bool { return f.Ti > 0 && f.Ti < noTi }

// noTi, s, stands for a reset time that is not there.
const noTi = 1e9

type fitBank struct {
	E, OP                     [3]float32 // filter states: low pass, low pass again, high pass
	S                         [3]float64 // of Int e, which grows large
	A00, A01, A11, B0, B1, YY float64
	Start                     float64 // s, of the block
	Warm                      uint32  // samples since the restart
	N                         uint32  // samples in the block
	Last                      fit
	Ring                      [fitRing]fit
	Count                     uint32       // good fits ever
	BaseK, BaseT              num.Quantile // medians of good fits older than the ring
	DevK, DevT                num.Quantile // 80 % quantile of their deviations, ln
}

// tuneState is what is common to the fits.
type tuneState struct {
	LimitAt float64 // s, OP last at a limit
	OPMean  float64 // %, slow mean of OP (200 slots)
	FFMean  float64 // slow mean of a multiplying feedforward, its unit
	Law     float32 // share of excited blocks that the PI law explains; 0 before the first
	Sign    float32 // of the gain as seen; 0 unknown
}

func (w *Watch) stepFit(k, level int, e, si, op float64) {
	b := &w.s.Fits[k]
	if b.Warm == 0 {
		e, op := float32(e), float32(op)
		b.E, b.S, b.OP = [3]float32{e, e, e}, [3]float64{si, si, si}, [3]float32{op, op, op}
		b.clear(w.in.t)
	}
	b.Warm++
	o := [3]float64{pass(&b.E, e), 0, pass(&b.OP, op)}
	b.S[0] += fitAL * (si - b.S[0])
	b.S[1] += fitAL * (b.S[0] - b.S[1])
	b.S[2] += fitAH * (b.S[1] - b.S[2])
	o[1] = b.S[1] - b.S[2]
	h := w.levelS(level)
	if w.in.limit {
		w.s.Tune.LimitAt = w.in.t
	}
	// PV that stands between the values of an analyser shows no law at scales below.
	if u := w.s.Motion.Update.Value(); u > 3 && u*w.s.Grid.DT > fitScale*h {
		return
	}
	if b.Warm < 4*fitTh || w.in.t-w.s.Tune.LimitAt < 3*fitTh*h && w.s.Tune.LimitAt > 0 {
		return
	}
	b.A00 += o[0] * o[0]
	b.A01 += o[0] * o[1]
	b.A11 += o[1] * o[1]
	b.B0 += o[0] * o[2]
	b.B1 += o[1] * o[2]
	b.YY += o[2] * o[2]
	b.N++
	if b.N < fitBlock || b.N%8 != 0 {
		return
	}
	r := w.solveFit(k)
	if !(r.ok() && r.X > fitX*1.25) && b.N < fitBlockX {
		return
	}
	if r.X > fitX*1.25 {
		good := float32(0.01)
		if r.R2 > 0.95 {
			good = 1
		}
		if t := &w.s.Tune; t.Law == 0 {
			t.Law = good
		} else {
			t.Law += (good - t.Law) / 8
		}
	}
	if r.ok() && r.X > fitX*1.25 {
		w.keepFit(k, r)
	} else if r.R2 > fitR2 {
		b.Last = r
	}
	b.clear(w.in.t)
}

// pass is the band pass of the fits.
func pass(f *[3]float32, v float64) float64 {
	lo := float64(f[0]) + fitAL*(v-float64(f[0]))
	mi := float64(f[1]) + fitAL*(lo-float64(f[1]))
	hi := float64(f[2]) + fitAH*(mi-float64(f[2]))
	f[0], f[1], f[2] = float32(lo), float32(mi), float32(hi)
	return mi - hi
}

func (b *fitBank) clear(t float64) {
	b.A00, b.A01, b.A11, b.B0, b.B1, b.YY, b.N = 0, 0, 0, 0, 0, 0, 0
	b.Start = t
}

func (w *Watch) keepFit(k int, r fit) {
	b := &w.s.Fits[k]
	i := b.Count % fitRing
	if b.Count >= fitRing {
		old := &b.Ring[i]
		if old.R2 > changeR2 { // like with like
			if b.BaseK.N > 2 {
				b.DevK.Add(math.Abs(math.Log(math.Abs(float64(old.Kc))/b.BaseK.Value())), 0.8, 0.05, 0.01)
			}
			b.BaseK.Mean(math.Abs(float64(old.Kc)), 0.02, 1e-6)
			if old.hasReset() {
				if b.BaseT.N > 2 {
					b.DevT.Add(math.Abs(math.Log(float64(old.Ti)/b.BaseT.Value())), 0.8, 0.05, 0.01)
				}
				b.BaseT.Mean(float64(old.Ti), 0.02, 1e-3)
			}
		}
	}
	b.Ring[i] = r
	b.Last = r
	b.Count++
	w.s.Tune.Sign = 1
	if r.Kc < 0 {
		w.s.Tune.Sign = -1
	}
	w.s.Motion.LawSeen = true
	w.tuneCheck(k)
}

// solveFit solves the normal equations of the running block.
func (w *Watch) solveFit(k int) (r fit) {
	b := &w.s.Fits[k]
	det := b.A00*b.A11 - b.A01*b.A01
	// OP that hardly moves (held, or one step of its resolution) says nothing.
	if !(det > 0) || b.N < 20 || b.YY/float64(b.N) < leastOP*leastOP {
		return
	}
	kc := (b.B0*b.A11 - b.B1*b.A01) / det
	ki := (b.B1*b.A00 - b.B0*b.A01) / det
	rss := b.YY - kc*b.B0 - ki*b.B1
	h := w.levelS(2 * k)
	s := max(w.s.Noise.sigma(), 0.01)
	r = fit{Kc: float32(kc), Ti: float32(kc / ki), R2: float32(1 - rss/b.YY), At: float32(w.in.t), T0: float32(b.Start)}
	if math.Abs(kc/ki) > noReset*fitScale*h {
		r.Ti = noTi
	}
	r.X = float32(b.A11 / float64(b.N) / (s * s * w.s.Grid.DT * h * fitNoise))
	return
}

// tuning gives the best present estimate: newest valid fits at or after since;
// with a period the scale nearest to a sixth of it, running block included.
func (w *Watch) tuning(since, period float64) (kc, ti float64, ok bool) {
	best := math.Inf(-1)
	for k := range w.s.Fits {
		b := &w.s.Fits[k]
		r := b.Last
		if period > 0 && float64(b.N) > 3*fitTh {
			if q := w.solveFit(k); q.ok() {
				r = q
			}
		}
		if float64(r.At) < since || !r.ok() {
			continue
		}
		score := 10*float64(r.R2) + min(1, float64(r.X)/2000)
		if period > 0 {
			score -= 0.6 * math.Abs(math.Log(fitScale*w.levelS(2*k)*6/period))
		}
		if score > best {
			best, kc, ti, ok = score, float64(r.Kc), float64(r.Ti), true
		}
	}
	return
}

// usualTuning is the tuning before time t: medians of the older good fits of the
// scale that has most of them.
func (w *Watch) usualTuning(t float64) (kc, ti float64, ok bool) {
	most := 1
	for k := range w.s.Fits {
		b := &w.s.Fits[k]
		var ks, ts [fitRing]float64
		n, nt := 0, 0
		for i := range min(int(b.Count), fitRing) {
			f := &b.Ring[i]
			if float64(f.At) < t && f.R2 > 0.95 {
				ks[n] = math.Abs(float64(f.Kc))
				n++
				if f.hasReset() {
					ts[nt] = float64(f.Ti)
					nt++
				}
			}
		}
		old := int(b.BaseK.N)
		if old > 6 && (b.DevK.Value() > 0.5 || b.DevT.Value() > 0.7) {
			continue // a scale at which the law does not show: filter, late OP, steps of an analyser
		}
		if n+old <= most || nt == 0 && b.BaseT.N == 0 {
			continue
		}
		most = n + old
		if old >= 3 || n == 0 {
			kc = b.BaseK.Value()
		} else {
			kc = num.Median(ks[:n])
		}
		if b.BaseT.N >= 3 || nt == 0 {
			ti = b.BaseT.Value()
		} else {
			ti = num.Median(ts[:nt])
		}
		ok = true
	}
	return
}

// sign is the sign with which OP answers e: from the loop list, else as seen.
func (w *Watch) sign() float64 {
	if s := w.loop.Sign(); s != 0 {
		return s
	}
	return float64(w.s.Tune.Sign)
}

// propOnlySeen: OP is a scaled copy of e, no integral action in it.
func (w *Watch) propOnlySeen() bool {
	n := 0
	for k := range w.s.Fits {
		q := &w.s.Fits[k].Last
		switch {
		case q.At == 0 || q.R2 < fitR2:
		case q.R2 > 0.95 && q.Kc != 0 && (q.Ti < 0 || q.Ti == noTi):
			n++
		default:
			n--
		}
	}
	return n > 0
}
