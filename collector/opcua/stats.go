package opcua

import (
	"fmt"
	"math"
	"slices"
	"strings"
	"sync/atomic"
	"time"

	"github.com/gopcua/opcua/ua"

	"midwatch/collector"
)

// counts are what a source has done since it started.
type counts struct {
	values, notifications, keepAlives   atomic.Uint64
	duplicates, outOfOrder, gaps        atomic.Uint64
	republished, overflow               atomic.Uint64
	bad, uncertain                      atomic.Uint64
	serverTime, arrivalTime, clockSteps atomic.Uint64
	strays                              atomic.Uint64 // values or answers that belong to nothing known
	attempts, sessions, fresh, resumed  atomic.Uint64
	throttled, askedAgain               atomic.Uint64
	oddStatus                           atomic.Uint64
	watched                             atomic.Uint64 // gauge: items
	slowed, shortened                   atomic.Uint64 // gauges: items sampled more slowly, or queued less, than wished
	roundTrip                           atomic.Uint64 // gauge: ms of the last publish request
}

func (c *counts) all() map[string]uint64 {
	return map[string]uint64{
		"values": c.values.Load(), "notifications": c.notifications.Load(), "keepalives": c.keepAlives.Load(),
		"duplicates": c.duplicates.Load(), "out_of_order": c.outOfOrder.Load(), "gaps": c.gaps.Load(),
		"republished": c.republished.Load(), "overflow": c.overflow.Load(),
		"bad": c.bad.Load(), "uncertain": c.uncertain.Load(),
		"server_time": c.serverTime.Load(), "arrival_time": c.arrivalTime.Load(), "clock_steps": c.clockSteps.Load(),
		"strays": c.strays.Load(), "odd_status": c.oddStatus.Load(), "attempts": c.attempts.Load(), "sessions": c.sessions.Load(),
		"fresh": c.fresh.Load(), "resumed": c.resumed.Load(), "throttled": c.throttled.Load(), "asked_again": c.askedAgain.Load(),
		"watched": c.watched.Load(), "slowed": c.slowed.Load(), "short_queues": c.shortened.Load(), "publish_ms": c.roundTrip.Load(),
	}
}

// median is the running median of the last 61 numbers: one late answer does not
// move it.
type median struct {
	last [61]int64
	n    int
}

func (m *median) add(x int64) {
	m.last[m.n%len(m.last)] = x
	m.n++
}

func (m *median) value() int64 {
	k := min(m.n, len(m.last))
	if k == 0 {
		return 0
	}
	sorted := m.last
	slices.Sort(sorted[:k])
	return sorted[k/2]
}

type certDays struct{ own, server time.Time }

// gauge notes the lag of the newest value of a message and how far the server's
// clock is off. newest is math.MinInt64 when the message held no PV.
func (s *Source) gauge(arrived, newest int64, published time.Time) {
	s.mu.Lock()
	defer s.mu.Unlock()
	if t := millis(published); t > 0 {
		s.skew.add(arrived - t)
	}
	if newest == math.MinInt64 {
		return
	}
	s.lag.add(arrived - newest)
	slow := 3 * (s.cfg.Publish + s.slowest())
	lag := time.Duration(s.lag.value()-s.skew.value()) * time.Millisecond // less what the clocks differ
	switch {
	case lag <= slow:
		s.late = time.Time{}
	case s.late.IsZero():
		s.late = s.now()
	}
}

func (s *Source) slowest() time.Duration {
	slow := time.Second
	for _, sub := range s.subs {
		slow = max(slow, sub.sampling)
	}
	return slow
}

const (
	clockTolerance = 5000 // ms
	lateAfter      = time.Minute
)

// State says how the source is. It can be asked at any time.
func (s *Source) State() collector.SourceState {
	s.mu.Lock()
	defer s.mu.Unlock()
	now := s.now()
	st := collector.SourceState{Name: s.name, Kind: "opcua", Link: s.link, Since: s.since, LastData: s.last,
		Counts: s.counts.all(), LagMs: s.lag.value(), ClockOffsetMs: s.skew.value(),
		CertDays: collector.DaysLeft(s.certs.own, now), ServerCertDays: collector.DaysLeft(s.certs.server, now)}
	for _, sub := range s.subs {
		for _, it := range sub.items {
			if it.refusal == nil {
				continue
			}
			for _, b := range it.bindings {
				st.Refused = append(st.Refused, collector.RefusedTag{Loop: b.Name, Address: b.Address, Why: it.refusal.Error()})
			}
		}
	}
	st.Counts["refused"] = uint64(len(st.Refused))
	offset := time.Duration(s.skew.value()) * time.Millisecond
	shift := time.Duration(s.lag.value()-s.skew.value()) * time.Millisecond
	switch {
	case s.fault != nil:
		st.Problem, st.Hint = s.fault.problem, s.fault.hint
	case s.link == "watching" && s.server != ua.ServerStateRunning:
		st.Problem = "the server says of itself: " + strings.TrimPrefix(s.server.String(), "ServerState")
		st.Hint = "look at the server; its values may stand still"
	case s.certs.server != (time.Time{}) && now.After(s.certs.server):
		st.Problem = "the server's certificate expired on " + s.certs.server.Format(time.DateOnly)
		st.Hint = "renew it on the server"
	case offset.Abs() > clockTolerance*time.Millisecond:
		st.Problem = "the clocks differ: the server's is " + behind(offset)
		st.Hint = clockHint(offset)
	case zoneFault(shift):
		st.Problem = "the times of the values are " + behind(shift) + ", as a wrong time zone makes them"
		st.Hint = "set the time zone of the device that stamps the values; times are not shifted here"
	case !s.late.IsZero() && now.Sub(s.late) >= lateAfter:
		st.Problem = fmt.Sprintf("values come %s late", shift.Round(100*time.Millisecond))
		st.Hint = "the server is overloaded: ask for fewer tags or longer sampling"
	case len(st.Refused) > 0:
		st.Problem = fmt.Sprintf("%d tags cannot be watched", len(st.Refused))
		st.Hint = "they are listed as refused, each with its reason, and asked for again every few minutes"
	}
	return st
}

func behind(d time.Duration) string {
	if d > 0 {
		return d.Round(time.Second).String() + " behind"
	}
	return (-d).Round(time.Second).String() + " ahead"
}

func clockHint(d time.Duration) string {
	if zoneFault(d) {
		return "a difference of whole or half hours points to a wrong time zone; times are not shifted here"
	}
	return "synchronise both clocks; times are not shifted here"
}

// zoneFault says whether a difference is close to a whole or half hour.
func zoneFault(d time.Duration) bool {
	d = d.Abs()
	off := (d - d.Round(30*time.Minute)).Abs()
	return d >= 29*time.Minute && off < 30*time.Second
}
