package detect_test

import (
	"bytes"
	"encoding/json"
	"math"
	"math/rand/v2"
	"slices"
	"strings"
	"testing"

	"midwatch/collector"
	"midwatch/configs"
	"midwatch/detect"
)

// lines are findings as replay writes them.
func lines(t testing.TB, fs []detect.Finding) []byte {
	t.Helper()
	var b bytes.Buffer
	e := json.NewEncoder(&b)
	for i := range fs {
		if err := e.Encode(&fs[i]); err != nil {
			t.Fatal(err)
		}
	}
	return b.Bytes()
}

// differ says where two sets of lines part; empty when they are the same.
func differ(a, b []byte) string {
	if bytes.Equal(a, b) {
		return ""
	}
	x, y := strings.Split(string(a), "\n"), strings.Split(string(b), "\n")
	for i := range x {
		if i >= len(y) || x[i] != y[i] {
			return x[i] + "\nbut\n" + strings.Join(y[min(i, len(y)):min(i+1, len(y))], "")
		}
	}
	return "more lines: " + y[len(x)-1]
}

func TestSameFramesSameFindings(t *testing.T) {
	for _, x := range fixtures() {
		if d := differ(lines(t, replay(x.loop, x.frames)), lines(t, replay(x.loop, x.frames))); d != "" {
			t.Errorf("%s: %s", x.kind, d)
		}
	}
}

// A memory changes nothing: a replay that is cut anywhere, saved and loaded into a
// new watch says byte for byte what one that was not cut says, and so do the view
// and what is restated.
func TestMemoryChangesNothing(t *testing.T) {
	rnd := rand.New(rand.NewPCG(5, 5))
	for _, x := range fixtures() {
		whole, want := watchOver(x.loop, x.frames)
		t.Run(string(x.kind), func(t *testing.T) {
			cuts := []int{0, 1, 5, 20, len(x.frames) - 1}
			for range 40 {
				cuts = append(cuts, rnd.IntN(len(x.frames)))
			}
			for _, f := range want { // and just around what is said
				for i := range x.frames {
					if x.frames[i].Time >= f.At {
						cuts = append(cuts, i, min(i+1, len(x.frames)))
						break
					}
				}
			}
			slices.Sort(cuts)
			w := detect.New(x.loop, 0, detect.Options{})
			var got []detect.Finding
			emit := func(f *detect.Finding) { got = append(got, *f) }
			for i := range x.frames {
				for len(cuts) > 0 && cuts[0] == i {
					cuts = cuts[1:]
					b := w.Save(nil)
					if th, err := detect.MemoryThrough(b); err != nil || th != w.Through() {
						t.Fatalf("memory says through %d, %v; the watch %d", th, err, w.Through())
					}
					before := w
					w = detect.New(x.loop, 0, detect.Options{})
					if err := w.Load(b); err != nil {
						t.Fatal(err)
					}
					if w.Through() != before.Through() {
						t.Fatalf("through %d, was %d", w.Through(), before.Through())
					}
					if !bytes.Equal(w.Save(nil), b) {
						t.Fatal("a memory that was loaded is saved as another")
					}
					if d := differ(lines(t, restated(before)), lines(t, restated(w))); d != "" {
						t.Fatalf("restated after frame %d: %s", i, d)
					}
				}
				w.Step(&x.frames[i], emit)
			}
			if d := differ(lines(t, want), lines(t, got)); d != "" {
				t.Errorf("%s", d)
			}
			a, b := whole.View(), w.View()
			if a.State != b.State || a.Why != b.Why || a.SampleS != b.SampleS || len(a.Open) != len(b.Open) || !slices.Equal(a.BlindSpots, b.BlindSpots) ||
				!slices.Equal(whole.Explain(), w.Explain()) {
				t.Errorf("views differ:\n%+v\n%+v", a, b)
			}
		})
	}
}

func restated(w *detect.Watch) (fs []detect.Finding) {
	w.Restate(func(f *detect.Finding) { fs = append(fs, *f) })
	return
}

// Saving appends, and saving is no step: the watch goes on as before.
func TestSaveAppendsAndDisturbsNothing(t *testing.T) {
	x := fixtures()[0]
	want := replay(x.loop, x.frames)
	w := detect.New(x.loop, 0, detect.Options{})
	var got []detect.Finding
	for i := range x.frames {
		w.Step(&x.frames[i], func(f *detect.Finding) { got = append(got, *f) })
		if i%997 == 0 {
			b := w.Save([]byte("head"))
			if string(b[:4]) != "head" || !bytes.Equal(b[4:], w.Save(nil)) {
				t.Fatal("Save does not append, or two memories of one state differ")
			}
		}
	}
	if d := differ(lines(t, want), lines(t, got)); d != "" {
		t.Error(d)
	}
}

