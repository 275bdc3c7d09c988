package daemon

import (
	"sync/atomic"
	"time"
)

// Clock is the wall clock of everything that reads one. A demonstration runs it
// faster; nothing here calls time.Now by itself.
type Clock struct {
	Now   func() time.Time
	After func(time.Duration) <-chan time.Time
}

// WallClock is the clock on the wall.
func WallClock() Clock { return Clock{time.Now, time.After} }

// Faster is a clock that begins at begin now and runs factor times as fast.
func Faster(begin time.Time, factor float64) Clock {
	c, start := Held(begin, factor)
	start()
	return c
}

// Held is a clock as of [Faster] that stands at begin until start is called.
func Held(begin time.Time, factor float64) (c Clock, start func()) {
	var zero atomic.Pointer[time.Time]
	return Clock{
		Now: func() time.Time {
			z := zero.Load()
			if z == nil {
				return begin
			}
			return begin.Add(time.Duration(float64(time.Since(*z)) * factor))
		},
		After: func(d time.Duration) <-chan time.Time { return time.After(time.Duration(float64(d) / factor)) },
	}, func() { now := time.Now(); zero.CompareAndSwap(nil, &now) }
}

func (c Clock) ms() int64 { return c.Now().UnixMilli() }
