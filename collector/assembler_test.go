package collector

import (
	"fmt"
	"math"
	"math/rand"
	"runtime"
	"slices"
	"strings"
	"testing"
	"time"

	"midwatch/configs"
)

var t0 = time.Date(2026, 1, 5, 0, 0, 0, 0, time.UTC).UnixMilli()

// rig drives an assembler of loops in virtual time; times are seconds after t0.
type rig struct {
	t     testing.TB
	a     *Assembler
	delay float64 // arrival after the sample's time, s
	got   map[LoopID][]Frame
}

func newRig(t testing.TB, edit func(*configs.Loop), n int) *rig {
	t.Helper()
	r := &rig{t: t, delay: 0.2, got: map[LoopID][]Frame{}}
	var loops []*configs.Loop
	for i := range n {
		l := configs.NewLoop(fmt.Sprintf("FIC-%d", 100+i))
		l.SampleS = 1
		if edit != nil {
			edit(l)
		}
		loops = append(loops, l)
	}
	a, err := New(loops, Options{}, func(id LoopID, f *Frame) { r.got[id] = append(r.got[id], *f) })
	if err != nil {
		t.Fatal(err)
	}
	r.a = a
	return r
}

func ms(s float64) int64 { return t0 + int64(math.Round(s*1000)) }

func (r *rig) sample(role Role, at, v float64) Sample {
	return Sample{Role: role, Time: ms(at), Arrived: ms(at + r.delay), Value: v}
}

func (r *rig) feed(s ...Sample)             { r.a.Feed(s) }
func (r *rig) put(role Role, at, v float64) { r.feed(r.sample(role, at, v)) }
func (r *rig) tick(at float64)              { r.tickAs(at, at) }
func (r *rig) tickAs(at, through float64) {
	r.a.Tick(Tick{Through: ms(through), Arrived: ms(at + r.delay), Alive: true})
}

// text writes the frames of loop 0 compactly: time pv/sp/op mode flags.
func (r *rig) text() string {
	var b strings.Builder
	for i, f := range r.got[0] {
		if i > 0 {
			b.WriteString("; ")
			if f.Time <= r.got[0][i-1].Time {
				r.t.Errorf("frame %d goes back: %d after %d", i, f.Time, r.got[0][i-1].Time)
			}
		}
		fmt.Fprintf(&b, "%g %s/%s/%s", float64(f.Time-t0)/1000, num(f.PV), num(f.SP), num(f.OP))
		if f.Mode != ModeUnknown {
			b.WriteString(" " + f.Mode.String())
		}
		for k, w := range FlagWords {
			if f.Flags&(1<<k) != 0 {
				b.WriteString(" " + w)
			}
		}
	}
	return b.String()
}

func num(v float32) string {
	if v != v {
		return "-"
	}
	return fmt.Sprint(v)
}

func (r *rig) want(want string) {
	r.t.Helper()
	if got := r.text(); got != want {
		r.t.Errorf("frames\n got %s\nwant %s", got, want)
	}
}

func exception(l *configs.Loop) { l.Report = configs.Exception }

func TestFrameTakesNewestWithinHalfASample(t *testing.T) {
	r := newRig(t, func(l *configs.Loop) { l.ModeMap = "0=manual;1=auto" }, 1)
	r.put(RoleSP, 0.0, 50)
	r.put(RoleMode, 0.0, 1)
	r.put(RolePV, 1, 49)
	r.put(RoleOP, 1.4, 30)  // one scan with the PV at 1
	r.put(RoleSP, 1.5, 51)  // just within half a sample
	r.put(RoleOP, 1.55, 31) // of the next frame
	r.put(RoleMode, 1.9, 0)
	r.put(RolePV, 2, 48)
	r.put(RolePV, 3, 47)
	r.want("1 49/51/30 auto; 2 48/51/31 manual")
}

func TestPeriodicMakesNothingUp(t *testing.T) {
	r := newRig(t, nil, 1)
	r.a.Join(Group{}, []LoopID{0})
	r.put(RoleSP, 0, 5)
	r.put(RolePV, 1, 1)
	for s := 1.0; s < 20; s++ {
		r.tick(s)
	}
	r.want("1 1/5/-") // a tick closes the last frame, and makes none
	r.put(RolePV, 20, 2)
	r.put(RolePV, 21, 3)
	r.want("1 1/5/-; 20 2/5/-")
}

func TestLateDuplicateBadUncertainLost(t *testing.T) {
	r := newRig(t, nil, 1)
	r.put(RolePV, 1, 1)
	r.put(RolePV, 2, 2) // closes 1
	r.put(RolePV, 0.8, 9)
	r.put(RolePV, 1, 9)
	r.put(RolePV, 2, 9) // time already taken, still open
	bad := r.sample(RolePV, 3, 9)
	bad.Quality = Bad
	r.feed(bad)
	unsure := r.sample(RolePV, 4, 4)
	unsure.Quality, unsure.Lost, unsure.Unconfirmed = Uncertain, true, true
	r.feed(unsure)
	r.put(RolePV, 5, math.Inf(1))
	r.a.Lost(0)
	r.put(RolePV, 6, math.Copysign(0, -1))
	r.put(RolePV, 7, 7)
	// Lost stands on the next frame made after the report.
	r.want("1 1/-/-; 2 2/-/-; 3 -/-/-; 4 4/-/- uncertain lost unconfirmed; 5 -/-/- lost; 6 0/-/-")
	if s := math.Signbit(float64(r.got[0][5].PV)); s {
		t.Error("negative zero in a frame")
	}
	if b := math.Float32bits(r.got[0][2].PV); b != math.Float32bits(NaN32) {
		t.Errorf("NaN %x is not the one NaN", b)
	}
	c := r.a.Counts(0)
	if c.Late != 2 || c.Duplicates != 1 || c.Lost != 2 || c.Frames != 6 {
		t.Errorf("counts %+v", c)
	}
	if r.a.Totals() != c {
		t.Errorf("totals %+v", r.a.Totals())
	}
}

