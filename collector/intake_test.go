package collector

import (
	"context"
	"fmt"
	"math/rand"
	"slices"
	"strings"
	"sync"
	"testing"

	"go.uber.org/goleak"

	"midwatch/configs"
)

func TestMain(m *testing.M) { goleak.VerifyTestMain(m) }

// values gives what waits in a batch, in order, for reading in tests.
func (b *Batch) values() []float64 {
	var out []float64
	x, y := b.ring.span(b.ring.first, b.ring.end())
	for _, s := range append(slices.Clone(x), y...) {
		out = append(out, s.Value)
	}
	return out
}

func numbered(loop LoopID, from, to int) []Sample {
	var out []Sample
	for i := from; i < to; i++ {
		out = append(out, Sample{Loop: loop, Value: float64(i)})
	}
	return out
}

func TestRingKeepsTheNewestInOrder(t *testing.T) {
	for _, limit := range []int{1, 7, 300, 1000} {
		in := NewShards(1, limit)
		var b Batch
		next, taken := 0, 0
		rng := rand.New(rand.NewSource(1))
		dropped := uint64(0)
		for range 200 {
			n := rng.Intn(2 * limit)
			in.Put(numbered(0, next, next+n))
			next += n
			if rng.Intn(3) == 0 {
				in.Shard(0).Take(&b)
				got := b.values()
				want := max(taken, next-limit)
				dropped += uint64(want - taken)
				for i, v := range got {
					if v != float64(want+i) {
						t.Fatalf("limit %d: value %d is %g, want %d", limit, i, v, want+i)
					}
				}
				if len(got) != next-want {
					t.Fatalf("limit %d: %d values, want %d", limit, len(got), next-want)
				}
				taken = next
				if c := in.Counts(); c.Dropped != dropped || c.Put != uint64(next) || c.Waiting != 0 {
					t.Fatalf("limit %d: %+v, dropped %d", limit, c, dropped)
				}
			}
		}
	}
}

func TestSpreadByLoop(t *testing.T) {
	in := NewShards(3, 0)
	var all []Sample
	for i := range 30 {
		all = append(all, Sample{Loop: LoopID(i % 10), Value: float64(i)})
	}
	in.Put(all)
	in.Put([]Sample{{Loop: 4, Value: 99}})
	for k := range 3 {
		var b Batch
		if !in.Shard(k).Take(&b) {
			t.Fatal("nothing")
		}
		var want []float64
		for _, s := range all {
			if int(s.Loop)%3 == k {
				want = append(want, s.Value)
			}
		}
		if k == 1 {
			want = append(want, 99)
		}
		if got := b.values(); !slices.Equal(got, want) {
			t.Errorf("shard %d: %v, want %v", k, got, want)
		}
		if in.Shard(k).Take(&b) {
			t.Errorf("shard %d gives twice", k)
		}
	}
}

// feedAll drives an assembler of one loop from a batch.
func feedAll(t *testing.T, in *Shards) string {
	t.Helper()
	l := configs.NewLoop("LIC-310")
	l.SampleS = 1
	r := &rig{t: t, got: map[LoopID][]Frame{}}
	var err error
	if r.a, err = New([]*configs.Loop{l}, Options{}, func(id LoopID, f *Frame) { r.got[id] = append(r.got[id], *f) }); err != nil {
		t.Fatal(err)
	}
	var b Batch
	in.Shard(0).Take(&b)
	b.Feed(r.a)
	return r.text()
}

func TestDroppedSamplesFlagTheNextFrame(t *testing.T) {
	in := NewShards(1, 3)
	for s := 1.0; s <= 6; s++ {
		in.Put([]Sample{{Role: RolePV, Time: ms(s), Arrived: ms(s), Value: s}})
	}
	if got := feedAll(t, in); got != "4 4/-/- lost; 5 5/-/-" {
		t.Errorf("%s", got)
	}
}

func TestBacklogRoundTheEndOfTheRing(t *testing.T) {
	in := NewShards(1, 40)
	in.Put(numbered(7, 0, 25)) // of a loop that is not there
	var backlog []Sample
	for _, role := range []Role{RolePV, RoleSP} {
		for s := 1.0; s <= 15; s++ {
			backlog = append(backlog, Sample{Role: role, Time: ms(s), Arrived: ms(16), Value: s})
		}
	}
	in.Put(backlog)
	want := ""
	for s := 1; s <= 14; s++ {
		want += fmt.Sprintf("%d %d/%d/-; ", s, s, s)
	}
	if got := feedAll(t, in); got+"; " != want {
		t.Errorf("%s", got)
	}
}

