package detect

import "math"

// A swing of a loop that another shares may be the other's, long before a group of both is
// known: their periods as read are apart while it is irregular, and one may not be seen live
// all the time. What a loop says of its own element in that time waits.

// besideBegan and besideKnown are periods: within the first the swings of two loops began
// together, which one fault makes of both sooner than two do, and after the second their phase
// has shown it.
const (
	besideBegan = 20.0
	besideKnown = 60.0
)

// besideKept is the mean resultant length over which crossings may be of one swing: of those
// of loops apart once in a thousand times (Rayleigh's test of 8 up and 8 down, see together).
const besideKept = 0.75

// beside gives for each loop that swings another, not of its cascade, at a period that may be
// its own, whose crossings keep to its own or whose swing began with its own lately: the first
// of them by name. order is that of the periods; only neighbours in it are compared.
func (s *shared) beside(end int64, live []SiteEvidence, order []int) map[string]string {
	out := map[string]string{}
	low := 0
	for _, i := range order {
		a := &live[i]
		for order[low] != i && !mayBeOne(a.PeriodS, live[order[low]].PeriodS) {
			low++
		}
		first := len(live)
		for _, j := range order[low:] {
			b := &live[j]
			if !mayBeOne(a.PeriodS, b.PeriodS) {
				break
			}
			if j < first && i != j && !cascaded(s.loops[a.ID], s.loops[b.ID]) && mayShare(end, a, b) {
				first = j
			}
		}
		if first < len(live) {
			out[s.loops[a.ID].Name] = s.loops[live[first].ID].Name
		}
	}
	return out
}

// mayShare: their swings began together lately, or their crossings keep to each other.
func mayShare(end int64, a, b *SiteEvidence) bool {
	period := 1000 * max(a.PeriodS, b.PeriodS) // ms
	if math.Abs(float64(a.Since-b.Since)) < besideBegan*period && float64(end-max(a.Since, b.Since)) < besideKnown*period {
		return true
	}
	r, n := phaseKept(&a.Evidence, &b.Evidence, besideKept)
	return n >= 10 && r > besideKept
}

// with is the group in which a loop may follow another, as far as is known; nil: it swings alone.
func (s *shared) with(name string) *sharedGroup {
	if g := s.follows(name); g != nil {
		return g
	}
	if other := s.m.Beside[name]; other != "" && !s.root(name) {
		return &sharedGroup{Loops: []string{name, other}}
	}
	return nil
}
