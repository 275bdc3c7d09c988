package detect

import (
	"cmp"
	"encoding/json"
	"fmt"
	"math"
	"slices"
	"strings"

	"midwatch/collector"
	"midwatch/configs"
)

// shared finds groups of loops that cycle together: periods agree, and crossings
// keep their phase over slots. A group is one finding that lists its loops and
// names a candidate root, or none: the strongest nonlinearity (Thornhill 2005,
// IEEE Trans. Control Syst. Technol. 13, 434), never the earliest phase.
type shared struct {
	loops []*configs.Loop
	ids   map[string]collector.LoopID
	m     sharedMemory
}

type sharedMemory struct {
	Pairs  map[string]int // slots running in which the pair kept its phase
	Groups []sharedGroup
	Past   []sharedGroup // with a root, that ended less than a day ago

	Elements map[string]ownElement // by loop: what it says of its final element
	Beside   map[string]string     // by loop: another that may swing with it
	Cycles   map[string]bool       // loops that are told to cycle
}

type sharedGroup struct {
	Key    string // loop the finding is about
	Loops  []string
	Since  int64
	Gone   int // slots running in which it was not seen, nor two of its loops cycling
	Apart  int // slots running in which two of its loops cycle, but do not keep their phase
	Cause  Cause
	Root   string
	Period float64
	Widest string  // the loop that swings over the largest part of its range
	Amp    float64 // of Widest, in units of its PV
	Grew   int64   // onset of the swing of a root that grew by its own tuning, ms UTC; 0: none did
	Ended  int64   // ms UTC
	Next   string  // a root and cause that differ from what is said, and slots running with them
	NextN  int
}

// Slots in which a pair must keep its phase before it is said; slots, and periods of the
// cycle, after which a group whose loops have come to rest is over. While they go on at
// what may be one period, a phase that is not kept for a while is no end: a valve that slips
// sets it anew. A day of it is.
const (
	sharedSlots = 2
	sharedGone  = 6
	goneCycles  = 6
	sharedApart = 86400 * 1000 / SiteSlotMs
)

// grewBefore, periods, is how much earlier a swing must have begun to be the one that carries the
// other: the onset of a growing swing is read to about that.
const grewBefore = 2.0

// mayBeOne: two periods, s, are within a factor of two, as those of a swing that comes and goes
// read.
func mayBeOne(p, q float64) bool { return p < 2*q && q < 2*p }

// Periods nearer than this, as a logarithm, may be one: what decides is the phase.
const samePeriod = 0.12

func newShared(loops []*configs.Loop) Site {
	ids := map[string]collector.LoopID{}
	for i, l := range loops {
		ids[l.Name] = collector.LoopID(i)
	}
	return &shared{loops: loops, ids: ids, m: sharedMemory{Pairs: map[string]int{}, Elements: map[string]ownElement{}, Cycles: map[string]bool{}}}
}

func (s *shared) Save() ([]byte, error) { return json.Marshal(s.m) }
func (s *shared) Load(b []byte) error {
	m := sharedMemory{}
	if err := json.Unmarshal(b, &m); err != nil {
		return err
	}
	if m.Pairs == nil {
		m.Pairs = map[string]int{}
	}
	if m.Elements == nil {
		m.Elements = map[string]ownElement{}
	}
	if m.Cycles == nil {
		m.Cycles = map[string]bool{}
	}
	for name, x := range m.Elements { // numbers of loops are those of the list in force
		x.Said.ID = s.id(name)
		m.Elements[name] = x
	}
	s.m = m
	return nil
}

// together: methods section 6; independent phases give a mean resultant length
// over 0.85 of 14 crossings about once in 25,000. A pair that was together stays it
// while its phase is kept by more than half: a valve that slips sets it anew.
func together(a, b *Evidence, were bool) bool {
	tol, need, kept := samePeriod, 14, 0.85
	switch {
	case were:
		kept = 0.6
	case a.Regular > 8 && b.Regular > 8:
		tol, kept = 0.03, 0.92
	}
	if math.Abs(math.Log(a.PeriodS/b.PeriodS)) > tol {
		return false
	}
	r, n := phaseKept(a, b, kept)
	return n >= min(need, a.N) && n >= 10 && r > kept
}

