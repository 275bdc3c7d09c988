package detect

import (
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
	m     sharedMemory
}

type sharedMemory struct {
	Pairs  map[string]int // slots running in which the pair kept its phase
	Groups []sharedGroup
}

type sharedGroup struct {
	Key    string // loop the finding is about
	Loops  []string
	Since  int64
	Gone   int // slots running without the group
	Cause  Cause
	Root   string
	Period float64
}

// Slots in which a pair must keep its phase before it is said, and slots after
// which a group that is not seen is over.
const (
	sharedSlots = 2
	sharedGone  = 6
)

func newShared(loops []*configs.Loop) Site {
	return &shared{loops: loops, m: sharedMemory{Pairs: map[string]int{}}}
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
	s.m = m
	return nil
}

// together: methods section 6; independent phases give a mean resultant length
// over 0.85 of 14 crossings about once in 25,000.
func together(a, b *Evidence) bool {
	tol, need, kept := 0.12, 14, 0.85
	if a.Regular > 8 && b.Regular > 8 {
		tol, kept = 0.03, 0.92
	}
	if math.Abs(math.Log(a.PeriodS/b.PeriodS)) > tol {
		return false
	}
	r, n := phaseKept(a, b)
	return n >= min(need, a.N) && n >= 10 && r > kept
}

func (s *shared) Judge(end int64, live []SiteEvidence, emit func(*Finding)) {
	// Neighbours in period only: n log n over oscillating loops.
	order := make([]int, len(live))
	for i := range order {
		order[i] = i
	}
	slices.SortStableFunc(order, func(a, b int) int {
		switch {
		case live[a].PeriodS < live[b].PeriodS:
			return -1
		case live[a].PeriodS > live[b].PeriodS:
			return 1
		}
		return 0
	})
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
			if !together(&live[a].Evidence, &live[b].Evidence) {
				continue
			}
			k := s.loops[live[a].ID].Name + "\x00" + s.loops[live[b].ID].Name
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
	s.tell(end, seen, emit)
}

func (s *shared) group(live []SiteEvidence, g []int) sharedGroup {
	var out sharedGroup
	out.Since = math.MaxInt64
	best, second, sticking := -1.0, -1.0, false
	for _, i := range g {
		e := &live[i]
		out.Loops = append(out.Loops, s.loops[e.ID].Name)
		out.Since = min(out.Since, e.Since)
		out.Period += e.PeriodS / float64(len(g))
		if e.Shape > best {
			best, second = e.Shape, best
			out.Root, sticking = s.loops[e.ID].Name, e.Cause == ValveSticking
		} else if e.Shape > second {
			second = e.Shape
		}
		if e.Growing && (e.Cause == ResetTooShort || e.Cause == GainTooHigh) {
			// A loop that grew by its own tuning carries the others with it.
			out.Cause, out.Key = e.Cause, s.loops[e.ID].Name
		}
	}
	switch {
	case out.Key != "":
		out.Root = out.Key
	case best > 0.68 && best > second+0.08 && sticking:
		out.Cause, out.Key = ValveSticking, out.Root
	case best < 0.52:
		out.Root, out.Cause, out.Key = "", OutsideDisturbance, out.Loops[0]
	default:
		out.Root, out.Cause, out.Key = "", Undetermined, out.Loops[0]
	}
	return out
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

func (s *shared) tell(end int64, seen []sharedGroup, emit func(*Finding)) {
	var keep []sharedGroup
	taken := make([]bool, len(seen))
	for _, old := range s.m.Groups {
		at := -1
		for i := range seen {
			if !taken[i] && overlap(old.Loops, seen[i].Loops) >= 2 {
				at = i
				break
			}
		}
		if at < 0 {
			old.Gone++
			if old.Gone >= sharedGone {
				emit(s.finding(end, &old, Cleared))
				continue
			}
			keep = append(keep, old)
			continue
		}
		taken[at] = true
		now := seen[at]
		more := overlap(old.Loops, now.Loops) < len(now.Loops)
		cause := now.Cause != old.Cause && now.Cause != Undetermined
		for _, l := range old.Loops { // a loop that pauses stays listed
			if !slices.Contains(now.Loops, l) {
				now.Loops = append(now.Loops, l)
			}
		}
		slices.Sort(now.Loops)
		now.Key, now.Since = old.Key, min(old.Since, now.Since)
		if !cause {
			now.Cause, now.Root = old.Cause, old.Root
		}
		if more || cause {
			emit(s.finding(end, &now, Updated))
		}
		keep = append(keep, now)
	}
	for i := range seen {
		if !taken[i] {
			emit(s.finding(end, &seen[i], Raised))
			keep = append(keep, seen[i])
		}
	}
	s.m.Groups = keep
}

func (s *shared) finding(end int64, g *sharedGroup, e Event) *Finding {
	f := &Finding{Subject: Subject{Loop: g.Key}, Loop: g.Key, Loops: g.Loops, Kind: SharedOscillation, Event: e, At: end, Since: g.Since,
		Cause: g.Cause, Confidence: 0.7}
	for i, l := range s.loops {
		if l.Name == g.Key {
			f.ID = collector.LoopID(i)
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
	what := fmt.Sprintf("%d loops cycle together every %s: %s.", len(g.Loops), duration(g.Period), list)
	switch {
	case g.Root != "" && g.Cause == ValveSticking:
		f.AlsoPossible = []Cause{OutsideDisturbance}
		what += " Candidate root: " + g.Root + ", whose output looks like that of a sticking final element."
	case g.Root != "":
		what += " Candidate root: " + g.Root + ", which grew by its own tuning."
	default:
		f.Confidence = 0.6
		if g.Cause != OutsideDisturbance {
			f.AlsoPossible = []Cause{OutsideDisturbance}
		}
		what += " No root stands out: it may come from outside all of them."
	}
	f.Text = what + " Judge the root before any other loop of the group."
	f.TextShort = shorten(fmt.Sprintf("%d loops cycle every %s: %s.", len(g.Loops), duration(g.Period), list))
	return f
}
