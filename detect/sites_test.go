package detect_test

import (
	"bytes"
	"errors"
	"fmt"
	"math"
	"math/rand/v2"
	"slices"
	"strings"
	"sync"
	"testing"

	"midwatch/collector"
	"midwatch/configs"
	"midwatch/detect"
)

// together holds the records of a site: three loops that an outside swing moves
// with one period, one that cycles with a period of its own, one that is calm.
var togetherLoops = sync.OnceValue(func() (out []fixture) {
	for i, name := range []string{"FIC-101", "PIC-110", "TIC-221", "FIC-130", "LIC-315"} {
		c := 5 + float64(i)
		g := newRig(plantB.stretched(c), 2, 10*c, uint64(40+i))
		g.step, g.noise = 0.5, 0.08
		g.bumps(3, 1500)
		g.run(7200)
		period, phase := 150.0, float64(i)
		if i == 3 {
			period = 97
		}
		if i < 4 {
			g.each = func(t float64) { g.load = 12 * math.Sin(2*math.Pi*t/period+phase) }
		}
		g.run(10800)
		out = append(out, fixture{loop: loopOf(name, g), frames: g.out})
	}
	return
})

type recorded struct {
	id collector.LoopID
	detect.Evidence
}

// evidenceOf gives what the watches of the loops hand over, by slot.
func evidenceOf(loops []fixture) map[int64][]recorded {
	out := map[int64][]recorded{}
	for i, x := range loops {
		w := detect.New(x.loop, collector.LoopID(i), detect.Options{})
		for j := range x.frames {
			w.Step(&x.frames[j], func(*detect.Finding) {})
			if e, ok := w.TakeEvidence(); ok {
				out[e.Slot] = append(out[e.Slot], recorded{collector.LoopID(i), e})
				if _, again := w.TakeEvidence(); again {
					panic("evidence is given twice")
				}
			}
		}
	}
	return out
}

func slots(ev map[int64][]recorded) (s []int64) {
	for k := range ev {
		s = append(s, k)
	}
	slices.Sort(s)
	return
}

func loopsOf(x []fixture) (l []*configs.Loop) {
	for _, f := range x {
		l = append(l, f.loop)
	}
	return
}

// judge runs the site detectors over all slots; at every slot the records come in
// the order that shuffle makes, and restart may replace the site detectors.
func judge(t testing.TB, loops []*configs.Loop, ev map[int64][]recorded, shuffle func([]recorded), restart func(*detect.Sites) *detect.Sites) (fs []detect.Finding) {
	s := detect.NewSites(loops)
	for _, end := range slots(ev) {
		r := slices.Clone(ev[end])
		if shuffle != nil {
			shuffle(r)
		}
		for _, e := range r {
			s.Record(e.id, e.Evidence)
		}
		s.Slot(end, func(f *detect.Finding) { fs = append(fs, *f) })
		if restart != nil {
			s = restart(s)
		}
	}
	return
}

func TestSharedOscillation(t *testing.T) {
	x := togetherLoops()
	ev := evidenceOf(x)
	fs := judge(t, loopsOf(x), ev, nil, nil)
	if len(fs) == 0 {
		t.Fatal("the common cycle is not found")
	}
	for i := range fs {
		checkFinding(t, &fs[i])
		if fs[i].Kind != detect.SharedOscillation {
			t.Errorf("%s from the site detectors", fs[i].Kind)
		}
	}
	f := fs[len(fs)-1]
	if got := strings.Join(f.Loops, " "); got != "FIC-101 PIC-110 TIC-221" {
		t.Errorf("group %q", got)
	}
	if p, _ := f.Measures.Get("period_s"); math.Abs(p/150-1) > 0.03 {
		t.Errorf("period %.4g s, of the swing 150 s", p)
	}
	if ownTuning(f.Cause) || f.Cause == detect.ValveSticking {
		t.Errorf("a swing from outside is blamed on %q", f.Cause)
	}
	if f.ID != 0 && x[f.ID].loop.Name != f.Loop {
		t.Errorf("id %d is not %s", f.ID, f.Loop)
	}
	raised := 0
	for _, f := range fs {
		if f.Event == detect.Raised {
			raised++
		}
	}
	if raised != 1 {
		t.Errorf("one swing is raised %d times", raised)
	}
}

// Neither the order of records nor that of the loop list matters.
func TestSiteResultsIgnoreOrder(t *testing.T) {
	x := togetherLoops()
	ev := evidenceOf(x)
	want := lines(t, judge(t, loopsOf(x), ev, nil, nil))
	rnd := rand.New(rand.NewPCG(1, 9))
	for range 8 {
		got := lines(t, judge(t, loopsOf(x), ev, func(r []recorded) {
			rnd.Shuffle(len(r), func(i, j int) { r[i], r[j] = r[j], r[i] })
		}, nil))
		if d := differ(want, got); d != "" {
			t.Fatalf("order of records: %s", d)
		}
		y := slices.Clone(x)
		rnd.Shuffle(len(y), func(i, j int) { y[i], y[j] = y[j], y[i] })
		if d := differ(want, lines(t, judge(t, loopsOf(y), evidenceOf(y), nil, nil))); d != "" {
			t.Fatalf("order of the loop list: %s", d)
		}
	}
}

