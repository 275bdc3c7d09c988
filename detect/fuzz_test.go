package detect_test

import (
	"bytes"
	"encoding/binary"
	"math"
	"math/rand/v2"
	"testing"

	"midwatch/collector"
	"midwatch/configs"
	"midwatch/detect"
)

// frameBytes is what the fuzzer spends on one frame.
const frameBytes = 14

// framesOf reads any bytes as frames: times that jump, values from calm to
// absurd, flags and modes of all sorts.
func framesOf(b []byte) (out []collector.Frame) {
	now := int64(1767225600000)
	pv, sp, op := float32(50), float32(50), float32(50)
	value := func(kind byte, raw uint16, was float32) float32 {
		x := float32(raw)/65535*2 - 1
		switch kind % 16 {
		case 0:
			return collector.NaN32
		case 1:
			return float32(math.Inf(int(raw&1)*2 - 1))
		case 2:
			return x * math.MaxFloat32
		case 3:
			return math.Float32frombits(uint32(raw) << 16)
		case 4:
			return x * 1e-40
		case 5:
			return 0
		case 6:
			return 100
		case 7:
			return was
		case 8:
			return float32(math.NaN())
		}
		if was != was || was > 1e6 || was < -1e6 {
			was = 50
		}
		return was + x
	}
	for ; len(b) >= frameBytes; b = b[frameBytes:] {
		gap := int64(binary.LittleEndian.Uint16(b))
		switch b[2] % 16 {
		case 0:
			now -= gap * 1000
		case 1:
			now += gap * 60000
		case 2:
			now = min(now+gap<<24, 200e12) // to the year 8307
		case 3:
			now += gap
		default:
			now += 1000
		}
		pv = value(b[3]&15, binary.LittleEndian.Uint16(b[4:]), pv)
		sp = value(b[3]>>4, binary.LittleEndian.Uint16(b[6:])/64+32256, sp)
		op = value(b[8]&15, binary.LittleEndian.Uint16(b[9:]), op)
		f := collector.Frame{Time: now, PV: pv, SP: sp, OP: op, Mode: collector.Auto, Feedforward: collector.NaN32, Position: collector.NaN32}
		if b[8]&16 != 0 {
			f.Mode = collector.Mode(b[11] % 8)
		}
		if b[8]&32 != 0 {
			f.Flags = collector.Flags(uint16(b[12])|uint16(b[11])<<8) & (1<<11 - 1)
		}
		if b[8]&64 != 0 {
			f.Gain, f.Reset = value(b[13]&15, uint16(b[11])<<8, 1), value(b[13]>>4, uint16(b[12])<<8, 30)
		}
		// A run of the same kind, so that detectors get somewhere.
		n := 1
		if b[8]&128 != 0 {
			n = 1 + int(b[13]%64)
		}
		for i := range n {
			g := f
			g.Time = now + int64(i)*1000
			if n > 1 && g.PV == g.PV {
				g.PV += float32(math.Sin(float64(i) * float64(b[12]) / 64))
			}
			out = append(out, g)
		}
		now += int64(n-1) * 1000
	}
	return
}

func fuzzLoop(kind byte) *configs.Loop {
	l := configs.NewLoop("AIC-204")
	l.PVRangeGiven = kind&1 != 0
	l.Action = configs.Action(kind >> 1 % 3)
	l.Process = configs.Process(kind >> 3 % 4)
	l.Duty = configs.Duty(kind % 8)
	if kind&32 != 0 {
		l.SampleS, l.Report = 1, configs.Exception
	}
	if kind&64 != 0 {
		l.GainPct, l.IdealReset, l.PVAlarmHigh, l.OPSplit = 0.8, 30, 90, 50
	}
	if kind&128 != 0 {
		l.PVLow, l.PVHigh = 40, 60
		l.Name = "LIC-310 of the clear well with a long name, and 測定 beside it"
		l.Unit = "m³/h"
	}
	return l
}

