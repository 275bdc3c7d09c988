package trend

import (
	"bytes"
	"errors"
	"math"
	"strconv"
	"strings"
	"testing"
	"time"

	"midwatch/collector"
	"midwatch/configs"
)

func FuzzNumber(f *testing.F) {
	for _, s := range []string{"", "0", "-0", "94.702", "0.1", "1e5", "16777217", "16777216.5", "0.00000011920929", "9007199254740993",
		"1.00000005960464477539", "3.4028236e38", "340282346638528859811704183484516925440", "0.000000000000000000000001", "1.", ".5", ".",
		"-", "+1", "0x1p-2", "Inf", "nan", "1_0", "33554433", "8388608.5", "8388609.5", "0.30000001192092896", "12345678.9", "99999999999"} {
		f.Add(s)
	}
	f.Fuzz(func(t *testing.T, s string) {
		if strings.Contains(s, ",") {
			return
		}
		want, err := strconv.ParseFloat(s, 32)
		if got, ok := parseNumber(s); s != "" && (ok != (err == nil || math.IsInf(want, 0)) || ok && math.Float32bits(got) != math.Float32bits(float32(want))) {
			t.Errorf("%q the long way: %v %v, want %v %v", s, got, ok, want, err)
		}
		for _, tail := range []string{"", ",1"} {
			got, next, ok := scanNumber([]byte(s+tail), 0)
			if !ok {
				continue // goes the long way
			}
			if next != len(s) {
				t.Fatalf("%q: stopped at %d", s, next)
			}
			if s == "" && got != got {
				continue
			}
			if err != nil || math.Float32bits(got) != math.Float32bits(float32(want)) {
				t.Errorf("%q: %v (%x), want %v (%x), %v", s, got, math.Float32bits(got), want, math.Float32bits(float32(want)), err)
			}
		}
	})
}

// Decimals around the midpoints of neighbouring float32 are where rounding twice
// goes wrong.
func TestNumbersNearMidpoints(t *testing.T) {
	tried := 0
	for i := range uint32(200_000) {
		bits := i * 21473 % 0x7f000000
		x, y := math.Float32frombits(bits), math.Float32frombits(bits+1)
		if x < 1e-6 || x > 1e9 {
			continue
		}
		mid := (float64(x) + float64(y)) / 2
		for _, d := range []float64{mid, math.Nextafter(mid, 0), math.Nextafter(mid, 1e30)} {
			for _, digits := range []int{7, 8, 9, 12, 15, 16} {
				s := strconv.FormatFloat(d, 'f', digits, 64)
				want, _ := strconv.ParseFloat(s, 32)
				if got, _, ok := scanNumber([]byte(s), 0); ok {
					tried++
					if got != float32(want) {
						t.Fatalf("%s: %v, want %v", s, got, float32(want))
					}
				}
			}
		}
	}
	if tried < 100_000 {
		t.Errorf("only %d went the short way", tried)
	}
}

func FuzzTime(f *testing.F) {
	for _, s := range []string{"2026-01-05T00:00:06Z", "2026-01-05T00:00:06.123Z", "1969-12-31T23:59:59.9999Z", "2024-02-29T12:00:00+05:30",
		"2023-02-29T12:00:00Z", "0000-01-01T00:00:00Z", "9999-12-31T23:59:60Z", "2026-01-05T24:00:00Z", "2026-01-05T00:00:06.Z",
		"2026-01-05T00:00:06-24:00", "2026-01-05T00:00:06.1234567891Z", "2026-13-05T00:00:06Z", "2026-01-05t00:00:06z", "2100-02-29T00:00:00Z",
		"0000-01-01T00:00:00,", "2026-01-05T00:00:06 ", "\x00\x00\x00\x00\x00\x00\x00\x00\x00\x00T00:00:06Z"} {
		f.Add(s)
	}
	f.Fuzz(func(t *testing.T, s string) {
		if strings.Contains(s, ",") {
			return // time.Parse takes a comma for the point
		}
		want, err := time.Parse(time.RFC3339Nano, s)
		var c clock
		for range 2 { // the second time the date is remembered
			got, next, ok := c.scan([]byte(s), 0)
			if !ok {
				continue
			}
			if err != nil || got != want.UnixMilli() || next != len(s) {
				t.Fatalf("%q: %d to %d, want %v %v", s, got, next, want, err)
			}
		}
		if err != nil {
			return
		}
		var w clock
		out, ok := w.append(nil, want.UnixMilli())
		if u := want.UTC(); ok != (u.Year() >= 0 && u.Year() <= 9999) || ok && string(out) != u.Truncate(time.Millisecond).Format("2006-01-02T15:04:05.000Z") {
			t.Errorf("%q written as %q", s, out)
		}
	})
}

