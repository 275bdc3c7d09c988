package detect_test

import (
	"math"
	"math/rand/v2"

	"midwatch/collector"
	"midwatch/configs"
	"midwatch/detect"
)

// plant is gain * exp(-theta s) / product of (tau s + 1), over s where integrating.
type plant struct {
	gain        float64 // %/%, or %/s per % where integrating
	lags        []float64
	theta       float64 // s
	integrating bool
}

// stretched is the plant with all times multiplied by c.
func (p plant) stretched(c float64) plant {
	q := plant{gain: p.gain, theta: p.theta * c, integrating: p.integrating}
	if p.integrating {
		q.gain /= c
	}
	for _, x := range p.lags {
		q.lags = append(q.lags, x*c)
	}
	return q
}

// The plants of the reference tables (percent in and out, seconds).
var (
	plantA = plant{gain: 1, lags: []float64{10}, theta: 1}
	plantB = plant{gain: 1, lags: []float64{10}, theta: 2}
	plantC = plant{gain: 1, lags: []float64{10}, theta: 5}
	plantD = plant{gain: 1, lags: []float64{10}, theta: 10}
	plantE = plant{gain: 2, lags: []float64{60}, theta: 12}
	plantF = plant{gain: 1, lags: []float64{10, 4}, theta: 2}
	plantH = plant{gain: 0.05, theta: 4, integrating: true}
)

// rig is a PI loop around a plant, simulated in small steps and logged as frames.
// PV and OP rest at 50 %.
type rig struct {
	plant
	kc, ti    float64 // of the law acting on action*e; ti +Inf: P only
	td        float64 // s, derivative on PV, filtered with td/8
	action    float64 // +1 reverse, -1 direct (the plant's gain is then taken negative)
	step      float64 // s, of the simulation and of the controller
	logS      float64 // s between frames
	noise     float64 // %, one standard deviation, new at every noiseS
	noiseS    float64 // s; 0: logS
	qPV, qOP  float64 // resolution of the log, %
	stick     float64 // %, the stem holds until OP is farther than this from it, then jumps to OP
	opLo      float64 // limits of OP, %
	opHi      float64
	windUp    bool // the integral goes on at the limits
	sp        float64
	load      float64 // % of OP, at the plant's input
	outPV     float64 // %, added to PV outside the loop
	frozen    bool    // the transmitter holds its value
	peg       float64 // %, what the transmitter shows instead; NaN: PV
	mode      collector.Mode
	byHand    float64 // OP in manual
	gain      float32 // read from tags
	reset     float32
	rnd       *rand.Rand
	each      func(t float64) // called before every step of the controller
	t         float64
	x         []float64
	level     float64
	delay     []float64 // OP of the last steps
	part      float64   // of a step, of the dead time
	lastE     float64
	head      int
	integral  float64
	op, stem  float64
	d, lastPV float64
	meas, nz  float64
	nextNoise float64
	begun     bool
	out       []collector.Frame
	t0        int64
}

func newRig(p plant, kc, ti float64, seed uint64) *rig {
	return &rig{plant: p, kc: kc, ti: ti, action: 1, step: max(p.theta/40, 0.05), logS: 1, opLo: 0, opHi: 100, sp: 50,
		peg: math.NaN(), mode: collector.Auto, rnd: rand.New(rand.NewPCG(seed, 7)), t0: 1767225600000} // 2026-01-01
}

// run simulates seconds and logs frames.
func (r *rig) run(seconds float64) {
	if !r.begun {
		r.begun = true
		r.x = make([]float64, len(r.lags))
		r.op, r.stem, r.lastPV = 50, 50, 50
		r.integral = 0
	}
	sub := max(1, int(math.Round(r.logS/r.step)))
	h := r.logS / float64(sub)
	if r.delay == nil {
		// Holding OP over a step is half a step of delay already.
		n := max(0, r.theta/h-0.5)
		r.delay, r.part = make([]float64, int(n)+2), n-math.Floor(n)
	}
	decay := make([]float64, len(r.lags))
	for i, tau := range r.lags {
		decay[i] = 1 - math.Exp(-h/tau)
	}
	noiseS := r.noiseS
	if noiseS == 0 {
		noiseS = r.logS
	}
	for range int(math.Round(seconds / r.logS)) {
		for range sub {
			r.t += h
			if r.each != nil {
				r.each(r.t)
			}
			y := r.level
			if !r.integrating {
				y = 0
				if n := len(r.x); n > 0 {
					y = r.x[n-1]
				}
			}
			if r.t >= r.nextNoise-1e-9 {
				r.nz = r.noise * r.rnd.NormFloat64()
				r.nextNoise = r.t + noiseS
			}
			if !r.frozen {
				r.meas = max(-5, min(105, 50+y+r.outPV+r.nz))
				if r.peg == r.peg {
					r.meas = r.peg
				}
			}
			r.control(h)
			r.drive(h, decay)
		}
		r.frame()
	}
}