func TestLateValueHoldsFromTheNextFrameOn(t *testing.T) {
	r := newRig(t, nil, 1)
	r.put(RoleSP, 0, 5)
	for s := 1.0; s <= 3; s++ {
		r.put(RolePV, s, s)
	}
	r.put(RoleSP, 1.2, 6) // its frame is closed with 5
	r.put(RoleSP, -7, 4)  // older than what is held: of no use
	r.put(RolePV, 4, 4)
	r.want("1 1/5/-; 2 2/5/-; 3 3/6/-")
	if c := r.a.Counts(0); c.Late != 2 {
		t.Errorf("late %d, want 2", c.Late)
	}
}

func TestBacklogComesTagByTag(t *testing.T) {
	r := newRig(t, nil, 1)
	var batch []Sample
	for _, role := range []Role{RolePV, RoleSP, RoleOP} {
		for s := 1.0; s <= 40; s++ {
			batch = append(batch, r.sample(role, s+0.01*float64(role), s))
		}
	}
	r.feed(batch...)
	if len(r.got[0]) != 39 {
		t.Fatalf("%d frames", len(r.got[0]))
	}
	for _, f := range r.got[0] {
		if f.SP != f.PV || f.OP != f.PV {
			t.Fatalf("a frame mixes scans: %+v", f)
		}
	}
}

func TestExceptionHoldsOnTheGrid(t *testing.T) {
	for _, offset := range []float64{0, 7200, -7200, 90, -90} {
		t.Run(fmt.Sprint("ticks ahead by ", offset), func(t *testing.T) {
			r := newRig(t, exception, 1)
			r.a.Join(Group{}, []LoopID{0})
			r.put(RoleSP, 0, 5)
			r.put(RolePV, 1, 1)
			for s := 1.0; s <= 6; s++ {
				if s == 5 {
					r.put(RolePV, 4.8, 2)
				}
				r.tickAs(s, s+offset)
			}
			for s := 7.0; s <= 9; s++ {
				r.tickAs(s, s+offset)
			}
			full := "1 1/5/-; 2 1/5/- held; 3 1/5/- held; 4 1/5/- held; 4.8 2/5/-; 5.8 2/5/- held; 6.8 2/5/- held; 7.8 2/5/- held"
			got := r.text()
			if !strings.HasPrefix(full, got) {
				t.Fatalf("frames\n got %s\nwant %s", got, full)
			}
			// A foreign clock may cost a sample of delay, no more.
			if n := len(r.got[0]); n < 7 || offset == 0 && n != 8 {
				t.Errorf("%d frames until the tick at 9: %s", n, got)
			}
			if c := r.a.Counts(0); c.Late != 0 {
				t.Errorf("an offset made %d samples late", c.Late)
			}
		})
	}
}

func TestLateServerMakesNoFalseFrames(t *testing.T) {
	r := newRig(t, exception, 1)
	r.a.Join(Group{}, []LoopID{0})
	r.put(RolePV, 1, 1)
	r.tick(1.5)
	r.delay = 20 // the server falls behind, values and ticks alike
	for s := 2.0; s <= 30; s++ {
		r.put(RolePV, s, s)
		r.tick(s)
	}
	for i, f := range r.got[0] {
		if f.Flags != 0 || f.PV != float32(i+1) {
			t.Fatalf("false frame %+v", f)
		}
	}
	if len(r.got[0]) < 28 {
		t.Errorf("%d frames", len(r.got[0]))
	}
}

func TestOldFirstValueIsASeed(t *testing.T) {
	r := newRig(t, exception, 2)
	r.a.Join(Group{}, []LoopID{0, 1})
	seed := r.sample(RolePV, -36000, 7)
	seed.Arrived = ms(0.2)
	r.feed(seed)
	news := r.sample(RolePV, 0.5, 1)
	news.Loop = 1
	r.tick(0)
	r.feed(news) // a loop of the group shows that the clocks agree
	for s := 1.0; s <= 4; s++ {
		r.tick(s)
	}
	r.want("0.5 7/-/- held; 1.5 7/-/- held; 2.5 7/-/- held; 3.5 7/-/- held")

	// Alone, the seed is held after half a minute.
	r = newRig(t, exception, 1)
	r.a.Join(Group{}, []LoopID{0})
	r.feed(seed)
	for s := 0.0; s <= 32; s++ {
		r.tick(s)
	}
	r.want("29.5 7/-/- held; 30.5 7/-/- held; 31.5 7/-/- held")
}

