package daemon

import (
	"math"
	"slices"
	"strings"
	"testing"
	"time"

	"github.com/google/go-cmp/cmp"

	"midwatch/collector"
	"midwatch/configs"
	"midwatch/detect"
)

// changed gives a configuration with another loop list.
func (r *rig) changed(change func([]*configs.Loop) []*configs.Loop) *configs.Config {
	c := *r.config
	c.Loops = nil
	for _, l := range r.config.Loops {
		x := *l
		c.Loops = append(c.Loops, &x)
	}
	c.Loops = change(c.Loops)
	return &c
}

func byName(ls []*configs.Loop, name string) *configs.Loop {
	return ls[slices.IndexFunc(ls, func(l *configs.Loop) bool { return l.Name == name })]
}

func ofLoops(lines []string, names ...string) (out []string) {
	for _, l := range lines {
		if slices.ContainsFunc(names, func(n string) bool { return strings.Contains(l, `"loop":"`+n+`"`) }) {
			out = append(out, l)
		}
	}
	return out
}

// Loops that a reload does not change keep everything: their findings are those
// of a run without it, however much else changes.
func TestReloadLeavesOthersAlone(t *testing.T) {
	plain := newRig(t, newMill().loops)
	plain.start()
	newMill().run(plain, 0, millSeconds)
	plain.stop()

	m := newMill()
	r := newRig(t, m.loops)
	r.start()
	m.run(r, 0, 2000)
	frames := r.d.counts().frames
	c := r.changed(func(ls []*configs.Loop) []*configs.Loop {
		byName(ls, "FIC-107").ResetS, byName(ls, "FIC-107").IdealReset = 60, 60 // verdict
		byName(ls, "FIC-108").PVHigh = 200                                      // memory
		byName(ls, "FIC-109").Name, byName(ls, "FIC-110").Was = "FIC-209", ""   // gone, and a new one
		byName(ls, "FIC-110").Priority = "high"                                 // text
		fresh := configs.NewLoop("AIC-1")
		fresh.Source, fresh.PV, fresh.SP, fresh.OP = "gateway", "a/pv", "a/sp", "a/op"
		return append([]*configs.Loop{fresh}, ls...)
	})
	works, gateway := r.scripts["works"], r.scripts["gateway"]
	if err := r.d.Apply(t.Context(), c); err != nil {
		t.Fatal(err)
	}
	if r.scripts["works"] != works {
		t.Error("a source whose settings and tags did not change was restarted")
	}
	if r.scripts["gateway"] == gateway {
		t.Error("a source with a new tag was not restarted")
	}
	m.run(r, 2000, millSeconds)
	if got := r.d.counts().frames; got <= frames {
		t.Error("no frames after the reload")
	}
	v, ok := r.d.View("FIC-107")
	if !ok || v.Last.Time == 0 {
		t.Error("the retuned loop lost its state")
	}
	if _, ok := r.d.View("FIC-109"); ok {
		t.Error("a loop that is gone is still shown")
	}
	r.config = c
	r.stop()
	quiet := []string{"FIC-100", "FIC-101", "FIC-102", "FIC-103", "FIC-104", "FIC-105", "FIC-106", "FIC-110"}
	want, got := ofLoops(plain.lines(), quiet...), ofLoops(r.lines(), quiet...)
	wantKinds(t, want, detect.SustainedOscillation, detect.OutputSaturation, detect.StaleData)
	if d := cmp.Diff(want, got); d != "" {
		t.Errorf("findings of unchanged loops differ (-without +with reload):\n%s", d)
	}
	marked := false
	f, err := Look(r.config)
	if err != nil {
		t.Fatal(err)
	}
	defer f.Close()
	for x, err := range f.window.Frames(t.Context(), "FIC-108", 0, epoch.Add(24*time.Hour).UnixMilli()) {
		if err != nil {
			t.Fatal(err)
		}
		marked = marked || x.Flags&collector.Marked != 0
	}
	if !marked {
		t.Error("no mark in the window of the loop whose range changed")
	}
}