// anyFrames steps a watch through frames and holds what must hold whatever comes;
// on the way it is saved and loaded, and a second watch that was not must agree.
func anyFrames(t testing.TB, l *configs.Loop, frames []collector.Frame) {
	w, plain := detect.New(l, 0, detect.Options{}), detect.New(l, 0, detect.Options{})
	var fs, want []detect.Finding
	through := int64(0)
	for i := range frames {
		f := &frames[i]
		w.Step(f, func(f *detect.Finding) { fs = append(fs, *f) })
		plain.Step(f, func(f *detect.Finding) { want = append(want, *f) })
		if f.Time > through {
			through = f.Time
		}
		if w.Through() != through {
			t.Fatalf("through %d, newest frame %d", w.Through(), through)
		}
		if e, ok := w.TakeEvidence(); ok && (e.Slot > through || e.N > len(e.Cross)) {
			t.Errorf("evidence of slot %d at %d", e.Slot, through)
		}
		if i%211 == 50 {
			b := w.Save(nil)
			w = detect.New(l, 0, detect.Options{})
			if err := w.Load(b); err != nil {
				t.Fatal(err)
			}
		}
	}
	for i := range fs {
		checkFinding(t, &fs[i])
	}
	statementsOfState(t, fs)
	if d := differ(lines(t, want), lines(t, fs)); d != "" {
		t.Errorf("saving on the way changed: %s", d)
	}
	w.Restate(func(f *detect.Finding) { checkFinding(t, f) })
	if v := w.View(); v.State == "" || v.State != detect.Judged && v.Why == "" {
		t.Errorf("state %q, why %q", v.State, v.Why)
	}
	for _, s := range w.Explain() {
		if s == "" || bytes.Contains([]byte(s), []byte("%!")) {
			t.Errorf("explained %q", s)
		}
	}
}

func FuzzFrames(f *testing.F) {
	rnd := rand.New(rand.NewPCG(8, 8))
	for _, n := range []int{0, 5, 50} {
		b := make([]byte, n*frameBytes)
		for i := range b {
			b[i] = byte(rnd.Uint32())
		}
		f.Add(byte(n), b)
	}
	f.Fuzz(func(t *testing.T, kind byte, b []byte) {
		if len(b) > 60*frameBytes {
			return
		}
		anyFrames(t, fuzzLoop(kind), framesOf(b))
	})
}

// What the fuzzer does, for a while, in every run of the tests.
func TestAnyFrames(t *testing.T) {
	rnd := rand.New(rand.NewPCG(9, 9))
	for range 120 {
		b := make([]byte, (1+rnd.IntN(80))*frameBytes)
		wild := rnd.IntN(4) == 0
		for i := range b {
			b[i] = byte(rnd.Uint32())
			if !wild && (i%frameBytes == 3 || i%frameBytes == 8) { // calm values
				b[i] = b[i]&0x60 | 0x99
			}
		}
		anyFrames(t, fuzzLoop(byte(rnd.Uint32())), framesOf(b))
	}
}

// The fixtures with spoilt frames in between: gaps, steps of the clock, NaN,
// repeats, marks, absurd values.
func TestSpoiltFixtures(t *testing.T) {
	for _, x := range fixtures() {
		rnd := rand.New(rand.NewPCG(10, 10))
		var fr []collector.Frame
		shift := int64(0)
		for _, f := range x.frames {
			f.Time += shift
			switch rnd.IntN(400) {
			case 0:
				f.PV = collector.NaN32
			case 1:
				f.OP = collector.NaN32
			case 2:
				f.PV = 1e9
			case 3:
				shift += int64(rnd.IntN(600000))
				f.Flags |= collector.Gap
			case 4:
				shift -= int64(rnd.IntN(5000))
				f.Flags |= collector.ClockStep
			case 5:
				f.Mode = collector.Mode(rnd.IntN(8))
			case 6:
				f.Flags |= collector.Flags(rnd.IntN(1 << 11))
			case 7:
				f.SP = float32(rnd.IntN(100))
			case 8:
				continue
			}
			fr = append(fr, f)
		}
		anyFrames(t, x.loop, fr)
	}
}
