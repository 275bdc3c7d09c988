package trend

import (
	"math"
	"slices"

	"midwatch/collector"
	"midwatch/configs"
)

// Where a file has no flags, a loop without a usable row (one with a PV) for
// longer than its silence limit was out of sight. The limit is silence_s of the
// loop list; where that is empty it is the greatest of
//
//	                        periodic     exception
//	floor                   30 min       6 h
//	sample interval         x 40         x 40
//	longest gap it had      x 2.5        x 2.5
//
// The sample interval is sample_s, else the median of the loop's first nine.
// Gaps beyond the limit do not count as gaps it had.
const (
	floorPeriodicMs  = 30 * 60_000
	floorExceptionMs = 6 * 3_600_000
	limitSamples     = 40
	learnFirst       = 9
)

// past is what a reader remembers of a loop.
type past struct {
	last   int64 // time of the last frame, ms; math.MinInt64 none
	usable int64 // time of the last frame with a PV
	limit  int64 // silence limit, ms
	gap    int64 // longest gap within the limit, ms
	sample int64 // interval, ms; 0 not known
	fixed  bool  // silence_s was given
	infer  bool  // its last row came from a file without flags
	dark   bool  // its silence was said
	n      uint8 // intervals in first
	floor  int64
	first  [learnFirst]int32
}

func newPast(l *configs.Loop) past {
	p := past{last: math.MinInt64, usable: math.MinInt64, floor: floorPeriodicMs}
	if l.Report == configs.Exception {
		p.floor = floorExceptionMs
	}
	if l.SampleS > 0 {
		p.sample = int64(math.Round(l.SampleS * 1000))
	}
	p.limit = max(p.floor, limitSamples*p.sample)
	if l.SilenceS > 0 {
		p.limit, p.fixed = int64(math.Round(l.SilenceS*1000)), true
	}
	return p
}

// seen takes a usable row at t; it says whether the loop was out of sight
// before it.
func (p *past) seen(t int64) (gap bool) {
	if p.usable != math.MinInt64 {
		d := t - p.usable
		gap = d > p.limit
		if !gap && !p.fixed && (d > p.gap || p.sample == 0) {
			p.learn(d)
		}
	}
	p.usable, p.dark = t, false
	return gap
}

func (p *past) learn(d int64) {
	p.gap = max(p.gap, d)
	if p.sample == 0 {
		p.first[p.n] = int32(min(d, math.MaxInt32))
		if p.n++; p.n == learnFirst {
			slices.Sort(p.first[:])
			p.sample = max(1, int64(p.first[learnFirst/2]))
		}
	}
	p.limit = max(p.floor, limitSamples*p.sample, p.gap*5/2)
}

// silence watches for loops that say nothing while others go on.
type silence struct {
	past  []past
	check int64 // no loop's limit is passed before this time, ms
	found []found
	at    int // of found: taken so far
}

type found struct {
	time int64
	id   uint32
}

// passes looks for loops whose limit the time of a row has passed. It says
// whether there are frames to take.
func (s *silence) passes(t int64) bool {
	if t <= s.check {
		return s.at < len(s.found)
	}
	s.found, s.at, s.check = s.found[:0], 0, math.MaxInt64
	for i := range s.past {
		p := &s.past[i]
		if p.dark || !p.infer || p.usable == math.MinInt64 {
			continue
		}
		due := p.usable + p.limit
		if due >= t {
			s.check = min(s.check, due)
			continue
		}
		p.dark = true
		if due = max(due, p.last+1); due < t {
			s.found = append(s.found, found{due, uint32(i)})
		}
	}
	slices.SortFunc(s.found, func(x, y found) int {
		if x.time != y.time {
			if x.time < y.time {
				return -1
			}
			return 1
		}
		return int(x.id) - int(y.id)
	})
	return len(s.found) > 0
}

// take gives the next loop found silent: a frame without values.
func (s *silence) take(f *collector.Frame) uint32 {
	g := s.found[s.at]
	s.at++
	if s.at == len(s.found) {
		s.found, s.at = s.found[:0], 0
	}
	blank(f)
	f.Time, f.Flags = g.time, collector.Gap
	s.past[g.id].last = g.time
	return g.id
}
