// Package detect judges loops: features of the frames, detectors that each claim
// one kind, a verdict that decides which claims stand and why, and site
// detectors that look across loops. It has no clock, no input or output and no
// randomness: the findings are a pure function of loop list, starting memory and
// frames.
//
// [Watch] judges one loop; [Sites] looks across loops. Adding a detector is one
// file with its step function and one row of the table in table.go.
//
// Caveats: a Watch is not safe for concurrent use. Frames must come in the order
// of their time. All state is plain numbers, so that a memory is a copy.
package detect

import (
	"math"

	"midwatch/collector"
	"midwatch/configs"
)

// Engine is the version of the detection; memories of another engine are not
// loaded whole.
const Engine = 6

// Options of a watch.
type Options struct {
	NuisancePerLoopYear float64 // false findings accepted per loop and year, all kinds together; 0: default 0.1
}

// Watch judges one loop.
type Watch struct {
	loop   *configs.Loop
	id     collector.LoopID
	normal collector.Mode // of the loop
	strict float64        // factor on persistence from the nuisance budget, 1 at the default
	s      state
	in     input
	usual  tuningOfRun
	emit   func(*Finding)
	evEnd  int64 // end of the slot closed by the last Step, ms UTC
	hasEv  bool
	mute   bool // warm-up: nothing is learnt or said
}

// state is all that a watch knows: plain numbers, no pointer, at most 4 KiB
// encoded.
type state struct {
	Through int64 // ms UTC of the last frame seen
	Grid    grid
	Scale   scale
	Motion  motion
	Noise   noise
	Last    collector.Frame
	Casc    [maxLevels]halfBlock
	Cycles  [maxLevels]cycleBank
	Int     float64 // integral of e since the last restart of the fits, % s
	Fits    [fitBanks]fitBank
	Tune    tuneState
	Sched   schedule
	Quiet   quietGain
	Track   track
	Clock   clock
	Osc     oscState
	Recov   recoveryState
	Off     offsetState
	OffPast offsetPast
	Sat     saturationState
	Misc    miscState
	Change  tuneChange
	Marks   [markKinds][2]mark // newest first
	Moved   tuningMove         // of the trouble that was said last
	Spell   spell
	Open    [kinds]openFinding
	OpenN   uint8 // findings open
	Slot    int64 // end of the running evidence slot, ms UTC
}

// New makes the watch of a loop. id is put into its findings.
func New(l *configs.Loop, id collector.LoopID, o Options) *Watch {
	normal, _ := collector.ParseMode(l.NormalMode)
	return &Watch{loop: l, id: id, normal: normal, strict: Strictness(o.NuisancePerLoopYear)}
}

// Step takes the next frame and emits what it makes of it. A frame not newer
// than the last one is ignored.
func (w *Watch) Step(f *collector.Frame, emit func(*Finding)) {
	w.emit = emit
	w.mute = false
	w.frame(f)
	w.emit = nil
}

// Warm takes a frame as Step does, with findings off: after a change of engine
// the filters and rings fill again without telling what is known already.
func (w *Watch) Warm(f *collector.Frame) {
	w.emit = nil
	w.mute = true
	w.frame(f)
	w.mute = false
}

// Through is the time of the last frame seen, ms UTC; 0 before the first.
func (w *Watch) Through() int64 { return w.s.Through }

func (w *Watch) frame(f *collector.Frame) {
	s := &w.s
	if f.Time <= s.Through && (s.Through != 0 || s.Grid.Begun) { // 0: nothing was seen yet, or the first frame is of 1970
		return
	}
	s.Through = f.Time
	if w.misjudged(f) {
		w.anew()
		s.Scale.init(w.loop, &collector.Frame{PV: f.SP, SP: f.SP}) // PV may be on its way yet
	}
	s.Last = *f
	if w.absurd(f) {
		clean := *f
		clean.PV = collector.NaN32
		f = &clean
	}
	g := &s.Grid
	if !g.Begun {
		if f.PV != f.PV { // nothing to begin with
			return
		}
		*g = grid{T0: f.Time, Begun: true}
		s.Scale.init(w.loop, f)
		s.Motion.first()
		s.Slot = (f.Time/SiteSlotMs + 1) * SiteSlotMs
	}
	t := float64(f.Time-g.T0) / 1000
	w.readTuning(f, t)
	if f.Flags&collector.Marked != 0 {
		w.restart(t)
	}
	if !w.usable(f, t) {
		g.LastFrame = t
		w.closeSlot(f.Time)
		return
	}
	if g.DT == 0 && !w.learnInterval(t) {
		g.LastFrame = t
		g.At = t
		return
	}
	w.stepGrid(f, t)
	g.LastFrame = t
	w.closeSlot(f.Time)
}

