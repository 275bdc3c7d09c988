package detect

import (
	"encoding/json"
	"fmt"
	"math"
	"slices"
	"strings"
	"time"

	"midwatch/collector"
)

// What happened to the loop, dated, so that a finding can say what changed before
// its trouble began: the question that an engineer asks first (common practice, no
// source). The two newest of each kind are held, and one from before the trouble is
// not given away for what follows it.

// mark is one happening.
type mark struct {
	At   moment  // its begin
	Size float32 // by kind; 0 none
}

const (
	markMode  = iota // 16 times the mode before plus the mode after, plus one
	markSP           // net change, % of range
	markHand         // net change of OP by hand, %
	markLimit        // s at a limit of OP
	markGap          // s without data
	markKinds
)

// Limits of what is worth a mark (common practice, no source).
const (
	markLeast   = 0.5     // %, a change of SP or of OP by hand
	markJoinS   = 900.0   // s between moves or stays at a limit that count as one
	markLimitS  = 60.0    // s at a limit that are worth a word
	markGapS    = 60.0    // s without data that are worth a word
	markBeforeS = 86400.0 // s before the onset that are looked at
)

// note begins a mark.
func (w *Watch) note(kind int, at, size float64) {
	m := &w.s.Marks[kind]
	if m[0].Size == 0 || m[0].At.s() <= w.earliest() {
		m[1] = m[0]
	}
	m[0] = mark{momentOf(at), float32(size)}
}

// earliest is the onset, s, of the oldest trouble that is open or suspected; later
// than any mark where there is none.
func (w *Watch) earliest() float64 {
	s := &w.s
	t := math.Inf(1)
	for k := range s.Open {
		if s.Open[k].On && k != kTuning && k != kMode {
			t = min(t, s.Open[k].Since)
		}
	}
	if s.Osc.Grow || s.Osc.Sus {
		t = min(t, s.Osc.Since)
	}
	if s.Off.Sign != 0 {
		t = min(t, s.Off.T0)
	}
	return t
}

// stepMarks compares the slot with the one before; it is called while motion still
// holds that.
func (w *Watch) stepMarks(was collector.Mode) {
	m, in := &w.s.Motion, &w.in
	if in.mode != was && in.mode != collector.ModeUnknown && was != collector.ModeUnknown {
		w.note(markMode, in.t, float64(was)*16+float64(in.mode)+1)
	}
	// In manual SP may follow PV; of an inner loop it is moved by the outer one.
	own := m.Active && in.mode != collector.Cascade && in.mode != collector.RemoteSP
	if d := in.sp - m.SP; own && math.Abs(d) > 1e-9 {
		// A ramp is one change, and so is a program that never rests.
		if x := &w.s.Marks[markSP][0]; x.Size != 0 && (m.SPBusy > 0.03 || in.t-x.At.s() < 30*in.dt) {
			x.Size += float32(d)
		} else if math.Abs(d) > 1e-3 {
			w.note(markSP, in.t, d)
		}
	}
	if hand := in.mode == collector.Manual || in.mode == collector.ModeUnknown && m.Manual; hand && in.hasOP {
		if d := in.op - m.OP; math.Abs(d) > markLeast {
			if x := &w.s.Marks[markHand][0]; x.Size != 0 && in.t-x.At.s() < markJoinS {
				x.Size += float32(d)
			} else {
				w.note(markHand, in.t, d)
			}
		}
	}
	if in.limit && m.Active {
		x := &w.s.Marks[markLimit][0]
		if end := x.At.s() + float64(x.Size); x.Size != 0 && in.t-end < markJoinS {
			x.Size = max(x.Size, float32(in.t-x.At.s()))
		} else {
			w.note(markLimit, in.t, in.dt)
		}
	}
}

// ChangeWhat says what a change before a finding was.
type ChangeWhat string

// What can have changed before a finding.
const (
	ChangedTuning   ChangeWhat = "tuning"
	ChangedMode     ChangeWhat = "mode"
	ChangedSetPoint ChangeWhat = "set-point"
	ChangedByHand   ChangeWhat = "op-by-hand"
	ChangedAtLimit  ChangeWhat = "op-at-limit"
	ChangedDataGap  ChangeWhat = "data-gap"
)

// Change is something that happened in the 24 h before the onset of a finding.
type Change struct {
	What ChangeWhat
	At   int64  // ms UTC
	Text string // what it came to, in words
}

