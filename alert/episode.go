package alert

import (
	"crypto/sha256"
	"encoding/base32"
	"math"
	"slices"
	"strings"
	"time"

	"midwatch/detect"
)

// State of an episode in the words of ISA-18.2 / IEC 62682, borrowed for alerts.
type State string

// States. Held is ours: the loop cannot be seen now.
const (
	Unacknowledged     State = "unacknowledged"
	Acknowledged       State = "acknowledged"
	ReturnedToNormal   State = "returned to normal"
	Normal             State = "normal" // returned and acknowledged, or returned for a day: closed
	Shelved            State = "shelved"
	SuppressedByDesign State = "suppressed by design"
	OutOfService       State = "out of service"
	Held               State = "held"
	Folded             State = "folded" // went on in another episode
)

// Member is one kind of finding of one subject within an episode, as last heard.
type Member struct {
	Finding detect.Finding `json:"finding"`
	Open    bool           `json:"open"`
	Depth   int            `json:"depth,omitempty"`  // in its cascade: 0 outermost, or none
	Within  bool           `json:"within,omitempty"` // a group of one cascade, of which its loops tell more
}

// Mark says who did something, when and why. Times are ms UTC.
type Mark struct {
	Who   string `json:"who,omitempty"`
	Why   string `json:"why,omitempty"`
	Wall  int64  `json:"wall,omitempty"`
	Until int64  `json:"until,omitempty"` // wall time, of a shelf
}

// Hold says since when (data time, ms UTC) a loop cannot be seen, and why.
type Hold struct {
	Since int64  `json:"since"`
	Why   string `json:"why"`
}

// Reasons why a loop cannot be seen that have a state of their own. Others
// (manual, tracking, no data) make an episode held.
const (
	WhySuppressed   = "suppressed"
	WhyOutOfService = "out-of-service"
	whyNoData       = "no data"
)

// Episode is one trouble of one subject with one root cause, from its first
// finding to its return to normal. All times but those of Mark are data time, ms
// UTC; 0 is not yet.
type Episode struct {
	ID       string         `json:"id"`
	Subject  detect.Subject `json:"subject"`
	Family   string         `json:"family"`
	Members  []Member       `json:"members"`
	Group    []string       `json:"group,omitempty"` // loops of a shared trouble
	Since    int64          `json:"since"`           // estimated onset, of this coming
	First    int64          `json:"first"`           // raised for the first time
	Raised   int64          `json:"raised"`          // raised the last time
	Said     int64          `json:"said,omitempty"`  // raised the last time that people were to be told of
	Cleared  int64          `json:"cleared,omitempty"`
	Last     int64          `json:"last"`  // newest data time that changed it
	Count    int            `json:"count"` // 1, and one more each time it came back
	Standing bool           `json:"standing,omitempty"`
	Into     string         `json:"into,omitempty"` // episode it was folded into
	Ack      *Mark          `json:"ack,omitempty"`
	Hold     *Hold          `json:"hold,omitempty"`
	Shelf    *Mark          `json:"shelf,omitempty"`

	Paged     int64 `json:"paged,omitempty"`     // when a person was first told, wall time
	Escalated int   `json:"escalated,omitempty"` // levels of escalation done

	Steps   uint32    `json:"steps"`   // steps told or to be told so far
	Entries uint32    `json:"entries"` // length of the journal
	Told    toldState `json:"told"`    // what the last step said
}

// toldState is what decides whether a change is news.
type toldState struct {
	Event      detect.Event `json:"event,omitempty"`
	Cause      detect.Cause `json:"cause,omitempty"`
	Kind       detect.Kind  `json:"kind,omitempty"`
	Confidence float64      `json:"confidence,omitempty"`
	Strength   float64      `json:"strength,omitempty"` // amplitude or offset, %
	Loops      int          `json:"loops,omitempty"`
	Root       string       `json:"root,omitempty"` // of a group
	Loop       string       `json:"loop,omitempty"` // that led
	Urgent     bool         `json:"urgent,omitempty"`
	LimitAt    int64        `json:"limit_at,omitempty"` // predicted, data time
	Reached    bool         `json:"reached,omitempty"`  // the limit was
}

// Open says whether any of its findings stands.
func (e *Episode) Open() bool {
	if e.Into != "" {
		return false
	}
	for i := range e.Members {
		if e.Members[i].Open {
			return true
		}
	}
	return false
}

// day is how long, in data time, a trouble that comes back is the same episode.
const day = int64(24 * time.Hour / time.Millisecond)

// State is the state in one word. A stronger word hides a weaker one.
func (e *Episode) State() State {
	open := e.Open()
	switch {
	case e.Into != "":
		return Folded
	case !open && e.Ack != nil:
		return Normal
	case e.Hold != nil && e.Hold.Why == WhyOutOfService && open:
		return OutOfService
	case e.Hold != nil && e.Hold.Why == WhySuppressed && open:
		return SuppressedByDesign
	case e.Shelf != nil:
		return Shelved
	case !open:
		return ReturnedToNormal
	case e.Hold != nil:
		return Held
	case e.Ack != nil:
		return Acknowledged
	}
	return Unacknowledged
}

// Lead is the finding that speaks for the episode: one that stands, with a named
// cause, the surest, the earliest. For a dead source it is the source's own, for
// a group the group's.
func (e *Episode) Lead() detect.Finding {
	if len(e.Members) == 0 {
		return detect.Finding{Subject: e.Subject}
	}
	best := 0
	for i := 1; i < len(e.Members); i++ {
		if leads(&e.Members[i], &e.Members[best]) {
			best = i
		}
	}
	return e.withLimit(e.Members[best].Finding)
}

