package daemon

import (
	"testing"
	"testing/synctest"
	"time"
)

// A held clock stands until it is started, then runs as fast as it is told.
func TestHeldClock(t *testing.T) {
	synctest.Test(t, func(t *testing.T) {
		begin := time.Date(2026, 1, 5, 6, 0, 0, 0, time.UTC)
		c, start := Held(begin, 60)
		time.Sleep(time.Minute)
		if now := c.Now(); !now.Equal(begin) {
			t.Errorf("before the start it is %s", now)
		}
		start()
		time.Sleep(time.Second)
		start() // once is enough
		time.Sleep(time.Second)
		if d := c.Now().Sub(begin); d != 2*time.Minute {
			t.Errorf("two seconds after the start %s have passed", d)
		}
	})
}