func TestLinkLost(t *testing.T) {
	for _, rep := range []configs.Report{configs.Periodic, configs.Exception} {
		r := newRig(t, func(l *configs.Loop) { l.Report = rep }, 1)
		r.a.Join(Group{}, []LoopID{0})
		for s := 1.0; s <= 3; s++ {
			r.put(RolePV, s, s)
			r.tick(s)
		}
		r.a.Tick(Tick{Arrived: ms(4), Alive: false})
		for s := 4.0; s < 63; s++ {
			r.a.Advance(ms(s))
		}
		r.want("1 1/-/-; 2 2/-/-; 3 3/-/-"[:len(r.text())]) // the grace: the server may have it all queued
		r.a.Advance(ms(64.1))
		r.a.Advance(ms(90))
		r.want("1 1/-/-; 2 2/-/-; 3 3/-/-; 3.5 -/-/- gap")
		r.put(RolePV, 100, 4)
		r.tick(100)
		r.put(RolePV, 101, 5)
		r.tick(101)
		r.put(RolePV, 102, 6)
		r.tick(102)
		got := r.text()
		if !strings.Contains(got, "; 100 4/-/- gap; 101 5/-/-") {
			t.Errorf("%v: %s", rep, got)
		}
	}
}

func TestLinkBackWithinTheGraceLosesNothing(t *testing.T) {
	r := newRig(t, exception, 1)
	r.a.Join(Group{}, []LoopID{0})
	r.put(RolePV, 1, 1)
	r.tick(1)
	r.put(RolePV, 2, 2)
	r.tick(2)
	r.a.Tick(Tick{Arrived: ms(3), Alive: false})
	r.a.Advance(ms(40))
	r.delay = 40 // the queue of the server
	for s := 3.0; s < 6; s++ {
		r.put(RolePV, s, s)
	}
	r.tick(43)
	got := r.text()
	if !strings.HasPrefix(got, "1 1/-/-; 2 2/-/-; 3 3/-/-; 4 4/-/-; 5 5/-/-; 6 5/-/- held") || strings.Contains(got, "gap") {
		t.Errorf("%s", got)
	}
}

func TestResumedSessionHoldsAgainAfterAGap(t *testing.T) {
	r := newRig(t, exception, 1)
	r.a.Join(Group{}, []LoopID{0})
	r.put(RolePV, 1, 1)
	r.tick(1)
	r.tick(2)
	r.a.Tick(Tick{Arrived: ms(3), Alive: false})
	r.a.Advance(ms(50))
	r.a.Advance(ms(80))
	r.tick(101)
	r.tick(102)
	r.want("1 1/-/-; 1.5 -/-/- gap; 100.5 1/-/- held gap; 101.5 1/-/- held")

	// A new subscription: the value must come anew.
	r.a.Join(Group{}, []LoopID{0})
	r.tick(103)
	r.tick(104)
	if n := len(r.got[0]); n != 4 {
		t.Errorf("held without a value: %s", r.text())
	}
	r.feed(Sample{Role: RolePV, Time: ms(1), Arrived: ms(104.2), Value: 1}) // it did not change
	r.tick(105)
	r.tick(106)
	if got := r.text(); !strings.HasSuffix(got, "; 104.5 1/-/- held gap; 105.5 1/-/- held") {
		t.Errorf("%s", got)
	}
}

func TestSilence(t *testing.T) {
	t.Run("periodic", func(t *testing.T) {
		r := newRig(t, nil, 2)
		r.put(RolePV, 1, 1)
		r.put(RolePV, 2, 2)
		other := r.sample(RolePV, 0, 0)
		other.Loop = 1
		for s := 3.0; s < 40; s++ { // time is seen by the other loop only
			other.Time, other.Arrived = ms(s), ms(s+0.2)
			r.feed(other)
		}
		r.want("1 1/-/-; 2 2/-/-; 2.5 -/-/- gap")
		r.put(RolePV, 41, 3)
		r.put(RolePV, 42, 4)
		r.want("1 1/-/-; 2 2/-/-; 2.5 -/-/- gap; 41 3/-/- gap")
	})
	t.Run("all silent", func(t *testing.T) {
		r := newRig(t, nil, 1)
		r.put(RolePV, 1, 1)
		r.put(RolePV, 500, 2)
		r.put(RolePV, 501, 3)
		r.want("1 1/-/-; 1.5 -/-/- gap; 500 2/-/- gap")
	})
	t.Run("exception holds while the group lives", func(t *testing.T) {
		r := newRig(t, exception, 1)
		r.a.Join(Group{}, []LoopID{0})
		r.put(RolePV, 1, 1)
		for s := 1.0; s <= 600; s++ {
			r.tick(s)
		}
		if n := len(r.got[0]); n != 599 || r.a.Counts(0).Gaps != 0 {
			t.Errorf("%d frames, %d gaps", n, r.a.Counts(0).Gaps)
		}
		for s := 601.0; s < 640; s++ {
			r.a.Advance(ms(s)) // now the group is silent
		}
		if r.a.Counts(0).Gaps != 1 {
			t.Errorf("no gap: %s", r.text()[len(r.text())-60:])
		}
	})
	t.Run("silence_s given", func(t *testing.T) {
		r := newRig(t, func(l *configs.Loop) { l.Report = configs.Exception; l.SilenceS = 10 }, 1)
		r.a.Join(Group{}, []LoopID{0})
		r.put(RolePV, 1, 1)
		for s := 1.0; s <= 60; s++ {
			r.tick(s)
		}
		if c := r.a.Counts(0); c.Gaps != 1 || c.Held > 11 {
			t.Errorf("%+v", c)
		}
	})
	t.Run("a jump of the wall clock silences nobody", func(t *testing.T) {
		r := newRig(t, nil, 1)
		r.put(RolePV, 1, 1)
		r.a.Advance(ms(1))
		r.a.Advance(ms(7200))
		r.a.Advance(ms(7201))
		r.a.Advance(ms(3))
		r.want("")
	})
}

