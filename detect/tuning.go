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
	fitBad    = 2          // blocks
	fitWarm   = 2 * fitTh  // samples after the filters were set, for what of OP is late
	fitBlock  = 10 * fitTh // samples at least in a block
	fitBlockX = 60 * fitTh // samples after which a block without excitation is dropped
	lawVotes  = 8
	fitSharp  = 0.25 // standard error, of the value: as near as readings are taken to agree
)

// A lag is taken where it removes a fifth of the residual variance (methods section
// 9): of a block of 65 samples, a quarter of them independent, that is F = 4, the 5 %
// limit. A bank that took it more often than not keeps to it: laws of two kinds do not
// compare.
const (
	lagGain  = 0.2
	lagVotes = 4
)

// leastOP and leastE are the least movements of OP and of e, % rms, from which a tuning is
// read. Of an e that stands (a frozen PV) only rounding is left, and any gain comes out.
const (
	leastOP = 0.02
	leastE  = 0.001
)

// fit is one estimate of the tuning in service.
type fit struct {
	Kc float32 // %/%, signed: positive for reverse action
	Ti float32 // s; negative or huge: no integral action seen
	R2 float32
	X  float32
	At moment  // end of its block
	T0 moment  // and begin
	PV float32 // %, mean over the block
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
	E, OP        [3]float32 // filter states: low pass, low pass again, high pass
	S            [3]float64 // of Int e, which grows large
	Sums         num.Sums
	Start        moment  // of the block
	PVSum        float32 // %, of the block
	Lag          float32 // s, of the last good block; 0 none
	Warm         uint16  // samples since the restart, up to fitWarm
	N            uint16  // samples in the block
	Run          int8    // excited blocks in a row that the law explains, and that could tell another; negative: that it does not
	ByLag        int8    // good blocks that took the lag less those that did not, -lagVotes to lagVotes
	ByLaw        int8    // excited blocks that the law explains less those that it does not, -lawVotes to lawVotes
	Last         fit
	Ring         [fitRing]fit
	Count        uint32       // good fits ever
	BaseK, BaseT num.Quantile // medians of good fits older than the ring
	DevK, DevT   num.Quantile // 80 % quantile of their deviations, ln
}

// tuneState is what is common to the fits.
type tuneState struct {
	LimitAt float64 // s, OP last at a limit
	SPAt    float64 // s, SP last moved where it usually rests
	OPMean  float64 // %, slow mean of OP (400 slots)
	OPUsual float64 // %, mean of OP over a week
	FFMean  float64 // mean of a multiplying feedforward over a week, its unit
	Law     float32 // share of excited blocks that the PI law explains; 0 before the first
	Sign    float32 // of the gain as seen; 0 unknown
}