// dyadic rounds values to 1/256, so that shifts and powers of two are exact.
func dyadic(frames []collector.Frame) []collector.Frame {
	out := slices.Clone(frames)
	r := func(v float32) float32 {
		if v != v {
			return v
		}
		return float32(math.Round(float64(v)*256) / 256)
	}
	for i := range out {
		f := &out[i]
		f.PV, f.SP, f.OP = r(f.PV), r(f.SP), r(f.OP)
	}
	return out
}

// inPercent takes from findings what is in units of PV, and the texts that show it.
func inPercent(fs []detect.Finding) []detect.Finding {
	out := slices.Clone(fs)
	for i := range out {
		f := &out[i]
		f.Text, f.TextShort = "", ""
		var m detect.Measures
		for _, x := range f.Measures {
			if x.Name != "pv" && !strings.HasSuffix(x.Name, "_pv") {
				m = append(m, x)
			}
		}
		f.Measures = m
	}
	return out
}

// The units in which PV, SP and OP arrive, and where their range lies, change
// nothing but the units of what is said.
func TestUnitsChangeNothing(t *testing.T) {
	type change struct {
		name                         string
		pvFactor, pvShift            float64
		opFactor, opShift, pvMeasure float64
	}
	changes := []change{
		{"PV times 8", 8, 0, 1, 0, 8},
		{"PV over 64", 1. / 64, 0, 1, 0, 1. / 64},
		{"PV shifted", 1, -300, 1, 0, 1},
		{"OP over 4", 1, 0, 0.25, 0, 1},
		{"OP shifted", 1, 0, 1, 20, 1},
		{"all", 4, 1000, 2, -50, 4},
	}
	for _, x := range fixtures() {
		frames := dyadic(x.frames)
		want := replay(x.loop, frames)
		for _, c := range changes {
			l := *x.loop
			pv := func(v float64) float64 { return v*c.pvFactor + c.pvShift }
			op := func(v float64) float64 { return v*c.opFactor + c.opShift }
			l.PVLow, l.PVHigh = pv(l.PVLow), pv(l.PVHigh)
			l.OPLow, l.OPHigh, l.OPLimitLow, l.OPLimitHigh = op(l.OPLow), op(l.OPHigh), op(l.OPLimitLow), op(l.OPLimitHigh)
			fr := slices.Clone(frames)
			for i := range fr {
				f := &fr[i]
				f.PV, f.SP, f.OP = collector.Clean32(pv(float64(f.PV))), collector.Clean32(pv(float64(f.SP))), collector.Clean32(op(float64(f.OP)))
			}
			got := replay(&l, fr)
			if d := differ(lines(t, inPercent(want)), lines(t, inPercent(got))); d != "" {
				t.Errorf("%s, %s: %s", x.kind, c.name, d)
				continue
			}
			for i := range got {
				for j, m := range got[i].Measures {
					w := want[i].Measures[j]
					if strings.HasSuffix(m.Name, "_pv") && math.Abs(m.Value-w.Value*c.pvMeasure) > 1e-9*math.Abs(m.Value) {
						t.Errorf("%s, %s: %s %g, want %g", x.kind, c.name, m.Name, m.Value, w.Value*c.pvMeasure)
					}
				}
			}
		}
	}
}

// When it happened changes nothing but the dates: not the first millisecond of 1970, nor
// a clock set before it, nor a time that is no whole second.
func TestDatesChangeNothing(t *testing.T) {
	for _, x := range fixtures() {
		want := replay(x.loop, x.frames)
		for _, begin := range []int64{0, -987654321, x.frames[0].Time + 3652*dayMs + 7} {
			later := begin - x.frames[0].Time
			fr := slices.Clone(x.frames)
			for i := range fr {
				fr[i].Time += later
			}
			moved := slices.Clone(want)
			for i := range moved {
				moved[i].At += later
				moved[i].Since += later
				moved[i].Changed = slices.Clone(moved[i].Changed)
				for j := range moved[i].Changed {
					moved[i].Changed[j].At += later
				}
			}
			if d := differ(lines(t, moved), lines(t, replay(x.loop, fr))); d != "" {
				t.Errorf("%s from %s: %s", x.kind, detect.FormatTime(begin), d)
			}
		}
	}
}