func TestAliveTag(t *testing.T) {
	r := newRig(t, func(l *configs.Loop) { l.Report = configs.Exception; l.AliveTag = "kf/alive" }, 1)
	r.a.Join(Group{}, []LoopID{0})
	r.put(RolePV, 1, 1)
	for s := 1.0; s <= 4; s++ {
		r.tick(s) // the connection lives: that proves nothing
	}
	r.want("")
	for s := 1.0; s <= 4; s++ {
		r.put(RoleAlive, s, s)
	}
	r.want("1 1/-/-; 2 1/-/- held; 3 1/-/- held")
	for s := 5.0; s <= 40; s++ {
		r.tick(s)
	}
	r.want("1 1/-/-; 2 1/-/- held; 3 1/-/- held; 3.5 -/-/- gap")
}

func TestClock(t *testing.T) {
	t.Run("1970 and next year", func(t *testing.T) {
		for _, wrong := range []int64{0, 5_000_000, time.Date(2027, 1, 5, 0, 0, 0, 0, time.UTC).UnixMilli()} {
			r := newRig(t, nil, 1)
			r.put(RolePV, 1, 1)
			r.put(RolePV, 2, 2)
			for s := 3.0; s <= 5; s++ {
				r.feed(Sample{Role: RolePV, Time: wrong + int64(s*1000), Arrived: ms(s), Value: s})
			}
			r.put(RolePV, 6, 6)
			r.put(RolePV, 7, 7)
			r.want("1 1/-/-; 2 2/-/- clock-step; 3 3/-/-; 4 4/-/-; 5 5/-/- clock-step; 6 6/-/-")
			if c := r.a.Counts(0); c.Clock != 4 || c.Late != 0 {
				t.Errorf("%+v", c)
			}
		}
	})
	t.Run("set back an hour", func(t *testing.T) {
		r := newRig(t, nil, 1)
		r.put(RoleSP, 1, 5)
		for s := 1.0; s <= 3; s++ {
			r.put(RolePV, s, s)
		}
		for s := 4.0; s <= 9; s++ {
			r.feed(Sample{Role: RoleSP, Time: ms(s - 3600), Arrived: ms(s), Value: s},
				Sample{Role: RolePV, Time: ms(s - 3600), Arrived: ms(s), Value: s})
		}
		r.put(RolePV, 10, 10) // mended
		r.put(RolePV, 11, 11)
		r.want("1 1/5/-; 2 2/5/-; 3 3/5/- clock-step; 6 6/5/-; 7 7/7/-; 8 8/8/-; 9 9/9/- clock-step; 10 10/9/-")
	})
	t.Run("one straggler is no step", func(t *testing.T) {
		r := newRig(t, nil, 1)
		for s := 1.0; s <= 300; s++ {
			r.put(RolePV, s, s)
			if s > 200 {
				r.feed(Sample{Role: RolePV, Time: ms(s - 100), Arrived: ms(s), Value: -1})
			}
		}
		for _, f := range r.got[0] {
			if f.PV < 0 || f.Flags != 0 {
				t.Fatalf("%+v", f)
			}
		}
	})
	t.Run("a value from the near future does not carry the loop along", func(t *testing.T) {
		r := newRig(t, nil, 1)
		for s := 1.0; s <= 400; s++ {
			r.put(RolePV, s, s)
			if s == 10 {
				r.feed(Sample{Role: RolePV, Time: ms(s + 240), Arrived: ms(s), Value: -1})
			}
		}
		n := len(r.got[0])
		if f := r.got[0][n-1]; f.Time != ms(399) || f.PV != 399 || n != 399 {
			t.Errorf("%d frames, the last %+v", n, f)
		}
		for i, f := range r.got[0] {
			if f.PV != float32(i+1) && i+1 != 250 || f.Time != ms(float64(i+1)) {
				t.Fatalf("frame %d: %+v", i, f)
			}
		}
	})
	t.Run("set forward", func(t *testing.T) {
		r := newRig(t, nil, 1)
		r.put(RolePV, -3600, 1)
		r.feed(Sample{Role: RolePV, Time: ms(-3599), Arrived: ms(-3599), Value: 2})
		r.feed(Sample{Role: RolePV, Time: ms(1), Arrived: ms(-3598), Value: 3}) // more than 5 min after arrival
		r.feed(Sample{Role: RolePV, Time: ms(2), Arrived: ms(-3597), Value: 4})
		r.want("-3600 1/-/-; -3599 2/-/- clock-step; -3598 3/-/-")
	})
	t.Run("own clock in 1970", func(t *testing.T) {
		r := newRig(t, nil, 1)
		for s := 1.0; s <= 4; s++ {
			r.feed(Sample{Role: RolePV, Time: ms(s), Arrived: int64(s * 1000), Value: s})
		}
		r.want("1 1/-/-; 2 2/-/-; 3 3/-/-")
	})
	t.Run("clock of the ticks set", func(t *testing.T) {
		for _, step := range []float64{-3600, 3600} {
			r := newRig(t, exception, 1)
			r.a.Join(Group{}, []LoopID{0})
			for s := 1.0; s <= 20; s++ {
				r.put(RolePV, s-0.3, s)
				if s < 10 {
					r.tick(s)
				} else {
					r.tickAs(s, s+step)
				}
			}
			c := r.a.Counts(0)
			if c.Late != 0 || c.Held != 0 || c.Frames < 18 || c.Clock != 1 {
				t.Errorf("step %g: %+v %s", step, c, r.text())
			}
		}
	})
}

