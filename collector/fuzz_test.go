package collector

import (
	"math"
	"testing"

	"midwatch/configs"
)

// FuzzAssembler: whatever arrives in whatever order, the frames of a loop go
// forward, hold clean numbers, and not more than the ticks or PVs account for.
func FuzzAssembler(f *testing.F) {
	f.Add([]byte{0, 10, 1, 5, 0, 20, 2, 7, 10, 1, 1, 0, 11, 2, 200, 9, 12, 0, 0, 1, 13, 3, 3, 3})
	f.Add([]byte{10, 0, 0, 0, 0, 1, 1, 1, 11, 1, 1, 1, 11, 9, 1, 1, 12, 1, 1, 1, 13, 255, 255, 1, 0, 250, 3, 9, 0, 1, 128, 9})
	f.Fuzz(func(t *testing.T, ops []byte) {
		var loops []*configs.Loop
		for i := range 3 {
			l := configs.NewLoop([]string{"AIC-204", "LIC-310", "FIC-101"}[i])
			l.Report = configs.Report(i % 2)
			if i == 2 {
				l.SampleS = 10
				l.SilenceS = 50
			} else if i == 1 {
				l.SampleS = 1
			}
			loops = append(loops, l)
		}
		last := [3]int64{math.MinInt64, math.MinInt64, math.MinInt64}
		var frames [3]uint64
		a, err := New(loops, Options{}, func(id LoopID, f *Frame) {
			if f.Time <= last[id] {
				t.Fatalf("loop %d: frame at %d after %d", id, f.Time, last[id])
			}
			last[id] = f.Time
			frames[id]++
			for _, v := range []float32{f.PV, f.SP, f.OP} {
				if v != v && math.Float32bits(v) != math.Float32bits(NaN32) || math.IsInf(float64(v), 0) || v == 0 && math.Signbit(float64(v)) {
					t.Fatalf("a frame holds %x", math.Float32bits(v))
				}
			}
		})
		if err != nil {
			t.Fatal(err)
		}
		now := t0
		var batch []Sample
		for ; len(ops) >= 4; ops = ops[4:] {
			op, x, y, z := ops[0], int64(ops[1]), int64(ops[2]), ops[3]
			g := Group{0, uint16(z & 1)}
			switch op % 16 {
			case 10:
				a.Join(g, []LoopID{LoopID(x % 3), LoopID(y % 3)})
			case 11:
				now += 100 * x
				a.Tick(Tick{Group: g, Through: now + 1000*(y-128), Arrived: now, Alive: z&2 == 0})
			case 12:
				now += 1000 * x
				a.Advance(now + 60_000*(y-128)*int64(z&1))
			case 13: // a clock far off
				batch = append(batch, Sample{Loop: LoopID(z % 3), Time: now + 3_600_000*(x-128), Arrived: now, Value: float64(y)})
			case 14:
				a.Feed(batch)
				batch = batch[:0]
			case 15:
				a.Lost(LoopID(z % 3))
			default:
				now += 20 * x
				s := Sample{Loop: LoopID(z % 3), Role: Role(op % 10), Quality: Quality(z >> 6 % 3), Lost: z&16 != 0,
					Time: now + 100*(y-200), Arrived: now, Value: float64(x) - 100}
				if z == 255 {
					s.Value = math.Inf(-1)
				}
				batch = append(batch, s)
			}
		}
		a.Feed(batch)
		for id := range LoopID(3) {
			c := a.Counts(id)
			if c.Frames != frames[id] || c.Held > c.Frames || c.Gaps > c.Frames || loops[id].Report == configs.Periodic && c.Held > 0 ||
				c.Frames-c.Held-c.Gaps+c.Thinned > c.Samples {
				t.Fatalf("loop %d: %+v, %d frames", id, c, frames[id])
			}
		}
	})
}
