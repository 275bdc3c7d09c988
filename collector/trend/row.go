package trend

import (
	"bytes"
	"fmt"
	"math"
	"strings"

	"midwatch/collector"
	"midwatch/configs"
)

const noLoop = ^uint32(0)

// roster knows the loops of the list by name.
type roster struct {
	loops  []*configs.Loop
	names  []string
	modes  []*collector.ModeMap
	byName map[string]uint32
}

func newRoster(loops []*configs.Loop) (*roster, error) {
	r := &roster{loops: loops, byName: make(map[string]uint32, len(loops))}
	for i, l := range loops {
		m, err := collector.ParseModeMap(l.ModeMap)
		if err != nil {
			return nil, fmt.Errorf("loop %s: mode_map: %w", l.Name, err)
		}
		r.names = append(r.names, l.Name)
		r.modes = append(r.modes, m)
		r.byName[l.Name] = uint32(i)
	}
	return r, nil
}

// parser turns the lines of one file into frames.
type parser struct {
	roster *roster
	fields []field
	clock  clock
	prev   uint32   // loop of the row before
	after  []uint32 // by loop: the loop of the row that followed it last

	modeText  []byte // last text of the column mode, and what it means
	mode      collector.Mode
	flagsText []byte
	flags     collector.Flags
	own       []ownMode // by loop
	split     [][]byte
}

// ownMode is the last mode of a loop given by the values of its mode_map.
type ownMode struct {
	text string
	mode collector.Mode
}

func newParser(r *roster, fields []field) *parser {
	return &parser{roster: r, fields: fields, after: make([]uint32, len(r.loops)+1), own: make([]ownMode, len(r.loops))}
}

// row parses a line. id is noLoop for a loop that is not in the list (name says
// which). The error says what is wrong with the row.
func (p *parser) row(line []byte, f *collector.Frame) (id uint32, name []byte, err error) {
	id, name, ok := p.fast(line, f)
	if !ok {
		return p.slow(line, f)
	}
	return id, name, nil
}

func blank(f *collector.Frame) {
	n := collector.NaN32
	*f = collector.Frame{PV: n, SP: n, OP: n, Feedforward: n, Position: n}
}

// fast takes rows without quotes or oddities.
func (p *parser) fast(line []byte, f *collector.Frame) (id uint32, name []byte, ok bool) {
	blank(f)
	var mode []byte
	i := 0
	for c, kind := range p.fields {
		if c > 0 {
			if i >= len(line) || line[i] != ',' {
				return 0, nil, false
			}
			i++
		}
		var v float32
		switch kind {
		case fieldTime:
			if f.Time, i, ok = p.clock.scan(line, i); !ok {
				return 0, nil, false
			}
		case fieldLoop:
			start := i
			if id, i = p.loop(line, i); id == noLoop {
				if name = line[start:i]; len(name) == 0 || name[0] == '"' || name[0] == ' ' || name[len(name)-1] == ' ' {
					return 0, nil, false
				}
			}
		case fieldPV, fieldSP, fieldOP, fieldGain, fieldReset, fieldFeedforward, fieldPosition:
			if v, i, ok = scanNumber(line, i); !ok {
				return 0, nil, false
			}
			if v == 0 {
				v = 0 // no negative zero
			}
			set(f, kind, v)
		default:
			start := i
			for i < len(line) && line[i] != ',' {
				i++
			}
			text := line[start:i]
			switch {
			case len(text) == 0 || kind == fieldOther && text[0] != '"':
			case kind == fieldMode && bytes.Equal(text, p.modeText):
				f.Mode = p.mode
			case kind == fieldFlags && bytes.Equal(text, p.flagsText):
				f.Flags = p.flags
			case text[0] == '"':
				return 0, nil, false
			case kind == fieldMode:
				if !p.word(f, text) {
					mode = text // in the words of its loop, which may not be known yet
				}
			case !p.words(f, text):
				return 0, nil, false
			}
		}
	}
	if mode != nil && id != noLoop {
		own := &p.own[id]
		if string(mode) != own.text {
			return 0, nil, false
		}
		f.Mode = own.mode
	}
	return id, name, i == len(line)
}

func set(f *collector.Frame, kind field, v float32) {
	switch kind {
	case fieldPV:
		f.PV = v
	case fieldSP:
		f.SP = v
	case fieldOP:
		f.OP = v
	case fieldGain:
		f.Gain = known(v)
	case fieldReset:
		f.Reset = known(v)
	case fieldFeedforward:
		f.Feedforward = v
	case fieldPosition:
		f.Position = v
	}
}

