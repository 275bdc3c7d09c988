package detect

import (
	"fmt"
	"maps"
	"math"
	"slices"

	"midwatch/configs"
)

// What a loop says of its own final element is judged anew once it is known to follow
// another. Every process between the root of a common cycle and a loop smooths the jumps of
// the root's element, and what is left may be the triangle of one that sticks; only the
// strongest of the group tells of itself (Thornhill 2005). A loop alone cannot know that.

// ownElement is the newest word of a loop that its own final element sticks.
type ownElement struct {
	Said Finding // as its watch says it
	Told Kind    // as what it was passed on; empty: its watch tells the cycle itself by now
	Root string  // newest root of a group with this loop
}

// follows gives the group in which another loop is the root, or may be as long as none is
// named. Loops of one cascade are no such group: the final element of an outer loop is its
// inner loop.
func (s *shared) follows(name string) *sharedGroup {
	for i := range s.m.Groups {
		if g := &s.m.Groups[i]; g.Root != name && slices.Contains(g.Loops, name) && slices.ContainsFunc(g.Loops, func(other string) bool {
			return other != name && (g.Root == "" || other == g.Root) && !s.cascaded(name, other)
		}) {
			return g
		}
	}
	return nil
}

// cascaded: one of the two sets the set point of the other.
func (s *shared) cascaded(a, b string) bool {
	return cascaded(s.loops[s.id(a)], s.loops[s.id(b)])
}

func cascaded(a, b *configs.Loop) bool { return a.Inner == b.Name || b.Inner == a.Name }

// Hear passes on what a loop says of itself, or what is left of it in its group. Where a loop
// gives up one word for another of which the same is left, the finding goes on; the new word
// is heard before the end of the old.
func (s *shared) Hear(f *Finding, emit func(*Finding)) {
	x, was := s.m.Elements[f.Loop]
	switch {
	case f.Kind == SustainedOscillation && f.Event == Cleared:
		if was && x.Told == f.Kind && f.At == x.Said.At && f.Reason == Rejudged {
			return // it goes on as what is left of its newer word
		}
	case f.Kind == SustainedOscillation:
		if was && x.Told == f.Kind {
			x.Told = ""
			s.m.Elements[f.Loop] = x
			f = goesOn(f)
		}
		if g := s.with(f.Loop); g != nil && f.Cause == ValveDeadBand {
			f = asFollower(f, g)
		}
	case f.Kind != ValveStickingKind:
	case f.Event == Cleared:
		delete(s.m.Elements, f.Loop)
		if was && x.Told == "" {
			return
		}
		if was && x.Told != f.Kind {
			f = taken(f, x.Told, f.At, f.Reason)
		}
	default:
		g := s.follows(f.Loop)
		x.learn(g)
		if !was {
			if g == nil {
				g = s.with(f.Loop)
			}
			x.Told = f.Kind
			if g != nil {
				x.Told = SustainedOscillation
			}
		}
		x.Said = *f
		s.m.Elements[f.Loop] = x
		switch {
		case x.Told == f.Kind:
		case g == nil:
			return // see rejudge
		case s.m.Cycles[f.Loop]:
			f = goesOn(asFollower(f, g))
		default:
			f = asFollower(f, g)
		}
	}
	if f.Kind == SustainedOscillation {
		s.m.Cycles[f.Loop] = true
		if f.Event == Cleared {
			delete(s.m.Cycles, f.Loop)
		}
	}
	emit(f)
}

// goesOn: what was told before, said anew.
func goesOn(f *Finding) *Finding {
	c := *f
	c.Event = Updated
	return &c
}

func (x *ownElement) learn(g *sharedGroup) {
	if g != nil && g.Root != "" {
		x.Root = g.Root
	}
}

// alone: no other loop says the same of its own element at nearly this period (within a
// factor of two, as a swing that comes and goes reads); of two at most one is the root.
func (s *shared) alone(x *ownElement) bool {
	p, ok := x.Said.Measures.Get("period_s")
	for name, y := range s.m.Elements {
		q, known := y.Said.Measures.Get("period_s")
		if name != x.Said.Loop && (!ok || !known || q < 2*p && p < 2*q) {
			return false
		}
	}
	return true
}

// root: the loop is the root of a group.
func (s *shared) root(name string) bool {
	return slices.ContainsFunc(s.m.Groups, func(g sharedGroup) bool { return g.Root == name })
}

// rejudge takes back what was said before the groups were known as they are now. What a loop
// said of its element stands again where it is the root itself, or where its group is over,
// never had one, and this loop alone says so.
func (s *shared) rejudge(end int64, emit func(*Finding)) {
	for _, name := range slices.Sorted(maps.Keys(s.m.Elements)) {
		x := s.m.Elements[name]
		now := x.Said
		now.At, now.Event = end, Raised
		g := s.follows(name)
		x.learn(g)
		s.m.Elements[name] = x
		switch {
		case x.Told == ValveStickingKind && g != nil:
			now = *asFollower(&now, g)
		case x.Told == SustainedOscillation && (g == nil && s.root(name) || s.with(name) == nil && x.Root == "" && s.alone(&x)):
		default:
			continue
		}
		if delete(s.m.Cycles, name); now.Kind == SustainedOscillation {
			s.m.Cycles[name] = true
		}
		emit(taken(&x.Said, x.Told, end, Rejudged))
		emit(&now)
		x.Told = now.Kind
		s.m.Elements[name] = x
	}
}

// taken ends what was told as a kind.
func taken(f *Finding, k Kind, at int64, reason string) *Finding {
	c := Finding{ID: f.ID, Subject: f.Subject, Loop: f.Loop, Kind: k, Event: Cleared, At: at, Since: f.Since, Cause: Undetermined, Reason: reason}
	if k == f.Kind {
		c.Cause = f.Cause
	}
	i := kSustained
	if k == ValveStickingKind {
		i = kSticking
	}
	c.Text, c.TextShort = textOver(f.Loop, i, reason)
	return &c
}

// asFollower is what is left of a finding that blames the final element of a loop which
// another one drives: that it cycles.
func asFollower(f *Finding, g *sharedGroup) *Finding {
	c := *f
	c.Kind, c.Cause, c.Confidence = SustainedOscillation, Undetermined, 0.6
	c.AlsoPossible = []Cause{OutsideDisturbance, f.Cause}
	c.Measures = nil
	for _, name := range table[kSustained].Measures {
		if v, ok := f.Measures.Get(name); ok {
			c.Measures = append(c.Measures, Measure{name, v})
		}
	}
	period := math.NaN()
	if v, ok := f.Measures.Get("period_s"); ok {
		period = v
	}
	with := fmt.Sprintf("%d loops of a group", len(g.Loops)-1)
	if len(g.Loops) == 2 {
		with = g.Loops[0]
		if with == f.Loop {
			with = g.Loops[1]
		}
	}
	what := "cycles" + part(" every %s", period, duration) + " with " + with
	c.Text, c.TextShort = "PV "+what+". Its output looks like that of a sticking final element, which the cycle of another loop can make it, too. ", f.Loop+": "+what
	if g.Root == "" {
		c.Text += "First judge the group: no root stands out yet."
	} else {
		c.Text += "Candidate root: " + g.Root + ". Judge the root before any other loop of the group."
		c.TextShort += "; candidate root: " + g.Root
	}
	c.TextShort = shorten(c.TextShort + ".")
	return &c
}
