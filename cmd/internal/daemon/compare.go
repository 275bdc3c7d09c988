package daemon

import (
	"context"
	"log/slog"
	"slices"
	"time"

	"midwatch/alert"
	"midwatch/alert/dossier"
	"midwatch/configs"
	"midwatch/detect"
)

// looks are how long after a change of tuning, in data time, a loop is compared
// with what it was before. The one at a week is the last where the data are
// enough; the last of all is the deadline.
var looks = []time.Duration{24 * time.Hour, 3 * 24 * time.Hour, 7 * 24 * time.Hour, 14 * 24 * time.Hour}

const (
	settledLook = 2  // at a week
	compareMost = 30 // comparisons at a time; the others wait for the next
)

// comparer holds loops after each change of their tuning against what they were
// before, and gives what came of it to the desk. One goroutine, one loop at a
// time: weeks of frames are read.
type comparer struct {
	d   *Daemon
	log *slog.Logger
}

func (c *comparer) run(ctx context.Context) {
	for {
		select {
		case <-ctx.Done():
			return
		case <-c.d.clock.After(time.Hour):
		}
		if err := c.turn(ctx); err != nil && ctx.Err() == nil {
			c.log.Error("changes of tuning are not compared", "err", err)
		}
	}
}

// turn makes the comparisons that are due.
func (c *comparer) turn(ctx context.Context) error {
	now := c.d.newest.Load()
	last := looks[len(looks)-1]
	// A week longer than the deadline: a watch that stood still makes up for it.
	all, err := c.d.desk.Sessions(now - (last + 7*24*time.Hour).Milliseconds())
	if err != nil {
		return err
	}
	options := detect.Options{NuisancePerLoopYear: c.d.config().Detect.NuisancePerLoopYear}
	roster := c.d.loops()
	done := 0
	for _, s := range all {
		o, due := dueLook(s, now)
		i := slices.IndexFunc(roster, func(l *configs.Loop) bool { return l != nil && (l.Name == s.Loop || l.Was == s.Loop) })
		if !due || i < 0 {
			continue
		}
		if done++; done > compareMost {
			break
		}
		if err := c.compare(ctx, roster[i], s, o, options); ctx.Err() != nil {
			return err
		} else if err != nil { // one loop must not keep the others from it; it is tried again
			c.log.Error("a change of tuning is not compared", "loop", s.Loop, "err", err)
		}
	}
	return nil
}

// compare makes one comparison and gives what came of it to the desk.
func (c *comparer) compare(ctx context.Context, l *configs.Loop, s alert.Session, o alert.Outcome, options detect.Options) error {
	last := looks[len(looks)-1].Milliseconds()
	from, to := max(s.Since, s.First-last), min(o.At, s.Last+last)
	x, err := dossier.Compare(l, c.d.window.Frames(ctx, l.Name, from, to), s.First, s.Last, options)
	if err != nil {
		return err
	}
	o.Verdict, o.Holds = x.Verdict, x.Holds
	o.Settled = o.Settled || x.Enough && o.Looks > settledLook
	if err := c.d.desk.Conclude(s, o); err != nil {
		return err
	}
	c.log.Info("before and after a change of tuning", "loop", l.Name, "changed", time.UnixMilli(s.Last).UTC(), "verdict", o.Verdict, "settled", o.Settled)
	return nil
}

// dueLook says whether a session is to be looked at with data up to now, and
// begins its outcome: the next change ends it.
func dueLook(s alert.Session, now int64) (alert.Outcome, bool) {
	o := s.Outcome
	if o.Settled {
		return o, false
	}
	o.At = now
	if s.Until != 0 && s.Until <= now {
		o.At, o.Settled = s.Until, true
		o.Looks++
		return o, true
	}
	n := o.Looks
	for n < len(looks) && now-s.Last >= looks[n].Milliseconds() {
		n++
	}
	due := n > o.Looks
	o.Looks, o.Settled = n, n == len(looks)
	return o, due
}