func (s *shared) Judge(end int64, live []SiteEvidence, emit func(*Finding)) {
	order := byPeriod(live) // neighbours in period only
	root := make([]int, len(live))
	for i := range root {
		root[i] = i
	}
	var find func(int) int
	find = func(i int) int {
		if root[i] != i {
			root[i] = find(root[i])
		}
		return root[i]
	}
	pairs := map[string]int{}
	for x, i := range order {
		for _, j := range order[x+1:] {
			if live[j].PeriodS > 1.13*live[i].PeriodS {
				break
			}
			a, b := min(i, j), max(i, j)
			k := s.loops[live[a].ID].Name + "\x00" + s.loops[live[b].ID].Name
			if !together(&live[a].Evidence, &live[b].Evidence, s.m.Pairs[k] >= sharedSlots) {
				continue
			}
			pairs[k] = s.m.Pairs[k] + 1
			if pairs[k] >= sharedSlots {
				root[find(b)] = find(a)
			}
		}
	}
	s.m.Pairs = pairs
	groups := map[int][]int{}
	for i := range live {
		r := find(i)
		groups[r] = append(groups[r], i)
	}
	var seen []sharedGroup
	for i := range live {
		if g := groups[i]; len(g) > 1 {
			seen = append(seen, s.group(live, g))
		}
	}
	s.tell(end, live, seen, emit)
	s.m.Beside = s.beside(end, live, order)
	s.rejudge(end, emit)
}

// byPeriod gives the numbers of the records in the order of their periods.
func byPeriod(live []SiteEvidence) []int {
	order := make([]int, len(live))
	for i := range order {
		order[i] = i
	}
	slices.SortStableFunc(order, func(a, b int) int { return cmp.Compare(live[a].PeriodS, live[b].PeriodS) })
	return order
}

func (s *shared) group(live []SiteEvidence, g []int) sharedGroup {
	var out sharedGroup
	out.Since = math.MaxInt64
	best, second, widest := -1, -1, 0.0
	beat, sticks, grows := false, false, false
	for _, i := range g {
		e := &live[i]
		l := s.loops[e.ID]
		out.Loops = append(out.Loops, l.Name)
		out.Since = min(out.Since, e.Since)
		out.Period += e.PeriodS / float64(len(g))
		if span := l.PVSpan(); e.Amp > widest && span > 0 {
			widest, out.Widest, out.Amp = e.Amp, l.Name, e.Amp/100*span
		}
		beat = beat || e.Beat
		sticks = sticks || e.Cause == ValveSticking
		grows = grows || e.Growing
		switch {
		case best < 0 || e.Shape > live[best].Shape || live[best].Shape != live[best].Shape:
			best, second = i, best
		case second < 0 || e.Shape > live[second].Shape || live[second].Shape != live[second].Shape:
			second = i
		}
		if e.Growing && tooLively(e.Cause) && !s.driven(l.Name, live, g) && (out.Grew == 0 || e.Since < out.Grew) {
			// A loop that grew by its own tuning carries the others with it: of several that
			// look so the one that began, since what is driven begins later.
			out.Cause, out.Key, out.Grew = e.Cause, l.Name, e.Since
		}
	}
	x, y := &live[best], &live[second]
	// A tie of shapes is broken by how far PV moves in jumps: every process between
	// the root and a follower smooths them (Thornhill 2005).
	leads := x.Shape > y.Shape+0.08 || !(y.Shape >= 0) || x.Jumps > y.Jumps+0.08
	switch {
	case out.Key != "":
		out.Root = out.Key
	case x.Shape > 0.68 && leads && x.Cause == ValveSticking:
		out.Root = s.loops[x.ID].Name
		out.Cause, out.Key = ValveSticking, out.Root
	case beat && !sticks && !grows:
		// Members share their beat, and a sticking element has none; nor does a load that
		// keeps its size make a swing that grows. A loop without corners
		// proves nothing: a slow process leaves none of its own element's.
		out.Cause, out.Key = OutsideDisturbance, out.Loops[0]
	default:
		out.Cause, out.Key = Undetermined, out.Loops[0]
	}
	return out
}

// tooLively: a tuning that leaves a loop too little damping.
func tooLively(c Cause) bool { return c == ResetTooShort || c == GainTooHigh }

// driven: another loop of the group sets the set point of this one.
func (s *shared) driven(name string, live []SiteEvidence, g []int) bool {
	for _, i := range g {
		if s.loops[live[i].ID].Inner == name {
			return true
		}
	}
	return false
}