func TestControlsKeepTheirPlaceAndAreNeverDropped(t *testing.T) {
	in := NewShards(1, 2)
	g := Group{1, 2}
	in.Join(g, []LoopID{0})
	for s := 1.0; s <= 8; s++ {
		in.Put([]Sample{{Role: RolePV, Time: ms(s), Arrived: ms(s), Value: s}})
		in.Tick(Tick{Group: g, Through: ms(s), Arrived: ms(s), Alive: true})
	}
	in.Tick(Tick{Group: g, Arrived: ms(9)})
	in.Tick(Tick{Group: g, Through: ms(10), Arrived: ms(10), Alive: true})
	in.Put([]Sample{{Role: RolePV, Time: ms(10), Arrived: ms(10), Value: 10}})
	var got []string
	var b Batch
	in.Shard(0).Take(&b)
	for _, c := range b.controls {
		if c.at != replaced {
			got = append(got, fmt.Sprint(c.at, " ", c.join, " ", c.tick.Alive, " ", c.tick.Arrived-t0))
		}
	}
	want := "0 [0] false -1767571200000,8 [] true 8000,8 [] false 9000,8 [] true 10000"
	if s := strings.Join(got, ","); s != want {
		t.Errorf("controls\n got %s\nwant %s", s, want)
	}
	if v := b.values(); !slices.Equal(v, []float64{8, 10}) {
		t.Errorf("values %v", v)
	}
}

func TestTicksOfAStalledConsumerStayBounded(t *testing.T) {
	in := NewShards(1, 4)
	for i := range 100_000 {
		in.Tick(Tick{Group: Group{0, uint16(i % 10)}, Through: int64(i), Alive: true})
	}
	if n := len(in.shards[0].controls); n > 200 {
		t.Errorf("%d controls wait", n)
	}
	var b Batch
	in.Shard(0).Take(&b)
	seen := map[Group]int64{}
	for _, c := range b.controls {
		if c.at != replaced {
			seen[c.tick.Group] = c.tick.Through
		}
	}
	for k := range uint16(10) {
		if got, want := seen[Group{0, k}], int64(99_990+int(k)); got != want {
			t.Errorf("group %d: through %d, want %d", k, got, want)
		}
	}
}

func TestManySourcesOneConsumerPerShard(t *testing.T) {
	const shards, sources, each = 3, 4, 5000
	in := NewShards(shards, 1<<20)
	ctx, cancel := context.WithCancel(context.Background())
	var consumers, producers sync.WaitGroup
	got := make([]map[LoopID][]float64, shards)
	for k := range shards {
		got[k] = map[LoopID][]float64{}
		consumers.Go(func() {
			var b Batch
			for s := in.Shard(k); ; {
				alive := s.Wait(ctx)
				for s.Take(&b) {
					x, y := b.ring.span(b.ring.first, b.ring.end())
					for _, v := range append(slices.Clone(x), y...) {
						got[k][v.Loop] = append(got[k][v.Loop], v.Value)
					}
				}
				if !alive {
					return
				}
			}
		})
	}
	for src := range sources {
		producers.Go(func() {
			for i := range each {
				in.Put([]Sample{{Loop: LoopID(src), Value: float64(i)}, {Loop: LoopID(src + sources), Value: float64(i)}})
				in.Tick(Tick{Group: Group{uint16(src), 0}, Alive: true})
			}
		})
	}
	producers.Wait()
	cancel()
	consumers.Wait()
	n := 0
	for k := range got {
		for id, v := range got[k] {
			if int(id)%shards != k || !slices.IsSorted(v) {
				t.Errorf("loop %d in shard %d out of order", id, k)
			}
			n += len(v)
		}
	}
	if n != 2*sources*each {
		t.Errorf("%d samples came out, want %d", n, 2*sources*each)
	}
}

func TestIntakeAllocatesNothing(t *testing.T) {
	in := NewShards(2, 0)
	batch, feed := loadOf(t, 50)
	_ = feed
	var b [2]Batch
	round := func() {
		in.Put(batch)
		in.Tick(Tick{Alive: true})
		for k := range b {
			in.Shard(k).Take(&b[k])
		}
	}
	for range 10 {
		round()
	}
	if n := testing.AllocsPerRun(100, round); n != 0 {
		t.Errorf("%g allocations per batch", n)
	}
}

func BenchmarkIntake(b *testing.B) {
	for _, shards := range []int{1, 2, 4} {
		b.Run(fmt.Sprint("shards=", shards), func(b *testing.B) {
			in := NewShards(shards, 0)
			batch, _ := loadOf(b, 1000)
			take := make([]Batch, shards)
			b.ReportAllocs()
			for b.Loop() {
				in.Put(batch)
				for k := range take {
					in.Shard(k).Take(&take[k])
				}
			}
			b.ReportMetric(float64(b.Elapsed().Nanoseconds())/float64(b.N)/float64(len(batch)), "ns/sample")
		})
	}
}
