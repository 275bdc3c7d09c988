package demo

import (
	"context"
	"encoding/json"
	"errors"
	"fmt"
	"math"
	"strings"
	"sync"
	"time"

	"midwatch/alert"
	"midwatch/cmd/internal/daemon"
	"midwatch/collector/plant"
	"midwatch/configs"
	"midwatch/detect"
)

// show is a demonstration that runs.
type show struct {
	screen *screen
	dir    string
	loops  []*configs.Loop
	truth  []plant.Truth
	clock  daemon.Clock // of the works and its watch
	start  func()       // lets the clock run
	begin  time.Time    // plant time of the start of the live part
	wall   time.Time
	plant  *plant.Server
	watch  *daemon.Daemon
	trends *trends
	told   time.Time // when a line of counts was last printed

	recalled bool // what is open of the recorded day was printed
	totals   totals

	mu   sync.Mutex
	said []detect.Finding // by the sender, in order

	shown map[string]string // topics that stand on the screen, as they were last put
}

// advisories takes the lines of the log sender.
type advisories struct{ s *show }

// event is what is read of a line.
type event struct {
	Type string `json:"type"`
	Data struct {
		detect.Finding
		facts
	} `json:"-"`
	Raw json.RawMessage `json:"data"`
}

type facts struct {
	Title    string           `json:"title"`
	Urgency  string           `json:"urgency"`
	State    string           `json:"state"`
	OldNewsS float64          `json:"old_news_s"`
	Body     string           `json:"body"`
	Findings []detect.Finding `json:"advisories"`
}

func (a advisories) Write(line []byte) (int, error) {
	var e event
	if err := json.Unmarshal(line, &e); err != nil {
		return 0, fmt.Errorf("a line of the log sender: %w", err)
	}
	if err := json.Unmarshal(e.Raw, &e.Data.facts); err != nil {
		return 0, fmt.Errorf("data of the log sender: %w", err)
	}
	if len(e.Data.Findings) == 0 && strings.HasPrefix(e.Type, "midwatch.advisory.") {
		if err := json.Unmarshal(e.Raw, &e.Data.Finding); err != nil {
			return 0, fmt.Errorf("finding of the log sender: %w", err)
		}
	}
	a.s.tell(&e)
	return len(line), nil
}

// tell prints an advisory.
func (s *show) tell(e *event) {
	s.mu.Lock()
	if e.Data.Kind != "" {
		s.said = append(s.said, e.Data.Finding)
	}
	s.said = append(s.said, e.Data.Findings...)
	s.mu.Unlock()
	if e.Data.Kind == "" {
		s.screen.print(e.Data.Title + "\n" + e.Data.Body)
		return
	}
	if e.Data.At >= s.begin.UnixMilli() || e.Data.Subject.Loop == "" {
		s.announce(e.Data.Finding, clockTime(e.Data.At))
	}
}

// recall prints what is open when all loops have caught up: of the recorded day
// only this is news.
func (s *show) recall() {
	for _, e := range s.watch.Status().Episodes {
		if f := e.Finding; !s.known(&f) {
			f.Event = detect.Raised
			s.announce(f, "before")
		}
	}
}

func topic(f *detect.Finding) string { return subject(f) + " " + string(f.Kind) }

func (s *show) known(f *detect.Finding) bool {
	s.mu.Lock()
	defer s.mu.Unlock()
	return s.shown[topic(f)] != ""
}

// announce prints a finding: whole the first time, in short when something else is to be
// said of it, and the end only of what was shown.
func (s *show) announce(f detect.Finding, at string) {
	s.mu.Lock()
	key, now := topic(&f), put(&f)
	before := s.shown[key]
	if s.shown[key] = now; f.Event == detect.Cleared {
		delete(s.shown, key)
	}
	s.mu.Unlock()
	if f.Event == detect.Updated && before == "" {
		f.Event = detect.Raised
	}
	if before != now && (before != "" || f.Event != detect.Cleared) {
		s.screen.print(advisory(&f, at))
	}
}

// put is what the screen says of a finding in a line.
func put(f *detect.Finding) string {
	what := words(string(f.Kind))
	switch {
	case f.Event == detect.Cleared:
		return what + " is over"
	case string(f.Cause) == string(f.Kind):
		what += ", " + detect.Likely(f.Confidence)
	case f.Cause != "" && f.Cause != detect.Undetermined:
		what += ", " + detect.Likely(f.Confidence) + " " + words(string(f.Cause))
	}
	if left, ok := f.Measures.Get("time_to_op_limit_s"); ok && left == 0 {
		what += "; OP has met its limit"
	}
	return what
}

