package quality

import (
	"math"
	"runtime"
	"slices"
	"sync"

	"midwatch/collector"
	"midwatch/configs"
	"midwatch/detect"
)

// Truth is what a case really holds, for scoring.
type Truth struct {
	Kinds  []detect.Kind  // any of these is the fault found; empty: nothing is to be found
	Also   []detect.Kind  // may be said as well, or instead, without being wrong
	Causes []detect.Cause // any of these is right; empty: the cause is not scored
	Soft   []detect.Cause // defensible: counts as undetermined
	OnsetS float64
	EndS   float64 // what is found later is not counted
	UnitS  float64 // period of the swing, or recovery time, for the delay
	Member int     // loop the fault is in; -1 any of them
	EarlyS float64 // before the onset in which the fault already builds up
}

// Law is the true control law of a loop in the ideal form.
type Law struct {
	Gain   float64 // %/%
	ResetS float64
	PI     bool // a law of two numbers that can be read from the trend
}

// Case is one or more loops with one truth, whatever simulates them. The functions
// are asked after Frames has run.
type Case struct {
	Family  string
	Index   int
	Healthy bool
	About   string // what is true of it, for people: lines that begin with #
	Epoch   int64  // ms UTC of second 0
	Seconds float64
	Rows    []*configs.Loop
	EveryS  []float64 // recording interval of each loop
	Frames  func(emit func(loop int, f *collector.Frame))
	Truth   func() Truth
	Law     func() Law // of the loop the fault is in, at the end
	Subtle  func() bool
	Clipped func(loop string, k detect.Kind) bool // OP or PV of the loop really sat at an end, so that this kind is no false one
	// Forbid says that a cause must not be named of a loop (nil: no such rule).
	Forbid func(loop string, c detect.Cause) bool
}

// asCase gives the scenario as what is judged.
func (s *scenario) asCase() *Case {
	t := &s.truth
	c := &Case{Family: s.family.name, Index: s.index, Healthy: s.family.healthy, About: describe(s), Epoch: s.epoch, Seconds: s.duration, Frames: s.run}
	for _, l := range s.rigs {
		c.Rows, c.EveryS = append(c.Rows, l.row), append(c.EveryS, l.rec.every)
	}
	c.Truth = func() Truth {
		unit := t.unit
		if t.cycles && t.unit > 0 && t.member <= 0 { // the swing of a valve, of a group's root too, is known only from the run
			if l := s.rigs[0]; l.turns > 10 {
				unit = math.Max(2*(s.duration-t.onset)/float64(l.turns), l.pu)
			}
		}
		kinds := t.kinds
		if l := s.rigs[0]; l.ringLag > 0 && l.clipLoud > t.unit { // the limits of OP have ended the growth: from then on the swing is a steady one
			kinds = append(slices.Clone(kinds), detect.SustainedOscillation)
		}
		return Truth{Kinds: kinds, Also: t.also, Causes: t.causes, Soft: t.soft, OnsetS: t.onset, EndS: t.end, UnitS: unit, Member: t.member, EarlyS: t.early}
	}
	c.Law = func() Law {
		w := s.rigs[max(t.member, 0)].law
		return Law{w.kc, w.ti, !math.IsInf(w.ti, 1) && w.schedule == nil && w.gap == 0}
	}
	c.Subtle = func() bool { return t.subtle != nil && t.subtle(s) }
	c.Clipped = s.trulyClipped
	if t.forbid != nil {
		c.Forbid = func(loop string, cause detect.Cause) bool { return t.forbid(s, loop, cause) }
	}
	return c
}

// trulyClipped: OP really sat at its limit for longer than a recovery takes, or PV
// at an end of its range, so a finding about that is no false one, whatever the
// family.
func (s *scenario) trulyClipped(loop string, k detect.Kind) bool {
	return slices.ContainsFunc(s.rigs, func(l *rig) bool {
		return l.name == loop && ReallyAtEnd(k, l.clipLongest, l.recovery, l.endLongest)
	})
}

// ReallyAtEnd: a finding of a kind is true of a loop whose OP sat at its limit for clip s, of
// recoveries of so many s, and whose PV sat at an end of its range for end s.
func ReallyAtEnd(k detect.Kind, clip, recovery, end float64) bool {
	return clip > 2*recovery && (k == detect.OutputSaturation || k == detect.SustainedOffset) || end > 60 && k == detect.PVAtRangeEnd
}

// JudgeAll makes and judges n cases on all cores; the order is that of their numbers.
// Each (nil: none) hears of every result as it comes.
func JudgeAll(n int, make1 func(int) *Case, nuisance float64, each func(*Result)) []Result {
	out := make([]Result, n)
	var wg sync.WaitGroup
	next := make(chan int)
	var mu sync.Mutex
	for range runtime.GOMAXPROCS(0) {
		wg.Go(func() {
			for k := range next {
				out[k] = Judge(make1(k), nuisance)
				if each != nil {
					mu.Lock()
					each(&out[k])
					mu.Unlock()
				}
			}
		})
	}
	for k := range n {
		next <- k
	}
	close(next)
	wg.Wait()
	return out
}