// FuzzFrame: frame -> CSV -> frame keeps every bit.
func FuzzFrame(f *testing.F) {
	f.Add("AIC-204", int64(1767571206000), uint32(0x42bd6666), uint32(0x80000000), uint32(0x7fc00001), uint32(0x3f828f5c), uint32(0x41c4cccd), uint32(1), uint32(0xff800000), byte(1), uint16(0))
	f.Add(`odd, "x" `, int64(-1), uint32(0), uint32(1), uint32(0x7f7fffff), uint32(0), uint32(0), uint32(0x00800000), uint32(0x34000000), byte(7), uint16(0x7ff))
	f.Fuzz(func(t *testing.T, name string, ms int64, pv, sp, op, gain, reset, ff, pos uint32, mode byte, flags uint16) {
		c := func(b uint32) float32 { return collector.Clean32(float64(math.Float32frombits(b))) }
		pos0 := func(v float32) float32 {
			if v > 0 {
				return v
			}
			return 0
		}
		in := collector.Frame{Time: ms % 253402300800000, PV: c(pv), SP: c(sp), OP: c(op), Gain: pos0(c(gain)), Reset: pos0(c(reset)),
			Feedforward: c(ff), Position: c(pos), Mode: collector.Mode(mode % 8), Flags: collector.Flags(flags & (1<<len(collector.FlagWords) - 1))}
		var b bytes.Buffer
		w := NewWriter(&b, AllColumns)
		if err := w.Write(name, &in); err != nil {
			if name != "" && !strings.ContainsAny(name, "\r\n") && in.Time > -62167219200000 {
				t.Fatal(err)
			}
			return
		}
		if err := w.Flush(); err != nil {
			t.Fatal(err)
		}
		if strings.TrimSpace(name) == "" {
			return // no name of a loop
		}
		r, err := Open([]string{"-"}, []*configs.Loop{configs.NewLoop(name)}, Options{Stdin: &b, Say: func(s string) { t.Error(s) }})
		if err != nil {
			t.Fatal(err)
		}
		defer r.Close()
		_, out, err := r.Next()
		if err != nil {
			t.Fatalf("%+v: %v", in, err)
		}
		bits := func(f *collector.Frame) [7]uint32 {
			b := math.Float32bits
			return [7]uint32{b(f.PV), b(f.SP), b(f.OP), b(f.Gain), b(f.Reset), b(f.Feedforward), b(f.Position)}
		}
		if bits(&in) != bits(out) || in.Time != out.Time || in.Mode != out.Mode || in.Flags != out.Flags {
			t.Errorf("in  %+v\nout %+v", in, *out)
		}
	})
}

// FuzzTrend: whatever a file holds, reading ends, frames of a loop go forward,
// counts add up, and what the short way reads the long way reads alike.
func FuzzTrend(f *testing.F) {
	f.Add([]byte(full + "\n2026-01-05T00:00:06Z,A,1,2,3,auto,held\n2026-01-05T00:00:07Z,B,1,,3,,\n"))
	f.Add([]byte("time,loop,pv,sp,op\n2026-01-05T00:00:06Z,A,1,2,3\n2026-01-06T00:00:06Z,A,1,2,3\n\"2026-01-07T00:00:06Z\",\"A\",1,2,3"))
	f.Add([]byte("\xef\xbb\xbftime,loop,pv,sp,op,x,gain,reset_s,feedforward,position\r\n2026-01-05T00:00:06+01:00,A,-0,nan,1e9,\"q\"\"\",1,2,3,4\r\n,,,,\n"))
	f.Add([]byte("\x1f\x8b\x08\x00\x00\x00\x00\x00"))
	f.Fuzz(func(t *testing.T, b []byte) {
		loops := loopsOf("A", "B", `C,"c`)
		r, err := Open([]string{"-"}, loops, Options{Stdin: bytes.NewReader(b)})
		if err != nil {
			return
		}
		last := [3]int64{math.MinInt64, math.MinInt64, math.MinInt64}
		err = r.Each(func(id collector.LoopID, f *collector.Frame) error {
			if f.Time <= last[id] {
				t.Errorf("loop %d goes back", id)
			}
			last[id] = f.Time
			for _, v := range []float32{f.PV, f.SP, f.OP, f.Feedforward, f.Position} {
				if v != v && math.Float32bits(v) != math.Float32bits(collector.NaN32) || math.IsInf(float64(v), 0) || v == 0 && math.Signbit(float64(v)) {
					t.Errorf("a frame holds %x", math.Float32bits(v))
				}
			}
			return nil
		})
		s := r.Summary()
		if s.Rows != s.Frames-s.Silent+s.Malformed+s.Late+s.Foreign {
			t.Errorf("%+v", s)
		}
		var bad *MalformedError
		if errors.As(err, &bad) != (r.failed == nil && s.Malformed*100 > s.Rows) {
			t.Errorf("%v with %+v", err, s)
		}
		if err := r.Close(); err != nil {
			t.Error(err)
		}
		ro, err := newRoster(loops)
		if err != nil {
			t.Fatal(err)
		}
		head, rest, _ := bytes.Cut(b, []byte("\n"))
		fields, _, err := readHeader(head)
		if err != nil {
			return
		}
		p := newParser(ro, fields)
		for line := range bytes.SplitSeq(rest, []byte("\n")) {
			var short, long collector.Frame
			id, _, ok := p.fast(line, &short)
			if !ok {
				continue
			}
			id2, _, err := p.slow(line, &long)
			if err != nil && id == noLoop {
				continue // a foreign row is left out either way
			}
			if err != nil || id != id2 || id != noLoop && show("", &short) != show("", &long) {
				t.Errorf("%q: short %d %+v, long %d %+v %v", line, id, short, id2, long, err)
			}
		}
	})
}