// advisory is a finding as the screen tells it: one line, and what the watch says
// about it the first time.
func advisory(f *detect.Finding, at string) string {
	what := put(f)
	if f.Event == detect.Updated {
		return fmt.Sprintf("%-6s  %-8s  still: %s\n", at, subject(f), what)
	}
	line := fmt.Sprintf("%-6s  %-8s  %s\n", at, subject(f), what)
	if f.Event == detect.Cleared {
		return line
	}
	return line + wrap(f.Text, strings.Repeat(" ", 18), width)
}

func subject(f *detect.Finding) string { return f.Subject.Loop + f.Subject.Source + f.Subject.Part }

func words(s string) string { return strings.ReplaceAll(s, "-", " ") }

// refresh draws the loops anew; elsewhere than on a terminal it prints a line of
// counts now and then.
func (s *show) refresh(ctx context.Context) error {
	if err := s.trends.read(ctx); err != nil {
		return err
	}
	if !s.recalled && s.watch.CatchingUp() == 0 && time.Since(s.wall) >= recallAfter {
		s.recalled = true
		s.recall()
	}
	if s.screen.terminal {
		s.screen.show(s.block())
		return nil
	}
	if time.Since(s.told) >= 20*time.Second {
		s.told = time.Now()
		s.screen.print(s.counts() + "\n")
	}
	return nil
}

// recallAfter leaves the desk a moment for the news of the recorded day.
const recallAfter = 2 * time.Second

// marks are short words for kinds, for the list of loops.
var marks = map[detect.Kind]string{
	detect.SustainedOffset: "offset", detect.GrowingOscillation: "growing", detect.SustainedOscillation: "oscillation",
	detect.SluggishRecovery: "sluggish", detect.OutputSaturation: "saturation", detect.ValveStickingKind: "sticking",
	detect.FrozenPV: "frozen pv", detect.PVAtRangeEnd: "range end", detect.NotInNormalMode: "not normal",
	detect.SharedOscillation: "shared", detect.StaleData: "stale data", detect.TuningChanged: "retuned",
}

// block is what a terminal shows below the advisories.
func (s *show) block() []string {
	cells := make([]string, len(s.loops))
	for i, l := range s.loops {
		v, _ := s.watch.View(l.Name)
		mark := ""
		switch {
		case v.Why == "catching up":
			mark = "catching up"
		case len(v.Open) > 0:
			mark = "* " + marks[v.Open[0].Kind]
		case v.State == detect.NotNormal && v.Last.Mode.String() != "":
			mark = v.Last.Mode.String()
		case v.State != detect.Judged:
			mark = words(string(v.State))
		}
		cells[i] = fmt.Sprintf("%-8s %s %-14s", l.Name, s.trends.loops[i], mark)
	}
	lines := []string{"", fmt.Sprintf("the last 2 h of PV - SP of every loop (middle: at set point)   plant time %s", clockTime(s.clock.Now().UnixMilli()))}
	half := (len(cells) + 1) / 2
	for i := range half {
		line := cells[i]
		if i+half < len(cells) {
			line += cells[i+half]
		}
		lines = append(lines, strings.TrimRight(line, " "))
	}
	return append(lines, s.counts())
}

// counts is the line of counts.
func (s *show) counts() string {
	st := s.watch.Status()
	l := st.Loops
	line := fmt.Sprintf("%d loops: judged %d, cannot judge %d, not in normal mode %d, held %d", l.Total, l.Judged, l.CannotJudge, l.NotNormal, l.Held)
	if l.CatchingUp > 0 {
		line += fmt.Sprintf("; catching up %d", l.CatchingUp)
	}
	if !s.screen.terminal {
		line = fmt.Sprintf("%-6s  %s", clockTime(s.clock.Now().UnixMilli()), line)
	}
	return line
}

// totals are what the demo came to.
type totals struct {
	counted bool
	frames  uint64
	missing uint64        // frames of the works that are not in what is kept
	lost    uint64        // what any part of the watch says it lost
	where   []string      // which
	unseen  []string      // loops without any live frame
	lived   time.Duration // of plant time
	walled  time.Duration
}

// count takes the counts at the end, before the watch stops. Frames that are not
// newer than the recorded day are none that were lost: a server tells the newest
// value of each tag when it is asked first.
func (s *show) count() error {
	c := s.watch.Status().Counts
	s.totals = totals{counted: true, frames: c["frames"], lived: s.clock.Now().Sub(s.begin), walled: time.Since(s.wall)}
	for _, k := range []string{"samples_dropped", "samples_late", "losses_reported", "findings_lost"} {
		if c[k] > 0 {
			s.totals.where = append(s.totals.where, fmt.Sprintf("%s %d", k, c[k]))
		}
		s.totals.lost += c[k]
	}
	s.totals.lost += s.watch.Status().Trends.Dropped + s.plant.Dropped()
	for _, l := range s.loops {
		seen, missing, err := s.holes(l)
		if err != nil {
			return err
		}
		s.totals.missing += missing
		if seen == 0 {
			s.totals.unseen = append(s.totals.unseen, l.Name)
		}
	}
	return nil
}

