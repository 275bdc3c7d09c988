package quality

import (
	"fmt"
	"math"
	"math/rand/v2"

	"midwatch/configs"
)

// shape is a kind of process to draw.
type shape uint8

const (
	lagShape       shape = iota // one lag, dead time shorter
	twoLags                     // lag and a second lag
	highOrder                   // three to five lags
	deadTime                    // dead-time dominant
	level                       // integrating
	levelWithLag                // integrating and a lag
	inverse                     // starts the wrong way
	unstable                    // mildly runaway
	flowShape                   // fast flow
	temperature                 // slow, with a second lag
	equalPctShape               // equal-percentage valve
	titrationShape              // S-shaped measurement
	squareFlow                  // flow by differential pressure, no root
)

var selfRegulating = []shape{lagShape, twoLags, highOrder, deadTime, inverse, flowShape, temperature, equalPctShape}
var anyShape = []shape{lagShape, twoLags, highOrder, deadTime, level, levelWithLag, inverse, flowShape, temperature, equalPctShape}

func between(r *rand.Rand, lo, hi float64) float64 { return lo + (hi-lo)*r.Float64() }
func logBetween(r *rand.Rand, lo, hi float64) float64 {
	return lo * math.Pow(hi/lo, r.Float64())
}
func chance(r *rand.Rand, p float64) bool        { return r.Float64() < p }
func pick[T any](r *rand.Rand, from ...T) T      { return from[r.IntN(len(from))] }
func (l *rig) at(t float64, do func(l *rig))     { l.happens = append(l.happens, event{t, do}) }
func (l *rig) setOnset(t float64, do func(*rig)) { l.onsetS = t; l.at(t, do) }

// plant is the open loop as the controller meets it, filter and hold included.
func (l *rig) plant() plantAt {
	extra := []float64{}
	if l.law.filter > 0 {
		extra = append(extra, l.law.filter)
	}
	if l.valve.lag > 0 {
		extra = append(extra, l.valve.lag)
	}
	delay := l.h/2 + l.sensor.hold/2
	return func(s complex128) complex128 { return l.proc.response(s, delay, extra...) }
}

func (l *rig) wScale() float64 { return 1 / (l.theta + math.Min(l.tau, 20*l.theta)/4) }

// wish narrows what is drawn.
type wish struct {
	shapes     []shape
	perPeriod  float64 // recorded frames per ultimate period at least
	minS, maxS float64 // of the main time constant; 0: 2 s to 2 h
	noD        bool
	plainLaw   bool // P on error, no filter
}

// drawRig draws a well tuned loop with loads and set-point steps, recorded as
// plants record. It draws again until the loop is sound.
func drawRig(r *rand.Rand, name string, w wish) *rig {
	for {
		if l := tryRig(r, name, w); l != nil {
			return l
		}
	}
}

func tryRig(r *rand.Rand, name string, w wish) *rig {
	if len(w.shapes) == 0 {
		w.shapes = anyShape
	}
	if w.perPeriod == 0 {
		w.perPeriod = 8
	}
	lo, hi := 2.0, 7200.0
	if w.maxS > 0 {
		lo, hi = w.minS, w.maxS
	}
	l := &rig{name: name, rng: r}
	drawProcess(r, l, pick(r, w.shapes...), lo, hi)
	l.valve.lo, l.valve.hi = 0, 100
	l.law.lo, l.law.hi = 0, 100
	l.law.sign = math.Copysign(1, l.proc.k)
	l.law.spWeight = 1
	l.sensor.lo, l.sensor.hi, l.sensor.pegged = 0, 100, math.NaN()
	if !w.plainLaw && chance(r, 0.25) {
		l.law.filter = between(r, 0.05, 0.35) * (l.proc.theta + 0.1*sum(l.proc.lags))
	}
	if chance(r, 0.3) && l.proc.class == lagging {
		l.valve.lag = between(r, 0.02, 0.2) * (l.proc.theta + 0.2*l.proc.lags[0])
	}
	if !drawScan(r, l, w.perPeriod) {
		return nil
	}
	if !tune(r, l, w) {
		return nil
	}
	l.law.velocity = chance(r, 0.4)
	l.law.anti = pick(r, clamped, clamped, tracking)
	if !w.plainLaw && chance(r, 0.1) {
		l.law.spWeight = 0
	}
	l.law.dOnError = chance(r, 0.3)
	l.sensor.sigma = math.Min(logBetween(r, 0.03, 0.5), 2/l.law.kc)
	if l.law.td > 0 {
		l.sensor.sigma = math.Min(l.sensor.sigma, 0.4/l.law.kc)
	}
	if chance(r, 0.3) {
		l.sensor.arTime = between(r, 0.5, 4) * l.h
	}
	if chance(r, 0.1) {
		l.sensor.spikes, l.sensor.spike = logBetween(r, 0.02, 0.5)/3600, 8*l.sensor.sigma
	}
	drawLoads(r, l)
	drawRecorder(r, l)
	drawRow(r, l)
	return l
}

