package others

import (
	"fmt"
	"math"
	"math/rand/v2"
	"slices"
	"strings"

	"midwatch/cmd/internal/quality"
	"midwatch/collector"
	"midwatch/detect"
)

type kinds = []detect.Kind
type causes = []detect.Cause

// plan is one or more loops with one truth, run together.
type plan struct {
	loops  []*loop
	couple func(j int) // before the step of loop j; nil none
	truth  quality.Truth
	cycles bool    // the unit is the period that the run shows
	clear  bool    // never subtle: not a matter of the size of the error
	floor  float64 // %: rms error below which it is subtle
	forbid func(loop string, c detect.Cause) bool
}

// family draws plans of one kind.
type family struct {
	name    string
	what    string
	healthy bool
	draw    func(r *rand.Rand, days float64) *plan
}

const epochMs = 1769904000000 // 2026-02-01T00:00:00Z

// make draws the case of an index.
func (f *family) make(seed uint64, index int, days float64) *quality.Case {
	h := uint64(0x84222325cbf29ce4)
	for _, c := range []byte(f.name) {
		h = (h ^ uint64(c)) * 0x100000001b3
	}
	r := rand.New(rand.NewPCG(seed*0x2545f4914f6cdd1d+0x6a09e667, h+uint64(index)*0x9e3779b97f4a7c15))
	p := f.draw(r, days)
	epoch := epochMs + int64(r.IntN(86400_000))
	own := p.loops[max(p.truth.Member, 0)]
	c := &quality.Case{Family: f.name, Index: index, Healthy: f.healthy, Epoch: epoch, Seconds: p.truth.EndS}
	for i, l := range p.loops {
		if i > 0 { // names within a plan differ
			l.name = fmt.Sprintf("%s%c", l.name, 'A'+i)
		}
		l.list.tuning, l.list.process, l.list.scan = l.list.tuning || chance(r, 0.6), chance(r, 0.7), chance(r, 0.5)
		l.onset, l.end = p.truth.OnsetS, p.truth.EndS
	}
	for i, l := range p.loops {
		if l.list.inner != "" {
			l.list.inner = p.loops[i+1].name
		}
		c.EveryS = append(c.EveryS, l.log.every)
	}
	c.Rows = rowsOf(p.loops)
	c.About = p.about(f.name, index, epoch)
	c.Frames = func(emit func(int, *collector.Frame)) { p.run(epoch, emit) }
	c.Truth = func() quality.Truth {
		t := p.truth
		if p.cycles && own.turns > 10 {
			t.UnitS = 2 * (t.EndS - t.OnsetS) / float64(own.turns)
		}
		return t
	}
	c.Law = func() quality.Law {
		kc, ti, _ := own.law.ideal()
		return quality.Law{Gain: kc, ResetS: ti, PI: !math.IsInf(ti, 1) && !own.law.square && own.law.gap == 0}
	}
	c.Subtle = func() bool {
		grew := own.onset == 0 || own.loud.rms() >= 1.5*own.quiet.rms()
		return !p.clear && (!grew || own.loud.rms() < p.floor)
	}
	c.Clipped = func(name string, k detect.Kind) bool {
		return slices.ContainsFunc(p.loops, func(l *loop) bool {
			return l.name == name && quality.ReallyAtEnd(k, l.clipMax, l.recovery, l.edgeMax)
		})
	}
	c.Forbid = p.forbid
	return c
}

// run steps all loops, each at its own scan, in order of time, and hands over their
// frames.
func (p *plan) run(epoch int64, emit func(int, *collector.Frame)) {
	for _, l := range p.loops {
		l.start()
	}
	var f collector.Frame
	var ok bool
	n := make([]int64, len(p.loops))
	for {
		j, t := 0, math.Inf(1)
		for i, l := range p.loops {
			if x := float64(n[i]+1) * l.h; x < t-1e-9 {
				j, t = i, x
			}
		}
		if t > p.truth.EndS {
			return
		}
		n[j]++
		if p.couple != nil {
			p.couple(j)
		}
		p.loops[j].step(t)
		if f, ok = p.loops[j].frame(epoch, t); ok {
			emit(j, &f)
		}
	}
}

