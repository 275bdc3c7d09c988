package mqtt

import (
	"fmt"
	"slices"
	"time"

	"midwatch/collector"
)

// maxRefused bounds the list in a state; the count beside it is exact.
const maxRefused = 500

// recent is how long a fault that has passed is still spoken of.
const recentMs = 10 * 60 * 1000

// counts since the start.
type counts struct {
	messages, values, retained, duplicates, malformed, clock, doubledHour, unknownQuality, unmatched uint64
	seqGaps, unresolved, historical, births, deaths, ignored                                         uint64
}

// State tells how the source is. Problem is the one most worth acting on.
func (s *source) State() collector.SourceState {
	now := s.now().UnixMilli()
	dropped := s.ring.droppedCount()
	l := &s.link
	l.mu.Lock()
	st := collector.SourceState{Name: s.name, Kind: "mqtt", Link: l.word, Since: l.since, Problem: l.problem, Hint: l.hint, CertDays: collector.DaysLeft(l.cert, s.now())}
	if st.Link == "" {
		st.Link = "down"
	}
	if l.read != nil {
		st.LastData = l.read.lastRead.Load()
	}
	refused, attempts, losses, cuts := l.refused, l.attempts, l.losses, l.cuts
	cutTopic, cutSize, cutAt := l.cutTopic, l.cutSize, l.cutAt
	clash := len(l.short) >= clashLosses && s.now().Sub(l.short[len(l.short)-1]) < clashMemory
	l.mu.Unlock()

	s.mu.Lock()
	defer s.mu.Unlock()
	c := s.counts
	st.Counts = map[string]uint64{"messages": c.messages, "values": c.values, "retained": c.retained, "duplicates": c.duplicates,
		"malformed": c.malformed, "clock": c.clock, "doubled_hour": c.doubledHour, "unknown_quality": c.unknownQuality,
		"unmatched": c.unmatched, "dropped": dropped, "oversize": cuts, "attempts": attempts, "losses": losses}
	if s.spb != nil {
		for k, v := range map[string]uint64{"seq_gaps": c.seqGaps, "unresolved": c.unresolved, "historical": c.historical,
			"births": c.births, "deaths": c.deaths, "ignored": c.ignored} {
			st.Counts[k] = v
		}
	}
	st.LagMs = s.lags.median()
	var missing uint64
	st.Refused, missing = s.refusedTags(refused, now)
	st.Counts["refused"] = missing
	if st.Problem != "" {
		return st
	}
	say := func(problem, hint string) {
		if st.Problem == "" {
			st.Problem, st.Hint = problem, hint
		}
	}
	if clash {
		say("the broker ended several connections soon after they began: another client uses this client id", "give each program its own client_id")
	}
	if s.spb != nil {
		if p, h := s.spb.problem(); p != "" {
			say(p, h)
		}
	}
	if cuts > 0 && now-cutAt < recentMs {
		say(fmt.Sprintf("a message of %d bytes on %s was cut: longer than max_payload (%d)", cutSize, cutTopic, s.cfg.MaxPayload),
			"raise max_payload if the tag is in there")
	}
	if p := s.malformedProblem(now); p != "" {
		say(p, "check payload, value, time and quality of this source, or the publisher")
	}
	if p, h := s.clockProblem(st.LagMs); p != "" {
		say(p, h)
	}
	return st
}

// refusedTags lists the tags that bring nothing, up to maxRefused, and counts all.
func (s *source) refusedTags(refused map[string]bool, now int64) (list []collector.RefusedTag, n uint64) {
	for _, t := range s.tags {
		why := s.whyMissing(t, refused, now)
		if why == "" {
			continue
		}
		if n++; len(list) < maxRefused {
			list = append(list, collector.RefusedTag{Loop: t.Name, Address: t.Address, Why: why})
		}
	}
	return list, n
}

func (s *source) whyMissing(t *tag, refused map[string]bool, now int64) string {
	if refused[t.filter] {
		return "the broker refused the subscription; hint: permission"
	}
	if t.why != "" {
		return t.why
	}
	if t.seen || s.watched == 0 {
		return ""
	}
	if s.spb != nil {
		if why := s.spb.whyMissing(t); why != "" {
			return why
		}
	}
	limit := s.pace.silentOther
	if t.Role == collector.RolePV || t.Role == collector.RoleAlive {
		limit = max(s.pace.silentPV, 10*time.Duration(t.Sample)*time.Millisecond)
	}
	if silent := now - s.watched; silent > limit.Milliseconds() {
		return fmt.Sprintf("nothing has come since connecting %d s ago; hint: permission or wrong topic (brokers grant subscriptions that they then keep silent)", silent/1000)
	}
	return ""
}

// malformedProblem sums up what could not be read lately.
func (s *source) malformedProblem(now int64) string {
	var worst *topic
	n, where := uint64(0), 0
	for _, t := range s.topics {
		f := &t.faults
		if f.count == 0 || now-f.lastAt > recentMs {
			continue
		}
		n += f.count
		where++
		if worst == nil || f.lastAt > worst.faults.lastAt || f.lastAt == worst.faults.lastAt && t.name < worst.name {
			worst = t
		}
	}
	if worst != nil {
		return fmt.Sprintf("%d payloads on %d topics could not be read; the last on %s: %s", n, where, worst.name, worst.faults.sample)
	}
	if s.spb != nil && s.spb.faults.count > 0 && now-s.spb.faults.lastAt < recentMs {
		return fmt.Sprintf("%d Sparkplug payloads could not be read; the last: %s", s.spb.faults.count, s.spb.faults.sample)
	}
	return ""
}

// clockProblem knows the offset of a wrong time zone: near a whole or half hour.
func (s *source) clockProblem(lagMs int64) (problem, hint string) {
	const half = 30 * minuteMs
	if s.lags.n < 20 || absMs(lagMs) < half-minuteMs {
		return "", ""
	}
	word := "behind"
	if lagMs < 0 {
		word = "ahead of"
	}
	lag := time.Duration(absMs(lagMs)) * time.Millisecond
	if off := absMs(lagMs) % half; off > 2*minuteMs && off < half-2*minuteMs {
		return fmt.Sprintf("times of the values are %s %s arrival", lag.Round(time.Second), word), "check the clock of the publisher"
	}
	return fmt.Sprintf("times of the values are %s %s arrival: a time zone fault", lag.Round(time.Minute), word),
		"the publisher sends local time as if it were UTC, or time_zone of this source is wrong"
}

func (l *lags) median() int64 {
	n := min(l.n, len(l.ms))
	if n == 0 {
		return 0
	}
	sorted := slices.Clone(l.ms[:n])
	slices.Sort(sorted)
	return sorted[n/2]
}