func sum(v []float64) (s float64) {
	for _, x := range v {
		s += x
	}
	return s
}

func drawProcess(r *rand.Rand, l *rig, s shape, lo, hi float64) {
	p := &l.proc
	p.u0, p.y0 = between(r, 32, 68), between(r, 35, 65)
	p.k = logBetween(r, 0.4, 3)
	p.loadBefore = chance(r, 0.5)
	tau := logBetween(r, lo, hi)
	switch s {
	case lagShape, equalPctShape:
		p.lags, p.theta = []float64{tau}, tau*logBetween(r, 0.06, 0.6)
	case twoLags, temperature:
		if s == temperature {
			tau = math.Max(tau, math.Min(hi, 120)*between(r, 1, 3))
		}
		p.lags, p.theta = []float64{tau, tau * between(r, 0.05, 0.4)}, tau*logBetween(r, 0.04, 0.4)
	case highOrder:
		n := 3 + r.IntN(3)
		for i := range n {
			p.lags = append(p.lags, tau/float64(n)*math.Pow(between(r, 0.6, 1), float64(i)))
		}
		p.theta = tau * between(r, 0.02, 0.2)
	case deadTime:
		p.lags, p.theta = []float64{tau}, tau*logBetween(r, 0.8, 3)
	case inverse:
		p.lags, p.theta = []float64{tau, tau * between(r, 0.1, 0.4)}, tau*between(r, 0.02, 0.15)
		p.lead = -tau * between(r, 0.05, 0.25)
	case flowShape:
		tau = logBetween(r, math.Max(lo, 1.5), math.Min(math.Max(hi, 3), 15))
		p.lags, p.theta = []float64{tau}, tau*between(r, 0.3, 1)
		p.k = logBetween(r, 0.6, 2)
	case level, levelWithLag:
		p.class = integrating
		p.theta = math.Max(0.5, tau*logBetween(r, 0.01, 0.08))
		p.k = 1 / tau * logBetween(r, 0.3, 2) / 2
		if s == levelWithLag {
			p.lags = []float64{p.theta * between(r, 0.3, 3)}
		}
	case unstable:
		p.class = runaway
		p.lags, p.theta = []float64{tau}, tau*between(r, 0.04, 0.15)
	case titrationShape:
		p.lags, p.theta = []float64{tau}, tau*between(r, 0.15, 0.8)
		b := between(r, 8, 20)
		p.out = curve{titration, b, between(r, -0.6, 0.6) * b}
		p.y0, p.k = between(r, 40, 60), logBetween(r, 0.8, 4)
	case squareFlow:
		p.lags, p.theta = []float64{math.Min(tau, 20)}, math.Min(tau, 20)*between(r, 0.2, 0.8)
		p.out = curve{squareLaw, 10 * math.Sqrt(p.y0), 0}
		p.k = logBetween(r, 0.8, 2)
	}
	if s == equalPctShape {
		p.in = curve{equalPercent, pick(r, 20.0, 35, 50), 0}
	}
	if chance(r, 0.35) { // direct action
		p.k = -p.k
	}
}

var scans = []float64{0.1, 0.25, 0.5, 1, 2, 5}
var intervals = []float64{1, 2, 5, 10, 30, 60}

