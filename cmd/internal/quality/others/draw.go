package others

import (
	"fmt"
	"math"
	"math/rand/v2"
)

// between draws evenly, spread evenly in the logarithm.
func between(r *rand.Rand, a, b float64) float64 { return a + (b-a)*r.Float64() }
func spread(r *rand.Rand, a, b float64) float64  { return a * math.Pow(b/a, r.Float64()) }
func chance(r *rand.Rand, p float64) bool        { return r.Float64() < p }
func one[T any](r *rand.Rand, of ...T) T         { return of[r.IntN(len(of))] }
func sign(r *rand.Rand) float64                  { return one(r, -1.0, 1) }

// wish narrows what is drawn; the zero value is anything.
type wish struct {
	plants []string // of plantNames
	forms  []string // of formNames
	slowS  [2]float64
	coarse bool    // logged at about an eighth of the recovery
	quiet  bool    // no loads but those the family adds
	lazy   float64 // limit of lazy; 0: that of healthy loops
}

var plantNames = []string{"dead time", "two lags", "many lags", "inverse", "resonant", "integrating", "exchanger", "titration", "gas", "gravity", "flow"}
var selfRegulating = []string{"dead time", "two lags", "many lags", "inverse", "exchanger", "gas", "gravity", "flow"}
var linearOnes = []string{"dead time", "two lags", "many lags", "inverse"}
var formNames = []string{"ideal", "velocity", "series", "tracking", "derivative", "filtered"}

// scanOf is a controller scan for a process this slow, s.
func scanOf(r *rand.Rand, slow float64) float64 {
	limit := math.Min(slow/between(r, 12, 30), 20)
	h := 0.1
	for _, c := range []float64{0.2, 0.25, 0.5, 1, 2, 5, 10, 20} {
		if c <= limit {
			h = c
		}
	}
	return h
}

// plantOf draws a process; it gives its scan and what it is.
func plantOf(r *rand.Rand, name string, slowS [2]float64) (process, float64) {
	lo, hi := 2.0, 7200.0
	if name == "integrating" || name == "titration" { // recover in many times their lags
		hi = 1200
	}
	if slowS[1] > 0 {
		lo, hi = slowS[0], slowS[1]
	}
	slow := spread(r, lo, hi)
	k := sign(r) * spread(r, 0.4, 3)
	u0, y0 := between(r, 35, 65), between(r, 35, 65)
	m := linear{k: k}
	switch name {
	case "dead time":
		f := between(r, 0.08, 0.6)
		m.dead, m.lags = f*slow, []float64{(1 - f) * slow}
	case "two lags":
		f, g := between(r, 0.05, 0.4), between(r, 0.1, 0.9)
		m.dead, m.lags = f*slow, []float64{slow * (1 - f) / (1 + g), slow * (1 - f) * g / (1 + g)}
	case "many lags":
		for n, i := 3+r.IntN(4), 0; i < n; i++ {
			m.lags = append(m.lags, slow/float64(n))
		}
	case "inverse":
		g, z := between(r, 0.3, 0.9), between(r, 0.1, 0.35)
		m.zero = z * slow
		m.lags = []float64{slow * (1 - z) / (1 + g), slow * (1 - z) * g / (1 + g)}
	case "resonant":
		m.zeta = between(r, 0.3, 0.8)
		f := between(r, 0.03, 0.3)
		m.w, m.dead = 2/(slow*(1-f)), f*slow
	case "integrating":
		f := between(r, 0.1, 0.9)
		m.integrating, m.k = true, sign(r)*spread(r, 0.02, 0.5)/slow
		m.dead, m.lags = f*slow, []float64{(1 - f) * slow}
	case "flow":
		slow = spread(r, 0.5, 3)
		if slowS[1] > 0 {
			slow = math.Max(lo, 0.5)
		}
		m.k = spread(r, 0.5, 2)
		m.dead, m.lags = 0.2*slow, []float64{0.5 * slow, 0.3 * slow}
	}
	h := scanOf(r, slow)
	switch name {
	case "exchanger":
		p := &exchanger{k: spread(r, 0.5, 2), lag: 0.6 * slow, sensor: 0.2 * slow, h: h, u0: u0, y0: y0}
		p.wait.line = make([]float64, int(math.Round(between(r, 0.1, 0.3)*slow/h)))
		return p, h
	case "titration":
		ka := math.Pow(10, -between(r, 4, 6.6))
		p := &titration{mix: 0.7 * slow, probe: 0.1 * slow, h: h, u0: u0, ca: spread(r, 0.002, 0.05), ka: ka, low: between(r, 0, 2), gain: 1}
		p.span = one(r, 8.0, 10, 12)
		if chance(r, 0.5) {
			p.kb = math.Pow(10, -9.25)
		}
		p.wait.line = make([]float64, int(math.Round(between(r, 0.05, 0.25)*slow/h)))
		p.ph0 = -math.Log10(ka) + between(r, -0.7, 0.9)
		// the base that holds this pH
		c := charge(p.ph0, p.ca, 0, p.ka, 0)
		base := -c
		if p.kb > 0 {
			base *= 1 + p.kb*math.Pow(10, p.ph0)
		}
		p.perOP = base / u0
		return p, h
	case "gas":
		return &vessel{fill: 0.85 * slow, valve: 0.15 * slow, h: h, u0: u0, p0: y0, gain: 1}, h
	case "gravity":
		return &tank{fill: 0.45 * slow, valve: 0.1 * slow, h: h, u0: u0, l0: y0, outlet: chance(r, 0.5), gain: 1}, h
	}
	c := newChain(m, h)
	c.u0, c.y0, c.direct = u0, y0, chance(r, 0.5)
	return c, h
}