func TestThinning(t *testing.T) {
	r := newRig(t, func(l *configs.Loop) { l.SampleS = 10 }, 1)
	for s := 0.0; s < 200; s++ {
		r.put(RolePV, s, s)
	}
	frames := r.got[0]
	var kept []Frame
	for _, f := range frames {
		if f.Time >= ms(50) {
			kept = append(kept, f)
		}
	}
	if len(kept) != 15 {
		t.Fatalf("%d frames in 150 s", len(kept))
	}
	for i, f := range kept[1:] {
		if f.Flags != Thinned || f.Time-kept[i].Time != 10_000 {
			t.Fatalf("%+v after %+v", f, kept[i])
		}
	}
	if c := r.a.Counts(0); c.Thinned+c.Frames != 199 {
		t.Errorf("%+v", c)
	}

	// Three times as fast is kept.
	r = newRig(t, func(l *configs.Loop) { l.SampleS = 3 }, 1)
	for s := 0.0; s < 100; s++ {
		r.put(RolePV, s, s)
	}
	if len(r.got[0]) != 99 {
		t.Errorf("%d frames", len(r.got[0]))
	}
}

func TestNewQualityUnderTheOldTime(t *testing.T) {
	r := newRig(t, exception, 1)
	r.a.Join(Group{}, []LoopID{0})
	r.put(RoleSP, 0, 5)
	r.put(RolePV, 1, 1)
	r.tick(1)
	r.tick(2)
	bad := []Sample{{Role: RolePV, Quality: Bad, Time: ms(1), Arrived: ms(2.5), Value: 1}, {Role: RoleSP, Quality: Bad, Time: ms(0), Arrived: ms(2.5)}}
	r.feed(bad...)
	r.feed(bad...)
	r.tick(3)
	r.tick(4)
	r.feed(Sample{Role: RolePV, Time: ms(1), Arrived: ms(4.5), Value: 1})
	r.tick(5)
	r.want("1 1/5/-; 2 -/-/- held; 3 -/-/- held; 4 1/-/- held")
	if c := r.a.Counts(0); c.Duplicates != 2 || c.Late != 0 {
		t.Errorf("%+v", c)
	}
}

func TestAdopt(t *testing.T) {
	r := newRig(t, exception, 2)
	g := Group{1, 0}
	r.a.Join(g, []LoopID{0, 1})
	r.put(RoleSP, 0, 5) // will not change again
	r.put(RolePV, 1, 1)
	tick := func(at float64) { r.a.Tick(Tick{Group: g, Through: ms(at), Arrived: ms(at + 0.2), Alive: true}) }
	tick(2)
	before := r.a
	renumbered := newRig(t, exception, 3)
	r.a, renumbered.got = renumbered.a, r.got
	r.a.emit = func(id LoopID, f *Frame) { r.got[id-2] = append(r.got[id-2], *f) }
	r.a.Adopt(2, before, 0)
	r.a.Adopt(0, before, 77) // a loop that was not there
	r.a.Join(g, []LoopID{2})
	r.feed(Sample{Loop: 2, Role: RolePV, Time: ms(2.5), Arrived: ms(2.6), Value: 2})
	tick(3)
	tick(4)
	r.want("1 1/5/-; 2.5 2/5/-; 3.5 2/5/- held"[:len(r.text())])
	if len(r.got[0]) < 2 || r.a.Counts(2).Samples != 3 {
		t.Errorf("%s %+v", r.text(), r.a.Counts(2))
	}
}