// drawScan picks controller scan and recording interval so that the ultimate
// period holds enough of both.
func drawScan(r *rand.Rand, l *rig, perPeriod float64) bool {
	l.h = 0.01
	l.measure()
	if l.pu == 0 {
		return false
	}
	var logs []float64
	for _, s := range intervals {
		if s*perPeriod <= l.pu {
			logs = append(logs, s)
		}
	}
	if len(logs) == 0 {
		return false
	}
	l.rec.every = logs[max(0, len(logs)-1-r.IntN(min(3, len(logs))))]
	var hs []float64
	for _, h := range scans {
		if h <= l.rec.every && h <= l.pu/12 && (h >= l.pu/250 || h == 5) {
			hs = append(hs, h)
		}
	}
	if len(hs) == 0 {
		hs = []float64{math.Min(l.rec.every, l.pu/20)}
	}
	l.h = pick(r, hs...)
	l.proc.theta = l.h * math.Max(1, math.Round(l.proc.theta/l.h))
	l.measure()
	return l.pu > 0
}

// measure fills in what is known from the design.
func (l *rig) measure() {
	extra := l.h/2 + l.law.filter + l.valve.lag + l.sensor.hold/2
	l.k, l.tau, l.theta = l.proc.fopdt(extra)
	l.ku, l.pu = ultimate(l.plant(), l.wScale())
}

// tune sets a published tuning: SIMC, AMIGO or lambda, and checks the margin.
func tune(r *rand.Rand, l *rig, w wish) bool {
	k, tau, th := l.k, l.tau, l.theta
	var kc, ti float64
	if l.proc.class == runaway { // SIMC-like for 1/(tau s - 1): gain well over 1/k, long reset
		kc, ti = (0.5*l.ku + 0.5*math.Sqrt(l.ku/k)), 0.0
		ti = 12 * th * between(r, 1.2, 2)
	} else {
		switch rule := r.IntN(3); {
		case rule == 0:
			tc := th * between(r, 1, 1.8)
			if math.IsInf(tau, 1) {
				kc, ti = 1/(k*(tc+th)), 4*(tc+th)
			} else {
				kc, ti = tau/(k*(tc+th)), math.Min(tau, 4*(tc+th))
			}
		case rule == 1:
			if math.IsInf(tau, 1) {
				kc, ti = 0.35/(k*th), 13.4*th
			} else {
				kc = 0.15/k + (0.35-th*tau/((th+tau)*(th+tau)))*tau/(k*th)
				ti = 0.35*th + 13*th*tau*tau/(tau*tau+12*th*tau+7*th*th)
			}
		default:
			tc := th * between(r, 1.5, 3)
			if math.IsInf(tau, 1) {
				kc, ti = (2*tc+th)/(k*(tc+th)*(tc+th)), 2*tc+th
			} else {
				kc, ti = tau/(k*(tc+th)), math.Min(tau, 8*th)
				if tau < th {
					kc, ti = (tau+th/2)/(k*(tc+th)), tau+th/2
				}
			}
		}
	}
	td := 0.0
	if !w.noD && !w.plainLaw && l.proc.class == lagging && tau > 2*th && chance(r, 0.15) {
		td = math.Min(0.4*th, ti/5)
	}
	g := l.plant()
	for range 8 {
		ms := maxSensitivity(g, l.wScale(), kc, ti, td)
		if ms < 1.85 || l.proc.class == runaway && ms < 3 {
			l.law.kc, l.law.ti, l.law.td = kc, ti, td
			l.recovery = 2.3*ti + 4*th
			l.perPV = 1 / (k * math.Max(0.15, 0.9*-math.Expm1(-2*th/tau)))
			if l.proc.class != lagging {
				l.perPV = kc
			}
			return kc < 25 && kc > 0.05
		}
		kc, ti = kc*0.85, ti*1.1
	}
	return false
}

func drawLoads(r *rand.Rand, l *rig) {
	e := math.Max(between(r, 0.8, 4), 6*l.sensor.sigma) // % of PV, a usual upset
	d := math.Min(e*l.perPV, 12)
	l.load.stepSize, l.load.stepMax = d, 1.4*d
	l.load.stepEvery = l.recovery * logBetween(r, 8, 60)
	ou := between(r, 0.2, 0.8) * math.Max(l.sensor.sigma, 0.08) * 2
	l.load.ou, l.load.ouTime = math.Min(ou*l.perPV, 5), l.recovery*logBetween(r, 0.1, 3)
	l.sp.centre = l.proc.y0
	reach := between(r, 1, 6)
	if l.proc.class == lagging {
		reach = math.Min(reach, 14*l.k)
	}
	if l.law.spWeight > 0 {
		reach = math.Min(reach, 12/l.law.kc)
	}
	if chance(r, 0.7) {
		l.sp.reach, l.sp.every = reach, l.recovery*logBetween(r, 15, 120)
	}
	if chance(r, 0.15) {
		l.load.daily = between(r, 0.5, 4)
	}
	switch l.proc.out.kind {
	case titration: // stay on the curve
		l.load.stepSize, l.load.stepMax = math.Min(l.load.stepSize, 2), 2.5
		l.sp.reach = math.Min(l.sp.reach, 2)
	}
}

