package detect

import (
	"cmp"
	"encoding/json"
	"math"
	"slices"

	"midwatch/collector"
	"midwatch/configs"
)

// SiteSlotMs is the slot of data time, ms, at whose end site detectors judge.
const SiteSlotMs = 5 * 60 * 1000

const evidenceCrossings = 16

// Evidence is what a loop hands to the site detectors at the end of a slot of
// data time: closed, never changed afterwards.
type Evidence struct {
	Slot      int64 // end of the slot, ms UTC
	Live      bool  // a sustained or growing oscillation is live
	Growing   bool
	PeriodS   float64
	Regular   float64
	Amp       float64 // %
	OverUsual float64 // amplitude over the loop's own usual, 0 unknown
	Shape     float64 // sine-triangle index; NaN unknown
	Jumps     float64 // share of PV's travel in the busiest fifth of the cycle; 0 unknown
	Since     int64   // ms UTC
	Cause     Cause
	Beat      bool // it keeps time, judged over so many periods that chance is out
	N         int
	Cross     [evidenceCrossings]float64 // s since 1970, zero crossings, newest first
}

// closeSlot closes the evidence of the slots that the frame has passed.
func (w *Watch) closeSlot(ms int64) {
	s := &w.s
	if ms < s.Slot || s.Slot == 0 {
		return
	}
	end := ms / SiteSlotMs * SiteSlotMs
	s.Slot = end + SiteSlotMs
	w.evEnd, w.hasEv = end, true
}

// TakeEvidence gives the record that the last Step closed, once.
func (w *Watch) TakeEvidence() (Evidence, bool) {
	if !w.hasEv {
		return Evidence{}, false
	}
	w.hasEv = false
	s := &w.s
	o := &s.Osc
	e := Evidence{Slot: w.evEnd}
	if (o.Sus || o.Grow) && o.Bad < 6 && s.Motion.Active && o.P > 0 {
		b := &s.Cycles[o.Bank]
		e.Live, e.Growing, e.PeriodS, e.Regular, e.Amp, e.Since, e.Cause = true, o.Grow, o.P, o.Regular, o.Amp, w.ms(o.Since), causes[o.Cause]
		if w.led() { // it follows: not its own growth, whatever it looks like
			e.Growing, e.Cause = false, Undetermined
		}
		keeps, _ := s.Clock.beat()
		e.Beat = keeps && s.Clock.long() && s.Clock.Bank == o.Bank
		sh := w.shapes()
		e.Shape = w.stickIndex(sh)
		if sh.stick == sh.stick {
			e.Jumps = sh.stick
		}
		if w.usualKnown(b) {
			e.OverUsual = o.Amp / b.Usual.Value()
		}
		t := b.Zero
		h := w.levelS(int(o.Bank))
		for i := range min(int(b.N), evidenceCrossings) {
			e.Cross[i] = float64(s.Grid.T0)/1000 + t
			t -= b.at(i).length() * h
			e.N++
		}
	}
	return e, true
}

// Sites are the site detectors: they see the evidence of all loops once per slot
// of data time. Results do not depend on the order of Record calls.
type Sites struct {
	loops []*configs.Loop
	ev    map[collector.LoopID]Evidence
	sites []Site
	done  int64 // end of the last slot judged, ms UTC
}

// Site is one detector across loops. Judge sees the live evidence of one slot,
// sorted by loop, and emits findings; Hear passes on a finding of a loop as it stands
// beside those; its state is what Save returns.
type Site interface {
	Judge(end int64, live []SiteEvidence, emit func(*Finding))
	Hear(f *Finding, emit func(*Finding))
	Save() ([]byte, error)
	Load([]byte) error
}

// SiteEvidence is the evidence of one loop with its number.
type SiteEvidence struct {
	ID collector.LoopID
	Evidence
}

// SiteRow is one row of the table of site detectors.
type SiteRow struct {
	Kind   Kind
	Doc    string
	Source string
	New    func(loops []*configs.Loop) Site
}

// SiteTable lists the site detectors.
func SiteTable() []SiteRow {
	return []SiteRow{{SharedOscillation, "loops that cycle with one period and keep their phase for ten half-cycles and more",
		"periods clustered as in Thornhill, Huang & Zhang 2003; phase kept: mean resultant length of the crossing times (Mardia 1972)", newShared}}
}

// NewSites makes the site detectors of a loop list.
func NewSites(loops []*configs.Loop) *Sites {
	s := &Sites{loops: loops, ev: map[collector.LoopID]Evidence{}}
	for _, r := range SiteTable() {
		s.sites = append(s.sites, r.New(loops))
	}
	return s
}

// Record takes the evidence of a loop. Records of a slot already judged are
// ignored.
func (s *Sites) Record(id collector.LoopID, e Evidence) {
	if e.Slot > s.done {
		s.ev[id] = e
	}
}

