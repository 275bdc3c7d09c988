package daemon

import (
	"math"
	"math/rand/v2"
	"strings"
	"testing"
	"time"

	"midwatch/collector"
	"midwatch/configs"
	"midwatch/detect"
)

// retunedFrames are days of a loop on a lag of 10 min under wandering load, 20 s
// apart; the gain is raised fourfold at the change (days).
func retunedFrames(days, change float64) (out []collector.Frame) {
	const dt = 20.0
	r := rand.New(rand.NewPCG(3, 1))
	pv, i, load := 50.0, 50.0, 0.0
	for t := 0.0; t < days*86400; t += dt {
		kc := 0.5
		if t >= change*86400 {
			kc = 2
		}
		e := 50 - pv
		i += kc * e * dt / 600
		op := i + kc*e
		out = append(out, collector.Frame{Time: epoch.UnixMilli() + int64(t*1000), PV: float32(pv), SP: 50, OP: float32(op), Mode: collector.Auto,
			Gain: float32(kc), Reset: 600, Position: collector.NaN32, Feedforward: collector.NaN32})
		load += -load*dt/1800 + 3*math.Sqrt(2*dt/1800)*r.NormFloat64()
		pv += (op+load-pv)*dt/600 + 0.05*r.NormFloat64()
	}
	return out
}

// Some time after a change of tuning the daemon compares the loop with what it was:
// a first verdict after a day, a last one after a week, or when the next change
// comes; the verdict is kept, and holds over a restart.
func TestComparesAfterAChange(t *testing.T) {
	l := configs.NewLoop("FIC-100")
	l.Source, l.PV, l.SP, l.OP, l.ModeTag = "works", "pv", "sp", "op", "mode"
	l.PVRangeGiven, l.Action, l.SampleS, l.GainPct, l.IdealReset = true, configs.Reverse, 20, 0.5, 600
	r := newRig(t, []*configs.Loop{l})
	r.start()
	if err := r.d.window.Fill(0, retunedFrames(12, 4)); err != nil {
		t.Fatal(err)
	}
	if err := r.d.window.Flush(t.Context()); err != nil {
		t.Fatal(err)
	}
	change := epoch.Add(4 * 24 * time.Hour).UnixMilli()
	hear := func(at int64) {
		t.Helper()
		f := detect.Finding{Subject: detect.Subject{Loop: l.Name}, Loop: l.Name, Kind: detect.TuningChanged, Event: detect.Raised, At: at, Since: at, Cause: detect.Undetermined, Confidence: 1}
		if err := r.d.desk.Hear([]detect.Finding{f}); err != nil {
			t.Fatal(err)
		}
	}
	hear(change)
	for _, c := range []struct {
		days    float64 // of data
		looks   int
		settled bool
		want    string
	}{{4.5, 0, false, ""}, {5.1, 1, false, "PV keeps closer to SP"}, {6, 1, false, "PV keeps closer to SP"}, {11.2, 3, true, "PV keeps closer to SP"}, {12, 3, true, "PV keeps closer to SP"}} {
		r.d.newest.Store(epoch.UnixMilli() + int64(c.days*86400e3))
		if err := (&comparer{r.d, r.d.log}).turn(t.Context()); err != nil {
			t.Fatal(err)
		}
		all, err := r.d.desk.Sessions(0)
		if err != nil || len(all) != 1 {
			t.Fatalf("%+v, %v", all, err)
		}
		if o := all[0].Outcome; o.Looks != c.looks || o.Settled != c.settled || !strings.HasPrefix(o.Verdict, c.want) || (c.want == "") != (o.At == 0) {
			t.Errorf("after %g days: %+v", c.days, o)
		}
	}
	// A further change: what is to be said of the one before is said now, and the
	// new one begins.
	hear(epoch.Add(11*24*time.Hour + 12*time.Hour).UnixMilli())
	r.stop()
	r.start()
	defer r.stop()
	r.d.newest.Store(epoch.Add(12 * 24 * time.Hour).UnixMilli())
	if err := (&comparer{r.d, r.d.log}).turn(t.Context()); err != nil {
		t.Fatal(err)
	}
	p, err := r.d.desk.Past([]string{l.Name}, 0)
	h := p.Loops[l.Name]
	if err != nil || len(h.Sessions) != 2 || !h.Sessions[0].Outcome.Settled || h.Sessions[1].Outcome.At != 0 {
		t.Errorf("%+v, %v", h.Sessions, err)
	}
}

// A loop whose data never suffice is given up at the deadline, and says so.
func TestComparisonHasADeadline(t *testing.T) {
	l := configs.NewLoop("FIC-100")
	l.Source, l.PV, l.SP, l.OP = "works", "pv", "sp", "op"
	l.PVRangeGiven, l.Action, l.SampleS = true, configs.Reverse, 20
	r := newRig(t, []*configs.Loop{l})
	r.start()
	defer r.stop()
	at := epoch.UnixMilli()
	f := detect.Finding{Subject: detect.Subject{Loop: l.Name}, Loop: l.Name, Kind: detect.TuningChanged, Event: detect.Raised, At: at, Since: at, Confidence: 1}
	if err := r.d.desk.Hear([]detect.Finding{f}); err != nil {
		t.Fatal(err)
	}
	for _, days := range []int64{8, 14} {
		r.d.newest.Store(at + days*86400e3)
		if err := (&comparer{r.d, r.d.log}).turn(t.Context()); err != nil {
			t.Fatal(err)
		}
		all, err := r.d.desk.Sessions(0)
		if o := all[0].Outcome; err != nil || o.Settled != (days == 14) || !strings.HasPrefix(o.Verdict, "not enough data yet") {
			t.Errorf("after %d days: %+v, %v", days, all, err)
		}
	}
}

// A loop that was renamed since its tuning was changed is compared all the same.
func TestComparesARenamedLoop(t *testing.T) {
	l := configs.NewLoop("FIC-900")
	l.Was, l.Source, l.PV, l.SP, l.OP, l.ModeTag = "FIC-100", "works", "pv", "sp", "op", "mode"
	l.PVRangeGiven, l.Action, l.SampleS, l.GainPct, l.IdealReset = true, configs.Reverse, 20, 0.5, 600
	r := newRig(t, []*configs.Loop{l})
	r.start()
	defer r.stop()
	if err := r.d.window.Fill(0, retunedFrames(12, 4)); err != nil {
		t.Fatal(err)
	}
	at := epoch.Add(4 * 24 * time.Hour).UnixMilli()
	f := detect.Finding{Subject: detect.Subject{Loop: l.Was}, Loop: l.Was, Kind: detect.TuningChanged, Event: detect.Raised, At: at, Since: at, Confidence: 1}
	if err := r.d.desk.Hear([]detect.Finding{f}); err != nil {
		t.Fatal(err)
	}
	r.d.newest.Store(epoch.Add(12 * 24 * time.Hour).UnixMilli())
	if err := (&comparer{r.d, r.d.log}).turn(t.Context()); err != nil {
		t.Fatal(err)
	}
	p, err := r.d.desk.Past([]string{l.Name}, 0)
	if h := p.Loops[l.Name]; err != nil || len(h.Sessions) != 1 || !strings.HasPrefix(h.Sessions[0].Outcome.Verdict, "PV keeps closer to SP") {
		t.Errorf("%+v, %v", p, err)
	}
}
