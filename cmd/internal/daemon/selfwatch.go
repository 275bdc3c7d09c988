package daemon

import (
	"context"
	"fmt"
	"sync"
	"sync/atomic"
	"time"

	"midwatch/collector"
	"midwatch/detect"
	"midwatch/store"
)

// When the watch speaks about itself.
const (
	selfEvery    = 10 * time.Second
	countEvery   = time.Minute      // loops by state, for the digest
	tellAfter    = 10 * time.Minute // a source down or late, a sender failing
	tellStore    = time.Minute
	lateMs       = 60_000    // values behind their source's clock
	quietAfter   = time.Hour // without new losses or steps until it is over
	certDays     = 30
	wallStepMost = 2 * time.Minute
)

// selfWatch makes findings about the watch itself: what it cannot see, keep or
// tell. Times are those of the injected clock.
type selfWatch struct {
	d      *Daemon
	turned atomic.Int64 // wall clock of the last turn, ms UTC
	// stepped is when a clock was last seen to step, wall clock ms UTC; 0: not yet.
	stepped atomic.Int64

	stands map[selfKey]*selfState

	mu      sync.Mutex
	said    []store.Problem // of the window, not looked at yet
	dropped map[string]uint64
	steps   map[string]uint64
	seen    time.Time // wall clock at the last turn
}

type selfKey struct {
	subject detect.Subject
	kind    detect.Kind
}

// selfState is one thing that may be wrong.
type selfState struct {
	since int64 // wall clock since which it is so, ms UTC; 0: it is not
	last  int64 // when it was last so
	told  bool
}

// trouble is what stands at one look.
type trouble struct {
	selfKey
	text, short string
	measures    detect.Measures
	after       time.Duration // how long it must stand until it is told
	since       int64         // known onset; 0: first seen now
}

func newSelfWatch(d *Daemon) *selfWatch {
	return &selfWatch{d: d, stands: map[selfKey]*selfState{}, dropped: map[string]uint64{}, steps: map[string]uint64{}}
}

// storeSaid takes a problem of the window; it must not block.
func (s *selfWatch) storeSaid(p store.Problem) {
	s.mu.Lock()
	defer s.mu.Unlock()
	if len(s.said) < 100 {
		s.said = append(s.said, p)
	}
}

func (s *selfWatch) run(ctx context.Context) {
	// What was told before a restart and stands no more must be taken back.
	for _, e := range s.d.desk.Episodes() {
		for i := range e.Members {
			m := &e.Members[i]
			if m.Open && m.Finding.Subject.Loop == "" {
				s.stands[selfKey{m.Finding.Subject, m.Finding.Kind}] = &selfState{since: m.Finding.Since, last: s.d.clock.ms(), told: true}
			}
		}
	}
	for {
		s.turn()
		select {
		case <-ctx.Done():
			return
		case <-s.d.clock.After(selfEvery):
		}
	}
}

func (s *selfWatch) turn() {
	now := s.d.clock.Now()
	var all []trouble
	for _, st := range s.d.sourceStates() {
		all = append(all, s.sourceTroubles(&st)...)
	}
	all = append(all, s.lostTroubles()...)
	all = append(all, s.storeTroubles()...)
	all = append(all, s.senderTroubles()...)
	all = append(all, s.clockTroubles(now)...)
	s.judge(now.UnixMilli(), all)
	s.turned.Store(now.UnixMilli())
	if k := s.d.counted.Load(); k == nil || now.UnixMilli()-k.at >= countEvery.Milliseconds() || now.UnixMilli() < k.at {
		s.d.loopCounts()
	}
}

// judge compares what stands now with what was told.
func (s *selfWatch) judge(now int64, all []trouble) {
	at := map[selfKey]bool{}
	for _, t := range all {
		at[t.selfKey] = true
		st := s.stands[t.selfKey]
		if st == nil {
			st = &selfState{}
			s.stands[t.selfKey] = st
		}
		if st.since == 0 {
			st.since = now
			if t.since != 0 {
				st.since = t.since
			}
		}
		st.last = now
		if !st.told && now-st.since >= t.after.Milliseconds() {
			st.told = true
			s.tell(t.selfKey, detect.Raised, now, st.since, t.text, t.short, t.measures)
		}
	}
	for k, st := range s.stands {
		if at[k] || now-st.last < linger(k.kind).Milliseconds() {
			continue
		}
		if st.told {
			s.tell(k, detect.Cleared, now, st.since, "This is over.", "over", nil)
		}
		delete(s.stands, k)
	}
}

