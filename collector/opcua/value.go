package opcua

import (
	"fmt"
	"math"
	"reflect"
	"strconv"
	"strings"
	"time"

	"github.com/gopcua/opcua/ua"

	"midwatch/collector"
)

// number turns a value into a number, or into a text where it is one. index
// picks an element of an array; -1 asks for a single value. ok is false when
// there is nothing that a loop could use.
func number(v *ua.Variant, index int) (x float64, text string, ok bool) {
	if v == nil {
		return math.NaN(), "", false
	}
	raw := v.Value()
	if index >= 0 {
		return element(raw, index)
	}
	return scalar(raw)
}

func scalar(raw any) (x float64, text string, ok bool) {
	switch n := raw.(type) {
	case float64:
		return n, "", true
	case float32:
		return float64(n), "", true
	case bool:
		if n {
			return 1, "", true
		}
		return 0, "", true
	case int8:
		return float64(n), "", true
	case uint8:
		return float64(n), "", true
	case int16:
		return float64(n), "", true
	case uint16:
		return float64(n), "", true
	case int32:
		return float64(n), "", true
	case uint32:
		return float64(n), "", true
	case int64:
		return float64(n), "", true
	case uint64:
		return float64(n), "", true
	case time.Time:
		if ms := millis(n); ms > 0 {
			return float64(ms), "", true
		}
	case string:
		return asNumber(n), n, true
	case *ua.LocalizedText:
		if n != nil {
			return asNumber(n.Text), n.Text, true
		}
	case *ua.QualifiedName:
		if n != nil {
			return asNumber(n.Name), n.Name, true
		}
	case *ua.Variant:
		return number(n, -1)
	}
	return math.NaN(), "", false
}

func asNumber(text string) float64 {
	x, err := strconv.ParseFloat(strings.TrimSpace(text), 64)
	if err != nil {
		return math.NaN()
	}
	return x
}

func element(raw any, index int) (x float64, text string, ok bool) {
	a := reflect.ValueOf(raw)
	if !a.IsValid() || a.Kind() != reflect.Slice || index >= a.Len() {
		return math.NaN(), "", false
	}
	return scalar(a.Index(index).Interface())
}

// unusable says why a value that arrived with a good status is no number.
func unusable(v *ua.Variant, index int) string {
	switch {
	case v == nil || v.Value() == nil:
		return "the tag has no value yet"
	case index < 0 && reflect.TypeOf(v.Value()).Kind() == reflect.Slice:
		return "the tag is an array; hint: write the index of the element behind the address: [0]"
	case index >= 0:
		return fmt.Sprintf("the tag has no element [%d]", index)
	}
	return fmt.Sprintf("a value of type %T is no number; hint: address a number, a boolean or a text", v.Value())
}

// quality by the two severity bits; the fourth value is reserved and bad.
func quality(c ua.StatusCode) collector.Quality {
	switch c >> 30 {
	case 0:
		return collector.Good
	case 1:
		return collector.Uncertain
	}
	return collector.Bad
}

// overflowed says that the server's queue dropped values before this one: the
// info bits are those of a data value (0x400) and the overflow bit (0x80) is set.
func overflowed(c ua.StatusCode) bool { return c&0x480 == 0x480 }

// millis is a time stamp of a data value in ms UTC, or 0 when there is none:
// servers without one send nothing, or the start of their epoch, 1601.
func millis(t time.Time) int64 {
	if t.IsZero() {
		return 0
	}
	return max(0, t.UnixMilli())
}

// codeOf is the number under which a mode travels: a number that the loop's mode
// map knows goes as it is, else by the word the server has for it.
func codeOf(m *collector.ModeMap, words map[int64]string, x float64, text string) float64 {
	if text != "" {
		return m.Code(text)
	}
	if m.Two() || m.Mode(x, math.NaN()) != collector.ModeUnknown {
		return x
	}
	if w, ok := words[int64(x)]; ok && x == math.Trunc(x) {
		if code := m.Code(w); !math.IsNaN(code) {
			return code
		}
	}
	return x
}
