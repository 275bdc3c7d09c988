package store

import (
	"encoding/hex"
	"fmt"
	"math"
	"math/rand/v2"
	"testing"

	"midwatch/collector"
)

// mixKind is one kind of loop of the mix that the figures are measured on.
type mixKind struct {
	name            string
	span            float64
	levels          float64 // of the converter; 0: float
	decimals        int     // of PV; -1: none
	opDecimals      int     // -1: unrounded float32
	noise           float64 // share of span
	jitterMs        int
	spStep, spEvery float64
}

var mix = []mixKind{
	{name: "12-bit, OP float", span: 200, levels: 4095, decimals: -1, opDecimals: -1, noise: 0.002},
	{name: "12-bit, OP float, jitter", span: 5, levels: 4095, decimals: -1, opDecimals: -1, noise: 0.001, jitterMs: 4},
	{name: "12-bit, OP 0.1", span: 160, levels: 4095, decimals: -1, opDecimals: 1, noise: 0.001},
	{name: "12-bit, OP 0.1, SP steps", span: 160, levels: 4095, decimals: -1, opDecimals: 1, noise: 0.002, spStep: 0.02, spEvery: 400},
	{name: "12-bit, quiet, OP 0.1", span: 100, levels: 4095, decimals: -1, opDecimals: 1, noise: 0.0002},
	{name: "16-bit, OP float, jitter", span: 1000, levels: 65535, decimals: -1, opDecimals: -1, noise: 0.002, jitterMs: 4},
	{name: "decimals 2 and 1", span: 14, decimals: 2, opDecimals: 1, noise: 0.001},
	{name: "float noise, SP steps", span: 120, decimals: -1, opDecimals: -1, noise: 0.002, spStep: 0.02, spEvery: 400},
	{name: "16-bit, OP float", span: 200, levels: 65535, decimals: -1, opDecimals: -1, noise: 0.0008},
	{name: "float noise", span: 10, decimals: -1, opDecimals: -1, noise: 0.001},
}

// trace is n frames of a loop: a first-order process under a PI law.
func (k mixKind) trace(rng *rand.Rand, t0 int64, n int) []collector.Frame {
	out := make([]collector.Frame, n)
	sp := k.span * 0.5
	x, integral, dist := sp, 45.0, 0.0
	round := func(v float64, dec int) float64 {
		p := math.Pow(10, float64(dec))
		return math.Round(v*p) / p
	}
	for i := range out {
		if k.spEvery > 0 && rng.Float64() < 1/k.spEvery {
			sp = k.span * (0.5 + k.spStep*rng.NormFloat64())
		}
		dist = 0.995*dist + 0.0004*k.span*rng.NormFloat64()
		pv := x + k.noise*k.span*rng.NormFloat64()
		if k.levels > 0 {
			pv = math.Round(pv/k.span*k.levels) * (k.span / k.levels)
		}
		if k.decimals >= 0 {
			pv = round(pv, k.decimals)
		}
		e := (sp - pv) / k.span * 100
		integral += 0.8 * e / 60
		op := min(max(integral+0.8*e, 0), 100)
		if k.opDecimals >= 0 {
			op = round(op, k.opDecimals)
		}
		x += ((op-45)/100*k.span + 0.5*k.span + dist - x) / 40
		t := t0 + int64(i)*1000
		if k.jitterMs > 0 {
			t += rng.Int64N(int64(2*k.jitterMs+1)) - int64(k.jitterMs)
		}
		out[i] = collector.Frame{Time: t, PV: collector.Clean32(pv), SP: collector.Clean32(round(sp, 2)), OP: collector.Clean32(op),
			Feedforward: nan32, Position: nan32, Mode: collector.Auto}
	}
	return out
}

const t2026 = int64(1767225600000)

func same(a, b collector.Frame) bool {
	return a.Time == b.Time && a.Mode == b.Mode && a.Flags == b.Flags &&
		sameBits(a.PV, b.PV) && sameBits(a.SP, b.SP) && sameBits(a.OP, b.OP) && sameBits(a.Gain, b.Gain) &&
		sameBits(a.Reset, b.Reset) && sameBits(a.Feedforward, b.Feedforward) && sameBits(a.Position, b.Position)
}