type changeJSON struct {
	What ChangeWhat `json:"what"`
	At   string     `json:"at"`
	Text string     `json:"text"`
}

// MarshalJSON writes the form of the contract.
func (c Change) MarshalJSON() ([]byte, error) {
	return json.Marshal(changeJSON{c.What, FormatTime(c.At), c.Text})
}

// UnmarshalJSON reads the form of the contract; unknown fields are ignored.
func (c *Change) UnmarshalJSON(b []byte) error {
	var j changeJSON
	if err := json.Unmarshal(b, &j); err != nil {
		return err
	}
	at, err := time.Parse(time.RFC3339Nano, j.At)
	if err != nil {
		return err
	}
	*c = Change{j.What, at.UnixMilli(), j.Text}
	return nil
}

// unrelated: such a change is a fact of its own finding, not of what came before, or can
// have nothing to do with it. A measurement that fails does not know of SP or the law, and
// values fail to arrive for nothing that the controller does.
func unrelated(k int, what ChangeWhat) bool {
	if k == kStale {
		return true
	}
	switch what {
	case ChangedTuning:
		return k == kTuning || k == kFrozen || k == kRangeEnd
	case ChangedSetPoint:
		return k == kFrozen || k == kRangeEnd
	case ChangedMode, ChangedByHand:
		return k == kMode
	case ChangedAtLimit:
		return k == kSaturation
	}
	return false
}

// before lists what changed in the 24 h before an onset, s since T0, oldest first;
// nothing is later than now, ms UTC.
func (w *Watch) before(k int, onset float64, now int64) (out []Change) {
	s := &w.s
	add := func(what ChangeWhat, at, slack float64, text string) {
		if text != "" && at <= onset+slack && onset-at <= markBeforeS && !unrelated(k, what) {
			out = append(out, Change{what, min(w.ms(at), now), text})
		}
	}
	slack := max(2*s.Grid.DT, 5)
	if m := w.tuningBefore(onset); w.words(&m) != "" {
		add(ChangedTuning, m.At, w.vagueS(), w.words(&m))
	}
	for kind := range s.Marks {
		for _, x := range s.Marks[kind] {
			at, size := x.At.s(), float64(x.Size)
			if size == 0 {
				continue
			}
			if kind == markLimit {
				size = min(size, onset-at) // what followed the onset did not come before it
			}
			what, text := w.markWords(kind, size)
			add(what, at, slack, text)
		}
	}
	slices.SortStableFunc(out, func(a, b Change) int {
		switch {
		case a.At < b.At:
			return -1
		case a.At > b.At:
			return 1
		}
		return 0
	})
	return out
}

// tuningDiffers is by how much the tuning read in a trouble is another one. Readings at two
// scales of time differ by more than those of one: a fifth more than a change asks for.
const tuningDiffers = 1.2 * changeRatio

// tuningMoved compares the tuning in service with the usual one before an onset, for a
// trouble that was found before the change itself was sure. same: both are known and agree.
func (w *Watch) tuningMoved(onset float64) (m tuningMove, same bool) {
	s := &w.s
	gain, reset := w.tuningNow()
	k0, t0, ok := w.usualTuning(onset - 2*s.Osc.P)
	if !ok || !(gain > 0) || !(reset > 0) || !(k0 > 0) || !(t0 > 0) || t0 >= noTi {
		return m, false
	}
	if !within(gain, k0, tuningDiffers) {
		m.GainWas, m.GainNow = float32(k0), float32(gain)
	}
	if !within(reset, t0, tuningDiffers) {
		m.ResetWas, m.ResetNow = float32(t0), float32(reset)
	}
	// Without a reading that tells since when, nothing is said of a time.
	if m.At, ok = w.readFrom(gain, reset, 0); !ok {
		return tuningMove{}, false
	}
	return m, near(gain, k0) && near(reset, t0)
}

// readSame: a reading from after an onset is that of before. What was read before says
// nothing of a change that made the trouble.
func (w *Watch) readSame(onset float64) bool {
	k0, t0, ok := w.usualTuning(onset - 2*w.s.Osc.P)
	if ok {
		_, ok = w.readFrom(k0, t0, onset)
	}
	return ok
}