// A long run of a server whose clock is neither that of the controllers nor
// keeps pace with it: no sample is late, nothing is made up, frames lag little.
func TestForeignClocksForADay(t *testing.T) {
	for _, c := range []struct{ offset, drift, news float64 }{
		{0, 0, 0.05}, {-3600, 0, 0.2}, {240, 0, 0.05}, {0, 100e-6, 0.05}, {0, -100e-6, 0.05}, {-20, 50e-6, 0.003}, {40, -50e-6, 0.003},
	} {
		rng := rand.New(rand.NewSource(3))
		r := newRig(t, exception, 1)
		r.a.Join(Group{}, []LoopID{0})
		var changes []openPV
		worst := 0.0
		for s := 1.0; s < 86_400; s++ {
			value := func(at float64) float64 { return at + c.offset + c.drift*at } // the controllers' clock
			var batch []Sample
			if s == 1 || rng.Float64() < c.news {
				x := Sample{Role: RolePV, Time: ms(value(s - 0.9*rng.Float64())), Arrived: ms(s + 0.3*rng.Float64()), Value: float64(len(changes))}
				changes = append(changes, openPV{x.Time, float32(x.Value), 0})
				batch = append(batch, x)
			}
			r.feed(batch...)
			r.a.Tick(Tick{Through: ms(s), Arrived: ms(s + 0.31), Alive: true})
			if n := len(r.got[0]); n > 0 && s > 10 {
				worst = max(worst, value(s)-float64(r.got[0][n-1].Time-t0)/1000)
			}
		}
		k := 0
		for i, f := range r.got[0] {
			for k+1 < len(changes) && changes[k+1].time <= f.Time {
				k++
			}
			if f.PV != changes[k].value {
				t.Errorf("%+v: frame %d at %d shows %g, the value was %g", c, i, f.Time-t0, f.PV, changes[k].value)
				break
			}
		}
		n := r.a.Counts(0)
		if n.Late+n.Gaps+n.Clock != 0 || n.Frames < 80_000 {
			t.Errorf("%+v: %+v", c, n)
		}
		// What equal clocks may be apart, and what drifts in 64 news.
		if limit := 8 + 2*math.Abs(c.drift)*64/c.news; worst > limit {
			t.Errorf("%+v: frames lag %.1f s, want less than %.1f s", c, worst, limit)
		}
	}
}

func TestTuningTags(t *testing.T) {
	r := newRig(t, func(l *configs.Loop) { l.GainUnit, l.ResetUnit = configs.GainBand, configs.ResetRepeatsPerMinute }, 1)
	r.put(RoleGain, 0, 125)
	r.put(RoleReset, 0, 2)
	r.put(RolePV, 1, 1)
	r.put(RolePV, 2, 1)
	r.put(RoleReset, 3, 0)
	for s := 3.0; s < 6; s++ {
		r.put(RolePV, s, 1)
	}
	var got []string
	for _, f := range r.got[0] {
		got = append(got, fmt.Sprint(f.Gain, "/", f.Reset))
	}
	if want := []string{"0.8/30", "0/0", "0/1e+09", "0/0"}; !slices.Equal(got, want) {
		t.Errorf("got %v, want %v", got, want)
	}
}

func TestReadTuning(t *testing.T) {
	n := math.NaN()
	for _, c := range []struct {
		name        string
		edit        func(*configs.Loop)
		gain, reset float64
		wantG       float32
		wantR       float32
	}{
		{"plain", nil, 2, 30, 2, 30},
		{"sign is action", nil, -2, 30, 2, 30},
		{"only gain", nil, 2, n, 2, 0},
		{"only reset", nil, n, 30, 0, 30},
		{"reset 0 s is not known", nil, 1, 0, 1, 0},
		{"minutes", func(l *configs.Loop) { l.ResetUnit = configs.ResetMinutes }, 1, 0.5, 1, 30},
		{"per span", func(l *configs.Loop) { l.GainUnit = configs.GainOPPerPV; l.PVHigh = 200 }, 0.6, 30, 1.2, 30},
		{"series", func(l *configs.Loop) { l.Form = configs.Series; l.RateS = 2 }, 2, 8, 2.5, 10},
		{"infinite", nil, math.Inf(1), math.Inf(1), 0, integralOff},
		{"zero gain", nil, 0, 5, 0, 5},
	} {
		l := configs.NewLoop("AIC-204")
		if c.edit != nil {
			c.edit(l)
		}
		if g, r := readTuning(l, c.gain, c.reset); g != c.wantG || r != c.wantR {
			t.Errorf("%s: %g/%g, want %g/%g", c.name, g, r, c.wantG, c.wantR)
		}
	}
}

func TestConditions(t *testing.T) {
	cond := func(s string) configs.Condition {
		c, err := configs.ParseCondition(s)
		if err != nil {
			t.Fatal(err)
		}
		return c
	}
	r := newRig(t, func(l *configs.Loop) {
		l.ActiveWhen = cond("kf/pump = running and kf/flow > 5")
		l.SuppressWhen = cond("kf/cip = 1 or kf/test = on")
	}, 1)
	running := WordMap("Running")
	step := 0.0
	flags := func() string {
		step++
		r.put(RolePV, step, 1)
		r.put(RolePV, step+0.9, 1)
		step++
		r.put(RolePV, step, 1)
		f := r.got[0][len(r.got[0])-1].Flags
		return fmt.Sprint(f&Inactive != 0, f&Suppressed != 0)
	}
	for _, c := range []struct {
		name string
		role Role
		v    float64
		bad  bool
		want string // inactive, suppressed
	}{
		{"nothing known", RoleSP, 1, false, "false false"},
		{"word differs", CondRole(false, 0), running.Code("stopped"), false, "true false"},
		{"word same, flow unknown", CondRole(false, 0), running.Code("RUNNING"), false, "false false"},
		{"flow low", CondRole(false, 1), 4, false, "true false"},
		{"flow high", CondRole(false, 1), 6, false, "false false"},
		{"cip", CondRole(true, 0), 1, false, "false true"},
		{"cip off", CondRole(true, 0), 0, false, "false false"},
		{"test on", CondRole(true, 1), 1, false, "false true"},
		{"test bad", CondRole(true, 1), 1, true, "false false"},
		{"flow bad", CondRole(false, 1), 0, true, "false false"},
	} {
		s := r.sample(c.role, step, c.v)
		s.Time += 1 // newer than what was given at the step
		if c.bad {
			s.Quality = Bad
		}
		r.feed(s)
		if got := flags(); got != c.want {
			t.Errorf("%s: inactive, suppressed = %s, want %s", c.name, got, c.want)
		}
	}
}