// A reverse loop and its mirror image (direct action, OP counted from the other
// end) are the same loop.
func TestMirroredLoop(t *testing.T) {
	for _, x := range fixtures() {
		if x.kind == detect.PVAtRangeEnd || x.kind == detect.OutputSaturation {
			continue // ends of OP are not alike: 0 % may be rest
		}
		frames := dyadic(x.frames)
		l := *x.loop
		l.Action = configs.Direct
		fr := slices.Clone(frames)
		for i := range fr {
			fr[i].OP = 100 - fr[i].OP
		}
		a, b := replay(x.loop, frames), replay(&l, fr)
		kinds := func(fs []detect.Finding) (s []string) {
			for _, f := range fs {
				if f.Event == detect.Raised {
					s = append(s, string(f.Kind)+" "+string(f.Cause)+" "+detect.FormatTime(f.At))
				}
			}
			return
		}
		if !slices.Equal(kinds(a), kinds(b)) {
			t.Errorf("%s:%s\nmirrored:%s", x.kind, brief(a), brief(b))
		}
	}
}

// Warm learns as Step does and says nothing; what it has seen is restated.
func TestWarmSaysNothing(t *testing.T) {
	for _, x := range fixtures() {
		a, b := detect.New(x.loop, 0, detect.Options{}), detect.New(x.loop, 0, detect.Options{})
		for i := range x.frames {
			a.Warm(&x.frames[i])
			b.Step(&x.frames[i], func(*detect.Finding) {})
		}
		if a.Through() != b.Through() || !bytes.Equal(a.Save(nil), b.Save(nil)) {
			t.Errorf("%s: a warmed-up watch knows something else", x.kind)
		}
		if d := differ(lines(t, restated(b)), lines(t, restated(a))); d != "" {
			t.Errorf("%s: %s", x.kind, d)
		}
	}
}

// Restate gives what is open, as of the last frame, and changes nothing.
func TestRestate(t *testing.T) {
	for _, x := range fixtures() {
		w, fs := watchOver(x.loop, x.frames)
		open := map[detect.Kind]detect.Finding{}
		for _, f := range fs {
			if f.Event == detect.Cleared {
				delete(open, f.Kind)
			} else {
				open[f.Kind] = f
			}
		}
		if len(open) == 0 {
			t.Errorf("%s: nothing is open at the end of its fixture", x.kind)
		}
		b := w.Save(nil)
		got := restated(w)
		if len(got) != len(open) {
			t.Errorf("%s: %d restated, %d open", x.kind, len(got), len(open))
		}
		for _, f := range got {
			o := open[f.Kind]
			if f.Event != detect.Raised || f.At != w.Through() || f.Since != o.Since || f.Cause != o.Cause || f.Confidence != o.Confidence {
				t.Errorf("%s: restated%s\nwas%s", x.kind, brief([]detect.Finding{f}), brief([]detect.Finding{o}))
			}
			checkFinding(t, &f)
		}
		if !bytes.Equal(b, w.Save(nil)) {
			t.Errorf("%s: restating changed the watch", x.kind)
		}
		v := w.View()
		if len(v.Open) != len(got) || !bytes.Equal(lines(t, v.Open), lines(t, got)) {
			t.Errorf("%s: the view holds other findings than are restated", x.kind)
		}
	}
}

// A frame that is not newer than the last is ignored, whatever it says.
func TestOldFramesAreIgnored(t *testing.T) {
	for _, x := range fixtures() {
		w := detect.New(x.loop, 0, detect.Options{})
		var got []detect.Finding
		emit := func(f *detect.Finding) { got = append(got, *f) }
		for i := range x.frames {
			w.Step(&x.frames[i], emit)
			if i%7 == 0 {
				old := x.frames[i/2]
				old.PV, old.Flags = 99, collector.Gap|collector.Marked
				w.Step(&old, emit)
				same := x.frames[i]
				same.PV = 3
				w.Warm(&same)
			}
		}
		if d := differ(lines(t, replay(x.loop, x.frames)), lines(t, got)); d != "" {
			t.Errorf("%s: %s", x.kind, d)
		}
	}
}

// Findings come in pairs: no kind is raised twice or cleared when it is not open,
// and their times do not run back.
func TestFindingsAreStatementsOfState(t *testing.T) {
	for _, x := range fixtures() {
		statementsOfState(t, replay(x.loop, x.frames))
	}
}

func statementsOfState(t testing.TB, fs []detect.Finding) {
	t.Helper()
	open := map[detect.Kind]bool{}
	at := int64(math.MinInt64)
	for _, f := range fs {
		if (f.Event == detect.Raised) == open[f.Kind] {
			t.Errorf("%s %s while open is %v", f.Kind, f.Event, open[f.Kind])
		}
		open[f.Kind] = f.Event != detect.Cleared
		if f.At < at {
			t.Errorf("%s %s at %d after one at %d", f.Kind, f.Event, f.At, at)
		}
		at = f.At
	}
}
