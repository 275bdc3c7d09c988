package mqtt

import (
	"fmt"
	"strconv"
	"strings"

	"midwatch/collector"
)

// topic is one MQTT topic of the text forms and the tags that it feeds.
type topic struct {
	name    string
	plan    *jsonPlan // nil: the payload is a number
	slots   []raw
	time    int // slots; -1 = none
	quality int
	tags    []*tag
	groups  []*group

	lastMs, lastArrived int64 // of the last payload that could be read
	faults              faults
}

// faults remember what could not be read on one topic or node.
type faults struct {
	count  uint64
	lastAt int64  // ms UTC
	sample string // the first 80 bytes of the last, escaped
}

func (f *faults) note(payload []byte, at int64) string {
	f.count++
	f.lastAt = at
	f.sample = excerpt(payload)
	return f.sample
}

// bindText builds topics and life groups of plain and JSON payloads.
func (s *source) bindText(bindings []collector.Binding) (errs []error) {
	groups := newGrouping(s)
	alive := map[collector.LoopID]string{}
	for _, b := range bindings {
		if b.Role == collector.RoleAlive {
			alive[b.Loop] = b.Address
		}
	}
	for _, b := range bindings {
		name, path, _ := strings.Cut(b.Address, "#")
		if err := checkTopic(name); err != nil {
			errs = append(errs, fmt.Errorf("loop %s: %q: %w", b.Name, b.Address, err))
			continue
		}
		t := s.topics[name]
		if t == nil {
			t = &topic{name: name, time: -1, quality: -1}
			s.topics[name] = t
			s.filters = append(s.filters, name)
		}
		g := &tag{Binding: b, slot: -1, filter: name}
		if err := s.place(t, g, path, strings.Contains(b.Address, "#")); err != nil {
			errs = append(errs, fmt.Errorf("loop %s: %q: %w", b.Name, b.Address, err))
			continue
		}
		t.tags = append(t.tags, g)
		s.tags = append(s.tags, g)
		if b.Role == collector.RolePV {
			if a := alive[b.Loop]; a != "" {
				groups.join("alive "+a, b.Loop)
			} else {
				groups.join("parent "+parent(name), b.Loop)
			}
		}
	}
	// A topic keeps alive the group of its parent, the groups that name it as
	// their alive tag, and the groups of the loops whose PV it carries.
	for _, t := range s.topics {
		t.groups = groups.touch(t.groups, "parent "+parent(t.name))
		for _, g := range t.tags {
			switch a := alive[g.Loop]; {
			case g.Role == collector.RoleAlive:
				t.groups = groups.touch(t.groups, "alive "+g.Address)
			case g.Role == collector.RolePV && a != "":
				t.groups = groups.touch(t.groups, "alive "+a)
			}
		}
		if t.plan != nil {
			t.slots = make([]raw, t.plan.slots)
		}
	}
	return errs
}

// place gives a tag its slot. Tags with a path, and all tags of a JSON source,
// are read from JSON; one topic cannot be both.
func (s *source) place(t *topic, g *tag, path string, hasPath bool) (err error) {
	if !hasPath && s.cfg.Payload != "json" {
		if t.plan != nil {
			return fmt.Errorf("another tag reads JSON from this topic; hint: write %s#PATH", t.name)
		}
		return nil
	}
	if hasPath && path == "" {
		return fmt.Errorf("nothing follows #; hint: write %s#PATH", t.name)
	}
	if t.plan == nil {
		if len(t.tags) > 0 {
			return fmt.Errorf("another tag reads a plain number from this topic; hint: give both a path")
		}
		t.plan = newPlan()
		if s.cfg.Time != "" {
			if t.time, err = t.plan.want(s.cfg.Time); err != nil {
				return fmt.Errorf("time: %w", err)
			}
		}
		if s.cfg.Quality != "" {
			if t.quality, err = t.plan.want(s.cfg.Quality); err != nil {
				return fmt.Errorf("quality: %w", err)
			}
		}
	}
	if !hasPath {
		if path = s.cfg.Value; path == "" {
			return fmt.Errorf("no path says where the value is; hint: set value: PATH for the source, or write %s#PATH", t.name)
		}
	}
	g.slot, err = t.plan.want(path)
	return err
}

