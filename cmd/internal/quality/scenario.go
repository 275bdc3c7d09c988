package quality

import (
	"math"
	"math/rand/v2"

	"midwatch/collector"
	"midwatch/detect"
)

// truth is what a scenario really holds.
type truth struct {
	kinds  []detect.Kind  // any of these is the fault found; empty: nothing is to be found
	also   []detect.Kind  // may be said as well, or instead, without being wrong
	causes []detect.Cause // any of these is right; empty: the cause is not scored
	soft   []detect.Cause // defensible: counts as undetermined
	onset  float64        // s
	end    float64        // s; what is found later is not counted
	unit   float64        // s: period of the swing, or recovery time, for the delay
	cycles bool           // unit is a period
	member int            // rig the fault is in; -1 any of them
	early  float64        // s before the onset in which the fault already builds up
	subtle func(*scenario) bool
	// forbid says that a cause must not be named of a loop (nil: no such rule).
	forbid func(s *scenario, loop string, c detect.Cause) bool
}

// scenario is one or more loops with one truth, run together.
type scenario struct {
	family   *family
	index    int
	rigs     []*rig
	couple   func(t float64, rigs []*rig)
	duration float64
	truth    truth
	epoch    int64
	rng      *rand.Rand
}

type frame = collector.Frame

// family draws scenarios of one kind.
type family struct {
	name    string
	healthy bool
	what    string
	weight  float64 // of the number of loops asked for
	draw    func(r *rand.Rand, days float64) *scenario
}

const epochMs = 1767484800000 // 2026-01-04T00:00:00Z

// draw makes the scenario of an index. hold uses another space of seeds.
func (f *family) make(seed uint64, hold bool, index int, days float64) *scenario {
	space := uint64(0x9e3779b97f4a7c15)
	if hold {
		space = 0xd1b54a32d192ed03
	}
	h := uint64(1469598103934665603)
	for _, c := range []byte(f.name) {
		h = (h ^ uint64(c)) * 1099511628211
	}
	r := rand.New(rand.NewPCG(seed^space, h+uint64(index)*0x2545f4914f6cdd1d))
	s := f.draw(r, days)
	s.family, s.index, s.rng = f, index, r
	s.epoch = epochMs + int64(r.IntN(86400))*1000 + int64(r.IntN(1000))
	if s.truth.end == 0 {
		s.truth.end = s.duration
	}
	for _, l := range s.rigs {
		l.onsetS = s.truth.onset
	}
	return s
}

// run steps all loops to the end and hands over the frames in order of time.
func (s *scenario) run(emit func(loop int, f *frame)) {
	for _, l := range s.rigs {
		l.start()
	}
	h := s.rigs[0].h
	var f frame // one for all: emit does not keep it
	var ok bool
	if len(s.rigs) == 1 && s.couple == nil {
		l := s.rigs[0]
		n := int64(s.duration / h)
		for i := int64(1); i <= n; i++ {
			if f, ok = l.step(s.epoch, float64(i)*h); ok {
				emit(0, &f)
			}
		}
		return
	}
	n := int64(s.duration / h)
	for i := int64(1); i <= n; i++ {
		t := float64(i) * h
		if s.couple != nil {
			s.couple(t, s.rigs)
		}
		for j, l := range s.rigs {
			if f, ok = l.step(s.epoch, t); ok {
				emit(j, &f)
			}
		}
	}
}

// ratio is how much larger the error got by the fault.
func (s *scenario) ratio(i int) float64 {
	l := s.rigs[max(i, 0)]
	return l.loud.rms() / math.Max(l.quiet.rms(), 0.02)
}
