package alert

import (
	"math"
	"strings"

	"midwatch/configs"
	"midwatch/detect"
)

// step is one change of an episode that is to be told, as the ledger saw it.
// Dispatch decides who is told and when.
type step struct {
	Item
	Wall  int64 `json:"wall"`            // when it was written down
	Quiet bool  `json:"quiet,omitempty"` // of no interest to people: programs only
	Worse bool  `json:"worse,omitempty"` // a standing trouble that got worse
	Wait  int64 `json:"wait,omitempty"`  // ms of wall time in which its group may show, see joinWait
}

// Item is what a message says of one episode, kept as it was when it happened:
// the same key always carries the same facts.
type Item struct {
	Episode  string         `json:"episode"`
	Step     uint32         `json:"step"`
	Event    detect.Event   `json:"event"`
	At       int64          `json:"at"` // data time, ms UTC
	Since    int64          `json:"since"`
	Finding  detect.Finding `json:"finding"`
	Loops    []string       `json:"loops,omitempty"` // all of them, see [Episode.Loops]
	Inner    string         `json:"inner,omitempty"` // innermost loop of a cascade, where several of it are in it
	Kinds    []detect.Kind  `json:"kinds,omitempty"` // all that were folded together
	Count    int            `json:"count"`
	State    State          `json:"state"`
	Hold     *Hold          `json:"hold,omitempty"`
	Standing bool           `json:"standing,omitempty"`
	Urgency  Urgency        `json:"urgency,omitempty"` // set by dispatch
	Why      string         `json:"why,omitempty"`     // of the urgency, or why it is told again
}

func (d *Desk) item(e *Episode) Item {
	it := Item{Episode: e.ID, Step: e.Steps, At: e.Last, Since: e.Since, Finding: e.Lead(), Loops: e.Loops(), Inner: e.inner(d.set.cascade), Count: e.Count,
		State: e.State(), Hold: e.Hold, Standing: e.Standing}
	seen := map[detect.Kind]bool{}
	for i := range e.Members {
		if k := e.Members[i].Finding.Kind; !seen[k] && (e.Members[i].Open || !e.Open()) {
			seen[k] = true
			it.Kinds = append(it.Kinds, k)
		}
	}
	return it
}

// step writes down that something is to be told.
func (b *batch) step(e *Episode, event detect.Event, at int64, quiet, worse bool) error {
	e.Steps++
	b.touch(e)
	lead := e.Lead()
	limit, reached, _ := limitOf(&lead)
	e.Told = toldState{Root: root(&lead), Loop: lead.Loop, LimitAt: limit, Reached: reached, Event: event, Cause: lead.Cause, Kind: lead.Kind, Confidence: lead.Confidence, Strength: strength(&lead),
		Loops: len(e.Loops()), Urgent: urgentSoon(&lead)}
	s := step{Item: b.d.item(e), Wall: b.d.wall(), Quiet: quiet, Worse: worse, Wait: b.d.joinWait(e, event)}
	s.Event, s.At = event, at
	if err := b.instead(e, &s); err != nil {
		return err
	}
	b.d.mem.steps[e.ID] = append(b.d.mem.steps[e.ID], s)
	return put(b.tx, bucketSteps, key2(e.ID, e.Steps), s)
}

// dropSteps forgets what of the episode was not routed yet.
func (b *batch) dropSteps(id string) (n uint32, err error) {
	for _, s := range b.d.mem.steps[id] {
		n++
		if err := b.tx.Delete(bucketSteps, key2(id, s.Step)); err != nil {
			return n, err
		}
	}
	delete(b.d.mem.steps, id)
	return n, nil
}

// news compares the episode with what was last told of it: whether to tell,
// whether a standing one got worse, and whether only programs care.
func (e *Episode) news() (news, worse, quiet bool) {
	lead, told := e.Lead(), e.Told
	s := strength(&lead)
	at, reached, ok := limitOf(&lead)
	// One that was told to grow, and when it meets a limit, is no news before it has: there
	// it is, once.
	foretold := lead.Kind == detect.GrowingOscillation && told.Kind == lead.Kind && told.LimitAt != 0 && !told.Reached
	doubled := s > 0 && s >= 2*told.Strength && !foretold
	urgent := urgentSoon(&lead) && !told.Urgent || foretold && reached
	// A limit that comes in half the time told before is news: it may fall into
	// the night now.
	if ok && !reached && told.LimitAt != 0 && at-lead.At <= (told.LimitAt-lead.At)/2 {
		urgent = true
	}
	grew := len(e.Loops()) >= 2*max(told.Loops, 1)
	if lead.Loop == told.Loop && lead.Kind != detect.SharedOscillation && len(e.Group) > 0 {
		grew = false // the other loop of a cascade swings along
	}
	cause := named(lead.Cause) && (lead.Cause != told.Cause || root(&lead) != "" && root(&lead) != told.Root)
	// What a loop of a group says once the group is no more seen is the same trouble.
	kind := lead.Kind != told.Kind && told.Kind != detect.SharedOscillation
	surer := kind || lead.Kind == told.Kind && math.Abs(lead.Confidence-told.Confidence) >= 0.1-1e-9
	news = doubled || urgent || grew || cause || kind || surer
	return news, doubled && told.Strength > 0 || urgent, !doubled && !urgent && !grew && !cause
}

