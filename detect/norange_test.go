package detect_test

import (
	"math"
	"strings"
	"testing"

	"midwatch/collector"
	"midwatch/detect"
)

// A level of 5 m whose range nobody gave is judged as finely as one whose range was given, also
// where its first values are those of a plant at rest. Its gain is of the range that the loop
// list stands for: 0 to 100, as the gain that is entered.
func TestLowInARangeThatNobodyGave(t *testing.T) {
	const gain, scale = 2, 0.05 // %/% of 5 m, m/%
	g := newRig(plantA, gain, 20, 5)
	g.noise, g.opLo, g.opHi = 0.1, 0, 100
	g.bumps(6, 300)
	g.run(4 * 3600)
	g.ti = math.Inf(1) // the integral is gone: an offset of a few per cent of 5 m stays
	g.each = nil
	g.load = 25
	g.run(4 * 3600)
	rest := func(v float64) []collector.Frame {
		f := make([]collector.Frame, 600)
		for i := range f {
			f[i] = g.out[0]
			f[i].Time = g.out[0].Time - int64(len(f)-i)*1000
			f[i].PV, f[i].SP, f[i].OP = float32(v), float32(v), 0
		}
		return f
	}
	frames := make([]collector.Frame, len(g.out))
	for i, f := range g.out {
		f.PV, f.SP = float32(scale*float64(f.PV)), float32(scale*float64(f.SP))
		frames[i] = f
	}
	for _, c := range []struct {
		name  string
		first []collector.Frame
	}{{"at work", nil}, {"at zero", rest(0)}, {"near zero", rest(0.01)}} {
		l := loopOf("LIC-310", g)
		l.Unit, l.PVRangeGiven, l.GainPct = "m", false, 100*gain/(100*scale)
		w := detect.New(l, 0, detect.Options{})
		var told []string
		seen := math.NaN()
		for i, f := range append(c.first, frames...) {
			w.Step(&f, func(f *detect.Finding) {
				if f.Event == detect.Raised {
					told = append(told, string(f.Kind))
				}
				if v, ok := f.Measures.Get("gain"); ok && math.Abs(math.Log(v/l.GainPct)) > 0.3 {
					t.Errorf("%s: a finding says a gain of %.3g", c.name, v)
				}
			})
			if i == len(c.first)+4*3600 {
				seen = w.View().GainPct
				if n := w.View().TuningNote; strings.Contains(n, "gain") {
					t.Errorf("%s: %s", c.name, n)
				}
			}
		}
		if !(math.Abs(math.Log(seen/l.GainPct)) < 0.15) {
			t.Errorf("%s: gain %.3g, not %.3g", c.name, seen, l.GainPct)
		}
		if !strings.Contains(strings.Join(told, " "), "sustained-offset") {
			t.Errorf("%s: told %q, not the offset", c.name, told)
		}
	}
}

// A gain that is read from a tag is of the list's range, too, and told as it was read.
func TestGainTagWithoutARange(t *testing.T) {
	g := newRig(plantA, 2, 20, 5)
	g.noise, g.opLo, g.opHi = 0.1, 0, 100
	g.bumps(6, 300)
	g.gain = 40
	g.run(2 * 3600)
	g.gain, g.kc = 80, 4
	g.run(2 * 3600)
	l := loopOf("LIC-310", g)
	l.PVRangeGiven = false
	w := detect.New(l, 0, detect.Options{})
	text := ""
	for _, f := range g.out {
		f.PV, f.SP = f.PV*0.05, f.SP*0.05
		w.Step(&f, func(f *detect.Finding) {
			if f.Kind == detect.TuningChanged && text == "" {
				text = f.Text
			}
		})
	}
	if !strings.Contains(text, "gain from about 40 to 80") {
		t.Errorf("%q", text)
	}
}