// checkTopic refuses what is no topic of a single tag.
func checkTopic(name string) error {
	switch {
	case name == "":
		return fmt.Errorf("the topic is empty; hint: write TOPIC or TOPIC#PATH")
	case strings.HasPrefix(name, "$share/"), strings.HasPrefix(name, "$queue/"):
		return fmt.Errorf("shared subscriptions are refused, they take messages away from their real consumer; hint: name the topic itself")
	case strings.ContainsAny(name, "+"):
		return fmt.Errorf("a tag is one topic; hint: write the topic without the wildcard +")
	case strings.ContainsRune(name, 0):
		return fmt.Errorf("the topic holds a NUL character")
	case len(name) > 65535:
		return fmt.Errorf("the topic is longer than 65535 bytes")
	case strings.HasPrefix(name, "spBv1.0/"):
		return fmt.Errorf("this is a Sparkplug topic; hint: set payload: sparkplug and write GROUP/NODE/DEVICE#METRIC")
	}
	return nil
}

// parent is the folder of a topic; a topic at the root stands for itself.
func parent(name string) string {
	if i := strings.LastIndexByte(name, '/'); i > 0 {
		return name[:i]
	}
	return name
}

// readText decodes one payload of a text form.
func (s *source) readText(t *topic, m *message) {
	if !m.retained {
		for _, g := range t.groups {
			g.heard(m.arrived)
		}
	}
	if t.plan == nil {
		at := s.settle(0, false, m)
		r := raw{kind: rawText, text: m.payload}
		for _, g := range t.tags {
			s.value(t, g, r, collector.Good, at, m)
		}
		return
	}
	if !t.plan.read(m.payload, t.slots) {
		s.unreadable(t, m)
		return
	}
	at := s.payloadTime(t, m)
	q := collector.Good
	if t.quality >= 0 {
		var known bool
		if q, known = readQuality(t.slots[t.quality]); !known {
			s.counts.unknownQuality++
		}
	}
	for _, g := range t.tags {
		r := t.slots[g.slot]
		if r.kind == rawMissing {
			// Partial payloads are usual: what is not in it did not change.
			if !g.seen && g.why == "" {
				g.why = "the topic speaks, but its payload has nothing at this path: " + excerpt(m.payload)
			}
			continue
		}
		s.value(t, g, r, q, at, m)
	}
	t.lastMs, t.lastArrived = at.ms, at.arrived
}

func (s *source) payloadTime(t *topic, m *message) stamp {
	if t.time < 0 {
		return s.settle(0, false, m)
	}
	r := t.slots[t.time]
	if r.kind != rawNumber && r.kind != rawText {
		return s.settle(0, false, m)
	}
	ms, doubled, ok := readTime(r.text, s.zone, m.arrived)
	if !ok {
		s.counts.clock++
		return s.settle(0, false, m)
	}
	if doubled {
		s.counts.doubledHour++
	}
	return s.settle(ms, true, m)
}

// value turns one scalar into a sample of one tag.
func (s *source) value(t *topic, g *tag, r raw, q collector.Quality, at stamp, m *message) {
	g.why = ""
	if g.Role == collector.RoleAlive {
		s.emit(g, s.aliveTag(t, r, m), q, at, r)
		return
	}
	v, strange := g.number(r, s.cfg.DecimalComma)
	if strange {
		s.counts.malformed++
		g.why = "no number and no known word: " + t.faults.note(m.payload, m.arrived)
	}
	s.emit(g, v, q, at, r)
}

// unreadable makes every tag of a topic bad: the publisher speaks, so the last
// value must not be held. The time is the one of the last payload, moved on by
// the time since, so that a source clock that is off stays off.
func (s *source) unreadable(t *topic, m *message) {
	s.counts.malformed++
	text := t.faults.note(m.payload, m.arrived)
	at := s.settle(0, false, m)
	if t.lastMs != 0 {
		at.ms = t.lastMs + (m.arrived - t.lastArrived)
	}
	for _, g := range t.tags {
		g.why = "the payload is not JSON: " + text
		s.emit(g, 0, collector.Bad, at, raw{kind: rawText, text: m.payload})
	}
}

func excerpt(payload []byte) string {
	return strconv.QuoteToASCII(string(payload[:min(len(payload), 80)]))
}
