package page

import (
	"context"
	"encoding/json"
	"math"
	"strconv"

	"midwatch/alert/page/api"
	"midwatch/collector"
	"midwatch/configs"
)

// column is a row of numbers in JSON: not a number is null.
type column []float32

// MarshalJSON writes the shortest form that reads back the same float32.
func (c column) MarshalJSON() ([]byte, error) {
	b := make([]byte, 0, 8*len(c)+2)
	b = append(b, '[')
	for i, v := range c {
		if i > 0 {
			b = append(b, ',')
		}
		if v != v {
			b = append(b, "null"...)
		} else {
			b = strconv.AppendFloat(b, float64(v), 'g', -1, 32)
		}
	}
	return append(b, ']'), nil
}

// run is a stretch of time in which something held.
type run struct {
	What string `json:"what"` // inactive, limit, overhang, gap, hidden, lost, held
	Word string `json:"word"`
	From int64  `json:"from"` // ms UTC
	To   int64  `json:"to"`
}

// change is a step of something that people set.
type change struct {
	At   int64  `json:"at"` // ms UTC
	Word string `json:"word"`
}

// trend is a span of a loop, thinned so that least and greatest values of every
// bucket are kept, in the order in which they came.
type trend struct {
	Loop     string      `json:"loop"`
	Unit     string      `json:"unit"`
	From     int64       `json:"from"` // ms UTC
	To       int64       `json:"to"`
	BucketMs int64       `json:"bucket_ms"` // at most two rows of a bucket; 0: every frame is there
	Frames   int         `json:"frames"`    // read
	Newest   int64       `json:"newest"`    // ms UTC of the newest frame of the span; 0: none
	Times    []int64     `json:"t"`
	PV       column      `json:"pv"`
	SP       column      `json:"sp"`
	OP       column      `json:"op"`
	Pos      column      `json:"pos,omitempty"` // position of the final element, in the unit of OP; nil: no tag
	FF       column      `json:"ff,omitempty"`  // feed-forward signal; nil: no tag
	Runs     []run       `json:"runs,omitempty"`
	Changes  []change    `json:"changes,omitempty"`
	Overlays []overlay   `json:"overlays,omitempty"`
	Troubles []span      `json:"troubles,omitempty"`
	Lines    []level     `json:"lines,omitempty"`
	PVScale  [2]number64 `json:"pv_scale"`
	tuning   []api.TuningReading
	last     collector.Frame
}

// number64 is a number in JSON; not a number is null.
type number64 float64

// MarshalJSON writes null for what is not finite.
func (n number64) MarshalJSON() ([]byte, error) {
	if f := float64(n); math.IsNaN(f) || math.IsInf(f, 0) {
		return []byte("null"), nil
	}
	return json.Marshal(float64(n))
}

// span is a trouble as the chart draws it.
type span struct {
	Kind  string `json:"kind"`
	Class string `json:"class"`
	Label string `json:"label"`
	From  int64  `json:"from"`
	To    int64  `json:"to"` // 0: it stands
}

// level is a horizontal line: a limit or an alarm.
type level struct {
	On    string  `json:"on"` // pv or op
	Value float64 `json:"value"`
	Label string  `json:"label"`
}

// pot gathers the frames of one bucket.
type pot struct {
	n              int
	first, last    collector.Frame
	pvLow, pvHigh  float32
	opLow, opHigh  float32
	posLow, posTop float32
	pvFell, opFell bool // the least came after the greatest
	posFell        bool
}

func (b *pot) add(f *collector.Frame) {
	if b.n == 0 {
		*b = pot{first: *f, pvLow: f.PV, pvHigh: f.PV, opLow: f.OP, opHigh: f.OP, posLow: f.Position, posTop: f.Position}
	}
	b.n++
	b.last = *f
	if f.PV < b.pvLow || b.pvLow != b.pvLow {
		b.pvLow, b.pvFell = f.PV, true
	}
	if f.PV > b.pvHigh || b.pvHigh != b.pvHigh {
		b.pvHigh, b.pvFell = f.PV, false
	}
	if f.OP < b.opLow || b.opLow != b.opLow {
		b.opLow, b.opFell = f.OP, true
	}
	if f.OP > b.opHigh || b.opHigh != b.opHigh {
		b.opHigh, b.opFell = f.OP, false
	}
	if f.Position < b.posLow || b.posLow != b.posLow {
		b.posLow, b.posFell = f.Position, true
	}
	if f.Position > b.posTop || b.posTop != b.posTop {
		b.posTop, b.posFell = f.Position, false
	}
}