// roundTrip encodes, decodes and compares bit for bit.
func roundTrip(t *testing.T, f []collector.Frame, base int64) []byte {
	t.Helper()
	var e encoder
	var d decoder
	b := e.append([]byte("before"), f, base)
	got, err := d.append(nil, b[len("before"):], base)
	if err != nil || len(got) != len(f) {
		t.Fatalf("decoded %d of %d frames: %v", len(got), len(f), err)
	}
	for i := range f {
		if !same(got[i], f[i]) {
			t.Fatalf("frame %d of %d: got %+v, want %+v", i, len(f), got[i], f[i])
		}
	}
	return b[len("before"):]
}

// randomFloat draws from what makes codecs fail.
func randomFloat(r *rand.Rand, kind int) float32 {
	switch kind {
	case 0:
		return 42.5
	case 1:
		return float32(math.Round(r.NormFloat64()*1000) / 100)
	case 2:
		return float32(float64(r.IntN(4096)) * (200.0 / 4095))
	case 3:
		return float32(r.NormFloat64())
	case 4: // any bits but the other NaN
		return collector.Clean32(float64(math.Float32frombits(r.Uint32())))
	case 5:
		return [...]float32{nan32, 0, math.SmallestNonzeroFloat32, -math.SmallestNonzeroFloat32, math.MaxFloat32, -math.MaxFloat32, 1, -1}[r.IntN(8)]
	case 6:
		return nan32
	case 7:
		return float32(r.IntN(3))
	case 8:
		return float32(-273.15 + float64(r.IntN(65536))*(1000.0/65535))
	case 9:
		return math.Float32frombits(r.Uint32N(1 << 23)) // denormals
	}
	return float32(1e20 * (1 + r.Float64()))
}

func randomFrames(r *rand.Rand, n int) []collector.Frame {
	var kinds [7]int
	for i := range kinds {
		kinds[i] = r.IntN(11)
	}
	nanShare := 0.0
	if r.IntN(2) == 0 {
		nanShare = r.Float64() / 2
	}
	timeKind, dt := r.IntN(5), []int64{1000, 1000, 500, 60000, 1}[r.IntN(5)]
	t := t2026
	f := make([]collector.Frame, n)
	for i := range f {
		v := func(c int) float32 {
			if r.Float64() < nanShare {
				return nan32
			}
			return randomFloat(r, kinds[c])
		}
		switch timeKind {
		case 0:
			t += dt
		case 1:
			t += dt + r.Int64N(9) - 4
		case 2:
			t += r.Int64N(100000)
		case 3:
			t = int64(r.Uint64()) // any time at all
		case 4:
			t = [...]int64{math.MaxInt64, math.MinInt64, 0, -1}[r.IntN(4)]
		}
		f[i] = collector.Frame{Time: t, PV: v(0), SP: v(1), OP: v(2), Mode: collector.Auto, Feedforward: nan32, Position: nan32}
		if kinds[3] > 5 {
			f[i].Gain, f[i].Reset = v(3), v(4)
		}
		if kinds[5] > 5 {
			f[i].Feedforward, f[i].Position = v(5), v(6)
		}
		if kinds[6] > 3 {
			f[i].Mode = collector.Mode(r.IntN(len(collector.ModeWords)))
			f[i].Flags = collector.Flags(r.Uint32())
		}
	}
	return f
}

func TestPieceRoundTrip(t *testing.T) {
	r := rand.New(rand.NewPCG(1, 2))
	for range times(1000, 4000) {
		roundTrip(t, randomFrames(r, 1+r.IntN(200)), t2026-r.Int64N(100000))
	}
	for _, n := range []int{1, 2, 3, 63, 64, 65, 128, 129, 600, maxPiece} {
		for _, k := range mix {
			roundTrip(t, k.trace(r, t2026, n), 0)
		}
	}
}

// TestMixSize holds the figure that the design asks for: under 3 bytes a frame
// in chunks of 600 s, on the mix.
func TestMixSize(t *testing.T) {
	for _, n := range []int{8, 60, 600} {
		r := rand.New(rand.NewPCG(3, 4))
		total := 0.0
		for _, k := range mix {
			size, frames := 0, 0
			for _, base := range []int64{0, 1, 2, 3, 4, 5, 6, 7} {
				f := k.trace(r, t2026+base*7777, 600)
				for i := 0; i+n <= len(f); i += n {
					size += len(roundTrip(t, f[i:i+n], t2026+base*7777+int64(i)*1000-300))
					frames += n
				}
			}
			per := float64(size) / float64(frames)
			total += per
			t.Logf("%4d frames, %-28s %.2f bytes a frame", n, k.name, per)
		}
		mean := total / float64(len(mix))
		t.Logf("%4d frames, mix: %.2f bytes a frame", n, mean)
		if limit := map[int]float64{8: 7, 60: 4.5, 600: 3}[n]; mean > limit {
			t.Errorf("%d frames: %.2f bytes a frame, want under %.1f", n, mean, limit)
		}
	}
}