func (w *Watch) stepFit(k, level int, e, si, op float64) {
	b := &w.s.Fits[k]
	h := w.levelS(level)
	if b.Warm == 0 {
		b.clear(w.in.t)
	}
	if w.in.limit {
		w.s.Tune.LimitAt = w.in.t
	}
	// Filters that stand at values of one moment keep the law from that moment on,
	// whatever its constant was before: where the constant changed within this sample,
	// they are set anew and nothing is lost. A limit changes it, and a step of the set
	// point where P does not act on it or PV is filtered.
	broke := max(w.s.Tune.LimitAt, w.s.Tune.SPAt)
	if b.Warm == 0 || broke > 0 && broke > w.in.t-2*h {
		e, op := float32(e), float32(op)
		b.E, b.S, b.OP = [3]float32{e, e, e}, [3]float64{si, si, si}, [3]float32{op, op, op}
		b.Warm = 1
		return
	}
	b.Warm = min(b.Warm+1, uint16(fitWarm))
	was := float64(b.OP[1] - b.OP[2])
	o := [3]float64{pass(&b.E, e), 0, pass(&b.OP, op)}
	b.S[0] += fitAL * (si - b.S[0])
	b.S[1] += fitAL * (b.S[0] - b.S[1])
	b.S[2] += fitAH * (b.S[1] - b.S[2])
	o[1] = b.S[1] - b.S[2]
	dop := (o[2] - was) / h
	// PV that stands between the values of an analyser shows no law at scales below.
	if u := w.s.Motion.Update.Value(); u > 3 && u*w.s.Grid.DT > fitScale*h {
		return
	}
	if b.Warm < fitWarm {
		return
	}
	b.Sums.Add(o[0], o[1], -dop, o[2])
	b.PVSum += float32(w.in.pv)
	b.N++
	if b.N < fitBlock || b.N%8 != 0 {
		return
	}
	r, lag, better := w.solveFit(k)
	excited := r.X > fitX*1.25
	good := r.ok() && excited && (lag > 0 || b.sharp(&r))
	if !good && b.N < fitBlockX {
		return
	}
	if excited {
		lawful, vote := float32(0.01), int8(-1)
		if r.R2 > 0.95 {
			lawful, vote = 1, 1
		}
		b.ByLaw = max(-lawVotes, min(b.ByLaw+vote, lawVotes))
		if t := &w.s.Tune; t.Law == 0 {
			t.Law = lawful
		} else {
			t.Law += (lawful - t.Law) / 8
		}
	}
	if good {
		w.keepFit(k, r, lag, better)
	} else if r.R2 > fitR2 {
		b.Last = r
	} else if excited {
		b.Run = max(min(b.Run, 0)-1, -fitBad)
	}
	if !excited {
		w.stepQuiet(k, &r)
	}
	b.clear(w.in.t)
	w.usual.known = false
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
	b.Sums, b.PVSum, b.N, b.Start = num.Sums{}, 0, 0, momentOf(t)
}