// readFrom is the begin, s, of the earliest reading held that agrees with a gain and a reset
// time, s (NaN: any), and began at or after a time, s; the running blocks read, too.
func (w *Watch) readFrom(gain, reset, after float64) (at float64, ok bool) {
	at = math.Inf(1)
	for k := range w.s.Fits {
		b := &w.s.Fits[k]
		look := func(f *fit) {
			if t := f.T0.s(); f.ok() && t >= after && near(math.Abs(float64(f.Kc)), gain) && (reset != reset || f.hasReset() && near(float64(f.Ti), reset)) {
				at = min(at, t)
			}
		}
		for i := range min(b.Count, fitRing) {
			look(&b.Ring[i])
		}
		look(&b.Last)
		if float64(b.N) > 3*fitTh {
			r, _, _ := w.solveFit(k)
			look(&r)
		}
	}
	return at, !math.IsInf(at, 1)
}

// markWords says a mark; the text is empty where it is too small for a word.
func (w *Watch) markWords(kind int, size float64) (ChangeWhat, string) {
	switch kind {
	case markMode:
		return ChangedMode, "mode from " + collector.Mode(int(size-1)/16).String() + " to " + collector.Mode(int(size-1)%16).String()
	case markSP:
		if math.Abs(size) < max(markLeast, 2*w.s.Noise.sigma()) {
			return ChangedSetPoint, ""
		}
		return ChangedSetPoint, "SP by " + signOf(size) + w.pvText(size)
	case markHand:
		if math.Abs(size) < markLeast {
			return ChangedByHand, "OP moved by hand"
		}
		return ChangedByHand, fmt.Sprintf("OP by hand by %s%s %%", signOf(size), sig2(math.Abs(size)))
	case markLimit:
		if size < markLimitS || w.s.Sat.LowShare > usualLow {
			return ChangedAtLimit, ""
		}
		return ChangedAtLimit, "OP at a limit for " + duration(size)
	}
	if size < max(markGapS, 5*w.s.Grid.DT) {
		return ChangedDataGap, ""
	}
	return ChangedDataGap, "no data for " + duration(size)
}

func signOf(v float64) string {
	if v < 0 {
		return "-"
	}
	return "+"
}

// beforeSentence says the changes before a finding, three at most, the nearest to its
// onset and one of the tuning first; where the watch saw the whole day and nothing, that.
func (w *Watch) beforeSentence(k int, f *Finding) string {
	if len(f.Changed) == 0 {
		return w.nothingBefore(k, f)
	}
	const most = 3
	near := slices.Clone(f.Changed)
	slices.Reverse(near)
	if i := slices.IndexFunc(near, func(c Change) bool { return c.What == ChangedTuning }); i > 0 {
		c := near[i]
		copy(near[1:], near[:i])
		near[0] = c
	}
	var t []string
	for _, c := range near[:min(len(near), most)] {
		ahead := float64(f.Since-c.At) / 1000
		switch slack := max(60, 2*w.s.Grid.DT); {
		case ahead < -slack: // a change read from the data: its begin and the onset are vague
			t = append(t, c.Text+", as read from "+duration(-ahead)+" after it began")
		case ahead < slack:
			t = append(t, c.Text+", as it began")
		default:
			t = append(t, c.Text+", "+duration(ahead)+" before")
		}
	}
	return " What changed before: " + strings.Join(t, "; ") + "."
}

// nothingBefore is said only where the whole day was seen and no mark of it can have
// been given away for a later one.
func (w *Watch) nothingBefore(k int, f *Finding) string {
	s := &w.s
	onset := float64(f.Since-s.Grid.T0) / 1000
	if k >= kFrozen || onset < markBeforeS || s.Motion.SPBusy > 0.03 { // a program that never rests: its changes are one mark
		return ""
	}
	for kind := range s.Marks {
		if x := &s.Marks[kind][1]; x.Size != 0 && x.At.s() > onset {
			return ""
		}
	}
	// A change found since is the usual tuning by now: what is read agrees with that, and an
	// onset can lie before it by mistake.
	changed := s.Change.Seen > 0 && s.Change.At > onset-markBeforeS
	if _, same := w.tuningMoved(onset); changed || !same || !w.readSame(onset) || f.Cause == IntegralMissing {
		return " No change of mode or SP was seen in the 24 h before."
	}
	if k == kGrowing && f.Cause != OutsideDisturbance {
		return " No change of mode, SP or tuning was seen in the 24 h before: the process, its final element or the measurement may have changed."
	}
	return " No change of mode, SP or tuning was seen in the 24 h before."
}
