package detect

import (
	"math"
	"regexp"
	"strconv"
	"strings"
	"testing"

	"midwatch/collector"
	"midwatch/configs"
)

var heldAsked = regexp.MustCompile(`(-?[0-9.]+)[^0-9(]*\(asked (under )?([0-9.]+)`)

// passes reads a line of evidence as an engineer does: are all numbers held beyond those asked?
// n is how many there are.
func passes(t *testing.T, line string) (all bool, n int) {
	t.Helper()
	all = true
	for _, m := range heldAsked.FindAllStringSubmatch(line, -1) {
		held, err1 := strconv.ParseFloat(m[1], 64)
		asked, err2 := strconv.ParseFloat(m[3], 64)
		if err1 != nil || err2 != nil {
			t.Fatalf("no numbers: %q", m[0])
		}
		if m[2] != "" {
			held, asked = -held, -asked
		}
		all = all && held >= asked
		n++
	}
	return all, n
}

// shows asks of a line that its numbers, n of them, pass where the rule holds, and only there.
func shows(t *testing.T, name, line string, holds bool, numbers int) {
	t.Helper()
	if all, n := passes(t, line); all != holds || n != numbers {
		t.Errorf("%s: want %v by %d numbers: %s", name, holds, numbers, line)
	}
}

func lineWith(lines []string, what string) string {
	for _, x := range lines {
		if strings.Contains(x, what) {
			return x
		}
	}
	return ""
}

// swingWatch is a watch of a minute's data, noise of 0.1 %, a usual size of 0.2 % at level 2,
// with half-cycles of the lengths, samples, and peaks, %.
func swingWatch(length func(i int) float64, peaks []float64) (*Watch, *cycleBank) {
	w := New(configs.NewLoop("LIC-310"), 0, Options{})
	w.s.Grid.DT, w.s.Grid.Begun = 60, true
	w.s.Motion.first()
	b := &w.s.Cycles[2]
	for range 200 {
		w.s.Noise.Long.Add(0.1, 0.3, 0.03, leastNoise)
		b.Usual.Add(0.2, 0.75, 0.006, 1e-3)
	}
	for i, p := range peaks {
		swingOf(b, 1, func(int) float64 { return length(i) }, p)
	}
	return w, b
}

func even(p float64, n int) (x []float64) {
	for range n {
		x = append(x, p)
	}
	return
}

// The evidence of a lasting swing passes what it shows to be asked where the rule holds, and
// only there: it fails by its size, its beat, or sizes as scattered as those of noise.
func TestExplainOfALastingSwing(t *testing.T) {
	steady := func(int) float64 { return 8 }
	for _, x := range []struct {
		name   string
		length func(int) float64
		peaks  []float64
		want   bool
	}{
		{"three times the usual", steady, even(0.7, 18), true},
		{"the usual size", steady, even(0.3, 18), false},
		{"no beat", func(i int) float64 { return 3 + float64(i*7%18) }, even(0.9, 18), false},
		{"sizes of noise", steady, []float64{1, .1, .1, 3, 3, .1, 1, .1, .1, 3, 3, .1, 3, .1, .1, 4, 3, 1}, false},
	} {
		w, b := swingWatch(x.length, x.peaks)
		for range keptRaise {
			w.countKept(2, b, false)
		}
		if got := w.kept(2, b); got != x.want {
			t.Fatalf("%s: the rule holds: %v", x.name, got)
		}
		shows(t, x.name, lineWith(w.explainKept(2), "does it last"), x.want, 4)
	}
}

// So does that of a violent one: it fails by one large step out of calm, by a peak that is no
// larger, by its beat, or by its size.
func TestExplainOfAViolentSwing(t *testing.T) {
	steady := func(int) float64 { return 8 }
	for _, x := range []struct {
		name   string
		length func(int) float64
		peaks  []float64
		want   bool
	}{
		{"1.6 times each", steady, []float64{1, 1.6, 2.6, 4.1, 6.6}, true},
		{"out of calm", steady, []float64{1, 1.3, 7, 9, 12}, false},
		{"one no larger", steady, []float64{1, 1.6, 2.6, 2.7, 6.6}, false},
		{"no beat", func(i int) float64 { return []float64{8, 3, 24, 18, 5}[i] }, []float64{1, 1.6, 2.6, 4.1, 6.6}, false},
		{"small", steady, []float64{0.3, 0.5, 0.8, 1.3, 2.1}, false},
	} {
		w, b := swingWatch(x.length, x.peaks)
		if got := w.violent(2, b); got != x.want {
			t.Fatalf("%s: the rule holds: %v", x.name, got)
		}
		shows(t, x.name, lineWith(w.explainCycle(2), "is it violent"), x.want, 4)
	}
}

// What was not read is said to be so, and why: a loop that does not move is another matter
// than one that moves by another law.
func TestExplainSaysWhatWasNotRead(t *testing.T) {
	w, _ := swingWatch(func(int) float64 { return 8 }, even(0.7, 18))
	w.s.Osc.Sus, w.s.Osc.P = true, 480
	says := func(what string) {
		t.Helper()
		if all := w.Explain(); lineWith(all, what) == "" {
			t.Errorf("no %q in\n%s", what, strings.Join(all, "\n"))
		}
	}
	says("lag of the controller not read (asked")
	w.s.Osc.Kc, w.s.Osc.PhiDeg = 1.2, 50
	says("lag of the controller 50 degrees (asked")

	says("tuning in service: not excited enough to read")
	w.s.Tune.Law = 0.1
	says("tuning in service: not read: e moves, but a PI law alone does not explain")
	if v := w.View(); !strings.Contains(v.Unread, "e moves") {
		t.Errorf("the view says %q", v.Unread)
	}
	w.s.Tune.Law = 0.9
	says("tuning in service: not read: the readings are not sharp enough")
}

// A loop without OP is explained in words, not in numbers that are none.
func TestExplainOfNoValue(t *testing.T) {
	w := New(configs.NewLoop("LIC-310"), 0, Options{})
	for i := range 40 {
		w.Step(&collector.Frame{Time: 1767225600000 + int64(i)*1000, PV: 50, SP: 50, OP: float32(math.NaN())}, func(*Finding) {})
	}
	all := strings.Join(w.Explain(), "\n")
	if strings.Contains(all, "NaN") || !strings.Contains(all, "OP unknown") {
		t.Error(all)
	}
}

// One row says nothing of the mode: it is not called manual.
func TestFirstRowIsNotManual(t *testing.T) {
	w := New(configs.NewLoop("LIC-310"), 0, Options{})
	w.Step(&collector.Frame{Time: 1767225600000, PV: 50, SP: 50, OP: 50, Mode: collector.Auto}, func(*Finding) {})
	if v := w.View(); v.State != Learning || v.Why != "learning the interval of its samples" {
		t.Errorf("%s: %s", v.State, v.Why)
	}
}
