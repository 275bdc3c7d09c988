package collector

import (
	"fmt"
	"math"
	"strconv"
	"strings"
)

// Mode is the actual (never the target) mode of a controller.
type Mode uint8

const (
	ModeUnknown Mode = iota
	Auto
	Manual
	Cascade      // set point from another loop
	RemoteSP     // set point from elsewhere
	RemoteOutput // output from elsewhere
	Tracking     // initialising, not selected, interlocked, local
	OutOfService
)

// ModeWords are the words of the modes, indexed by Mode; unknown is empty.
var ModeWords = [...]string{"", "auto", "manual", "cascade", "remote-sp", "remote-output", "tracking", "out-of-service"}

// String is the word of the mode; unknown is empty.
func (m Mode) String() string { return ModeWords[m] }

// ParseMode reads a word of [ModeWords].
func ParseMode(s string) (Mode, bool) {
	for i, w := range ModeWords {
		if s == w {
			return Mode(i), true
		}
	}
	return ModeUnknown, false
}

// LawActive says whether the control law acts on PV in this mode. An unknown
// mode is taken as active until the data say otherwise.
func (m Mode) LawActive() bool {
	return m == Auto || m == Cascade || m == RemoteSP || m == ModeUnknown
}

// usualWords are what servers and gateways commonly call their modes (common
// practice, no source); matched without case, spaces, hyphens and underscores.
var usualWords = map[string]Mode{
	"auto": Auto, "automatic": Auto, "a": Auto, "aut": Auto,
	"man": Manual, "manual": Manual, "hand": Manual, "m": Manual,
	"cas": Cascade, "casc": Cascade, "cascade": Cascade, "c": Cascade, "rcas": RemoteSP,
	"remote": RemoteSP, "remotesp": RemoteSP, "rsp": RemoteSP, "remotesetpoint": RemoteSP,
	"rout": RemoteOutput, "remoteoutput": RemoteOutput,
	"track": Tracking, "tracking": Tracking, "iman": Tracking, "lo": Tracking, "local": Tracking, "init": Tracking,
	"oos": OutOfService, "outofservice": OutOfService, "off": OutOfService,
}

func squeeze(s string) string {
	return strings.Map(func(r rune) rune {
		switch r {
		case ' ', '-', '_', '.':
			return -1
		}
		return r
	}, strings.ToLower(s))
}

// ModeMap says what the values of a loop's mode tags mean. The zero value knows
// the usual words only.
type ModeMap struct {
	entries []modeEntry
	two     bool
	word    bool // of [WordMap]: any other text is otherCode
}

type modeEntry struct {
	a, b   string // values as written; b is used when the mode has two tags
	an, bn float64
	mode   Mode
}

// textCode is the first of the codes under which words travel as numbers.
const textCode = 1 << 40

// otherCode is the code of a text that is not the word of a [WordMap].
const otherCode = textCode + 1

// WordMap is the map for a condition tag that is compared with a word
// (unit.state = running): its Code tells that word from any other text.
func WordMap(word string) *ModeMap {
	return &ModeMap{word: true, entries: []modeEntry{{a: squeeze(strings.TrimSpace(word)), an: math.NaN(), bn: math.NaN()}}}
}

// ParseModeMap reads "0=manual;1=auto;16=tracking" or, for two tags,
// "0/0=manual;1/0=auto". An empty text gives a map of the usual words.
func ParseModeMap(s string) (*ModeMap, error) {
	m := &ModeMap{}
	if strings.TrimSpace(s) == "" {
		return m, nil
	}
	for part := range strings.SplitSeq(s, ";") {
		if strings.TrimSpace(part) == "" {
			continue
		}
		k, v, ok := strings.Cut(part, "=")
		if !ok {
			return nil, fmt.Errorf("%q: want VALUE=MODE", strings.TrimSpace(part))
		}
		mode, ok := ParseMode(strings.TrimSpace(v))
		if !ok {
			return nil, fmt.Errorf("%q is no mode; modes are %s", strings.TrimSpace(v), strings.Join(ModeWords[1:], ", "))
		}
		a, b, two := strings.Cut(strings.TrimSpace(k), "/")
		if len(m.entries) > 0 && two != m.two {
			return nil, fmt.Errorf("%q: either all values are pairs or none", strings.TrimSpace(k))
		}
		m.two = two
		e := modeEntry{a: squeeze(strings.TrimSpace(a)), b: squeeze(strings.TrimSpace(b)), mode: mode, an: math.NaN(), bn: math.NaN()}
		if x, err := strconv.ParseFloat(strings.TrimSpace(a), 64); err == nil {
			e.an = x
		}
		if x, err := strconv.ParseFloat(strings.TrimSpace(b), 64); err == nil {
			e.bn = x
		}
		m.entries = append(m.entries, e)
	}
	return m, nil
}

// Two says whether the map is for a mode given by two tags.
func (m *ModeMap) Two() bool { return m != nil && m.two }

// Code turns a word delivered by a source into the number under which it
// travels in a Sample; NaN when the word means nothing. Numbers in text are
// taken as numbers.
func (m *ModeMap) Code(text string) float64 {
	if x, err := strconv.ParseFloat(strings.TrimSpace(text), 64); err == nil {
		return x
	}
	s := squeeze(strings.TrimSpace(text))
	if m != nil {
		for i, e := range m.entries {
			if e.a == s {
				return textCode + float64(i)
			}
			if m.two && e.b == s {
				return textCode + float64(i)
			}
		}
		if m.word && s != "" {
			return otherCode
		}
		if len(m.entries) > 0 {
			return math.NaN()
		}
	}
	if mode, ok := usualWords[s]; ok {
		return textCode*2 + float64(mode)
	}
	return math.NaN()
}

// Mode gives the mode of the value of the mode tag, or of both tags; b is
// ignored unless the map is for two tags.
func (m *ModeMap) Mode(a, b float64) Mode {
	if a >= 2*textCode {
		return Mode(a - 2*textCode)
	}
	if m == nil {
		return ModeUnknown
	}
	same := func(v, n float64, s string) bool {
		if v >= textCode {
			i := int(v - textCode)
			return i < len(m.entries) && (m.entries[i].a == s || m.entries[i].b == s)
		}
		return v == n
	}
	for _, e := range m.entries {
		if same(a, e.an, e.a) && (!m.two || same(b, e.bn, e.b)) {
			return e.mode
		}
	}
	return ModeUnknown
}