func (t *trend) row(at int64, pv, sp, op, pos, ff float32) {
	t.Times = append(t.Times, at)
	t.PV, t.SP, t.OP = append(t.PV, pv), append(t.SP, sp), append(t.OP, op)
	t.Pos, t.FF = append(t.Pos, pos), append(t.FF, ff)
}

// known gives a column, or nil where nothing is known in it.
func (c column) known() column {
	for _, v := range c {
		if v == v {
			return c
		}
	}
	return nil
}

func (t *trend) empty(b *pot) {
	switch b.n {
	case 0:
		return
	case 1:
		t.row(b.first.Time, b.first.PV, b.first.SP, b.first.OP, b.first.Position, b.first.Feedforward)
	default:
		p0, p1 := b.pvLow, b.pvHigh
		if b.pvFell {
			p0, p1 = p1, p0
		}
		o0, o1 := b.opLow, b.opHigh
		if b.opFell {
			o0, o1 = o1, o0
		}
		s0, s1 := b.posLow, b.posTop
		if b.posFell {
			s0, s1 = s1, s0
		}
		t.row(b.first.Time, p0, b.first.SP, o0, s0, b.first.Feedforward)
		t.row(b.last.Time, p1, b.last.SP, o1, s1, b.last.Feedforward)
	}
	b.n = 0
}

// readTrend reads a span and thins it to about points buckets.
func readTrend(ctx context.Context, frames collector.FrameReader, l *configs.Loop, from, to int64, points int) (*trend, error) {
	t := &trend{Times: []int64{}, Loop: l.Name, Unit: l.Unit, From: from, To: to, PVScale: [2]number64{number64(l.PVLow), number64(l.PVHigh)}}
	width := max(1, (to-from)/int64(points))
	var b pot
	at := int64(math.MinInt64)
	w := &watcher{l: l, t: t, join: 3 * width, on: map[string]int{}}
	thinned := false
	for f, err := range frames.Frames(ctx, l.Name, from, to) {
		if err != nil {
			return nil, err
		}
		t.Frames++
		t.Newest, t.last = f.Time, f
		w.frame(&f)
		k := (f.Time - from) / width
		if k != at || f.PV != f.PV || f.Flags&collector.Gap != 0 {
			t.empty(&b)
			at = k
		}
		if f.Flags&collector.Gap != 0 && len(t.Times) > 0 && f.PV == f.PV {
			t.row(f.Time-1, collector.NaN32, collector.NaN32, collector.NaN32, collector.NaN32, collector.NaN32)
		}
		if f.PV != f.PV {
			t.row(f.Time, f.PV, f.SP, f.OP, f.Position, f.Feedforward)
			continue
		}
		b.add(&f)
		thinned = thinned || b.n > 2
	}
	t.empty(&b)
	t.Pos, t.FF = t.Pos.known(), t.FF.known()
	w.end()
	if thinned {
		t.BucketMs = width
	}
	return t, nil
}

// watcher notes runs and changes while frames go by.
type watcher struct {
	l    *configs.Loop
	t    *trend
	join int64          // runs nearer than this are one, ms
	on   map[string]int // open run of a kind, index
	was  collector.Frame
	seen bool
	// gain and reset as last read from tags; 0: not yet
	gain, reset float32
}

