package dossier

import (
	"math"
	"slices"

	"midwatch/collector"
	"midwatch/configs"
)

// series is the loop on an even grid, in percent of span. NaN is no value.
type series struct {
	loop       *configs.Loop
	t0         int64   // ms UTC, of the first slot
	dt         float64 // s
	pv, sp, op []float64
	pos        []float64 // % of OP span; nil: no such tag
	ff         []float64 // units of the tag; nil: none
	mode       []collector.Mode
	law        []bool // the law acts as far as the mode says
	known      bool   // some mode was known
	frames     int
	good       int // slots with PV, SP
	gaps       int
	longest    float64 // s
	held       int
	lost       int
	thinned    int
	dropped    int // frames beyond the largest grid

	sigma    float64 // %, noise of PV
	quantPV  float64 // %, step of PV; 0 none seen
	quantOP  float64
	wander   float64    // %, usual slow wandering of e
	noiseLag [4]float64 // noise from differences over 1, 2, 4, 8 samples, over that from one
}

// most slots of a grid: a week at 5 Hz, or a year at 10 s.
const mostSlots = 3_200_000

func (s *series) n() int           { return len(s.pv) }
func (s *series) at(k int) int64   { return s.t0 + int64(math.Round(float64(k)*s.dt*1000)) }
func (s *series) slot(t int64) int { return int(math.Round(float64(t-s.t0) / 1000 / s.dt)) }
func (s *series) seconds() float64 { return float64(s.n()) * s.dt }
func (s *series) pvUnits(pct float64) float64 {
	return pct / 100 * s.loop.PVSpan()
}
func (s *series) unit() string {
	if s.loop.Unit != "" {
		return s.loop.Unit
	}
	return "PV units"
}

// newSeries puts frames on a grid. What stands between two frames is held for a
// few samples, by exception for half an hour; longer is a gap.
func newSeries(l *configs.Loop, frames []collector.Frame) *series {
	s := &series{loop: l, frames: len(frames), dt: interval(l, frames)}
	if len(frames) == 0 {
		return s
	}
	s.t0 = frames[0].Time
	span := float64(frames[len(frames)-1].Time-s.t0) / 1000
	if least := span / (mostSlots - 2); s.dt < least {
		s.dt = least
	}
	n := int(math.Round(span/s.dt)) + 1
	nan := math.NaN()
	for _, p := range []*[]float64{&s.pv, &s.sp, &s.op} {
		*p = slices.Repeat([]float64{nan}, n)
	}
	s.mode, s.law = make([]collector.Mode, n), make([]bool, n)
	pvSpan, opSpan := l.PVSpan(), l.OPSpan()
	hold := 3
	if l.Report == configs.Exception {
		hold = int(1800 / s.dt)
	}
	last := -1
	put := func(k int, f *collector.Frame) {
		s.pv[k] = (float64(f.PV) - l.PVLow) / pvSpan * 100
		s.sp[k] = (float64(f.SP) - l.PVLow) / pvSpan * 100
		s.op[k] = (float64(f.OP) - l.OPLow) / opSpan * 100
		s.mode[k] = f.Mode
		s.law[k] = f.Mode.LawActive() && f.Flags&(collector.Inactive|collector.Suppressed) == 0
		s.known = s.known || f.Mode != collector.ModeUnknown
		if f.Position == f.Position && l.Position != "" {
			if s.pos == nil {
				s.pos = slices.Repeat([]float64{nan}, n)
			}
			s.pos[k] = (float64(f.Position) - l.OPLow) / opSpan * 100
		}
		if f.Feedforward == f.Feedforward && l.Feedforward != "" {
			if s.ff == nil {
				s.ff = slices.Repeat([]float64{nan}, n)
			}
			s.ff[k] = float64(f.Feedforward)
		}
	}
	for i := range frames {
		f := &frames[i]
		k := s.slot(f.Time)
		if k < 0 || k >= n || k < last {
			s.dropped++
			continue
		}
		for _, c := range []struct {
			flag collector.Flags
			n    *int
		}{{collector.Held, &s.held}, {collector.Lost, &s.lost}, {collector.Thinned, &s.thinned}} {
			if f.Flags&c.flag != 0 {
				*c.n++
			}
		}
		if i > 0 && k-last > 1 && k-last <= hold && f.Flags&(collector.Gap|collector.ClockStep) == 0 {
			for j := last + 1; j < k; j++ {
				put(j, &frames[i-1])
			}
		}
		put(k, f)
		last = k
	}
	s.count()
	s.measureNoise()
	return s
}