// A loop that was renamed keeps its memory and its window.
func TestReloadRenames(t *testing.T) {
	m := newMill()
	r := newRig(t, m.loops)
	r.start()
	m.run(r, 0, 1200)
	before, _ := r.d.View("FIC-103")
	c := r.changed(func(ls []*configs.Loop) []*configs.Loop {
		l := byName(ls, "FIC-103")
		l.Name, l.Was = "FIC-903", "FIC-103"
		return ls
	})
	if err := r.d.Apply(t.Context(), c); err != nil {
		t.Fatal(err)
	}
	after, ok := r.d.View("FIC-903")
	if !ok || !goesOn(before, after) {
		t.Errorf("renamed: last frame %v, noise %v; before %v, %v", after.Last, after.NoisePV, before.Last, before.NoisePV)
	}
	n := 0
	for _, err := range r.d.Frames(t.Context(), "FIC-903", 0, epoch.Add(time.Hour).UnixMilli()) {
		if err != nil {
			t.Fatal(err)
		}
		n++
	}
	if n < 1100 {
		t.Errorf("%d frames under the new name, want those of the old one", n)
	}
	r.config = c
	r.stop()
}

// A configuration that cannot be put in force leaves everything as it was.
func TestReloadThatFails(t *testing.T) {
	m := newMill()
	r := newRig(t, m.loops)
	r.start()
	defer r.stop()
	m.run(r, 0, 100)
	works := r.scripts["works"]
	for name, c := range map[string]*configs.Config{
		"another data folder": func() *configs.Config { c := r.changed(keepAll); c.Data = t.TempDir(); return c }(),
		"a sender that cannot be made": func() *configs.Config {
			c := r.changed(keepAll)
			c.Advise.Senders = []configs.Sender{{Name: "log"}}
			return c
		}(),
		"a mode map that cannot be read": r.changed(func(ls []*configs.Loop) []*configs.Loop { ls[0].ModeMap = "1=sideways"; return ls }),
	} {
		t.Run(name, func(t *testing.T) {
			if err := r.d.Apply(t.Context(), c); err == nil {
				t.Fatal("it was taken")
			}
			if r.d.Config() != r.config || r.scripts["works"] != works {
				t.Error("something changed")
			}
			before := r.d.counts().frames
			m.run(r, int(r.clock.Now().Sub(epoch)/time.Second), int(r.clock.Now().Sub(epoch)/time.Second)+20)
			if r.d.counts().frames <= before {
				t.Error("no frames any more")
			}
		})
	}
}

// Another budget of false findings judges every loop by it; nothing is forgotten.
func TestReloadOfTheBudget(t *testing.T) {
	m := newMill()
	r := newRig(t, m.loops)
	r.start()
	defer r.stop()
	m.run(r, 0, 1200)
	before, _ := r.d.View("FIC-103")
	c := r.changed(keepAll)
	c.Detect.NuisancePerLoopYear = 5
	if err := r.d.Apply(t.Context(), c); err != nil {
		t.Fatal(err)
	}
	if after, _ := r.d.View("FIC-103"); !goesOn(before, after) {
		t.Error("the loop forgot what it had learned")
	}
	if r.d.detectOptions().NuisancePerLoopYear != 5 {
		t.Error("the budget is not in force")
	}
}

// goesOn says that a later view is of the same memory; a frame or two may have
// come in between.
func goesOn(before, after detect.View) bool {
	return after.Last.Time >= before.Last.Time && before.NoisePV > 0 && math.Abs(after.NoisePV/before.NoisePV-1) < 0.05
}

func keepAll(ls []*configs.Loop) []*configs.Loop { return ls }

// What changed while no watch ran begins anew, and what was open of it is taken
// back.
func TestChangeWhileStopped(t *testing.T) {
	m := newMill()
	r := newRig(t, m.loops)
	r.start()
	m.run(r, 0, 6000)
	r.stop()
	openOf := func(loop string) (n int) {
		for _, e := range r.d.desk.Episodes() {
			if e.Open() && e.Subject.Loop == loop {
				n++
			}
		}
		return n
	}
	if openOf("FIC-104") == 0 || openOf("FIC-103") == 0 {
		t.Fatal("nothing is open: the test would prove nothing")
	}
	r.config = r.changed(func(ls []*configs.Loop) []*configs.Loop {
		byName(ls, "FIC-104").PVHigh = 150
		return slices.DeleteFunc(ls, func(l *configs.Loop) bool { return l.Name == "FIC-103" })
	})
	r.start()
	defer r.stop()
	r.until("what was open is taken back", func() bool { return openOf("FIC-104") == 0 && openOf("FIC-103") == 0 })
	if v, _ := r.d.View("FIC-104"); v.State != detect.NoData {
		t.Errorf("the changed loop is %s, want it to begin anew", v.State)
	}
	if v, _ := r.d.View("FIC-100"); v.Last.Time == 0 {
		t.Error("an unchanged loop began anew")
	}
}