func (r *rig) control(h float64) {
	e := r.action * (r.sp - r.meas)
	if r.td > 0 {
		slope := (r.meas - r.lastPV) / h
		r.d += (1 - math.Exp(-h/(r.td/8))) * (slope - r.d)
	}
	r.lastPV = r.meas
	p := r.kc*e - r.action*r.kc*r.td*r.d
	if r.mode == collector.Manual {
		r.op = r.byHand
		r.integral = r.op - 50 - p // bumpless
		r.lastE = e
		return
	}
	next := r.integral
	if !math.IsInf(r.ti, 1) {
		next += r.kc * (e + r.lastE) / 2 * h / r.ti
	}
	r.lastE = e
	v := 50 + p + next
	out := max(r.opLo, min(r.opHi, v))
	if out == v || r.windUp || (v-out)*e < 0 {
		r.integral = next
	}
	r.op = max(r.opLo, min(r.opHi, 50+p+r.integral))
}

func (r *rig) drive(h float64, decay []float64) {
	if math.Abs(r.op-r.stem) > r.stick {
		r.stem = r.op
	}
	n := len(r.delay)
	r.delay[r.head] = (r.stem - 50 + r.load) * r.action
	whole := r.delay[(r.head+2)%n] // n-2 steps ago
	older := r.delay[(r.head+1)%n]
	r.head = (r.head + 1) % n
	v := (whole + r.part*(older-whole)) * r.plant.gain
	for i := range r.x {
		was := r.x[i]
		r.x[i] += decay[i] * (v - was)
		v = (was + r.x[i]) / 2
	}
	if r.integrating {
		r.level += v * h
	}
}

func (r *rig) frame() {
	q := func(v, q float64) float32 {
		if q > 0 {
			v = math.Round(v/q) * q
		}
		return collector.Clean32(v)
	}
	r.out = append(r.out, collector.Frame{Time: r.t0 + int64(math.Round(r.t*1000)), PV: q(r.meas, r.qPV), SP: float32(r.sp), OP: q(r.op, r.qOP),
		Gain: r.gain, Reset: r.reset, Mode: r.mode, Feedforward: collector.NaN32, Position: collector.NaN32})
}

// bumps makes the load a random step of the size every so often, s.
func (r *rig) bumps(size, every float64) {
	next := r.t + every
	r.each = func(t float64) {
		if t >= next {
			next += every
			r.load = size * (2*r.rnd.Float64() - 1)
			if math.Abs(r.load) < size/3 {
				r.load = math.Copysign(size/3, r.load)
			}
		}
	}
}

// loopOf is the entry of the loop list for a rig, as a site would write it.
func loopOf(name string, r *rig) *configs.Loop {
	l := configs.NewLoop(name)
	l.PVRangeGiven, l.Action, l.Process = true, configs.Reverse, configs.SelfRegulating
	if r.action < 0 {
		l.Action = configs.Direct
	}
	if r.integrating {
		l.Process = configs.Integrating
	}
	return l
}

// replay gives all findings of a fresh watch over frames.
func replay(l *configs.Loop, frames []collector.Frame) []detect.Finding {
	_, f := watchOver(l, frames)
	return f
}

func watchOver(l *configs.Loop, frames []collector.Frame) (*detect.Watch, []detect.Finding) {
	w := detect.New(l, 0, detect.Options{})
	var out []detect.Finding
	for i := range frames {
		w.Step(&frames[i], func(f *detect.Finding) { out = append(out, *f) })
	}
	return w, out
}

// last is the newest finding of a kind that was not a clearance.
func last(fs []detect.Finding, k detect.Kind) (detect.Finding, bool) {
	for i := len(fs) - 1; i >= 0; i-- {
		if fs[i].Kind == k && fs[i].Event != detect.Cleared {
			return fs[i], true
		}
	}
	return detect.Finding{}, false
}

// first is the raising of a kind.
func first(fs []detect.Finding, k detect.Kind) (detect.Finding, bool) {
	for _, f := range fs {
		if f.Kind == k && f.Event == detect.Raised {
			return f, true
		}
	}
	return detect.Finding{}, false
}

// brief says findings in short, for messages of tests.
func brief(fs []detect.Finding) string {
	s := ""
	for _, f := range fs {
		s += "\n  " + detect.FormatTime(f.At)[5:19] + " " + string(f.Kind) + " " + string(f.Event) + " " + string(f.Cause)
		for _, m := range f.Measures {
			s += " " + m.Name + "=" + string(detect.AppendSig(nil, m.Value))
		}
	}
	if s == "" {
		return " nothing"
	}
	return s
}