func overlap(a, b []string) int {
	n := 0
	for _, x := range a {
		if slices.Contains(b, x) {
			n++
		}
	}
	return n
}

// same: both hold two loops, or one at what may be one period; a loop has one cycle at a time.
func (g *sharedGroup) same(o *sharedGroup) bool {
	n := overlap(g.Loops, o.Loops)
	return n >= 2 || n == 1 && mayBeOne(g.Period, o.Period)
}

// goOn: two of its loops or more still cycle, at a period that may be that of the group.
func (g *sharedGroup) goOn(loops []*configs.Loop, live []SiteEvidence) bool {
	n := 0
	for i := range live {
		if e := &live[i]; slices.Contains(g.Loops, loops[e.ID].Name) && mayBeOne(e.PeriodS, g.Period) {
			n++
		}
	}
	return n >= 2
}

func (s *shared) tell(end int64, live []SiteEvidence, seen []sharedGroup, emit func(*Finding)) {
	var keep []sharedGroup
	taken := make([]bool, len(seen))
	for _, old := range s.m.Groups {
		if slices.ContainsFunc(keep, func(k sharedGroup) bool { return k.same(&old) }) {
			f := s.finding(end, &old, Cleared)
			f.Reason = Rejudged // two groups grew into one
			emit(f)
			continue
		}
		now := sharedGroup{Since: old.Since}
		for i := range seen {
			if !taken[i] && old.same(&seen[i]) {
				taken[i] = true
				now.join(&seen[i])
			}
		}
		if now.Loops == nil {
			if old.goOn(s.loops, live) {
				old.Gone, old.Apart = 0, old.Apart+1
			} else {
				old.Gone++
			}
			if float64(old.Gone) >= max(sharedGone, goneCycles*old.Period*1000/SiteSlotMs) || old.Apart >= sharedApart {
				emit(s.finding(end, &old, Cleared))
				s.past(end, old)
				continue
			}
			keep = append(keep, old)
			continue
		}
		news := now.follow(&old)
		more := overlap(old.Loops, now.Loops) < len(now.Loops)
		for _, l := range old.Loops { // a loop that pauses stays listed
			if !slices.Contains(now.Loops, l) {
				now.Loops = append(now.Loops, l)
			}
		}
		slices.Sort(now.Loops)
		if now.Key != old.Key {
			f := s.finding(end, &old, Cleared)
			f.Reason = Rejudged // it is about another loop from now on
			emit(f)
			emit(s.finding(end, &now, Raised))
		} else if more || news {
			emit(s.finding(end, &now, Updated))
		}
		keep = append(keep, now)
	}
	for i := range seen {
		if !taken[i] {
			was := s.before(end, &seen[i], keep)
			seen[i].follow(&was)
			emit(s.finding(end, &seen[i], Raised))
			keep = append(keep, seen[i])
		}
	}
	s.m.Groups = keep
}

const pastMs = 86400 * 1000

// past keeps a group that ended, with its root, for a day.
func (s *shared) past(end int64, g sharedGroup) {
	s.m.Past = slices.DeleteFunc(s.m.Past, func(p sharedGroup) bool { return p.Ended < end-pastMs || p.same(&g) })
	if g.Root != "" {
		g.Ended, g.Next, g.NextN = end, "", 0
		s.m.Past = append(s.m.Past, g)
	}
}

// before is what was said of a group that comes back with its root. Of others nothing was: it
// is about the first of its loops that no other group is about.
func (s *shared) before(end int64, g *sharedGroup, others []sharedGroup) sharedGroup {
	about := func(l string) bool {
		return slices.ContainsFunc(others, func(o sharedGroup) bool { return o.Key == l })
	}
	for _, p := range s.m.Past {
		if p.Ended >= end-pastMs && p.same(g) && slices.Contains(g.Loops, p.Root) && !about(p.Root) {
			return p
		}
	}
	key := g.Loops[0]
	for _, l := range slices.Backward(g.Loops) {
		if !about(l) {
			key = l
		}
	}
	return sharedGroup{Key: key, Cause: Undetermined}
}

