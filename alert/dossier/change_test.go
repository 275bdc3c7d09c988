package dossier_test

import (
	"math"
	"regexp"
	"strings"
	"testing"

	"midwatch/alert/dossier"
	"midwatch/collector"
	"midwatch/configs"
	"midwatch/detect"
)

// retuned is a record with a change of the tuning in the middle.
func retuned(days float64, kc, ti float64, seed uint64) works {
	w := quietWeek()
	w.days, w.steps, w.loads, w.tags, w.seed = days, 0, false, true, seed
	w.wander, w.dt, w.loop.SampleS, w.loop.ScanS = 2, 2, 2, 2
	w.kc, w.ti = 0.35, 900
	half := days * 86400 / 2
	w.retune = func(t float64) (float64, float64, bool) { return kc, ti, t > half }
	return w
}

// compared is the comparison around the middle of frames.
func compared(t testing.TB, l *configs.Loop, fs []collector.Frame) dossier.Change {
	t.Helper()
	mid := fs[len(fs)/2].Time
	c, err := dossier.Compare(l, each(fs), mid, mid, detect.Options{})
	if err != nil {
		t.Fatal(err)
	}
	return c
}

func TestBeforeAndAfter(t *testing.T) {
	d := mustBuild(t, retuned(6, 1.3, 150, 1))
	if len(d.Changes) != 1 {
		t.Fatalf("%d changes", len(d.Changes))
	}
	c := d.Changes[0]
	if !c.Holds || c.Ratio.High >= 1 || !strings.Contains(c.Verdict, "closer") {
		t.Errorf("a better tuning: %+v", c)
	}
	if c.Before != "gain 0.35, reset 900 s" || c.After != "gain 1.3, reset 150 s" {
		t.Errorf("tunings %q, %q", c.Before, c.After)
	}
	w := retuned(6, 1.3, 150, 2)
	w.kc, w.ti = 1.3, 150
	half := w.days * 86400 / 2
	w.retune = func(t float64) (float64, float64, bool) { return 0.35, 900, t > half }
	if c := mustBuild(t, w).Changes[0]; !c.Holds || !strings.Contains(c.Verdict, "strays further") {
		t.Errorf("a worse tuning: %+v", c)
	}
	if c := mustBuild(t, retuned(0.08, 1.3, 150, 3)).Changes[0]; c.Holds || !strings.Contains(c.Verdict, "not enough data yet") {
		t.Errorf("two hours: %+v", c)
	}
	busy := retuned(6, 1.3, 150, 4)
	busy.outside = func(t float64) float64 { return 0 }
	fs := busy.frames()
	for i := len(fs) / 2; i < len(fs); i++ { // set points that move all day, after it
		v := float32(0.05 * math.Floor(math.Mod(float64(i)/900, 2)))
		fs[i].SP += v
		fs[i].PV += v
	}
	x := compared(t, busy.loop, fs)
	if x.Holds || len(x.Like) == 0 {
		t.Errorf("sides that are not alike: %+v", x)
	}
}

// Without any change the verdict seldom says that there is one: 90 % ranges, so
// about one in ten, and fewer for the margin of 5 %.
func TestNoChangeIsSeldomOne(t *testing.T) {
	runs, holds, ratios := 40, 0, 0.0
	for seed := range uint64(runs) {
		w := retuned(3, 0.35, 900, 100+seed)
		w.tags = false
		fs := w.frames()
		c := compared(t, w.loop, fs)
		if c.Holds {
			holds++
		}
		if c.Ratio.Known() {
			ratios += math.Log(c.Ratio.Value) / float64(runs)
		}
	}
	t.Logf("%d of %d; mean ratio %.3f", holds, runs, math.Exp(ratios))
	if holds > runs/5 {
		t.Errorf("%d of %d records without a change are called changed", holds, runs)
	}
}

// nearRecord is a reset read within 1 % of the recorded 982 s, as two digits show it.
var nearRecord = regexp.MustCompile(`reset 9[89]0 s`)

// A recorded run whose reset was shortened to a fifth: the readings tell of the
// change, and the verdict that the loop swings since.
func TestSwingSinceTheChange(t *testing.T) {
	l, frames := recorded(t, "te-reset-short-18a.csv.gz", "te18")
	d, err := dossier.Build(dossier.Input{Loop: l, Frames: frames})
	if err != nil {
		t.Fatal(err)
	}
	if len(d.Changes) != 1 {
		t.Fatalf("%d changes", len(d.Changes))
	}
	c := d.Changes[0]
	if !c.Holds || !strings.Contains(c.Verdict, "swings since the change") {
		t.Errorf("%+v", c)
	}
	if got := line(d, "numbers to tune from"); !nearRecord.MatchString(got) || !strings.Contains(got, "s. A step back there needs no model") {
		t.Errorf("numbers: %q", got)
	}
	if !nearRecord.MatchString(c.Before) || !strings.Contains(c.After, "reset 180 s") {
		t.Errorf("from %q to %q; the record: 982 to 180 s", c.Before, c.After)
	}
}