func (w *watcher) hold(on bool, what, word string, at int64) {
	i, is := w.on[what]
	switch {
	case on && is && w.t.Runs[i].Word == word:
		w.t.Runs[i].To = at
	case on:
		// A flicker is no new run.
		for j := len(w.t.Runs) - 1; j >= 0; j-- {
			if r := &w.t.Runs[j]; r.What == what {
				if r.Word == word && at-r.To <= w.join {
					r.To, w.on[what] = at, j
					return
				}
				break
			}
		}
		w.on[what] = len(w.t.Runs)
		w.t.Runs = append(w.t.Runs, run{what, word, at, at})
	case is:
		w.t.Runs[i].To = at
		delete(w.on, what)
	}
}

func (w *watcher) frame(f *collector.Frame) {
	l, at := w.l, f.Time
	if len(w.t.Runs) > 2000 {
		w.join *= 2 // a storm of short runs: the picture cannot show them apart
	}
	mode := "in " + f.Mode.String()
	w.hold(!f.Mode.LawActive(), "inactive", mode, at)
	w.hold(f.Flags&collector.Suppressed != 0, "hidden", "suppressed by design", at)
	w.hold(f.PV != f.PV, "gap", "no usable value", at)
	limit := f.PV == f.PV && atLimit(f, l)
	w.hold(limit, "limit", "OP at a limit", at)
	if s := l.Sign(); s != 0 {
		push := s * (float64(f.SP) - float64(f.PV))
		high := float64(f.OP) > (l.OPLimitLow+l.OPLimitHigh)/2
		w.hold(limit && (high && push < 0 || !high && push > 0), "overhang", "OP stays at its limit though the error has changed sign: wind-up", at)
	}
	w.hold(f.Flags&collector.Lost != 0, "lost", "samples lost", at)
	if f.Flags&collector.ClockStep != 0 {
		w.say(at, "clock of the source stepped")
	}
	if f.Flags&collector.Marked != 0 {
		w.say(at, "range, action or tags changed in the list")
	}
	w.tuning(f)
	if w.seen {
		w.compare(f)
	}
	w.was, w.seen = *f, true
}

func (w *watcher) compare(f *collector.Frame) {
	l := w.l
	if f.Mode != w.was.Mode && f.Mode != collector.ModeUnknown {
		w.say(f.Time, "mode "+f.Mode.String())
	}
	if d := math.Abs(float64(f.SP) - float64(w.was.SP)); d > 0.005*math.Abs(l.PVSpan()) && f.Mode != collector.Cascade && math.IsNaN(l.SPRamp) {
		w.say(f.Time, "SP "+number(float64(w.was.SP), 4)+" → "+quantity(float64(f.SP), l.Unit))
	}
}

// tuning follows what tags say: a frame has gain and reset only where they
// differ from those read before.
func (w *watcher) tuning(f *collector.Frame) {
	if f.Gain == 0 && f.Reset == 0 {
		return
	}
	step := func(name, unit string, was *float32, now float32) {
		if now == 0 {
			return
		}
		if *was != 0 && *was != now {
			w.say(f.Time, name+" "+number(float64(*was), 3)+" → "+number(float64(now), 3)+unit+" (read from its tag)")
		}
		*was = now
	}
	step("gain", "\u00a0%/%", &w.gain, f.Gain)
	step("reset", "\u00a0s", &w.reset, f.Reset)
	n := math.NaN()
	w.t.tuning = append(w.t.tuning, api.TuningReading{Time: f.Time, Gain: orNaN(float64(w.gain)), GainLow: n, GainHigh: n, ResetS: orNaN(float64(w.reset)), ResetLow: n, ResetHigh: n, Read: true})
}

// maxChanges bounds what is said of a span; a set point that moves all the time
// is seen in the trend.
const maxChanges = 60

func (w *watcher) say(at int64, word string) {
	if len(w.t.Changes) < maxChanges {
		w.t.Changes = append(w.t.Changes, change{at, word})
	}
}

func (w *watcher) end() {
	out := w.t.Runs[:0]
	for _, r := range w.t.Runs {
		if r.To > r.From || r.What == "gap" || r.What == "lost" {
			out = append(out, r)
		}
	}
	w.t.Runs = out
}
