package mqtt

import (
	"encoding/json"
	"errors"
	"fmt"
	"strconv"
	"strings"
)

// maxDepth bounds the nesting of a payload, so that a hostile one cannot use up
// the stack.
const maxDepth = 64

// jsonPlan says which places of a payload are wanted. Its slots are filled in one
// pass over the payload; nothing is built of the rest, but all of it is checked.
type jsonPlan struct {
	root  *place
	slots int
}

// place is a node of the tree of wanted paths.
type place struct {
	slot     int // -1: only on the way
	keys     map[string]*place
	items    map[int]*place
	children []*place
}

func newPlan() *jsonPlan { return &jsonPlan{root: &place{slot: -1}} }

// want adds a path and returns its slot. A path is keys joined by dots, "[0]" for
// the item of an array and "['a.b']" for a key with a dot; the empty path is the
// payload itself.
func (p *jsonPlan) want(path string) (int, error) {
	steps, err := parsePath(path)
	if err != nil {
		return 0, err
	}
	at := p.root
	for _, s := range steps {
		at = at.child(s)
	}
	if at.slot < 0 {
		at.slot = p.slots
		p.slots++
	}
	return at.slot, nil
}

func (n *place) child(s step) *place {
	if c := n.keys[s.key]; s.index < 0 && c != nil {
		return c
	}
	if c := n.items[s.index]; s.index >= 0 && c != nil {
		return c
	}
	c := &place{slot: -1}
	n.children = append(n.children, c)
	switch {
	case s.index >= 0 && n.items == nil:
		n.items = map[int]*place{s.index: c}
	case s.index >= 0:
		n.items[s.index] = c
	case n.keys == nil:
		n.keys = map[string]*place{s.key: c}
	default:
		n.keys[s.key] = c
	}
	return c
}

// step is one key or, with index >= 0, one array item.
type step struct {
	key   string
	index int
}

var errPath = errors.New("hint: write keys joined by dots, ['a.b'] for a key with a dot, [0] for the first item of an array")

func parsePath(path string) ([]step, error) {
	var steps []step
	rest := path
	for rest != "" {
		switch {
		case strings.HasPrefix(rest, "['"):
			end := strings.Index(rest, "']")
			if end < 0 {
				return nil, fmt.Errorf("path %q: [' without ']; %w", path, errPath)
			}
			steps = append(steps, step{rest[2:end], -1})
			rest = rest[end+2:]
		case rest[0] == '[':
			end := strings.IndexByte(rest, ']')
			if end < 0 {
				return nil, fmt.Errorf("path %q: [ without ]; %w", path, errPath)
			}
			i, err := strconv.ParseUint(rest[1:end], 10, 31)
			if err != nil {
				return nil, fmt.Errorf("path %q: %q is no index; %w", path, rest[1:end], errPath)
			}
			steps = append(steps, step{"", int(i)})
			rest = rest[end+1:]
		default:
			end := strings.IndexAny(rest, ".[")
			if end < 0 {
				end = len(rest)
			}
			if end == 0 {
				return nil, fmt.Errorf("path %q has an empty key; %w", path, errPath)
			}
			steps = append(steps, step{rest[:end], -1})
			rest = rest[end:]
		}
		if rest != "" && rest[0] == '.' {
			if rest = rest[1:]; rest == "" {
				return nil, fmt.Errorf("path %q ends with a dot; %w", path, errPath)
			}
		}
	}
	return steps, nil
}

// read fills the slots from a payload; false means that it is not JSON. Of a key
// given twice the last one counts.
func (p *jsonPlan) read(payload []byte, slots []raw) bool {
	clear(slots)
	s := jsonScan{b: payload, slots: slots}
	s.space()
	if !s.value(p.root, 0) {
		return false
	}
	s.space()
	return s.i == len(s.b)
}

type jsonScan struct {
	b     []byte
	i     int
	slots []raw
}

func (s *jsonScan) space() {
	for s.i < len(s.b) && (s.b[s.i] == ' ' || s.b[s.i] == '\n' || s.b[s.i] == '\t' || s.b[s.i] == '\r') {
		s.i++
	}
}

// value reads one value; at is nil where nothing of it is wanted.
func (s *jsonScan) value(at *place, depth int) bool {
	if s.i >= len(s.b) || depth > maxDepth {
		return false
	}
	var r raw
	ok := false
	switch c := s.b[s.i]; {
	case c == '{':
		r.kind = rawTree
		ok = s.object(at, depth)
	case c == '[':
		r.kind = rawTree
		ok = s.array(at, depth)
	case c == '"':
		r.kind = rawText
		r.text, r.escaped, ok = s.str()
	case c == 't':
		r.kind = rawBool
		r.text, ok = s.word("true")
	case c == 'f':
		r.kind = rawBool
		r.text, ok = s.word("false")
	case c == 'n':
		r.kind = rawNull
		_, ok = s.word("null")
	default:
		r.kind = rawNumber
		r.text, ok = s.num()
	}
	if ok && at != nil && at.slot >= 0 {
		s.slots[at.slot] = r
	}
	return ok
}