// withSlowLoop leaves one loop of the group evidence in every third slot only.
func withSlowLoop(full map[int64][]recorded) map[int64][]recorded {
	slow := map[int64][]recorded{}
	for i, end := range slots(full) {
		for _, r := range full[end] {
			if r.id != 1 || i%3 == 0 {
				slow[end] = append(slow[end], r)
			}
		}
	}
	return slow
}

// A stop and a start between any two slots changes nothing.
func TestSiteMemoryChangesNothing(t *testing.T) {
	x := togetherLoops()
	loops := loopsOf(x)
	full := evidenceOf(x)
	for name, ev := range map[string]map[int64][]recorded{"every slot": full, "a slow loop": withSlowLoop(full)} {
		want := lines(t, judge(t, loops, ev, nil, nil))
		if len(want) == 0 {
			t.Errorf("%s: nothing is found", name)
		}
		got := lines(t, judge(t, loops, ev, nil, func(s *detect.Sites) *detect.Sites {
			b := s.Save([]byte("x"))
			if string(b[:1]) != "x" {
				t.Fatal("Save does not append")
			}
			n := detect.NewSites(loops)
			if err := n.Load(b[1:]); err != nil {
				t.Fatal(err)
			}
			if !bytes.Equal(n.Save(nil), b[1:]) {
				t.Fatal("what was loaded is saved as another")
			}
			return n
		}))
		if d := differ(want, got); d != "" {
			t.Errorf("%s: %s", name, d)
		}
	}
}

func TestDamagedSiteMemory(t *testing.T) {
	x := togetherLoops()
	s := detect.NewSites(loopsOf(x))
	for _, b := range [][]byte{nil, []byte("{"), []byte("[]"), []byte(`{"Done":5,"Sites":[]}`), []byte(`{"Done":5,"Sites":[7]}`), []byte(`{"Done":5,"Sites":["x"]}`)} {
		before := s.Save(nil)
		if err := s.Load(b); !errors.Is(err, detect.ErrMemory) {
			t.Errorf("%q: %v", b, err)
		}
		if !bytes.Equal(before, s.Save(nil)) {
			t.Errorf("%q changed the site detectors", b)
		}
	}
}

// A slot is judged once, and what comes too late for it is ignored.
func TestSlotIsJudgedOnce(t *testing.T) {
	x := togetherLoops()
	ev := withSlowLoop(evidenceOf(x))
	want := lines(t, judge(t, loopsOf(x), ev, nil, nil))
	s := detect.NewSites(loopsOf(x))
	var fs []detect.Finding
	emit := func(f *detect.Finding) { fs = append(fs, *f) }
	for _, end := range slots(ev) {
		for _, r := range ev[end] {
			s.Record(r.id, r.Evidence)
		}
		s.Slot(end, emit)
		for _, r := range ev[end] { // again, as a lie
			r.Evidence.PeriodS, r.Evidence.Live = 5, false
			s.Record(r.id, r.Evidence)
		}
		s.Slot(end, emit)
		s.Slot(end-detect.SiteSlotMs, emit)
	}
	if d := differ(want, lines(t, fs)); d != "" {
		t.Error(d)
	}
}

// The group is over when the swing is: said once, with its loops.
func TestSharedOscillationEnds(t *testing.T) {
	x := togetherLoops()
	ev := evidenceOf(x)
	ends := slots(ev)
	last := ends[len(ends)-1]
	for k := int64(1); k <= 12; k++ {
		for i := range x {
			ev[last+k*detect.SiteSlotMs] = append(ev[last+k*detect.SiteSlotMs], recorded{collector.LoopID(i), detect.Evidence{Slot: last + k*detect.SiteSlotMs}})
		}
	}
	fs := judge(t, loopsOf(x), ev, nil, nil)
	f := fs[len(fs)-1]
	if f.Event != detect.Cleared || f.Reason != detect.Over || len(f.Loops) != 3 {
		t.Errorf("the end of the common cycle:%s", brief(fs))
	}
	checkFinding(t, &f)
}

// Independent loops whose periods happen to agree are no group: with random
// phases the false share is tiny (methods section 6).
func TestStrangersAreNoGroup(t *testing.T) {
	rnd := rand.New(rand.NewPCG(3, 3))
	var loops []*configs.Loop
	for i := range 60 {
		loops = append(loops, configs.NewLoop(fmt.Sprintf("FIC-%d", 400+i)))
	}
	s := detect.NewSites(loops)
	t0 := int64(1767225600000)
	phase := make([]float64, len(loops))
	for slot := int64(1); slot <= 24; slot++ {
		end := t0 + slot*detect.SiteSlotMs
		for i := range loops {
			e := detect.Evidence{Slot: end, Live: true, PeriodS: 60 * (1 + 0.04*rnd.NormFloat64()), Regular: 6, Amp: 2, Shape: 0.4, Since: t0, Cause: detect.Undetermined}
			at := float64(end)/1000 - 60*rnd.Float64()
			for e.N = 0; e.N < len(e.Cross); e.N++ {
				at -= 30 * (1 + 0.17*rnd.NormFloat64())
				e.Cross[e.N] = at + phase[i]
			}
			s.Record(collector.LoopID(i), e)
		}
		s.Slot(end, func(f *detect.Finding) { t.Errorf("slot %d: %s", slot, f.Text) })
	}
}
