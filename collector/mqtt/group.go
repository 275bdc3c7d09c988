package mqtt

import (
	"bytes"

	"midwatch/collector"
)

// group is a life group: the loops of one publisher, as far as topics show it.
type group struct {
	id    collector.Group
	loops []collector.LoopID
	last  int64 // arrival of the last sign of life, ms UTC; 0 = none yet
	told  int64 // last of the last tick
	dead  bool  // said to be gone since the last sign of life
}

// heard notes a sign of life.
func (g *group) heard(arrived int64) {
	if arrived > g.last {
		g.last = arrived
	}
	g.dead = false
}

// tickAt is a tick with its place among the samples.
type tickAt struct {
	at   int
	tick collector.Tick
}

// grouping numbers life groups by a key while bindings are read.
type grouping struct {
	s     *source
	byKey map[string]*group
}

func newGrouping(s *source) *grouping { return &grouping{s, map[string]*group{}} }

func (gs *grouping) join(key string, loop collector.LoopID) *group {
	g := gs.byKey[key]
	if g == nil {
		g = &group{id: collector.Group{Source: gs.s.index, Sub: uint16(len(gs.s.groups))}}
		gs.byKey[key] = g
		gs.s.groups = append(gs.s.groups, g)
	}
	g.loops = append(g.loops, loop)
	return g
}

// touch adds the group of a key, if there is one, to a list once.
func (gs *grouping) touch(list []*group, key string) []*group {
	g := gs.byKey[key]
	if g == nil {
		return list
	}
	for _, have := range list {
		if have == g {
			return list
		}
	}
	return append(list, g)
}

// tickGroups says of each group that spoke since its last tick how far it has
// delivered. A group that is silent gets none: nobody knows what it would say.
func (s *source) tickGroups() {
	margin := s.cfg.Margin.Milliseconds()
	for _, g := range s.groups {
		if g.dead || g.last <= g.told {
			continue
		}
		g.told = g.last
		s.tick(collector.Tick{Group: g.id, Through: g.last - margin, Arrived: g.last, Alive: true})
	}
}

func (s *source) tick(t collector.Tick) { s.ticks = append(s.ticks, tickAt{len(s.out), t}) }

// end says that a group is out of sight. at is when that became so.
func (s *source) end(g *group, at int64) {
	if g.dead || g.last == 0 {
		return
	}
	g.dead, g.told = true, g.last
	s.tick(collector.Tick{Group: g.id, Through: g.last - s.cfg.Margin.Milliseconds(), Arrived: at, Alive: false})
}

// linkLost ends all groups at the last byte that was read, not when the loss was noticed.
func (s *source) linkLost(at int64) {
	for _, g := range s.groups {
		s.end(g, at)
	}
	if s.spb != nil {
		s.spb.linkLost()
	}
}

// markLost flags the next sample of every tag of which a message was dropped.
func (s *source) markLost(topics map[string]struct{}, all bool) {
	if s.spb != nil {
		s.spb.markLost(topics, all)
		return
	}
	for name := range topics {
		if t := s.topics[name]; t != nil {
			loseTags(t.tags)
		}
	}
	if all {
		loseTags(s.tags)
	}
}

func loseTags(tags []*tag) {
	for _, t := range tags {
		t.lost = true
	}
}

// aliveTag takes a word such as "offline", left by a broker as a will, or false as
// the end of the publisher (0). Every other value, the number 0 included (a
// toggling bit), is a sign of life (1), which the caller has noted.
func (s *source) aliveTag(t *topic, r raw, m *message) float64 {
	word := trim(r.text)
	gone := r.kind == rawNull || len(word) == 0
	for _, w := range [...]string{"offline", "false", "dead", "down", "disconnected", "bad"} {
		gone = gone || bytes.EqualFold(word, []byte(w))
	}
	if !gone {
		return 1
	}
	if !m.retained {
		for _, g := range t.groups {
			s.end(g, m.arrived)
		}
	}
	return 0
}