// holes counts the live frames of a loop that are kept, and those that the works
// published but the watch does not have, from the first live one on: the works
// publishes without a break, so every longer interval is a hole.
func (s *show) holes(l *configs.Loop) (seen, missing uint64, err error) {
	every := int64(1000 * l.SampleS)
	last := int64(0)
	for f, err := range s.watch.Frames(context.Background(), l.Name, s.begin.UnixMilli()+1, math.MaxInt64) {
		if err != nil {
			return seen, missing, fmt.Errorf("kept frames of %s: %w", l.Name, err)
		}
		if last != 0 {
			missing += uint64(max(1, (f.Time-last)/every) - 1)
		}
		seen, last = seen+1, f.Time
	}
	return seen, missing, nil
}

// conclude prints the summary, and fails where a promise was broken.
func (s *show) conclude(whole bool) error {
	if !s.totals.counted {
		return nil
	}
	t := &s.totals
	lost := t.lost + t.missing
	writes := s.plant.Writes() + s.plant.ForeignPublishes()
	s.screen.show(nil)
	var b strings.Builder
	fmt.Fprintf(&b, "\nwatched %d loops for %s of plant time in %.0f s\n", len(s.loops), span(t.lived), t.walled.Seconds())
	fmt.Fprintf(&b, "live frames %s, lost %d; writes to the plant %d\n\n", thousands(t.frames), lost, writes)
	b.WriteString(s.verdicts() + "\n")
	for _, c := range alert.Cautions {
		b.WriteString(wrap(c, "", width))
	}
	s.screen.print(b.String())
	var errs []error
	if lost > 0 {
		errs = append(errs, fmt.Errorf("%d frames were lost (%s); hint: this machine may be too busy for a works at %d times its speed", lost, strings.Join(append(t.where, fmt.Sprintf("holes %d", t.missing)), ", "), factor))
	}
	if t.walled > settleIn && len(t.unseen) > 0 {
		errs = append(errs, fmt.Errorf("nothing came of %s; hint: the notes above may say why", strings.Join(t.unseen, ", ")))
	}
	if writes > 0 {
		errs = append(errs, fmt.Errorf("%d writes or publishes reached the plant: this must never happen; hint: please report it", writes))
	}
	return errors.Join(errs...)
}

// settleIn is when every loop should have spoken; the slowest speaks every five
// minutes of plant time.
const settleIn = 15 * time.Second

// span writes a duration in hours and minutes.
func span(d time.Duration) string {
	m := int(d.Round(time.Minute).Minutes())
	if m < 60 {
		return fmt.Sprintf("%d min", m)
	}
	return fmt.Sprintf("%d h %02d min", m/60, m%60)
}

// verdicts compares what was done to the works with what was said.
func (s *show) verdicts() string {
	s.mu.Lock()
	defer s.mu.Unlock()
	var b strings.Builder
	fmt.Fprintf(&b, "%-8s %-15s %-9s  %s\n", "loop", "fault", "since", "what the watch says, and after how long")
	for _, t := range s.truth {
		at := time.UnixMilli(t.From).UTC()
		day := at.Format("15:04")
		if at.Before(s.begin.Add(-time.Hour)) {
			day = "yesterday"
		}
		fmt.Fprintf(&b, "%-8s %-15s %-9s  %s\n", t.Loop, words(string(t.Fault)), day, s.verdict(&t))
	}
	return b.String()
}

func (s *show) verdict(t *plant.Truth) string {
	var first, last *detect.Finding
	for i := range s.said {
		f := &s.said[i]
		if f.Loop != t.Loop || f.Event == detect.Cleared || f.At < t.From {
			continue
		}
		if string(f.Kind) == t.Kind {
			if first == nil {
				first = f
			}
			last = f
		}
	}
	if first == nil {
		return "nothing yet"
	}
	text := words(string(last.Kind))
	if last.Cause != "" && last.Cause != detect.Undetermined && string(last.Cause) != string(last.Kind) {
		text += ", " + words(string(last.Cause))
	}
	return fmt.Sprintf("%s; %s", text, span(time.Duration(first.At-t.From)*time.Millisecond))
}