// Slot judges the slot that ends at end (ms UTC, a multiple of SiteSlotMs). It is
// called when every loop has passed end or is out of sight.
func (s *Sites) Slot(end int64, emit func(*Finding)) {
	if end <= s.done {
		return
	}
	s.done = end
	var live []SiteEvidence
	for id, e := range s.ev {
		if e.Slot <= end-6*SiteSlotMs { // out of sight for half an hour
			delete(s.ev, id)
			continue
		}
		if e.Live && e.Slot <= end {
			live = append(live, SiteEvidence{id, e})
		}
	}
	slices.SortFunc(live, func(a, b SiteEvidence) int { return cmp.Compare(s.loops[a.ID].Name, s.loops[b.ID].Name) })
	for _, d := range s.sites {
		d.Judge(end, live, emit)
	}
}

// Hear passes on a finding of a loop, or what is left of it beside what the site
// detectors know. It is called after the slots that end at or before the finding's time
// were judged, and before later ones.
func (s *Sites) Hear(f *Finding, emit func(*Finding)) {
	for _, d := range slices.Backward(s.sites) {
		next := emit
		emit = func(f *Finding) { d.Hear(f, next) }
	}
	emit(f)
}

type sitesMemory struct {
	Done  int64
	Sites []json.RawMessage
	Seen  []seenEvidence // of loops slower than the slot: it counts for half an hour
}

type seenEvidence struct {
	Loop string
	Evidence
}

// Save keeps what the site detectors hold between slots.
func (s *Sites) Save(dst []byte) []byte {
	m := sitesMemory{Done: s.done}
	for _, d := range s.sites {
		b, err := d.Save()
		if err != nil {
			return dst
		}
		m.Sites = append(m.Sites, b)
	}
	for id, e := range s.ev {
		if e.Shape != e.Shape {
			e.Shape = -1 // JSON has no NaN; below any shape, as unknown is
		}
		m.Seen = append(m.Seen, seenEvidence{s.loops[id].Name, e})
	}
	slices.SortFunc(m.Seen, func(a, b seenEvidence) int { return cmp.Compare(a.Loop, b.Loop) })
	b, err := json.Marshal(m)
	if err != nil {
		return dst
	}
	return append(dst, b...)
}

// Load restores what Save kept. ErrMemory means that nothing was taken.
func (s *Sites) Load(b []byte) error {
	var m sitesMemory
	if err := json.Unmarshal(b, &m); err != nil || len(m.Sites) != len(s.sites) {
		return ErrMemory
	}
	for i, d := range s.sites {
		if err := d.Load(m.Sites[i]); err != nil {
			return ErrMemory
		}
	}
	s.done = m.Done
	clear(s.ev)
	for id, l := range s.loops {
		for _, e := range m.Seen {
			if e.Loop == l.Name {
				s.ev[collector.LoopID(id)] = e.Evidence
			}
		}
	}
	return nil
}

// phaseKept is the mean resultant length of b's crossings against a's, up and down
// ones apart (a cycle need not be symmetric), for the better of the two signs, and
// how many of a's crossings were compared. Where it is not over least, it is not worked
// out to the end.
func phaseKept(a, b *Evidence, least float64) (r float64, n int) {
	for sign := range 2 {
		if q, m := phaseOfSign(a, b, sign, least); q > r {
			r, n = q, m
		}
	}
	return
}

func phaseOfSign(a, b *Evidence, sign int, least float64) (r float64, n int) {
	p := a.PeriodS
	var re, im [2]float64
	near := [2]int{sign, 1 - sign} // by kind of a's crossing: b's nearest to the one before
	for i := range a.N {
		best := math.Inf(1)
		for j := near[i&1]; j < b.N; j += 2 {
			d := math.Abs(a.Cross[i] - b.Cross[j])
			if d > math.Abs(best) {
				break // both go back in time: the farther ones are farther still
			}
			if d < math.Abs(best) {
				best, near[i&1] = a.Cross[i]-b.Cross[j], j
			}
		}
		if math.Abs(best) < p {
			sin, cos := math.Sincos(4 * math.Pi * best / p) // against half the period: stricter by two
			re[i&1] += cos
			im[i&1] += sin
			n++
		}
		// All that are left in phase would not do: two lengths are at most the root of twice their squares.
		left := float64(a.N - 1 - i)
		if math.Sqrt(2*(re[0]*re[0]+im[0]*im[0]+re[1]*re[1]+im[1]*im[1]))+left < (least-1e-9)*(float64(n)+left) {
			return 0, n
		}
	}
	if n == 0 {
		return 0, 0
	}
	return (math.Hypot(re[0], im[0]) + math.Hypot(re[1], im[1])) / float64(n), n
}