// interval is the sample interval, s: the median of the data, or what the loop
// list says where the data agree.
func interval(l *configs.Loop, frames []collector.Frame) float64 {
	var d []float64
	step := max(1, len(frames)/5000)
	for i := step; i < len(frames); i += step {
		if x := float64(frames[i].Time-frames[i-1].Time) / 1000; x > 0 {
			d = append(d, x)
		}
	}
	dt := 1.0
	if len(d) > 0 {
		slices.Sort(d)
		dt = quantile(d, 0.5)
		if l.Report == configs.Exception {
			dt = quantile(d, 0.1)
		}
	}
	if l.SampleS > 0 && (math.Abs(dt/l.SampleS-1) < 0.3 || l.Report == configs.Exception) {
		dt = l.SampleS
	}
	return math.Max(dt, 0.02)
}

func (s *series) count() {
	run := 0
	for k := range s.pv {
		if s.pv[k] == s.pv[k] && s.sp[k] == s.sp[k] {
			s.good++
			run = 0
			continue
		}
		if run++; run == 5 {
			s.gaps++
		}
		if run >= 5 {
			s.longest = math.Max(s.longest, float64(run)*s.dt)
		}
	}
}

// measureNoise fills noise, resolution and usual wandering.
func (s *series) measureNoise() {
	n := s.n()
	step := max(1, n/60000)
	lags := [4]int{1, 2, 4, 8}
	// By blocks, the lower quartile of all: a swing or a ramp that is fast
	// against the samples would pass for noise.
	const share = 480
	every := max(1, n/share/400)
	var all []float64
	var ratio [4][]float64
	var d []float64
	for at := 0; at+share <= n || at == 0; at += every * share {
		first := 0.0
		for i, lag := range lags {
			d = d[:0]
			for k := at + lag; k < min(n, at+share); k++ {
				if x := math.Abs(s.pv[k] - s.pv[k-lag]); x == x && (x > 0 || s.loop.Report != configs.Exception) {
					d = append(d, x)
				}
			}
			if len(d) < 20 {
				break
			}
			slices.Sort(d)
			v := 1.0484 * quantile(d, 0.5)
			if i == 0 {
				first = v
				all = append(all, v)
			}
			if first > 0 {
				ratio[i] = append(ratio[i], v/first)
			}
		}
	}
	fast := 0.0
	if len(all) > 0 {
		fast = quantile(slices.Sorted(slices.Values(all)), 0.25)
	}
	s.quantPV, s.quantOP = resolution(s.pv, step), resolution(s.op, step)
	s.sigma = math.Max(fast, math.Max(s.quantPV*0.289, 0.002))
	for i, r := range ratio {
		if len(r) > 0 {
			s.noiseLag[i] = median(r)
		}
	}
	// Slow wandering: means of blocks of 20 samples while the law acts and SP
	// stands, without the noise.
	var m []float64
	const block = 20
	for k := 0; k+block <= n; k += block {
		sum, ok := 0.0, true
		for j := k; j < k+block; j++ {
			sum += s.sp[j] - s.pv[j]
			ok = ok && s.law[j] && s.sp[j] == s.sp[k]
		}
		if sum == sum && ok {
			m = append(m, sum/block)
		}
	}
	s.wander = math.NaN()
	if len(m) >= 10 {
		mid := median(m)
		for i := range m {
			m[i] = math.Abs(m[i] - mid)
		}
		w := 1.4826 * median(m)
		s.wander = math.Sqrt(math.Max(0, w*w-s.sigma*s.sigma/block))
	}
}

// resolution is the step in which a signal moves, % of span; 0 where its changes
// are not whole steps.
func resolution(x []float64, step int) float64 {
	var d []float64
	for k := 1; k < len(x); k += step {
		if v := math.Abs(x[k] - x[k-1]); v > 1e-5 {
			d = append(d, v)
		}
	}
	if len(d) < 30 {
		return 0
	}
	slices.Sort(d)
	q := quantile(d, 0.02)
	whole := 0
	for _, v := range d {
		if r := v / q; math.Abs(r-math.Round(r)) < 0.06 || r > 20 {
			whole++
		}
	}
	// A resolution shows in that few values repeat: most changes are small whole
	// multiples of it.
	if float64(whole) < 0.97*float64(len(d)) || quantile(d, 0.5) > 20*q {
		return 0
	}
	return q
}

// limits are the OP limits as set in the controller, %.
func (s *series) limits() (low, high float64) {
	l := s.loop
	return (l.OPLimitLow - l.OPLow) / l.OPSpan() * 100, (l.OPLimitHigh - l.OPLow) / l.OPSpan() * 100
}

// pegged says whether OP lies at a limit: -1 low, 1 high.
func (s *series) pegged(k int) int {
	lo, hi := s.limits()
	switch near := math.Max(0.5, 2*s.quantOP); {
	case s.op[k] <= lo+near:
		return -1
	case s.op[k] >= hi-near:
		return 1
	}
	return 0
}

// mean over slots [a, b), what is there.
func mean(x []float64, a, b int) float64 {
	sum, n := 0.0, 0
	for k := max(a, 0); k < min(b, len(x)); k++ {
		if x[k] == x[k] {
			sum += x[k]
			n++
		}
	}
	if n == 0 {
		return math.NaN()
	}
	return sum / float64(n)
}
