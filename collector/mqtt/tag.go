package mqtt

import (
	"math"

	"midwatch/collector"
)

// tag is one binding with what is known of its last value.
type tag struct {
	collector.Binding
	filter    string // the subscription that brings it
	slot      int    // of the value in a JSON plan
	lost      bool
	seen      bool   // a value came since connecting, retained or not
	why       string // why the last delivery held no value; empty when it did
	lastTime  int64
	lastValue float64
	lastGood  collector.Quality
}

// seeds says whether a retained value of this role may be used: what changes
// seldom may be taken as last known, a measurement or a sign of life never.
func (t *tag) seeds() bool { return t.Role != collector.RolePV && t.Role != collector.RoleAlive }

// stamp is when a value was taken and how sure that is.
type stamp struct {
	ms       int64
	arrived  int64
	own      bool // by the source's own clock
	retained bool
	unsure   bool // the name behind the value is not confirmed
}

// emit queues one sample. The caller queues all samples of a payload without
// anything in between, so that they leave in one batch.
func (s *source) emit(t *tag, v float64, q collector.Quality, at stamp, from raw) {
	if math.IsInf(v, 0) || q == collector.Bad {
		v = math.NaN()
	}
	if math.IsNaN(v) {
		q = collector.Bad
	}
	t.seen = true
	sample := collector.Sample{Loop: t.Loop, Role: t.Role, Quality: q, Lost: t.lost, Time: at.ms, Arrived: at.arrived,
		Value: v, Unconfirmed: at.unsure}
	if s.seen != nil {
		s.seen(t, sample, from, at.retained)
	}
	if at.retained {
		s.counts.retained++
		if !t.seeds() || (at.own && at.ms <= t.lastTime) {
			return
		}
	} else if at.own && at.ms == t.lastTime && q == t.lastGood && (v == t.lastValue || v != v && t.lastValue != t.lastValue) {
		s.counts.duplicates++
		return
	}
	t.lastTime, t.lastValue, t.lastGood, t.lost = at.ms, v, q, false
	s.counts.values++
	s.out = append(s.out, sample)
}

// settle decides on the time of a payload: its own, unless that is missing,
// absurd or more than five minutes ahead of arrival.
func (s *source) settle(own int64, has bool, m *message) stamp {
	at := stamp{ms: m.arrived, arrived: m.arrived, retained: m.retained}
	if !has {
		return at
	}
	if !m.retained {
		s.lags.add(m.arrived - own)
	}
	if own > m.arrived+futureLimitMs || own < firstTimeMs {
		s.counts.clock++
		return at
	}
	at.ms, at.own = own, true
	return at
}

// lags is a running record of arrival minus source time.
type lags struct {
	ms [63]int64
	n  int
}

func (l *lags) add(ms int64) {
	l.ms[l.n%len(l.ms)] = ms
	l.n++
}