// base draws a loop that is healthy by proof.
func base(r *rand.Rand, w wish) *loop {
	plants, forms := w.plants, w.forms
	if plants == nil {
		plants = plantNames
	}
	if forms == nil {
		forms = formNames
	}
	for {
		name := one(r, plants...)
		l := &loop{name: nameOf(r), valve: free{}, r: r}
		l.plant, l.h = plantOf(r, name, w.slowS)
		l.room = 25
		l.reach = between(r, 8, 15)
		form := one(r, forms...)
		if name == "exchanger" || name == "titration" || name == "gas" || name == "gravity" {
			l.room = l.reach // the models hold over what loads may do
		}
		l.law = lawOf(r, form, l.plant.locals(0)[0].k)
		l.law.h = l.h
		if tune(r, l, name, w.lazy) && l.prove(l.reach) && l.prompt() && logOf(r, l, w.coarse, name == "flow") {
			l.kind = name + ", " + form
			noiseOf(r, l, name == "flow")
			if !w.quiet {
				loadsOf(r, l)
			}
			return l
		}
	}
}

func lawOf(r *rand.Rand, form string, k float64) controller {
	c := controller{sign: 1, weight: 1, low: 0, high: 100, lead: between(r, 5, 12)}
	if k < 0 {
		c.sign = -1
	}
	switch form {
	case "velocity":
		c.form = velocity
	case "series":
		c.form = series
		c.td = 1 // set by tune
	case "tracking":
		c.form = tracking
	case "derivative":
		c.td = 1
	case "filtered":
		c.filter = 1
	case "gap":
		c.gap = 1
	case "squared":
		c.square = true
	}
	if chance(r, 0.3) && c.form != velocity && !c.square && c.gap == 0 {
		c.weight = between(r, 0.3, 1)
	}
	return c
}

// tune sets a tuning by one of several methods, at times changed by hand, that keeps
// the margins of a healthy loop.
func tune(r *rand.Rand, l *loop, name string, lazy float64) bool {
	m := l.plant.locals(l.reach)[0]
	if lazy == 0 {
		lazy = 2.5
		if name == "resonant" {
			lazy = 6
		}
		if m.integrating {
			lazy = 1.6
		}
	}
	c := &l.law
	d, f := c.td > 0, c.filter > 0
	c.td, c.filter = 0, 0
	for range 25 {
		kc, ti := tuning(r, &m)
		if !(kc > 0) || math.IsInf(kc, 0) {
			continue
		}
		if chance(r, 0.4) {
			kc, ti = kc*spread(r, 0.4, 2.5), ti*spread(r, 0.4, 2.5)
		}
		c.kc, c.ti = kc, math.Max(ti, 4*l.h)
		if d {
			c.td = c.ti / between(r, 5, 10)
		}
		if f {
			c.filter = between(r, 0.02, 0.12) * m.slow()
		}
		if c.gap > 0 {
			c.gap = between(r, 0.5, 2)
		}
		for range 4 {
			if l.steady(1.8, 2.2) {
				if x := l.lazy(); x <= lazy && (!m.integrating || 1/(c.kc*math.Abs(m.k)) < 12*m.slow()) {
					return true
				}
				break
			}
			c.kc *= 0.75
		}
	}
	return false
}

// tuning is one of the published rules on the model.
func tuning(r *rand.Rand, m *linear) (kc, ti float64) {
	w, mag, ok := crossing(func(w float64) complex128 { return m.at(w) * complex(math.Copysign(1, m.k), 0) }, m.slow())
	k, lag, dead := m.fit()
	k = math.Abs(k)
	method := r.IntN(5)
	if m.integrating && (method == 1 || method == 3) {
		method = 2
	}
	if !ok && (method == 0 || method == 4) {
		method = 2
	}
	switch method {
	case 0: // Ziegler and Nichols, closed loop, detuned
		return 0.45 / mag * between(r, 0.4, 0.9), 2 * math.Pi / w / 1.2
	case 1: // Cohen and Coon, detuned
		return lag / (k * dead) * (0.9 + dead/(12*lag)) * between(r, 0.35, 0.9), dead * (30 + 3*dead/lag) / (9 + 20*dead/lag)
	case 2: // lambda, by the lag
		if m.integrating {
			l := dead * between(r, 1, 4)
			return (2*l + dead) / (k * (l + dead) * (l + dead)), 2*l + dead
		}
		return lag / (k * (lag*between(r, 1, 4) + dead)), lag
	case 3: // IMC with the dead time by a half
		l := math.Max(dead*between(r, 1.7, 4), 0.2*lag)
		return (2*lag + dead) / (2 * k * l), lag + dead/2
	}
	return 1 / mag / 3.2, 2.2 * 2 * math.Pi / w // Tyreus and Luyben
}