// TestRareColumnsCostNothing compares a piece with and without columns that say
// the same throughout.
func TestRareColumnsCostNothing(t *testing.T) {
	f := mix[2].trace(rand.New(rand.NewPCG(5, 6)), t2026, 600)
	plain := len(roundTrip(t, f, 0))
	for i := range f {
		f[i].Gain, f[i].Reset, f[i].Position = 1.5, 240, 33
	}
	if with := len(roundTrip(t, f, 0)); with > plain+20 {
		t.Errorf("three constant columns cost %d bytes in 600 frames", with-plain)
	}
}

// TestOldPieces decodes pieces as version 1 wrote them: a change of the format
// must not pass unseen.
func TestOldPieces(t *testing.T) {
	const base = t2026
	ramp := func(n int, pv func(i int) float64) []collector.Frame {
		f := make([]collector.Frame, n)
		for i := range f {
			f[i] = plain(base+500+int64(i)*1000, collector.Clean32(pv(i)))
			f[i].OP = 12.5
		}
		return f
	}
	odd := ramp(6, func(i int) float64 { return math.Pi * float64(i) })
	odd[2].PV, odd[3].Time, odd[4].Mode, odd[5].Flags, odd[1].Gain = nan32, odd[3].Time+7, collector.Manual, collector.Held, 2
	for _, c := range []struct {
		name string
		f    []collector.Frame
		hex  string
	}{
		{"decimal", ramp(4, func(i int) float64 { return 1.25 + float64(i%2)/100 }), "0e0195f40a447d00cc200f904823e8"},
		{"odd", odd, "0f0e95f420a055fc5a000304ea8031490fdb5243f69490fd8800001c401f209047d20a003100003084000f00"},
		{"lattice", ramp(60, func(i int) float64 { return 200.0 / 4095 * float64(i*i%50+1000) }), "1bc032be8440486b86bb445de43fa9018fe8d66b2043542c98f0572487ac1aa49027074887620c9c990d20510520d489298d11d2290738092a1b61e2095e0c7931e0ae490f583540803e41208fa0"},
	} {
		var e encoder
		// The fit of a lattice may differ in its last bits between architectures.
		if got := fmt.Sprintf("%x", e.append(nil, c.f, base)); got != c.hex && c.name != "lattice" {
			t.Errorf("%s: written anew: %s", c.name, got)
		}
		b, err := hex.DecodeString(c.hex)
		if err != nil {
			t.Fatal(err)
		}
		var d decoder
		got, err := d.append(nil, b, base)
		if err != nil || len(got) != len(c.f) {
			t.Fatalf("%s: %d frames, %v", c.name, len(got), err)
		}
		for i := range got {
			if !same(got[i], c.f[i]) {
				t.Errorf("%s: frame %d is %+v, was %+v", c.name, i, got[i], c.f[i])
			}
		}
	}
}

func TestInOrder(t *testing.T) {
	at := func(ms int64, pv float32, fl collector.Flags) collector.Frame {
		return collector.Frame{Time: ms, PV: pv, Flags: fl}
	}
	for _, c := range []struct {
		name     string
		in, want []collector.Frame
	}{
		{"in order", []collector.Frame{at(1, 1, 0), at(2, 2, 0)}, []collector.Frame{at(1, 1, 0), at(2, 2, 0)}},
		{"sorted", []collector.Frame{at(2, 2, 0), at(1, 1, 0)}, []collector.Frame{at(1, 1, 0), at(2, 2, 0)}},
		{"later wins", []collector.Frame{at(1, 1, 0), at(1, 2, 0)}, []collector.Frame{at(1, 2, 0)}},
		{"live beats history", []collector.Frame{at(1, 1, 0), at(1, 2, collector.Backfilled)}, []collector.Frame{at(1, 1, 0)}},
		{"live beats history before", []collector.Frame{at(1, 2, collector.Backfilled), at(1, 1, 0)}, []collector.Frame{at(1, 1, 0)}},
		{"later history wins", []collector.Frame{at(1, 1, collector.Backfilled), at(1, 2, collector.Backfilled)}, []collector.Frame{at(1, 2, collector.Backfilled)}},
	} {
		got := inOrder(c.in)
		if fmt.Sprint(got) != fmt.Sprint(c.want) {
			t.Errorf("%s: got %v, want %v", c.name, got, c.want)
		}
	}
}