// withLimit adds to what is said of a group the limit that the first of its loops meets: the
// group tells nothing of growth, and its loops make no messages of their own.
func (e *Episode) withLimit(f detect.Finding) detect.Finding {
	if f.Kind != detect.SharedOscillation {
		return f
	}
	soonest, loop, measure := int64(0), "", ""
	for i := range e.Members {
		if m := &e.Members[i]; m.Open && m.Finding.Kind == detect.GrowingOscillation {
			if at, name, ok := firstLimit(&m.Finding); ok && (loop == "" || at < soonest) {
				soonest, loop, measure = at, m.Finding.Loop, name
			}
		}
	}
	if loop == "" {
		return f
	}
	left := math.Max(0, float64(soonest-f.At)/1000)
	f.Measures = append(slices.Clone(f.Measures), detect.Measure{Name: measure, Value: left})
	f.Text += " Of these " + loop + " meets its " + limitWords(measure) + " first."
	return f
}

func leads(a, b *Member) bool {
	if a.Open != b.Open {
		return a.Open
	}
	fa, fb := &a.Finding, &b.Finding
	if x, y := a.collects(), b.collects(); x != y {
		return x
	}
	if a.collects() && fa.At != fb.At {
		return fa.At > fb.At // a group is about another loop from now on
	}
	if x, y := named(fa.Cause), named(fb.Cause); x != y {
		return x
	}
	// In a cascade the inner loop is judged first: the outer one works through it.
	if a.Depth != b.Depth {
		return a.Depth > b.Depth
	}
	// The growing one of a pair says more than the sustained one.
	if x, y := fa.Kind == detect.GrowingOscillation, fb.Kind == detect.GrowingOscillation; x != y {
		return x
	}
	if fa.Confidence != fb.Confidence {
		return fa.Confidence > fb.Confidence
	}
	if fa.Since != fb.Since {
		return fa.Since < fb.Since
	}
	return memberKey(fa) < memberKey(fb)
}

// collects: it tells of the whole of an episode.
func (m *Member) collects() bool { return collects(m.Finding.Kind) && !m.Within }

func collects(k detect.Kind) bool { return k == detect.SourceDown || k == detect.SharedOscillation }

func named(c detect.Cause) bool {
	return c != detect.NoCause && c != detect.Undetermined && c != detect.OutsideDisturbance
}

// Loops names every loop of the episode, each once: those of a cascade from the inner
// to the outer, else the subject's first.
func (e *Episode) Loops() []string {
	var out []string
	seen := map[string]bool{}
	depth := map[string]int{}
	for i := range e.Members {
		depth[e.Members[i].Finding.Loop] = e.Members[i].Depth
	}
	add := func(l string) {
		if l != "" && !seen[l] {
			seen[l] = true
			out = append(out, l)
		}
	}
	add(e.Subject.Loop)
	for i := range e.Members {
		add(e.Members[i].Finding.Loop)
	}
	for _, l := range e.Group {
		add(l)
	}
	slices.SortStableFunc(out, func(a, b string) int { return depth[b] - depth[a] })
	return out
}

// inner is the innermost loop of a cascade of which an outer loop shares the episode;
// empty: none. That a source is down is no matter of a cascade, and loops that share
// an episode need not be of one.
func (e *Episode) inner(of relatives) string {
	name, deepest := "", 0
	if e.Family == familySource || e.Family == familyData {
		return name
	}
	for i := range e.Members {
		m := &e.Members[i]
		if m.Open && m.Depth > deepest && slices.ContainsFunc(e.Members, func(o Member) bool {
			return o.Open && o.Depth < m.Depth && slices.Contains(of[m.Finding.Loop], o.Finding.Loop)
		}) {
			name, deepest = m.Finding.Loop, m.Depth
		}
	}
	return name
}

// Entry is one line of an episode's journal. It is only ever appended.
type Entry struct {
	Episode string          `json:"episode"`
	Number  uint32          `json:"number"`
	At      int64           `json:"at,omitempty"` // data time, ms UTC; 0 where it has none
	Wall    int64           `json:"wall"`         // when it was written down, ms UTC
	What    string          `json:"what"`
	State   State           `json:"state"` // after it
	Who     string          `json:"who,omitempty"`
	Why     string          `json:"why,omitempty"`
	Until   int64           `json:"until,omitempty"`
	Finding *detect.Finding `json:"finding,omitempty"`
}

// episodeID is stable: the same findings make the same id on every run.
func episodeID(f *detect.Finding, family string) string {
	sum := sha256.Sum256([]byte(subjectKey(f.Subject) + "\x00" + family + "\x00" + detect.FormatTime(f.At)))
	tail := strings.ToLower(base32.StdEncoding.EncodeToString(sum[:5]))
	return time.UnixMilli(f.At).UTC().Format("20060102-1504-") + tail
}

func subjectKey(s detect.Subject) string {
	switch {
	case s.Loop != "":
		return "loop:" + s.Loop
	case s.Source != "":
		return "source:" + s.Source
	}
	return "part:" + s.Part
}

func memberKey(f *detect.Finding) string { return subjectKey(f.Subject) + "\x00" + string(f.Kind) }