// join adds what was seen of one group in parts; the part with a root tells it.
func (g *sharedGroup) join(o *sharedGroup) {
	if g.Loops == nil || g.Root == "" && o.Root != "" {
		g.Cause, g.Root, g.Key, g.Grew, g.Period, g.Widest, g.Amp = o.Cause, o.Root, o.Key, o.Grew, o.Period, o.Widest, o.Amp
	}
	g.Loops = append(g.Loops, o.Loops...)
	g.Since = min(g.Since, o.Since)
}

// stays: the group swings on with the loop from which it grew. Growth once seen is not undone by
// what the loops look like at their limits, but by another that began plainly before.
func (g *sharedGroup) stays(old *sharedGroup) bool {
	return old.Grew != 0 && old.Root != "" && slices.Contains(g.Loops, old.Root) && !(g.Grew != 0 && float64(old.Grew-g.Grew) > grewBefore*1000*g.Period)
}

// follow takes over what was said of the group before. A cause must be seen twice, and a
// root for a cycle, before it is named, and for more before it takes the place of a cause named
// already; no cause found is no news. It reports whether cause or root is new.
func (g *sharedGroup) follow(old *sharedGroup) (news bool) {
	if g.stays(old) {
		g.Next, g.NextN = "", 0
	} else if g.Cause != Undetermined && (g.Cause != old.Cause || g.Root != old.Root) {
		cycles := 0.0
		switch {
		case old.Cause != Undetermined:
			cycles = 4
		case g.Root != "":
			cycles = 1
		}
		next, n := g.Root+" "+string(g.Cause), 1
		if old.Next == next {
			n = old.NextN + 1
		}
		if n >= sharedSlots && float64(n)*SiteSlotMs/1000 >= cycles*g.Period {
			if g.Root == "" {
				g.Key = old.Key
			}
			return true
		}
		g.Next, g.NextN = next, n
	} else if g.Cause == Undetermined {
		g.Next, g.NextN = old.Next, old.NextN
	}
	g.Key, g.Cause, g.Root, g.Grew = old.Key, old.Cause, old.Root, old.Grew
	return false
}

// id is the number of a loop; 0 of one that is gone.
func (s *shared) id(loop string) collector.LoopID { return s.ids[loop] }

func (s *shared) finding(end int64, g *sharedGroup, e Event) *Finding {
	f := &Finding{Subject: Subject{Loop: g.Key}, Loop: g.Key, Loops: g.Loops, Kind: SharedOscillation, Event: e, At: end, Since: g.Since,
		Cause: g.Cause, Confidence: 0.7}
	f.ID = s.id(g.Key)
	widest := ""
	for _, l := range s.loops {
		if l.Name == g.Widest && g.Amp > 0 {
			widest = "; widest in " + l.Name + ", ±" + sig2(g.Amp) + unitOf(l.Unit)
		}
	}
	list := strings.Join(g.Loops, ", ")
	if e == Cleared {
		f.Reason, f.Confidence = Over, 0
		f.Text = "The common cycle of " + list + " is over."
		f.TextShort = shorten(g.Key + ": common cycle is over.")
		return f
	}
	f.Measures = Measures{{"period_s", g.Period}, {"loops", float64(len(g.Loops))}}
	lasts, from := duration(float64(f.At-f.Since)/1000), ""
	what := fmt.Sprintf("For %s %d loops have been cycling together every %s: %s%s.", lasts, len(g.Loops), duration(g.Period), list, widest)
	switch {
	case g.Root != "" && g.Cause == ValveSticking:
		f.AlsoPossible = []Cause{OutsideDisturbance}
		what += " Candidate root: " + g.Root + ", whose output looks like that of a sticking final element." +
			" First stroke it when operations agree, before anything at the other loops."
	case g.Root != "":
		what += " Candidate root: " + g.Root + ", which grew by its own tuning." +
			" First check its measurement and final element, then its tuning, before anything at the other loops."
	default:
		f.Confidence = 0.6
		if g.Cause != OutsideDisturbance {
			f.AlsoPossible = []Cause{OutsideDisturbance}
		}
		what += " No root stands out: it may come from outside all of them." +
			" First look upstream for what they share (supply, header, feed), then for a loop of the group that cycles by itself."
	}
	if g.Root != "" {
		from = ", " + likely(f.Confidence) + " from " + g.Root
	}
	f.Text = what
	f.TextShort = shorten(fmt.Sprintf("%d loops cycle every %s for %s%s: %s.", len(g.Loops), duration(g.Period), lasts, from, list))
	return f
}