func (s *jsonScan) object(at *place, depth int) bool {
	s.i++
	for first := true; ; first = false {
		s.space()
		if s.i >= len(s.b) {
			return false
		}
		if s.b[s.i] == '}' && first {
			s.i++
			return true
		}
		key, escaped, ok := s.str()
		if !ok {
			return false
		}
		s.space()
		if s.i >= len(s.b) || s.b[s.i] != ':' {
			return false
		}
		s.i++
		s.space()
		var c *place
		if at != nil && len(at.keys) > 0 {
			if escaped {
				key = raw{text: key, escaped: true}.unescaped()
			}
			if c = at.keys[string(key)]; c != nil {
				c.forget(s.slots)
			}
		}
		if !s.value(c, depth+1) {
			return false
		}
		if more, ok := s.comma('}'); !more {
			return ok
		}
	}
}

func (s *jsonScan) array(at *place, depth int) bool {
	s.i++
	for n := 0; ; n++ {
		s.space()
		if s.i < len(s.b) && s.b[s.i] == ']' && n == 0 {
			s.i++
			return true
		}
		var c *place
		if at != nil && len(at.items) > 0 {
			c = at.items[n]
		}
		if !s.value(c, depth+1) {
			return false
		}
		if more, ok := s.comma(']'); !more {
			return ok
		}
	}
}

// comma reads what follows an item: a comma (more) or the end.
func (s *jsonScan) comma(end byte) (more, ok bool) {
	s.space()
	if s.i >= len(s.b) {
		return false, false
	}
	s.i++
	return s.b[s.i-1] == ',', s.b[s.i-1] == end
}

// forget empties the slots of a place that is given again.
func (n *place) forget(slots []raw) {
	if n.slot >= 0 {
		slots[n.slot] = raw{}
	}
	for _, c := range n.children {
		c.forget(slots)
	}
}

// str reads a string and returns what is between the quotes.
func (s *jsonScan) str() (text []byte, escaped, ok bool) {
	if s.i >= len(s.b) || s.b[s.i] != '"' {
		return nil, false, false
	}
	s.i++
	start := s.i
	for s.i < len(s.b) {
		switch c := s.b[s.i]; {
		case c == '"':
			s.i++
			return s.b[start : s.i-1], escaped, true
		case c < 0x20:
			return nil, false, false
		case c == '\\':
			escaped = true
			if !s.escape() {
				return nil, false, false
			}
		default:
			s.i++
		}
	}
	return nil, false, false
}

func (s *jsonScan) escape() bool {
	if s.i+1 >= len(s.b) {
		return false
	}
	switch s.b[s.i+1] {
	case '"', '\\', '/', 'b', 'f', 'n', 'r', 't':
		s.i += 2
		return true
	case 'u':
		if s.i+6 > len(s.b) {
			return false
		}
		for _, c := range s.b[s.i+2 : s.i+6] {
			if (c < '0' || c > '9') && (c|0x20 < 'a' || c|0x20 > 'f') {
				return false
			}
		}
		s.i += 6
		return true
	}
	return false
}

// unescaped is the text without JSON escapes. Escapes are rare in names and
// numbers, so the standard library may do it.
func (r raw) unescaped() []byte {
	if !r.escaped {
		return r.text
	}
	var out string
	if err := json.Unmarshal(append(append([]byte{'"'}, r.text...), '"'), &out); err != nil {
		return r.text
	}
	return []byte(out)
}

func (s *jsonScan) word(w string) ([]byte, bool) {
	start := s.i
	if len(s.b)-start < len(w) || string(s.b[start:start+len(w)]) != w {
		return nil, false
	}
	s.i += len(w)
	return s.b[start:s.i], true
}

// num reads a number by the grammar of RFC 8259.
func (s *jsonScan) num() ([]byte, bool) {
	start := s.i
	if s.i < len(s.b) && s.b[s.i] == '-' {
		s.i++
	}
	if s.i < len(s.b) && s.b[s.i] == '0' {
		s.i++
	} else if !s.run() {
		return nil, false
	}
	if s.i < len(s.b) && s.b[s.i] == '.' {
		s.i++
		if !s.run() {
			return nil, false
		}
	}
	if s.i < len(s.b) && s.b[s.i]|0x20 == 'e' {
		s.i++
		if s.i < len(s.b) && (s.b[s.i] == '+' || s.b[s.i] == '-') {
			s.i++
		}
		if !s.run() {
			return nil, false
		}
	}
	return s.b[start:s.i], true
}

// run reads one digit or more.
func (s *jsonScan) run() bool {
	start := s.i
	for s.i < len(s.b) && s.b[s.i] >= '0' && s.b[s.i] <= '9' {
		s.i++
	}
	return s.i > start
}