// root is the loop from which a group swings, as far as it is named.
func root(f *detect.Finding) string {
	if f.Kind == detect.SharedOscillation && named(f.Cause) {
		return f.Loop
	}
	return ""
}

// strength is how bad it is in % of span, 0 where the finding does not say.
func strength(f *detect.Finding) float64 {
	for _, m := range f.Measures {
		if strings.HasPrefix(m.Name, "amplitude") && strings.HasSuffix(m.Name, "_pct") ||
			strings.HasPrefix(m.Name, "offset") && strings.HasSuffix(m.Name, "_pct") || m.Name == "error_pct" {
			return math.Abs(m.Value)
		}
	}
	return 0
}

// limitAt is when a limit or PV alarm is reached by the finding's own
// prediction: data time, ms UTC.
func limitAt(f *detect.Finding) (at int64, what string, ok bool) {
	at, measure, ok := firstLimit(f)
	return at, limitWords(measure), ok
}

// firstLimit is the same with the name of the measure that says when.
func firstLimit(f *detect.Finding) (at int64, measure string, ok bool) {
	for _, m := range f.Measures {
		if !strings.HasPrefix(m.Name, "time_to_") || !strings.HasSuffix(m.Name, "_s") || m.Value < 0 || m.Value > 30*86400 {
			continue
		}
		t := f.At + int64(m.Value*1000)
		if !ok || t < at {
			at, measure, ok = t, m.Name, true
		}
	}
	return at, measure, ok
}

// limitOf is the same without the words, and whether it is reached.
func limitOf(f *detect.Finding) (at int64, reached, ok bool) {
	at, _, ok = limitAt(f)
	return at, ok && at <= f.At, ok
}

// limitWords is the limit of which a measure says when it is met.
func limitWords(measure string) string {
	w := strings.ReplaceAll(strings.TrimSuffix(strings.TrimPrefix(measure, "time_to_"), "_s"), "_", " ")
	for _, r := range [][2]string{{"op limit", "OP limit"}, {"pv alarm", "PV alarm"}, {"pv limit", "PV limit"}} {
		w = strings.ReplaceAll(w, r[0], r[1])
	}
	return w
}

// urgentSoon says, in data time alone, that the finding speaks of something that
// does not wait: it is what makes a change news, not yet what wakes someone.
func urgentSoon(f *detect.Finding) bool {
	if _, blind := deaf(f); blind {
		return true
	}
	at, _, ok := limitAt(f)
	return ok && at-f.At < day
}

// deaf says that PV tells nothing or does nothing any more.
func deaf(f *detect.Finding) (why string, ok bool) {
	switch {
	case f.Kind == detect.FrozenPV:
		return "PV is frozen: the controller works on a number that does not move", true
	case f.Kind == detect.PVAtRangeEnd:
		return "PV is at the end of its range: the true value is not known", true
	case f.Cause == detect.FinalElementNotFollowing:
		return "PV does not follow while OP moves", true
	}
	return "", false
}

// digestOnly kinds never make a message of their own to people.
func digestOnly(k detect.Kind) bool {
	switch k {
	case detect.TuningChanged, detect.NotInNormalMode, detect.SluggishRecovery, detect.SamplesLost, detect.ClockStepKind, detect.SourceLate:
		return true
	}
	return false
}

// horizon is the time before which a limit must not be reached unseen.
type horizon struct {
	at    int64 // wall time, ms UTC
	words string
}

// urgency ranks a finding: from what it predicts and what that means.
func urgency(f *detect.Finding, l *configs.Loop, h horizon) (Urgency, string) {
	if f.Event == detect.Cleared || digestOnly(f.Kind) {
		return Note, ""
	}
	if why, ok := deaf(f); ok {
		return Now, why
	}
	if at, what, ok := limitAt(f); ok {
		if at <= f.At {
			return Now, what + " is reached"
		}
		if at < h.at {
			return Now, what + " expected before " + h.words
		}
		return Morning, ""
	}
	if f.Kind == detect.OutputSaturation && (l == nil || l.Duty != configs.Averaging && l.Duty != configs.Selector && l.Duty != configs.Standby) {
		return Now, "OP limit is reached"
	}
	return Morning, ""
}

// rank orders items for people: the higher, the sooner shown and the longer kept.
func (d *Desk) rank(it *Item) float64 {
	r := map[Urgency]float64{Now: 3e6, Morning: 2e6, Note: 1e6}[it.Urgency]
	if it.Event == detect.Cleared {
		r -= 5e5
	}
	if l := d.set.loops[it.Finding.Loop]; l != nil {
		switch strings.ToLower(l.Priority) {
		case "high", "1", "urgent":
			r += 2e5
		case "low", "3":
			r -= 2e5
		}
	}
	if _, blind := deaf(&it.Finding); blind || it.Finding.Kind == detect.OutputSaturation {
		r += 1e5 // reached already
	} else if at, _, ok := limitAt(&it.Finding); ok {
		r += 1e5 / (1 + math.Max(0, float64(at-it.At))/3.6e6)
	}
	if collects(it.Finding.Kind) {
		r += 1e4 * math.Log1p(float64(len(it.Loops)))
	}
	return r + 1e3*math.Min(strength(&it.Finding), 100)/100*it.Finding.Confidence + it.Finding.Confidence
}