// linger is how long something must be over until that is told: what is a
// single event is kept for an hour, what is a state for a minute.
func linger(k detect.Kind) time.Duration {
	switch k {
	case detect.SamplesLost, detect.ClockStepKind:
		return quietAfter
	}
	return time.Minute
}

func (s *selfWatch) tell(k selfKey, e detect.Event, at, since int64, text, short string, m detect.Measures) {
	f := detect.Finding{Subject: k.subject, Kind: k.kind, Event: e, At: at, Since: since, Text: text, TextShort: short, Measures: m}
	if e == detect.Cleared {
		f.Reason = detect.Over
	} else {
		f.Confidence = 1
	}
	s.d.ledger.say(f)
}

func (s *selfWatch) sourceTroubles(st *collector.SourceState) (out []trouble) {
	of := detect.Subject{Source: st.Name}
	if st.Link != linkWatching {
		why := st.Problem
		if why == "" {
			why = "it does not answer"
		}
		if st.Hint != "" {
			why += "; hint: " + st.Hint
		}
		out = append(out, trouble{selfKey: selfKey{of, detect.SourceDown}, after: tellAfter, since: st.Since,
			text:  fmt.Sprintf("Source %s delivers nothing: %s. Its loops are not watched until it is back.", st.Name, why),
			short: fmt.Sprintf("source %s delivers nothing; its loops are not watched", st.Name)})
		return out
	}
	if late := st.LagMs - max(0, st.ClockOffsetMs); late > lateMs {
		out = append(out, trouble{selfKey: selfKey{of, detect.SourceLate}, after: tellAfter, measures: detect.Measures{{Name: "late_s", Value: float64(late) / 1000}},
			text:  fmt.Sprintf("Values of source %s arrive about %s late. What is found on its loops is as late.", st.Name, detect.Duration(float64(late)/1000)),
			short: fmt.Sprintf("values of source %s arrive late", st.Name)})
	}
	for _, c := range []struct {
		days int
		what string
	}{{st.CertDays, "midwatch's own certificate for source " + st.Name}, {st.ServerCertDays, "the certificate of the server of source " + st.Name}} {
		if c.days == 0 || c.days >= certDays {
			continue
		}
		left := fmt.Sprintf("expires in %d days", c.days)
		switch {
		case c.days < 0:
			left = "has expired"
		case c.days == 1:
			left = "expires within a day"
		}
		out = append(out, trouble{selfKey: selfKey{of, detect.CertificateExpiring}, measures: detect.Measures{{Name: "days", Value: float64(c.days)}},
			text:  fmt.Sprintf("The certificate: %s %s. Renew it before the server refuses it.", c.what, left),
			short: fmt.Sprintf("%s %s", c.what, left)})
	}
	return out
}

// lostTroubles tells of samples that were lost on their way, by counts that grow.
func (s *selfWatch) lostTroubles() (out []trouble) {
	grew := func(name string, n uint64) uint64 {
		before, known := s.dropped[name]
		s.dropped[name] = n
		if !known || n <= before {
			return 0
		}
		return n - before
	}
	if n := grew("part rings", s.d.intake.Counts().Dropped); n > 0 {
		out = append(out, trouble{selfKey: selfKey{detect.Subject{Part: "rings"}, detect.SamplesLost}, measures: detect.Measures{{Name: "samples", Value: float64(n)}},
			text:  fmt.Sprintf("%d samples were dropped because they came faster than they could be judged. The machine may be too busy.", n),
			short: "samples dropped: the machine is too busy"})
	}
	for _, st := range s.d.sourceStates() {
		n := uint64(0)
		for _, key := range []string{"dropped", "overflow", "gaps", "seq_gaps"} {
			n += grew("source "+st.Name+" "+key, st.Counts[key])
		}
		if n > 0 {
			out = append(out, trouble{selfKey: selfKey{detect.Subject{Source: st.Name}, detect.SamplesLost}, measures: detect.Measures{{Name: "samples", Value: float64(n)}},
				text:  fmt.Sprintf("Samples of source %s are missing: %d reports of losses within 10 s. Frames behind a loss are flagged.", st.Name, n),
				short: fmt.Sprintf("samples of source %s are missing", st.Name)})
		}
	}
	return out
}

