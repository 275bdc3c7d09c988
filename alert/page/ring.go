package page

import (
	"context"
	"math"
	"sync"
	"time"

	"midwatch/collector"
	"midwatch/configs"
)

// A strip shows a day in buckets of three minutes: 480 of them, five bytes each.
const (
	bucketMs    = 3 * 60 * 1000
	ringBuckets = 24 * 20
)

// What a bucket saw.
const (
	sawData = 1 << iota
	sawManual
	sawInactive // the law could not act for another reason: tracking, out of service, by condition
	sawLimit    // OP at one of its limits
	sawBad      // a gap or bad quality
	sawHidden   // suppressed by design
)

// bucket is the least and the greatest PV, in steps of 150 % of range over the
// whole of int16, so that a little outside the range is kept.
type bucket struct {
	low, high int16
	saw       uint8
}

// ring is a day of one loop in buckets. It reads the window once and then only
// what is new, when somebody looks.
type ring struct {
	mu sync.Mutex
	day
}

type day struct {
	scale   [4]float64 // range of PV and limits of OP it was read with: others begin anew
	begun   bool
	first   int64 // number of the oldest bucket held
	through int64 // ms UTC of the newest frame read
	low     [ringBuckets]int16
	high    [ringBuckets]int16
	saw     [ringBuckets]uint8
}

const fullScale = math.MaxInt16 - 1

func squeezePV(pct float64) int16 {
	return int16(math.Round(max(-1, min(1, (pct-50)/75)) * fullScale))
}

func widenPV(v int16) float64 { return float64(v)/fullScale*75 + 50 }

// strips holds a ring for every loop that was looked at.
type strips struct {
	mu    sync.Mutex
	rings map[string]*ring
}

func (s *strips) ring(l *configs.Loop) *ring {
	s.mu.Lock()
	defer s.mu.Unlock()
	if s.rings == nil {
		s.rings = map[string]*ring{}
	}
	r := s.rings[l.Name]
	if r == nil {
		r = &ring{}
		s.rings[l.Name] = r
	}
	return r
}

// keep forgets the rings of loops that are gone.
func (s *strips) keep(loops []LoopState) {
	s.mu.Lock()
	defer s.mu.Unlock()
	if len(s.rings) <= len(loops) {
		return
	}
	names := make(map[string]bool, len(loops))
	for i := range loops {
		names[loops[i].Loop.Name] = true
	}
	for n := range s.rings {
		if !names[n] {
			delete(s.rings, n)
		}
	}
}

// between reads what is new of the loop up to now and copies the buckets of a
// span (ms UTC) within the day before now, oldest first.
func (s *strips) between(ctx context.Context, frames collector.FrameReader, l *configs.Loop, now time.Time, start, end int64) ([]bucket, error) {
	r := s.ring(l)
	r.mu.Lock()
	defer r.mu.Unlock()
	if of := [4]float64{l.PVLow, l.PVHigh, l.OPLimitLow, l.OPLimitHigh}; !r.begun || r.scale != of {
		r.day = day{scale: of}
	}
	last := now.UnixMilli() / bucketMs
	r.slide(last)
	from := max(r.through+1, r.first*bucketMs)
	for f, err := range frames.Frames(ctx, l.Name, from, now.UnixMilli()+1) {
		if err != nil {
			return nil, err
		}
		r.add(&f, l)
	}
	last = min(last, end/bucketMs)
	n := max(1, min((end-start)/bucketMs, last-r.first+1))
	out := make([]bucket, 0, n)
	for b := last - n + 1; b <= last; b++ {
		i := b % ringBuckets
		out = append(out, bucket{r.low[i], r.high[i], r.saw[i]})
	}
	return out, nil
}

// slide moves the day so that last is its newest bucket.
func (r *day) slide(last int64) {
	first := last - ringBuckets + 1
	if !r.begun {
		r.begun, r.first = true, first
		return
	}
	for b := r.first; b < first && b < r.first+ringBuckets; b++ {
		i := b % ringBuckets
		r.low[i], r.high[i], r.saw[i] = 0, 0, 0
	}
	r.first = max(r.first, first)
}

func (r *day) add(f *collector.Frame, l *configs.Loop) {
	r.through = f.Time
	b := f.Time / bucketMs
	if b < r.first || b >= r.first+ringBuckets {
		return
	}
	i := b % ringBuckets
	saw := r.saw[i]
	if f.Flags&collector.Gap != 0 {
		saw |= sawBad
	}
	if f.PV != f.PV {
		r.saw[i] = saw | sawBad
		return
	}
	v := squeezePV((float64(f.PV) - l.PVLow) / l.PVSpan() * 100)
	if saw&sawData == 0 {
		r.low[i], r.high[i] = v, v
	}
	r.low[i], r.high[i] = min(r.low[i], v), max(r.high[i], v)
	saw |= sawData
	switch {
	case f.Mode == collector.Manual:
		saw |= sawManual
	case !f.Mode.LawActive() || f.Flags&collector.Inactive != 0:
		saw |= sawInactive
	}
	if f.Flags&collector.Suppressed != 0 {
		saw |= sawHidden
	}
	if atLimit(f, l) {
		saw |= sawLimit
	}
	r.saw[i] = saw
}

// atLimit says that OP lies at one of its limits, within a thousandth of range.
func atLimit(f *collector.Frame, l *configs.Loop) bool {
	if f.OP != f.OP {
		return false
	}
	slack := math.Abs(l.OPSpan()) / 1000
	return float64(f.OP) <= l.OPLimitLow+slack || float64(f.OP) >= l.OPLimitHigh-slack
}