func TestExceptionWithoutTicksMakesNothingUp(t *testing.T) {
	r := newRig(t, exception, 1)
	r.put(RolePV, 1, 1)
	r.put(RolePV, 5, 2)
	r.put(RolePV, 9.2, 3)
	// A PV shows that all before it came: the loop was at its old value.
	r.want("1 1/-/-; 2 1/-/- held; 3 1/-/- held; 4 1/-/- held; 5 2/-/-; 6 2/-/- held; 7 2/-/- held; 8 2/-/- held")
}

func TestShardsOfAnAssembler(t *testing.T) {
	var loops []*configs.Loop
	for i := range 7 {
		loops = append(loops, configs.NewLoop(fmt.Sprint("TIC-", i)))
	}
	got := map[LoopID]int{}
	for k := range 3 {
		a, err := New(loops, Options{Shard: k, Shards: 3}, func(id LoopID, f *Frame) {
			if int(id)%3 != k || f.PV != float32(id) {
				t.Errorf("loop %d of shard %d: %g", id, k, f.PV)
			}
			got[id]++
		})
		if err != nil {
			t.Fatal(err)
		}
		for s := 1.0; s <= 3; s++ {
			for id := range LoopID(9) {
				a.Feed([]Sample{{Loop: id, Role: RolePV, Time: ms(s), Arrived: ms(s), Value: float64(id)}})
			}
		}
		// Seven loops in all; the samples of the others are counted.
		mine := (7 - k + 2) / 3
		if c := a.Totals(); c.Foreign != uint64(27-3*mine) || c.Samples != uint64(3*mine) {
			t.Errorf("shard %d: %+v", k, c)
		}
	}
	if len(got) != 7 {
		t.Errorf("%v", got)
	}
	a, _ := New(loops, Options{}, func(LoopID, *Frame) {})
	a.Feed([]Sample{{Role: RoleCond0 + MaxConds, Time: t0, Arrived: t0}})
	if a.Totals().Foreign != 1 {
		t.Error("a role beyond the last is taken")
	}
}

func TestNewRefuses(t *testing.T) {
	bad := configs.NewLoop("AIC-204")
	bad.ModeMap = "0=asleep"
	if _, err := New([]*configs.Loop{bad}, Options{}, nil); err == nil || !strings.Contains(err.Error(), `loop AIC-204: mode_map: "asleep" is no mode`) {
		t.Errorf("%v", err)
	}
	many := configs.NewLoop("AIC-204")
	many.ActiveWhen.Terms = make([]configs.Term, 5)
	if _, err := New([]*configs.Loop{many}, Options{}, nil); err == nil || !strings.Contains(err.Error(), "at most 4") {
		t.Errorf("%v", err)
	}
}

func TestModeOfTwoTags(t *testing.T) {
	r := newRig(t, func(l *configs.Loop) { l.ModeMap = "0/0=manual;1/0=auto;1/1=cascade" }, 1)
	r.put(RoleMode, 0, 1)
	r.put(RoleMode2, 0, 0)
	r.put(RolePV, 1, 1)
	r.put(RoleMode2, 1.8, 1)
	r.put(RolePV, 2, 2)
	r.put(RolePV, 3, 3)
	r.want("1 1/-/- auto; 2 2/-/- cascade")
}

// Whatever the order and the cut of arrival within what the watermark has not
// passed, the frames are the same.
func TestArrivalOrderDoesNotMatter(t *testing.T) {
	rng := rand.New(rand.NewSource(7))
	type delivery struct {
		samples []Sample
		tick    int64
	}
	for _, rep := range []configs.Report{configs.Periodic, configs.Exception} {
		var blocks []delivery
		for s := 0; s < 300; s++ {
			var d delivery
			at := float64(s)
			// Everything that belongs before half past the last PV of the
			// block comes with the block.
			for range 1 + rng.Intn(3) {
				d.samples = append(d.samples, Sample{Role: RoleSP + Role(rng.Intn(2)), Time: ms(at - 0.49 + 0.97*rng.Float64()), Value: rng.Float64()})
			}
			if rep == configs.Periodic || rng.Intn(3) == 0 {
				d.samples = append(d.samples, Sample{Role: RolePV, Time: ms(at), Value: rng.Float64()})
			}
			d.tick = ms(at + 0.49)
			for i := range d.samples {
				d.samples[i].Arrived = ms(at + 0.6)
			}
			blocks = append(blocks, d)
		}
		run := func(shuffle bool) []Frame {
			r := newRig(t, func(l *configs.Loop) { l.Report = rep }, 1)
			r.a.Join(Group{}, []LoopID{0})
			r.feed(Sample{Role: RolePV, Time: ms(-1), Arrived: ms(-0.9), Value: 1})
			r.a.Tick(Tick{Through: ms(-0.51), Arrived: ms(-0.4), Alive: true})
			for _, b := range blocks {
				s := slices.Clone(b.samples)
				if shuffle {
					rng.Shuffle(len(s), func(i, k int) { s[i], s[k] = s[k], s[i] })
				}
				for len(s) > 0 {
					n := len(s)
					if shuffle {
						n = 1 + rng.Intn(len(s))
					}
					r.feed(s[:n]...)
					s = s[n:]
				}
				r.a.Tick(Tick{Through: b.tick, Arrived: ms(float64(b.tick-t0)/1000 + 0.2), Alive: true})
			}
			return r.got[0]
		}
		same := func(x, y Frame) bool { // NaN is NaN here
			return fmt.Sprint(x) == fmt.Sprint(y)
		}
		want := run(false)
		if len(want) < 295 {
			t.Fatalf("%d frames", len(want))
		}
		for range 20 {
			if got := run(true); !slices.EqualFunc(got, want, same) {
				for i := range want {
					if i >= len(got) || !same(got[i], want[i]) {
						t.Fatalf("report %d, frame %d of %d/%d:\n got %v\nwant %v", rep, i, len(got), len(want), got[min(i, len(got)-1)], want[i])
					}
				}
				t.Fatal("more frames")
			}
		}
	}
}