func (s *selfWatch) storeTroubles() (out []trouble) {
	part := func(name, text, short string, since int64) {
		out = append(out, trouble{selfKey: selfKey{detect.Subject{Part: name}, detect.StoreFailing}, after: tellStore, since: since, text: text, short: short})
	}
	k, l := s.d.keeper, s.d.ledger
	if since := k.since.Load(); since != 0 {
		why := "unknown"
		if p := k.problem.Load(); p != nil {
			why = *p
		}
		part("trends", "Trends cannot be written: "+why+". Detection goes on; trends of this time are lost.", "trends cannot be written; detection goes on", since)
	}
	if since := l.failing.Load(); since != 0 {
		why := "unknown"
		if p := l.problem.Load(); p != nil {
			why = *p
		}
		part("state", "Episodes cannot be written: "+why+". Nobody is told of anything new until they can.", "episodes cannot be written; nobody is told", since)
	}
	s.mu.Lock()
	said := s.said
	s.said = nil
	s.mu.Unlock()
	for _, p := range said {
		if p.Kind == store.Damaged || p.Kind == store.Behind || p.Kind == store.BadSum {
			out = append(out, trouble{selfKey: selfKey{detect.Subject{Part: "trends"}, detect.StoreFailing}, text: "Trends: " + p.Text, short: "some trends are lost"})
			break
		}
	}
	return out
}

func (s *selfWatch) senderTroubles() (out []trouble) {
	for _, st := range s.d.desk.Senders() {
		if st.Since == 0 {
			continue
		}
		out = append(out, trouble{selfKey: selfKey{detect.Subject{Part: "sender " + st.Name}, detect.SenderFailing}, after: tellAfter, since: st.Since,
			measures: detect.Measures{{Name: "queued", Value: float64(st.Queued)}},
			text:     fmt.Sprintf("Sender %s delivers nothing: %s. %d messages wait and are tried again.", st.Name, st.Problem, st.Queued),
			short:    fmt.Sprintf("sender %s delivers nothing, %d messages wait", st.Name, st.Queued)})
	}
	return out
}

// clockTroubles tells of clocks that stepped: that of the machine, and those of
// sources.
func (s *selfWatch) clockTroubles(now time.Time) (out []trouble) {
	if !s.seen.IsZero() {
		// Between two looks about selfEvery passes; a busy machine makes it more.
		if d := now.Round(0).Sub(s.seen); d < 0 || d > selfEvery+wallStepMost {
			way := "ahead"
			if d < selfEvery {
				way = "back"
			}
			out = append(out, trouble{selfKey: selfKey{detect.Subject{Part: "clock"}, detect.ClockStepKind}, measures: detect.Measures{{Name: "step_s", Value: (d - selfEvery).Seconds()}},
				text:  fmt.Sprintf("The clock of this machine stepped %s by about %s, or the machine slept.", way, detect.Duration((d - selfEvery).Abs().Seconds())),
				short: "the clock of this machine stepped"})
		}
	}
	s.seen = now.Round(0)
	for _, st := range s.d.sourceStates() {
		n := st.Counts["clock_steps"]
		before, known := s.steps[st.Name]
		s.steps[st.Name] = n
		if known && n > before {
			out = append(out, trouble{selfKey: selfKey{detect.Subject{Source: st.Name}, detect.ClockStepKind},
				text:  fmt.Sprintf("The clock of source %s stepped. Frames at the step are flagged.", st.Name),
				short: fmt.Sprintf("the clock of source %s stepped", st.Name)})
		}
	}
	if len(out) > 0 {
		s.stepped.Store(now.UnixMilli())
	}
	return out
}