// known turns "no value" into the 0 that a frame has for a tuning not read.
func known(v float32) float32 {
	if v > 0 {
		return v
	}
	return 0
}

// loop reads the name at line[i:]. The next row's loop is mostly the one that
// followed this row's loop before, so a comparison does for a look-up.
func (p *parser) loop(line []byte, i int) (uint32, int) {
	guess := p.after[p.prev]
	name := ""
	if int(guess) < len(p.roster.names) {
		name = p.roster.names[guess]
	}
	if e := i + len(name); e < len(line) && line[e] == ',' && string(line[i:e]) == name && name != "" {
		p.prev = guess
		return guess, e
	}
	e := bytes.IndexByte(line[i:], ',')
	if e < 0 {
		e = len(line) - i
	}
	id, ok := p.roster.byName[string(line[i:i+e])]
	if !ok {
		return noLoop, i + e
	}
	p.after[p.prev] = id
	p.prev = id
	return id, i + e
}

// word reads a mode that differs from the one before; false where it is none of
// [collector.ModeWords].
func (p *parser) word(f *collector.Frame, text []byte) bool {
	m, ok := collector.ParseMode(string(text))
	if ok {
		p.modeText, p.mode = append(p.modeText[:0], text...), m
		f.Mode = m
	}
	return ok
}

// words reads flags that differ from those before.
func (p *parser) words(f *collector.Frame, text []byte) bool {
	fl, bad := parseFlags(string(text))
	if bad == "" {
		p.flagsText, p.flags = append(p.flagsText[:0], text...), fl
		f.Flags = fl
	}
	return bad == ""
}

// slow takes any row, and knows why not.
func (p *parser) slow(line []byte, f *collector.Frame) (id uint32, name []byte, err error) {
	fields, ok := splitQuoted(line, p.split[:0])
	p.split = fields
	if !ok {
		return noLoop, nil, fmt.Errorf("a quote is not closed or has text behind it")
	}
	if len(fields) != len(p.fields) {
		return noLoop, nil, fmt.Errorf("%d columns where the header has %d", len(fields), len(p.fields))
	}
	blank(f)
	var mode string
	for c, kind := range p.fields {
		raw := fields[c]
		text := strings.TrimSpace(string(raw))
		switch kind {
		case fieldTime:
			if f.Time, ok = parseTime(text); !ok {
				return noLoop, nil, fmt.Errorf("time %q is not RFC 3339, such as 2026-01-05T00:00:06.000Z", clip(raw, 40))
			}
		case fieldLoop:
			if text == "" {
				return noLoop, nil, fmt.Errorf("no loop")
			}
			name = raw
		case fieldPV, fieldSP, fieldOP, fieldGain, fieldReset, fieldFeedforward, fieldPosition:
			v, ok := parseNumber(text)
			if !ok {
				return noLoop, nil, fmt.Errorf("%s %q is no number", columns[kind].Name, clip(raw, 40))
			}
			set(f, kind, clean(v))
		case fieldMode:
			mode = text
		case fieldFlags:
			fl, bad := parseFlags(text)
			if bad != "" {
				return noLoop, nil, fmt.Errorf("flag %q is unknown; flags are %s, joined by +", bad, strings.Join(collector.FlagWords[:], ", "))
			}
			f.Flags = fl
		}
	}
	id, ok = p.roster.byName[string(name)]
	if !ok {
		if id, ok = p.roster.byName[strings.TrimSpace(string(name))]; !ok {
			return noLoop, name, nil
		}
	}
	p.after[p.prev] = id
	p.prev = id
	if f.Mode, ok = collector.ParseMode(mode); !ok {
		// A historian keeps the mode as the controller gives it.
		m := p.roster.modes[id]
		code := m.Code(mode)
		f.Mode = m.Mode(code, math.NaN())
		if code != code || f.Mode == collector.ModeUnknown && p.roster.loops[id].ModeMap == "" {
			return noLoop, nil, fmt.Errorf("mode %q is unknown; modes are %s, or the values of the loop's mode_map",
				mode, strings.Join(collector.ModeWords[1:], ", "))
		}
		p.own[id] = ownMode{mode, f.Mode}
	}
	return id, nil, nil
}

// parseFlags reads words joined by +; bad is the first that is none.
func parseFlags(text string) (f collector.Flags, bad string) {
	if text == "" {
		return 0, ""
	}
next:
	for w := range strings.SplitSeq(text, "+") {
		w = strings.TrimSpace(w)
		for k, known := range collector.FlagWords {
			if w == known {
				f |= 1 << k
				continue next
			}
		}
		return 0, fmt.Sprintf("%.20s", w)
	}
	return f, ""
}
