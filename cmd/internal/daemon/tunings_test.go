package daemon

import (
	"math"
	"slices"
	"testing"
	"time"

	"midwatch/alert/page/api"
	"midwatch/collector"
	"midwatch/detect"
)

// The tuning in service is written down when it is first known and when it
// moves; it outlives a restart and a rename, and goes long after the loop.
func TestTuningIsKept(t *testing.T) {
	loops := manyLoops(2)
	for _, l := range loops {
		l.GainTag, l.ResetTag = l.Name+"/gain", l.Name+"/reset"
	}
	r := newRig(t, loops)
	r.start()
	second := 0
	feed := func(gain float64) {
		for range 3 {
			at := epoch.Add(time.Duration(second) * time.Second)
			samples := manySamples(2, second)
			for id := range loops {
				samples = append([]collector.Sample{
					{Loop: collector.LoopID(id), Role: collector.RoleGain, Time: at.UnixMilli(), Arrived: at.UnixMilli(), Value: gain},
					{Loop: collector.LoopID(id), Role: collector.RoleReset, Time: at.UnixMilli(), Arrived: at.UnixMilli(), Value: 42}}, samples...)
			}
			second++
			r.put("works", at.Add(time.Second), samples)
		}
		r.until("the frames are judged", func() bool {
			v, _ := r.d.View("L00001")
			return v.Last.Time >= epoch.Add(time.Duration(second-2)*time.Second).UnixMilli()
		})
		r.d.keeper.keepTunings(t.Context())
	}
	gains := func(name string) (out []float64) {
		rs, err := r.d.Tuning(t.Context(), name, 0)
		if err != nil {
			t.Fatal(err)
		}
		for _, x := range rs {
			if !x.Read || x.ResetS != 42 {
				t.Errorf("%s: %+v", name, x)
			}
			out = append(out, x.Gain)
		}
		return out
	}
	feed(2)
	feed(2)
	feed(3)
	if got := gains("L00000"); !slices.Equal(got, []float64{2, 3}) {
		t.Fatalf("gains %v, want 2 and 3: the same is not written twice", got)
	}
	r.stop()
	r.config.Loops[0].Name, r.config.Loops[0].Was = "L90000", "L00000"
	r.config.Loops = r.config.Loops[:1]
	r.start()
	defer r.stop()
	if got := gains("L90000"); !slices.Equal(got, []float64{2, 3}) {
		t.Errorf("after a restart under another name: gains %v", got)
	}
	if rs, err := r.d.Tuning(t.Context(), "L90000", epoch.Add(4*time.Second).UnixMilli()); err != nil || len(rs) != 1 {
		t.Errorf("since a time: %v, %v", rs, err)
	}
	r.d.keeper.dropTunings()
	if rs, err := keptTuning(r.d.state, "L00001", "", 0); err != nil || len(rs) != 2 {
		t.Errorf("a loop that left the list has %d readings, %v: it may come back", len(rs), err)
	}
	r.config.Keep.Full, r.config.Keep.Thin, r.config.Keep.Evidence = time.Hour, time.Hour, time.Hour
	r.clock.set(r.clock.Now().Add(3 * time.Hour))
	r.d.keeper.dropTunings()
	if rs, err := keptTuning(r.d.state, "L00001", "", 0); err != nil || len(rs) != 0 {
		t.Errorf("as old as anything is kept: %d readings, %v", len(rs), err)
	}
}

func reading(at int64, gain, reset float64) api.TuningReading {
	return api.TuningReading{Time: at, Gain: gain, GainLow: gain / 1.1, GainHigh: gain * 1.1, ResetS: reset, ResetLow: reset / 1.1, ResetHigh: reset * 1.1}
}

func TestTuningNews(t *testing.T) {
	const hour = 3600e3
	n := math.NaN()
	last := reading(0, 2, 60)
	for name, c := range map[string]struct {
		now  api.TuningReading
		want bool
	}{
		"the same an hour later":     {reading(hour, 2, 60), false},
		"within its range":           {reading(hour, 2.1, 56), false},
		"gain left its range":        {reading(hour, 2.4, 60), true},
		"reset left its range":       {reading(hour, 2, 20), true},
		"a day later":                {reading(24*hour, 2, 60), true},
		"no newer frame":             {reading(0, 9, 9), false},
		"read from tags now":         {api.TuningReading{Time: hour, Gain: 2, ResetS: 60, Read: true}, true},
		"reset is not seen any more": {api.TuningReading{Time: hour, Gain: 2, GainLow: 1.9, GainHigh: 2.1, ResetS: n, ResetLow: n, ResetHigh: n}, false},
	} {
		if got := tuningNews(&last, &c.now); got != c.want {
			t.Errorf("%s: news %v, want %v", name, got, c.want)
		}
	}
}

func TestTuningsAreBounded(t *testing.T) {
	var rs []api.TuningReading
	for i := range int64(5000) {
		rs = boundedTunings(append(rs, reading(i, 1, 60)), 100)
		if len(rs) > maxTunings {
			t.Fatalf("%d readings", len(rs))
		}
	}
	if rs[0].Time < 100 || rs[len(rs)-1].Time != 4999 || rs[len(rs)-2].Time != 4998 {
		t.Errorf("from %d to %d: the newest stay whole", rs[0].Time, rs[len(rs)-1].Time)
	}
	back, err := readTunings(writeTunings(rs))
	if err != nil || len(back) != len(rs) || back[7].Time != rs[7].Time || math.Abs(back[7].ResetHigh-66) > 1e-4 {
		t.Fatalf("%d of %d come back, %v", len(back), len(rs), err)
	}
	for _, b := range [][]byte{{2}, {1, 2, 3}, append(writeTunings(rs), 0)} {
		if _, err := readTunings(b); err == nil {
			t.Errorf("%d bytes of another form are taken", len(b))
		}
	}
	v := detect.View{GainPct: math.NaN()}
	v.Last.Time = 5
	if _, ok := tuningOf(&v); ok {
		t.Error("a reading where nothing is known")
	}
	v.TagReset = 30
	if x, ok := tuningOf(&v); !ok || !x.Read || x.ResetS != 30 || !math.IsNaN(x.Gain) {
		t.Errorf("by tag: %+v", x)
	}
}
