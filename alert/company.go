package alert

import (
	"math"
	"slices"

	"midwatch/detect"
)

// A swing that several loops share is one trouble. That they share it is known only some
// cycles after each of them was found to swing, so what is told of a loop waits for its
// group where it may have one: where another loop swings with nearly the same period, and
// both were found at about the same time, or that one has a group already.

// How long a group takes to show, data time: two slots of the site detectors and the one
// under way, and the cycles in which loops must keep their phase. How long its root takes:
// two slots.
const (
	joinMs     = 3 * detect.SiteSlotMs
	joinCycles = 5.0
	rootMs     = 2*detect.SiteSlotMs + 60_000
)

// joinTogether, periods, is the time between two findings of one swing: loops do not all show it
// equally plainly.
const joinTogether = 20.0

// joinWait is how long, ms, a step of the episode waits for a group or its root; 0: not at all.
// Half of the time to a limit is left in any case.
func (d *Desk) joinWait(e *Episode, event detect.Event) int64 {
	lead := e.Lead()
	if e.Family != familySwing || event == detect.Cleared {
		return 0
	}
	wait := int64(0)
	switch {
	case lead.Kind == detect.SharedOscillation:
		if lead.Cause == detect.Undetermined {
			wait = rootMs
		}
	case event == detect.Raised && (len(e.Group) > 0 || d.companion(e, &lead)):
		wait = joinMs + int64(joinCycles*1000*period(&lead))
	}
	wait = min(wait, d.o.SettleSwing.Milliseconds())
	if at, _, ok := limitAt(&lead); ok {
		wait = min(wait, max(at-lead.At, 0)/2)
	}
	return wait
}

// companion says whether a swing that was found before may be that of the episode, too.
func (d *Desk) companion(e *Episode, lead *detect.Finding) bool {
	for _, o := range d.mem.episodes {
		if o.Family != familySwing || o == e || !o.Open() || o.Raised > e.Raised || o.Raised == e.Raised && o.ID > e.ID || !o.compatible(lead) {
			continue
		}
		if float64(e.Raised-o.Raised) <= joinTogether*1000*period(lead) || o.openKind(detect.SharedOscillation) {
			return true
		}
	}
	return false
}

// period of a swing, s; 0: not known.
func period(f *detect.Finding) float64 {
	p, ok := f.Measures.Get("period_s")
	if !ok || p != p {
		return 0
	}
	return math.Max(p, 0)
}

// instead replaces what waits of the episode by a newer step, which then tells what that one
// was to tell; what is over is told after it.
func (b *batch) instead(e *Episode, s *step) error {
	old := b.d.mem.steps[e.ID]
	if len(old) == 0 || old[len(old)-1].Wait == 0 {
		return nil
	}
	last := &old[len(old)-1]
	if s.Event == detect.Cleared {
		last.Wait = 0
		return put(b.tx, bucketSteps, key2(e.ID, last.Step), *last)
	}
	if last.Event == detect.Raised {
		s.Event = detect.Raised
	}
	s.Quiet, s.Worse = s.Quiet && last.Quiet, s.Worse || last.Worse
	if s.Wait = b.d.joinWait(e, s.Event); s.Finding.Kind == last.Finding.Kind {
		s.Wait = min(s.Wait, max(last.Wall+last.Wait-s.Wall, 0))
	}
	if err := b.tx.Delete(bucketSteps, key2(e.ID, last.Step)); err != nil {
		return err
	}
	b.d.mem.steps[e.ID] = old[:len(old)-1]
	return nil
}

// newMember is what an episode keeps of a finding.
func (d *Desk) newMember(f *detect.Finding) Member {
	m := Member{Finding: *f, Open: true, Depth: d.set.depth[f.Loop]}
	if f.Kind == detect.SharedOscillation && len(f.Loops) > 0 {
		m.Within = !slices.ContainsFunc(f.Loops[1:], func(l string) bool { return !slices.Contains(d.set.cascade[f.Loops[0]], l) })
	}
	return m
}
