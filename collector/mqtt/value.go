package mqtt

import (
	"bytes"
	"math"
	"strconv"

	"midwatch/collector"
)

// rawKind is what a payload holds at one place.
type rawKind uint8

const (
	rawMissing rawKind = iota
	rawNumber
	rawText
	rawBool
	rawNull
	rawTree // an object or array: never a value
)

// raw is one scalar of a payload, not yet understood. text points into the
// payload (for rawBool it is "true" or "false").
type raw struct {
	kind    rawKind
	escaped bool // text still holds JSON escapes
	text    []byte
}

// takesWords says whether words and booleans mean something for this role. For
// all others they are bad quality, never 0 or 1.
func takesWords(r collector.Role) bool {
	return r == collector.RoleMode || r == collector.RoleMode2 || r == collector.RoleAlive || r >= collector.RoleCond0
}

// number is the value of a scalar for a tag, NaN where it has none. strange says
// that the text is none of the ways in which sources say "no value", so that
// somebody should look at it.
func (t *tag) number(r raw, comma bool) (v float64, strange bool) {
	switch r.kind {
	case rawNumber, rawText:
		text := trim(r.text)
		if v, ok := parseNumber(text, comma && r.kind == rawText); ok {
			return v, false
		}
		if r.kind == rawText && takesWords(t.Role) {
			if v, ok := parseBool(text); ok {
				return v, false
			}
			v := t.Modes.Code(string(r.unescaped()))
			return v, math.IsNaN(v)
		}
		return math.NaN(), !saysNothing(text)
	case rawBool:
		if takesWords(t.Role) {
			v, _ := parseBool(r.text)
			return v, false
		}
		return math.NaN(), false
	case rawTree:
		return math.NaN(), true
	}
	return math.NaN(), false
}

func parseBool(b []byte) (float64, bool) {
	switch {
	case bytes.EqualFold(b, []byte("true")):
		return 1, true
	case bytes.EqualFold(b, []byte("false")):
		return 0, true
	}
	return 0, false
}

// saysNothing knows the usual words for "no value".
func saysNothing(b []byte) bool {
	if len(b) == 0 || len(b) >= 3 && bytes.EqualFold(b[:3], []byte("bad")) {
		return true
	}
	for _, w := range [...]string{"nan", "null", "none", "true", "false", "inf", "-inf", "n/a"} {
		if len(b) == len(w) && bytes.EqualFold(b, []byte(w)) {
			return true
		}
	}
	return false
}

// parseNumber reads a decimal ASCII number and nothing else: no hexadecimal, no
// "Infinity", no thousands separators.
func parseNumber(b []byte, comma bool) (float64, bool) {
	var buf [40]byte
	if comma {
		if i := bytes.IndexByte(b, ','); i >= 0 {
			if len(b) > len(buf) || bytes.IndexByte(b, '.') >= 0 {
				return 0, false
			}
			copy(buf[:], b)
			buf[i] = '.'
			b = buf[:len(b)]
		}
	}
	if !numeric(b) {
		return 0, false
	}
	v, err := strconv.ParseFloat(string(b), 64)
	return v, err == nil
}

func numeric(b []byte) bool {
	for _, c := range b {
		if (c < '0' || c > '9') && c != '.' && c != '-' && c != '+' && c != 'e' && c != 'E' {
			return false
		}
	}
	return len(b) > 0
}

// trim cuts white space, NUL bytes that C programs leave behind, and a byte
// order mark.
func trim(b []byte) []byte {
	b = bytes.TrimPrefix(b, []byte("\xef\xbb\xbf"))
	for len(b) > 0 && (b[0] == ' ' || b[0] >= '\t' && b[0] <= '\r') {
		b = b[1:]
	}
	for len(b) > 0 && (b[len(b)-1] == ' ' || b[len(b)-1] == 0 || b[len(b)-1] >= '\t' && b[len(b)-1] <= '\r') {
		b = b[:len(b)-1]
	}
	return b
}

// readQuality understands numbers of the classic OPC kind (192 and above good,
// 64 uncertain, 500 stale), OPC UA status codes (two severity bits), words and
// booleans. known is false for a word it has never heard; that is uncertain.
func readQuality(r raw) (q collector.Quality, known bool) {
	switch r.kind {
	case rawMissing, rawNull:
		return collector.Good, true
	case rawBool:
		if r.text[0] == 't' {
			return collector.Good, true
		}
		return collector.Bad, true
	case rawNumber, rawText:
		text := trim(r.text)
		if x, ok := parseNumber(text, false); ok {
			return qualityOfNumber(x), true
		}
		for _, w := range qualityWords {
			if len(text) == len(w.word) && bytes.EqualFold(text, []byte(w.word)) {
				return w.q, true
			}
		}
	}
	return collector.Uncertain, false
}

func qualityOfNumber(x float64) collector.Quality {
	switch {
	case x >= 1<<31:
		return collector.Bad
	case x >= 1<<30:
		return collector.Uncertain
	case x == 500:
		return collector.Uncertain
	case x >= 192:
		return collector.Good
	case x >= 64:
		return collector.Uncertain
	}
	return collector.Bad
}

var qualityWords = [...]struct {
	word string
	q    collector.Quality
}{
	{"good", collector.Good}, {"ok", collector.Good}, {"valid", collector.Good}, {"true", collector.Good},
	{"uncertain", collector.Uncertain}, {"stale", collector.Uncertain}, {"questionable", collector.Uncertain},
	{"bad", collector.Bad}, {"invalid", collector.Bad}, {"false", collector.Bad}, {"error", collector.Bad},
	{"", collector.Good},
}