var intervals = []float64{1, 2, 3, 5, 10, 15, 20, 30, 60}

// logOf draws how the loop is logged.
func logOf(r *rand.Rand, l *loop, coarse, fast bool) bool {
	want := l.recovery / spread(r, 12, 150)
	if coarse {
		want = l.recovery / between(r, 7.5, 11)
	}
	every := 0.0
	for _, c := range intervals {
		if (c <= want || c == 1) && math.Abs(c/l.h-math.Round(c/l.h)) < 1e-6 && c >= l.h {
			every = c
		}
	}
	least := 8.0
	if fast {
		least = 5
	}
	if every == 0 || l.recovery < least*every || coarse && l.recovery > 14*every || l.recovery > 4000*every {
		return false
	}
	l.perLog = int(math.Round(every / l.h))
	l.log = logger{every: every, modeKnown: chance(r, 0.7), low: one(r, 0.0, 0, -20, 5), span: one(r, 1.0, 10, 14, 100, 250, 1600)}
	if chance(r, 0.3) {
		l.log.pvStep = one(r, 0.012, 0.025, 0.05)
	}
	if chance(r, 0.3) {
		l.log.opStep = one(r, 0.01, 0.05, 0.1)
	}
	l.log.opLate = chance(r, 0.15)
	if chance(r, 0.15) {
		l.log.jitter = between(r, 0.05, 0.4)
	}
	return true
}

func noiseOf(r *rand.Rand, l *loop, fast bool) {
	l.noise = spread(r, 0.02, 0.25)
	if fast {
		l.noise = spread(r, 0.2, 1)
	}
	// the noise that OP shows stays below a few percent
	kc, _, td := l.law.ideal()
	if td > 0 {
		kc *= l.law.lead
	}
	l.noise = math.Min(l.noise, 2/kc)
	if chance(r, 0.3) {
		l.hiss = &wander{rms: l.noise * between(r, 0.5, 1.5), tau: l.recovery * between(r, 0.01, 0.06), h: l.h, r: r}
	}
}

// stepFor is the load step, % of OP, whose error peaks at so many percent of PV,
// within the room there is.
func (l *loop) stepFor(peak float64) float64 { return math.Min(peak/l.peak, 0.4*l.room) }

// loadsOf draws ordinary loads: steps, and often one more.
func loadsOf(r *rand.Rand, l *loop) {
	l.loads = append(l.loads, &steps{size: l.stepFor(spread(r, 0.6, 4) + 4*l.noise), gap: l.recovery * spread(r, 4, 20), r: r})
	small := l.stepFor(spread(r, 0.2, 1) + l.noise)
	switch r.IntN(7) {
	case 0:
		l.loads = append(l.loads, &wander{rms: small, tau: l.recovery * spread(r, 0.3, 10), h: l.h, r: r})
	case 1:
		l.loads = append(l.loads, &daily{size: between(r, 2, 6), phase: r.Float64(), r: r})
	case 2:
		l.loads = append(l.loads, &walk{speed: 0.5 * small / math.Sqrt(l.recovery), reach: 0.4 * l.room, h: l.h, r: r})
	case 3:
		l.loads = append(l.loads, &pulses{size: small, gap: l.recovery * spread(r, 15, 80), long: l.recovery * spread(r, 0.3, 3), spread: 0.3, r: r})
	}
	if chance(r, 0.3) {
		l.sp = &steps{size: spread(r, 0.5, 3), gap: l.recovery * spread(r, 15, 60), r: r}
	}
}

func nameOf(r *rand.Rand) string {
	return fmt.Sprintf("%s-%d", one(r, "FIC", "LIC", "TIC", "PIC", "AIC"), 100+r.IntN(800))
}

func (l *loop) String() string {
	m := l.plant.locals(l.reach)[0]
	kc, ti, td := l.law.ideal()
	return fmt.Sprintf("%s: %s; k %.4g lags %.4g dead %.4g zero %.3g w %.3g; Kc %.4g Ti %.4g Td %.3g filter %.3g weight %.2g; scan %g every %g; recovery %.4g peak %.3g lazy %.3g; noise %.3g room %.3g; pvStep %.3g opLate %v jitter %.2g deadband %.2g opStep %.2g mode %v",
		l.name, l.kind, m.k, m.lags, m.dead, m.zero, m.w, kc, ti, td, l.law.filter, l.law.weight, l.h, l.log.every, l.recovery, l.peak, l.lazy(), l.noise, l.room,
		l.log.pvStep, l.log.opLate, l.log.jitter, l.log.deadband, l.log.opStep, l.log.modeKnown)
}
