package mqtt

import (
	"bytes"
	"encoding/json"
	"errors"
	"math"
	"strconv"
	"strings"
	"testing"
	"time"
)

// slowJSON is the standard library's answer to what a plan reads.
func slowJSON(payload []byte) (any, bool) {
	d := json.NewDecoder(bytes.NewReader(payload))
	d.UseNumber()
	var v any
	if d.Decode(&v) != nil {
		return nil, false
	}
	_, err := d.Token()
	return v, err != nil && json.Valid(payload)
}

func descend(v any, steps []step) (any, bool) {
	for _, s := range steps {
		switch x := v.(type) {
		case map[string]any:
			var ok bool
			if v, ok = x[s.key]; s.index >= 0 || !ok {
				return nil, false
			}
		case []any:
			if s.index < 0 || s.index >= len(x) {
				return nil, false
			}
			v = x[s.index]
		default:
			return nil, false
		}
	}
	return v, true
}

func depthOf(b []byte) (deepest int) {
	depth, quoted := 0, false
	for i := 0; i < len(b); i++ {
		switch c := b[i]; {
		case quoted && c == '\\':
			i++
		case c == '"':
			quoted = !quoted
		case !quoted && (c == '{' || c == '['):
			depth++
			deepest = max(deepest, depth)
		case !quoted && (c == '}' || c == ']'):
			depth--
		}
	}
	return deepest
}

func FuzzJSON(f *testing.F) {
	for _, s := range []string{`{"v":1.5,"t":1767528000000,"q":"good"}`, `{"d":{"v":[1,{"x":null}]},"d":3}`, `{"a.b":true,"d":{"v":[false]}}`,
		`{"\u0076":"\ud83d\ude00","d":[]}`, `{"v":`, `[1,2`, `"x"`, `01`, `-0.5e+3`, `{"v":1}x`, `{"v":"a` + "\x01" + `"}`, "{\"v\":\"\xff\"}", ` { "v" : 1 , "d" : { } } `, `{,}`, `[1,]`, `{"v":1,}`, `nul`} {
		f.Add([]byte(s))
	}
	paths := []string{"", "v", "t", "q", "d", "d.v", "d.v[0]", "d.v[1].x", "['a.b']", "[0]"}
	plan := newPlan()
	slots := make([]int, len(paths))
	steps := make([][]step, len(paths))
	for i, p := range paths {
		var err error
		if slots[i], err = plan.want(p); err != nil {
			f.Fatal(err)
		}
		steps[i], _ = parsePath(p)
	}
	got := make([]raw, plan.slots)
	f.Fuzz(func(t *testing.T, payload []byte) {
		ok := plan.read(payload, got)
		want, wantOK := slowJSON(payload)
		if ok != wantOK {
			if wantOK && depthOf(payload) > maxDepth {
				return
			}
			t.Fatalf("read says %v, the standard library %v", ok, wantOK)
		}
		if !ok {
			return
		}
		for i := range paths {
			v, there := descend(want, steps[i])
			r := got[slots[i]]
			same := false
			switch x := v.(type) {
			case nil:
				same = !there && r.kind == rawMissing || there && r.kind == rawNull
			case bool:
				same = r.kind == rawBool && string(r.text) == strconv.FormatBool(x)
			case json.Number:
				same = r.kind == rawNumber && string(r.text) == x.String()
			case string:
				same = r.kind == rawText && strings.ToValidUTF8(string(r.unescaped()), "\ufffd") == strings.ToValidUTF8(x, "\ufffd")
				same = same || r.kind == rawText && bytes.ContainsFunc(r.text, func(c rune) bool { return c == '\ufffd' })
			default:
				same = r.kind == rawTree
			}
			if !same {
				t.Fatalf("path %q: read %d %q, the standard library %v", paths[i], r.kind, r.text, v)
			}
		}
	})
}

func FuzzNumber(f *testing.F) {
	for _, s := range []string{"1", "1,5", "-1e5", "0x1", "1_0", "inf", ".5", "5.", "e", "1e400", "", "--1", "1,2,3"} {
		f.Add([]byte(s), true)
		f.Add([]byte(s), false)
	}
	f.Fuzz(func(t *testing.T, b []byte, comma bool) {
		v, ok := parseNumber(b, comma)
		text := string(b)
		if comma && !strings.Contains(text, ".") {
			text = strings.Replace(text, ",", ".", 1)
		}
		want, err := strconv.ParseFloat(text, 64)
		plain := strings.Trim(text, "0123456789.+-eE") == ""
		if wantOK := err == nil && plain; ok != wantOK && len(b) <= 40 {
			t.Fatalf("%q: ok %v, want %v", b, ok, wantOK)
		}
		if ok && (v != want || math.IsNaN(v) || math.IsInf(v, 0)) {
			t.Fatalf("%q: %v, want %v", b, v, want)
		}
	})
}

func FuzzTime(f *testing.F) {
	for _, s := range []string{"2026-01-04T12:00:00Z", "2026-01-04T12:00:00.5+01:00", "2026-10-25T01:30:00", "1767528000.5", "1e18", "2026-02-30T00:00:00Z", "0000-01-01T00:00:00Z"} {
		f.Add([]byte(s))
	}
	zone, err := time.LoadLocation("Europe/London")
	if err != nil {
		f.Fatal(err)
	}
	f.Fuzz(func(t *testing.T, b []byte) {
		ms, _, ok := readTime(b, zone, noon)
		want, err := time.Parse(time.RFC3339Nano, string(b))
		var pe *time.ParseError
		// The standard library also takes hours of one digit.
		if err == nil && b[13] == ':' && (!ok || ms != want.UnixMilli()) {
			t.Fatalf("%q: %d %v, the standard library %d", b, ms, ok, want.UnixMilli())
		}
		if err != nil && !errors.As(err, &pe) {
			t.Fatal(err)
		}
		if local, err := time.ParseInLocation("2006-01-02T15:04:05", string(b), zone); err == nil && ok {
			back := time.UnixMilli(ms).In(zone).Format("2006-01-02T15:04:05")
			skipped := local.Format("2006-01-02T15:04:05") != string(b)
			if back != string(b) && !skipped {
				t.Fatalf("%q reads back as %q", b, back)
			}
		}
	})
}