func TestSteadyStateAllocatesNothing(t *testing.T) {
	batch, feed := loadOf(t, 100)
	for range 20 {
		feed(batch)
	}
	if n := testing.AllocsPerRun(100, func() { feed(batch) }); n != 0 {
		t.Errorf("%g allocations per batch", n)
	}
}

// What a loop costs in the assembler, its settings and its waiting values
// included.
func TestMemoryPerLoop(t *testing.T) {
	const n = 2000
	batch, feed := loadOf(t, n)
	heap := func() uint64 {
		var m runtime.MemStats
		runtime.GC()
		runtime.ReadMemStats(&m)
		return m.HeapAlloc
	}
	_ = batch
	var loops []*configs.Loop
	for i := range n {
		l := configs.NewLoop(fmt.Sprint("FIC-", i))
		l.SampleS = 1
		loops = append(loops, l)
	}
	before := heap()
	a, err := New(loops, Options{}, func(LoopID, *Frame) {})
	if err != nil {
		t.Fatal(err)
	}
	for s := int64(0); s < 10; s++ {
		for k := 0; k < len(batch); k += 100 { // small batches: their own memory is not at issue
			for i := range batch[k : k+100] {
				batch[k+i].Time += 1000
				batch[k+i].Arrived += 1000
			}
			a.Feed(batch[k : k+100])
		}
	}
	per := float64(heap()-before) / n
	t.Logf("%.0f bytes per loop", per)
	if per > 600 {
		t.Errorf("%.0f bytes per loop", per)
	}
	runtime.KeepAlive(a)
	runtime.KeepAlive(feed)
}

// loadOf makes a batch of one scan of n loops (PV, SP, OP, tag by tag) and a
// function that moves it on by a second and feeds it.
func loadOf(t testing.TB, n int) ([]Sample, func([]Sample)) {
	var loops []*configs.Loop
	for i := range n {
		l := configs.NewLoop(fmt.Sprint("FIC-", i))
		l.SampleS = 1
		loops = append(loops, l)
	}
	a, err := New(loops, Options{}, func(LoopID, *Frame) {})
	if err != nil {
		t.Fatal(err)
	}
	var batch []Sample
	for _, role := range []Role{RolePV, RoleSP, RoleOP} {
		for i := range n {
			batch = append(batch, Sample{Loop: LoopID(i), Role: role, Time: t0 + int64(i%7), Arrived: t0 + 300, Value: float64(i)})
		}
	}
	return batch, func(b []Sample) {
		for i := range b {
			b[i].Time += 1000
			b[i].Arrived += 1000
		}
		a.Feed(b)
	}
}

// Loops that report changes only and are silent: one held frame per tick each.
func BenchmarkHeld(b *testing.B) {
	const n = 1000
	r := newRig(b, exception, n)
	r.a.emit = func(LoopID, *Frame) {}
	var ids []LoopID
	for i := range LoopID(n) {
		ids = append(ids, i)
	}
	r.a.Join(Group{}, ids)
	for i := range LoopID(n) {
		r.feed(Sample{Loop: i, Role: RolePV, Time: ms(0), Arrived: ms(0.1), Value: 1})
	}
	s := 0.0
	b.ReportAllocs()
	for b.Loop() {
		s++
		r.tick(s)
	}
	b.ReportMetric(float64(b.Elapsed().Nanoseconds())/float64(b.N)/n, "ns/frame")
}

func BenchmarkAssembler(b *testing.B) {
	for _, n := range []int{100, 10_000} {
		b.Run(fmt.Sprint("loops=", n), func(b *testing.B) {
			batch, feed := loadOf(b, n)
			feed(batch)
			b.ReportAllocs()
			b.ResetTimer()
			for b.Loop() {
				feed(batch)
			}
			b.ReportMetric(float64(b.Elapsed().Nanoseconds())/float64(b.N)/float64(len(batch)), "ns/sample")
		})
	}
}