func (w *Watch) keepFit(k int, r fit, lag float64, better bool) {
	b := &w.s.Fits[k]
	b.Lag = float32(lag)
	b.Run = min(max(b.Run, 0)+1, 100)
	if b.oneShape() {
		b.Run = 0
	}
	had := b.ByLag > 0
	if better {
		b.ByLag = min(b.ByLag+1, lagVotes)
	} else {
		b.ByLag = max(b.ByLag-1, -lagVotes)
	}
	if had != (b.ByLag > 0) && b.Count > 0 { // like with like: another law, another history
		b.Count, b.BaseK, b.BaseT, b.DevK, b.DevT = 0, num.Quantile{}, num.Quantile{}, num.Quantile{}, num.Quantile{}
		if int(w.s.Sched.Bank) == k {
			w.s.Sched = schedule{}
		}
	}
	i := b.Count % fitRing
	if b.Count >= fitRing {
		old := &b.Ring[i]
		// Like with like; what is suspected to be new does not teach what is usual.
		if c := &w.s.Change; old.R2 > changeR2 && !(c.Maybe > 0 && int(c.MaybeOf) == k && old.T0 >= c.MaybeAt) && !(b.young() && b.denied(old)) {
			if b.BaseK.N > 2 {
				b.DevK.Add(math.Abs(w.strays(k, old)), 0.8, 0.05, 0.01)
			}
			b.BaseK.Mean(math.Abs(float64(old.Kc)), 0.02, 1e-6)
			w.s.Sched.learn(k, old, w)
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
	if c := &w.s.Change; b.young() && b.outvoted() && !(c.Maybe > 0 && int(c.MaybeOf) == k) { // nor is a change suspected
		b.BaseK, b.BaseT, b.DevK, b.DevT = num.Quantile{}, num.Quantile{}, num.Quantile{}, num.Quantile{}
	}
}

// deniedBy is the factor on the gain over which two readings are not of one law: twice is as
// much as any stray.
const deniedBy = 3.0

// young: the history is of so few readings that another law would soon make a mean of both.
func (b *fitBank) young() bool { return b.BaseK.N > 0 && b.BaseK.N < changeYoung }

// denied: a reading is of another law than the history.
func (b *fitBank) denied(f *fit) bool {
	return !within(math.Abs(float64(f.Kc)), b.BaseK.Value(), deniedBy)
}

// outvoted: none of the readings in the ring is of the law of the history.
func (b *fitBank) outvoted() bool {
	for i := range b.Ring {
		if !b.denied(&b.Ring[i]) {
			return false
		}
	}
	return b.Count >= fitRing
}

// solveFit solves the normal equations of the running block. lag, s, is that of the
// third regressor where it was taken; better says that the block is for it.
func (w *Watch) solveFit(k int) (r fit, lag float64, better bool) {
	b := &w.s.Fits[k]
	// OP that hardly moves (held, or one step of its resolution) says nothing, nor e.
	kc, ki, rss, ok := b.Sums.Two()
	if n := float64(b.N); !ok || b.N < 20 || b.Sums.YY < n*leastOP*leastOP || b.Sums.A00 < n*leastE*leastE {
		return
	}
	h := w.levelS(2 * k)
	s := max(w.s.Noise.sigma(), 0.01)
	r.At, r.T0, r.PV = momentOf(w.in.t), b.Start, b.PVSum/float32(b.N)
	r.X = float32(b.Sums.A11 / float64(b.N) / (s * s * w.s.Grid.DT * h * fitNoise))
	// OP logged late, PV filtered in the controller: OP + L dOP/dt = law. What is
	// faster than eight samples of the log is not seen well enough for it.
	if T := fitScale * h; r.X > fitX && T >= 8*w.s.Grid.DT {
		k3, i3, l, rss3, ok3 := b.Sums.Three()
		better = ok3 && l > 0 && rss3 < (1-lagGain)*rss
		switch {
		case better && l > T && 1-rss/b.Sums.YY < 0.99:
			return fit{}, 0, true // a lag too long for this scale: neither law is seen
		case ok3 && l > 0 && l <= T && (b.ByLag > 0 || b.Count == 0 && better):
			kc, ki, rss, lag = k3, i3, rss3, l
		}
		better = better && l <= T
	}
	r.Kc, r.Ti, r.R2 = float32(kc), float32(kc/ki), float32(1-rss/b.Sums.YY)
	switch {
	case math.Abs(kc/ki) > noReset*fitScale*h:
		r.Ti = noTi
	case kc*ki < 0:
		if g, i := b.errors(kc, ki, rss); max(g, i) < 1./3 {
			return fit{X: r.X}, 0, false // gain against reset: no such law, whatever R2 is
		}
	}
	return
}

// errors are the standard errors of gain and integral, each a part of it, by the least
// squares; a quarter of the rows are taken for independent.
func (b *fitBank) errors(kc, ki, rss float64) (gain, integral float64) {
	m := &b.Sums
	s2 := rss / (float64(b.N) / 4)
	return math.Sqrt(s2/(m.A00-m.A01*m.A01/m.A11)) / math.Abs(kc), math.Sqrt(s2/(m.A11-m.A01*m.A01/m.A00)) / math.Abs(ki)
}

// sharp: gain and reset of a fit of the running block are good to fitSharp. A gain that
// moves OP by less than its resolution, or the integral of noise that was not logged, leaves
// R2 high, since the other part moves OP.
func (b *fitBank) sharp(r *fit) bool {
	kc := float64(r.Kc)
	gain, integral := b.errors(kc, kc/float64(r.Ti), (1-float64(r.R2))*b.Sums.YY)
	return gain < fitSharp && (r.Ti == noTi || integral < fitSharp)
}

// oneShape: e and its integral are one shape in the running block, as where e only decays after
// steps of SP: what OP made of either cannot be told apart, and the least of what the law does
// not know, such as OP logged late or in coarse steps, moves gain and reset time together by
// any factor (variance inflation of 100; Marquardt 1970, Technometrics 12, 591).
func (b *fitBank) oneShape() bool {
	m := &b.Sums
	return m.A01*m.A01 > 0.99*m.A00*m.A11
}

// newest is the newest sharp fit; the last of all before there is one.
func (b *fitBank) newest() *fit {
	if b.Count == 0 {
		return &b.Last
	}
	return &b.Ring[(b.Count-1)%fitRing]
}