func (p *plan) about(name string, index int, epoch int64) string {
	var b strings.Builder
	t := &p.truth
	fmt.Fprintf(&b, "# %s #%d: %.1f h, onset %s (%.1f h), unit %.4g s, kinds %v also %v causes %v soft %v\n", name, index, t.EndS/3600,
		detect.FormatTime(epoch+int64(t.OnsetS*1000)), t.OnsetS/3600, t.UnitS, t.Kinds, t.Also, t.Causes, t.Soft)
	for _, l := range p.loops {
		fmt.Fprintf(&b, "#  %s; list %+v; loads", l, l.list)
		for _, s := range l.loads {
			fmt.Fprintf(&b, " %s", load(s))
		}
		fmt.Fprintln(&b)
	}
	return b.String()
}

// load says what a part of a load is, without its random source.
func load(s signal) string {
	switch s := s.(type) {
	case *steps:
		return fmt.Sprintf("steps{%.3g each %.4g}", s.size, s.gap)
	case *wander:
		return fmt.Sprintf("wander{%.3g tau %.4g}", s.rms, s.tau)
	case *daily:
		return fmt.Sprintf("daily{%.3g}", s.size)
	case *batch:
		return fmt.Sprintf("batch{%.3g phase %.4g ramp %.4g spread %.2g}", s.size, s.phase, s.ramp, s.spread)
	case *walk:
		return fmt.Sprintf("walk{%.3g reach %.3g}", s.speed, s.reach)
	case *pulses:
		return fmt.Sprintf("pulses{%.3g each %.4g for %.4g}", s.size, s.gap, s.long)
	case *swing:
		return fmt.Sprintf("swing{%.3g period %.4g square %.2g}", s.size, s.period, s.square)
	case *excursions:
		return fmt.Sprintf("excursions{%.3g each %.4g for %.4g}", s.size, s.gap, s.long)
	case *ramped:
		return fmt.Sprintf("ramped{%.3g in %.4g}", s.size, s.ramp)
	}
	return fmt.Sprintf("%T", s)
}

// Options of a bench.
type Options struct {
	Loops    int     // cases per family
	Days     float64 // of a healthy loop recorded at 10 s
	Seed     uint64
	Match    func(family string) bool
	Nuisance float64 // handed to detection; 0: its default
	Each     func(*quality.Result)
}

// Families are the names of all, and what they hold; healthy ones come last.
func Families() (names, what []string, healthy []bool) {
	for _, fs := range [][]family{faults, healthyOnes} {
		for _, f := range fs {
			names, what, healthy = append(names, f.name), append(what, f.what), append(healthy, f.healthy)
		}
	}
	return names, what, healthy
}

// IsHealthy says whether a family is one of healthy loops.
func IsHealthy(name string) bool {
	return slices.ContainsFunc(healthyOnes, func(f family) bool { return f.name == name })
}

// matching families, faults first.
func (o *Options) matching() []*family {
	var out []*family
	for _, fs := range [][]family{faults, healthyOnes} {
		for i := range fs {
			if o.Match == nil || o.Match(fs[i].name) {
				out = append(out, &fs[i])
			}
		}
	}
	return out
}

// Cases are the cases of an index, one for each matching family.
func Cases(o Options, index int) []*quality.Case {
	var out []*quality.Case
	for _, f := range o.matching() {
		out = append(out, f.make(o.Seed, index, o.Days))
	}
	return out
}

// Run draws and judges all cases on all cores, in order of family and index.
func Run(o Options) []quality.Result {
	fs := o.matching()
	return quality.JudgeAll(len(fs)*o.Loops, func(k int) *quality.Case {
		return fs[k/o.Loops].make(o.Seed, k%o.Loops, o.Days)
	}, o.Nuisance, o.Each)
}