func drawRecorder(r *rand.Rand, l *rig) {
	c := &l.rec
	c.pvHi, c.opHi = 100, 100
	if chance(r, 0.7) {
		span := math.Round(logBetween(r, 2, 900))
		if chance(r, 0.3) {
			c.pvLo = math.Round(between(r, -50, 50))
		}
		c.pvHi = c.pvLo + span
	}
	switch r.IntN(5) {
	case 0:
	case 1:
		c.pvQ = 100.0 / 4096
	case 2:
		c.pvQ = 0.1
	case 3:
		c.pvQ = math.Pow(10, math.Floor(math.Log10(0.001*(c.pvHi-c.pvLo)))) / (c.pvHi - c.pvLo) * 100
	case 4:
		c.pvQ = 0.02
	}
	c.opQ = pick(r, 0, 0.01, 0.1, 100.0/4096)
	if chance(r, 0.2) {
		c.opLate = between(r, 0.3, 1) * math.Min(c.every, 30*l.h)
	}
	if chance(r, 0.2) {
		c.jitter = between(r, 0.02, 0.3)
	}
	if chance(r, 0.2) {
		c.missing = logBetween(r, 0.001, 0.05)
	}
	if chance(r, 0.1) {
		c.deadband, c.heldRows = 0.2, chance(r, 0.7)
	}
	c.modeKnown = chance(r, 0.65)
	c.tuningTags = chance(r, 0.1)
}

// drawRow writes the loop list's row: as commissioned, more or less complete.
func drawRow(r *rand.Rand, l *rig) {
	w := configs.NewLoop(l.name)
	w.Service, w.Source = fmt.Sprintf("simulated %s", l.name), "sim"
	w.PV, w.SP, w.OP = l.name+".PV", l.name+".SP", l.name+".OP"
	w.PVLow, w.PVHigh, w.PVRangeGiven = l.rec.pvLo, l.rec.pvHi, l.rec.pvHi != 100 || l.rec.pvLo != 0
	w.SPLimitLow, w.SPLimitHigh = w.PVLow, w.PVHigh
	if l.rec.modeKnown {
		w.ModeTag = l.name + ".MODE"
	}
	if chance(r, 0.85) {
		w.Action = configs.Reverse
		if l.law.sign < 0 {
			w.Action = configs.Direct
		}
	}
	if chance(r, 0.65) {
		enter(l, w, 1)
	}
	if chance(r, 0.5) {
		w.Process = [...]configs.Process{configs.SelfRegulating, configs.Integrating, configs.Runaway}[l.proc.class]
	}
	if chance(r, 0.5) {
		w.SampleS = l.rec.every
	}
	if chance(r, 0.4) {
		w.ScanS = l.h
	}
	if chance(r, 0.5) {
		w.Element = "valve"
	}
	if l.rec.deadband > 0 {
		w.Report = configs.Exception
	}
	l.row = w
}

// enter writes the tuning into the row, the reset wrong by a factor.
func enter(l *rig, w *configs.Loop, wrong float64) {
	w.Gain, w.GainPct = l.law.kc, l.law.kc
	w.Reset, w.ResetGiven = l.law.ti*wrong, true
	w.ResetS, w.IdealReset = w.Reset, w.Reset
	w.RateS = l.law.td
	w.Rate = w.RateS
	if l.law.td > 0 && l.name != "" {
		if k, i, d, ok := toSeries(l.law.kc, l.law.ti, l.law.td); ok && l.law.dOnError {
			w.Form, w.Gain, w.Reset, w.ResetS, w.Rate, w.RateS = configs.Series, k, i*wrong, i*wrong, d, d
		}
	}
}

// baseline is a span long enough to know the loop by.
func (l *rig) baseline(r *rand.Rand) float64 {
	return math.Min(math.Max(l.recovery*between(r, 60, 150), between(r, 6, 30)*3600), math.Max(20*86400, 40*l.recovery))
}
