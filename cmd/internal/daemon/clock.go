package daemon

import "time"

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
	zero := time.Now()
	return Clock{
		Now:   func() time.Time { return begin.Add(time.Duration(float64(time.Since(zero)) * factor)) },
		After: func(d time.Duration) <-chan time.Time { return time.After(time.Duration(float64(d) / factor)) },
	}
}

func (c Clock) ms() int64 { return c.Now().UnixMilli() }