// TestDecodeDamaged feeds flipped and cut pieces to the decoder: it may err or
// give other frames, but must end and never panic.
func TestDecodeDamaged(t *testing.T) {
	r := rand.New(rand.NewPCG(7, 8))
	var e encoder
	var d decoder
	for range times(1000, 3000) {
		b := e.append(nil, randomFrames(r, 1+r.IntN(100)), 0)
		for range 1 + r.IntN(4) {
			b[r.IntN(len(b))] ^= 1 << r.IntN(8)
		}
		b = b[:r.IntN(len(b)+1)]
		if f, err := d.append(nil, b, 0); err == nil && len(f) > maxPiece {
			t.Fatalf("%d frames", len(f))
		}
	}
}

func FuzzDecode(f *testing.F) {
	r := rand.New(rand.NewPCG(9, 10))
	var e encoder
	for range 20 {
		f.Add(e.append(nil, randomFrames(r, 1+r.IntN(80)), 0))
	}
	for _, k := range mix {
		f.Add(e.append(nil, k.trace(r, t2026, 100), 0))
	}
	f.Fuzz(func(t *testing.T, b []byte) {
		var d decoder
		got, err := d.append(nil, b, 0)
		if err != nil {
			return
		}
		for i := range got {
			got[i] = clean(got[i])
		}
		roundTrip(t, got, 0) // whatever it was, it survives
	})
}

// FuzzFrames builds columns from raw bytes and wants them back.
func FuzzFrames(f *testing.F) {
	f.Add([]byte{0, 0, 0x48, 0x42, 1, 2, 3, 4, 5, 6, 7, 8}, uint64(1000), byte(3))
	f.Fuzz(func(t *testing.T, b []byte, dt uint64, sel byte) {
		var fs []collector.Frame
		for i := 0; i+4 <= len(b) && len(fs) < maxPiece; i += 4 {
			v := math.Float32frombits(uint32(b[i]) | uint32(b[i+1])<<8 | uint32(b[i+2])<<16 | uint32(b[i+3])<<24)
			x := collector.Frame{Time: int64(uint64(len(fs)) * dt), Feedforward: nan32, Position: nan32, Mode: collector.Auto}
			*[...]*float32{&x.PV, &x.SP, &x.OP, &x.Gain, &x.Reset, &x.Feedforward, &x.Position, &x.PV}[sel&7] = v
			fs = append(fs, clean(x))
		}
		if len(fs) > 0 {
			roundTrip(t, fs, int64(dt))
		}
	})
}

func BenchmarkEncode(b *testing.B) {
	for _, n := range []int{8, 600} {
		b.Run(fmt.Sprintf("frames=%d", n), func(b *testing.B) {
			traces := make([][]collector.Frame, len(mix))
			for i, k := range mix {
				traces[i] = k.trace(rand.New(rand.NewPCG(1, uint64(i))), t2026, 600)
			}
			var e encoder
			var buf []byte
			frames, size := 0, 0
			b.ReportAllocs()
			for i := 0; b.Loop(); i++ {
				at := (i / len(mix) * n) % (600 - n + 1)
				buf = e.append(buf[:0], traces[i%len(mix)][at:at+n], t2026)
				frames += n
				size += len(buf)
			}
			b.ReportMetric(float64(b.Elapsed().Nanoseconds())/float64(frames), "ns/frame")
			b.ReportMetric(float64(size)/float64(frames), "B/frame")
		})
	}
}

func BenchmarkDecode(b *testing.B) {
	for _, n := range []int{8, 600} {
		b.Run(fmt.Sprintf("frames=%d", n), func(b *testing.B) {
			var e encoder
			pieces := make([][]byte, len(mix))
			for i, k := range mix {
				pieces[i] = e.append(nil, k.trace(rand.New(rand.NewPCG(1, uint64(i))), t2026, n), 0)
			}
			var d decoder
			var buf []collector.Frame
			frames := 0
			b.ReportAllocs()
			for i := 0; b.Loop(); i++ {
				var err error
				if buf, err = d.append(buf[:0], pieces[i%len(mix)], 0); err != nil {
					b.Fatal(err)
				}
				frames += n
			}
			b.ReportMetric(float64(b.Elapsed().Nanoseconds())/float64(frames), "ns/frame")
		})
	}
}