// farthest is how many spans outside its range a value can lie and still be meant.
// What is beyond comes of a broken frame and would stay in the filters for good
// (common practice, no source).
const farthest = 100

// absurd: PV, SP or OP is no value of this loop. NaN is not absurd, only missing.
func (w *Watch) absurd(f *collector.Frame) bool {
	far := func(v float32, low, span float64) bool { return math.Abs(float64(v)-low) > farthest*span }
	if sc := &w.s.Scale; w.s.Grid.Begun {
		return far(f.PV, sc.PVLow, sc.PVSpan) || far(f.SP, sc.PVLow, sc.PVSpan) || far(f.OP, sc.OPLow, sc.OPSpan)
	}
	const wide = 1e12 // before a range is known
	return far(f.PV, 0, wide) || far(f.SP, 0, wide) || far(f.OP, 0, wide)
}

// usable sorts out frames that carry no value to judge and notes staleness.
func (w *Watch) usable(f *collector.Frame, t float64) bool {
	bad := f.PV != f.PV || f.SP != f.SP
	if !bad && f.Flags&collector.Unconfirmed == 0 {
		w.stepStale(f, t, false)
		return true
	}
	w.stepStale(f, t, true)
	if f.Flags&collector.Gap != 0 {
		w.restart(t)
	}
	return false
}

// learnInterval takes the median of the first intervals as the sample interval.
// What the loop list says holds where the data agree with it within 30 %, and by
// exception, where intervals say nothing.
func (w *Watch) learnInterval(t float64) bool {
	g := &w.s.Grid
	said := w.loop.SampleS
	if said > 0 && w.loop.Report == configs.Exception {
		g.DT, g.At, g.Levels = said, t, levelsFor(said)
		return true
	}
	if g.N == 0 {
		g.N = 1
		return false
	}
	g.Guess[g.N-1] = float32(t - g.LastFrame)
	g.N++
	if int(g.N) <= learnIntervals {
		return false
	}
	var x [learnIntervals]float64
	for i, v := range g.Guess {
		x[i] = float64(v)
	}
	m := median(x[:])
	if w.loop.Report == configs.Exception {
		m = quantile(x[:], 0.1)
	}
	// Milliseconds are all a frame holds; a shorter interval is a burst.
	g.DT = max(m, 0.05)
	if said > 0 && math.Abs(m/said-1) < 0.3 {
		g.DT = said
	}
	g.Levels = levelsFor(g.DT)
	g.At, g.Fast, g.Slow, g.Seen, g.N = t, 0, 0, 0, 0
	return true
}

// relearn starts over when the data come at another pace than was learnt.
func (w *Watch) relearn(k int) bool {
	g := &w.s.Grid
	g.Seen++
	if k <= 0 {
		g.Fast++
	} else if k > 1 {
		g.Slow++
	}
	if g.Seen < 240 {
		return false
	}
	fast, slow := g.Fast, g.Slow
	g.Seen, g.Fast, g.Slow = 0, 0, 0
	if fast < 80 && (slow < 200 || w.loop.Report == configs.Exception) {
		return false
	}
	w.anew() // filters and rings count in slots, the noise level too
	return true
}

