package detect

import "math"

// Swings that grow.

// Thresholds of growth (methods section 4: rules D and E and two longer ones;
// regularity of half-cycles, t of the slope, growth over the window, times the
// loop's own usual amplitude). Each held for three half-cycles running.
var growthRules = [...]struct {
	n       int
	regular float64
	t       float64
	over    float64 // growth over the window
	usual   float64
}{
	{8, 4, 6, 1.5, 4},
	{12, 5, 8, 1.5, 3},
	{20, 5, 10, 1.5, 2.5},
}

const growConfirm = 3

func (w *Watch) judgeGrowth(level int, b *cycleBank, st ringStat) {
	s := &w.s
	o := &s.Osc
	if w.drowned(level, b, st) && b.Kept < fastGrow {
		b.Conf = 0
		return
	}
	sigma := s.Noise.sigma()
	usual := b.Usual.Value()
	tip := b.tip()
	least := max(1.6*sigma, 0.12)
	large := least
	if !w.usualKnown(b) { // smaller may be usual, unless it grows as evenly as no load makes it
		least, large = max(3*sigma, 0.3), max(3*sigma, 1)
	}
	grow := false
	if o.Sus && (o.Evals > 24 && tip < 1.8*o.AmpLo || o.Sticking || tip < 1.5*float64(o.Grown)) || w.scheduled(b, st.period*w.levelS(level)) {
		b.Conf = 0 // what has long been there, or stopped growing before, must really have grown
		return
	}
	if w.violent(level, b) {
		grow = true
		b.Conf = max(b.Conf, growConfirm-1)
	}
	if tip > least && w.calmSP(st.period*w.levelS(level)) {
		even := 1.0
		if tip <= large {
			even = 2
		}
		for _, r := range growthRules {
			if tip <= r.usual*usual {
				continue
			}
			if _, regular, ok := b.lengths(r.n); !ok || regular < even*r.regular*math.Sqrt(w.strict) {
				continue
			}
			if by, t := b.growth(r.n); t >= even*r.t*w.strict && math.Pow(by, float64(r.n-2)/2) >= r.over {
				grow = true
				break
			}
		}
		if k := &s.Track; !grow && tip > large && k.On && int(k.Bank) == level && k.GN >= 36 {
			// Slow growth shows over the whole episode only.
			beta, t := k.slope()
			if _, regular, ok := b.lengths(ringLen); ok && regular >= 5 && t >= 14*w.strict && beta*k.GN > math.Log(1.8) && tip > 2*usual {
				by, _ := b.growth(ringLen)
				grow = by > 1.005
			}
		}
	}
	if grow {
		if b.Conf < 200 {
			b.Conf++
		}
	} else if b.Conf > 0 {
		b.Conf--
	}
	if b.Conf < growConfirm {
		return
	}
	if !o.Grow {
		o.Grow = true
		if !o.Sus {
			w.beginOsc(level, b, 10)
		}
	}
	// A period between two banks grows in both: the first keeps it while it sees it.
	if live := &s.Cycles[o.Bank]; int(o.Bank) != level && !o.Sus && (live.Conf < growConfirm || live.N < 4 || tip > 1.5*live.tip()) {
		w.beginOsc(level, b, 10)
	}
	by, _ := b.growth(st.n)
	o.Growth = max(by, 1)
}

// violent: loops of hours never show eight half-cycles in time; few but violent
// ones count: four that each outgrow the last, far over noise and usual size; three
// where the tuning in service is far more aggressive than what was set up.
func (w *Watch) violent(level int, b *cycleBank) bool {
	if b.N < violentHalves || b.at(0).ln() < 0 {
		return false
	}
	tip := b.tip()
	if tip < violentTip {
		return false
	}
	period, regular, _ := b.lengths(violentHalves)
	p := period * w.levelS(level)
	if regular < violentRegular*w.strict || period < bankLowP || period > 1.5*bankHighP || p < violentSlow || !w.steadySP(2.5*p) {
		return false
	}
	n, size := w.violentAsked(level)
	if int(b.N) <= n || tip < size {
		return false
	}
	// An unstable loop grows by the same factor each time; a load step out of calm by
	// much, once.
	least, most := b.steps(n)
	return least > math.Log(violentGrows) && most < violentEven*least
}

// What is asked of a violent swing (common practice, no source).
const (
	violentHalves  = 4      // half-cycles whose lengths are looked at
	violentTip     = 2.5    // %, its newest peaks
	violentNoise   = 2.5    // of the noise level
	violentUsual   = 5.0    // of the usual size, where the tuning is not the reason
	violentRegular = 3.0    // length over its scatter
	violentSlow    = 1200.0 // s, its period: a faster one shows half-cycles enough
	violentGrows   = 1.22   // from peak to peak, each time
	violentEven    = 3.0    // the most growth, ln, over the least, under which it is one factor
)

// violentAsked is how many times on end a violent swing must outgrow itself, and the size of
// its newest peaks, %.
func (w *Watch) violentAsked(level int) (n int, size float64) {
	n, size = 3, max(violentTip, violentNoise*w.s.Noise.sigma())
	if !w.aggressive() {
		n, size = 4, max(size, violentUsual*w.usualNear(level))
	}
	return n, size
}

// steps are the least and the largest growth, ln, from each of the newest n peaks to the next.
func (b *cycleBank) steps(n int) (least, most float64) {
	least = math.Inf(1)
	for i := range n {
		by := b.at(i).ln() - b.at(i+1).ln()
		least, most = min(least, by), max(most, by)
	}
	return least, most
}

// aggressive: the reset time in service is less than half of what the loop list
// says, or the gain more than twice, with no other knob the other way.
func (w *Watch) aggressive() bool {
	kc, ti, ok := w.tuning(0, 0)
	g, r := w.listedGain(), w.loop.IdealReset
	if !ok || !(g > 0) || !(r > 0) || !(ti > 0) {
		return false
	}
	k := math.Abs(kc) / g
	return k > 0.7 && ti < r/2 || k > 2 && ti < 1.5*r
}

// usualNear is the usual size at a level, or at the slowest one below it that has
// seen enough half-cycles: wandering is not smaller there.
func (w *Watch) usualNear(level int) float64 {
	for l := level; l >= 0 && l >= level-3; l-- {
		if q := &w.s.Cycles[l].Usual; q.N >= 20 {
			return q.Value()
		}
	}
	return 0
}

// calmSP: no set-point ramp and no step within the last cycles explains the swing.
func (w *Watch) calmSP(period float64) bool {
	m := &w.s.Motion
	if w.in.t-m.SPStep < 1.5*period && m.SPBusy < 0.3 {
		return false
	}
	return true
}