// anew begins to learn again; what was told, and facts that hold whatever was learnt, stay.
func (w *Watch) anew() {
	keep := w.s
	w.s = state{Through: keep.Through, Grid: grid{T0: keep.Grid.T0, Begun: true, At: keep.Grid.At, LastFrame: keep.Grid.LastFrame},
		Scale: keep.Scale, Last: keep.Last, Misc: keep.Misc, Change: keep.Change, Marks: keep.Marks, Moved: keep.Moved, Spell: keep.Spell.found(), Open: keep.Open, OpenN: keep.OpenN, Slot: keep.Slot}
	w.usual.known = false
	w.s.Motion.first()
}

// stepGrid turns the frame into slots of the grid.
func (w *Watch) stepGrid(f *collector.Frame, t float64) {
	s := &w.s
	g := &s.Grid
	first := false
	if g.At == 0 && s.Motion.Changes == 0 && s.Noise.N == 0 {
		g.At = t - g.DT
		first = true
	}
	k := int(math.Round((t - g.At) / g.DT))
	if k > 1 && s.Motion.PV != s.Motion.PV { // nothing was seen yet that could be held
		g.At, k = t-g.DT, 1
	}
	if w.relearn(k) {
		return
	}
	if k <= 0 {
		return // faster than the grid: the next slot sees what stands then
	}
	most := holdPeriodic
	if w.loop.Report == configs.Exception {
		most = int(holdExceptionS / g.DT)
	}
	if k > most || f.Flags&(collector.Gap|collector.ClockStep) != 0 {
		w.note(markGap, g.At, t-g.At)
		w.restart(t)
		g.At = t - g.DT
		k = 1
		first = true
	}
	in := &w.in
	for i := 1; i < k; i++ { // what was not said has not changed
		g.At += g.DT
		*in = input{t: g.At, dt: g.DT, pv: s.Motion.PV, sp: s.Motion.SP, op: s.Motion.OP, pos: math.NaN(), mode: s.Motion.Mode, held: true}
		in.trim = s.Motion.Trim
		w.slot(f.Flags)
	}
	g.At += g.DT
	if d := t - g.At; d > g.DT/2 || d < -g.DT/2 {
		g.At = t
	}
	*in = input{t: g.At, dt: g.DT, mode: f.Mode, first: first, held: f.Flags&collector.Held != 0}
	in.pv = (float64(f.PV) - s.Scale.PVLow) / s.Scale.PVSpan * 100
	in.sp = w.rampedSP((float64(f.SP)-s.Scale.PVLow)/s.Scale.PVSpan*100, float64(k)*g.DT, first)
	in.op = (float64(f.OP) - s.Scale.OPLow) / s.Scale.OPSpan * 100
	in.pos = (float64(f.Position) - s.Scale.OPLow) / s.Scale.OPSpan * 100
	in.trim = w.trimOf(in.op, float64(f.Feedforward))
	s.Motion.Trim = in.trim
	w.slot(f.Flags)
}

// slot is one slot of the grid: features, then detectors, then the verdict.
func (w *Watch) slot(flags collector.Flags) {
	s, in := &w.s, &w.in
	in.hasOP = in.op == in.op
	if !in.hasOP {
		in.op = s.Motion.OP
		if in.op != in.op {
			in.op = 0
		}
		in.trim = in.op
	}
	in.e = in.sp - in.pv
	w.stepMotion(flags)
	w.stepSpell(flags)
	s.Noise.step(in.pv, w.loop.Report == configs.Exception || in.held, s.Motion.Update.Value(), in.active && !in.frozen && !s.Osc.Sus && !s.Osc.Grow)
	if in.active && !in.frozen {
		w.stepCascade()
	}
	for i := range table {
		table[i].step(w)
	}
	w.verdict()
}

// restart forgets what a gap makes worthless: filters, runs, rings.
func (w *Watch) restart(t float64) {
	s := &w.s
	for i := range s.Cycles {
		s.Cycles[i].reset()
	}
	for i := range s.Casc {
		s.Casc[i].Half = false
	}
	for i := range s.Fits {
		s.Fits[i].Warm = 0
	}
	s.Int = 0
	s.Track.reset()
	s.Spell = s.Spell.found()
	s.Recov.abandon()
	s.Off.restart()
	s.Sat.restart(t)
	s.Motion.PVSame, s.Motion.OPSame = t, t
}
