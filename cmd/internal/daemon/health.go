package daemon

import (
	"context"
	"fmt"
	"time"

	"midwatch/collector"
)

// Limits of health.
const (
	downAllowed  = 10 * time.Minute // a source may be known down for so long
	flushAllowed = time.Minute      // since the last flush, or three intervals of it
	partAllowed  = 30 * time.Second // since a part last turned
)

// part is a part of the watch that reports its age.
type part struct {
	name  string
	last  int64 // wall clock of the last turn, ms UTC
	most  time.Duration
	state string
}

func (d *Daemon) parts() []part {
	flush := max(flushAllowed, 3*d.config().Keep.Flush)
	out := []part{
		{"ledger", d.ledger.turned.Load(), partAllowed, ""},
		{"keeper", d.keeper.turned.Load(), flush, ""},
		{"flush", d.keeper.flushed.Load(), flush, ""},
		{"self watch", d.self.turned.Load(), partAllowed, ""},
	}
	for _, s := range d.shards {
		out = append(out, part{fmt.Sprintf("shard %d", s.n), s.turned.Load(), partAllowed, ""})
	}
	now := d.clock.ms()
	for i := range out {
		out[i].state = "well"
		if now-out[i].last > out[i].most.Milliseconds() {
			out[i].state = "stands still"
		}
	}
	return out
}

// Health says whether the watch is well: every source alive or known down for
// less than 10 minutes, every part turning, the last flush young. why is empty
// when it is.
func (d *Daemon) Health() (well bool, why []string) {
	if d.started.Load() == 0 {
		return false, []string{"not started"}
	}
	now := d.clock.ms()
	for _, p := range d.parts() {
		if p.state != "well" {
			why = append(why, fmt.Sprintf("%s: no sign of life for %s", p.name, time.Duration(now-p.last)*time.Millisecond))
		}
	}
	for _, s := range d.sourceStates() {
		if s.Link != linkWatching && now-s.Since > downAllowed.Milliseconds() {
			why = append(why, fmt.Sprintf("source %s: %s for %s", s.Name, s.Link, time.Duration(now-s.Since)*time.Millisecond))
		}
	}
	return len(why) == 0, why
}

// linkWatching is the link state of a source that delivers.
const linkWatching = "watching"

func (d *Daemon) sourceStates() []collector.SourceState {
	d.mu.RLock()
	feeds := d.feeds
	d.mu.RUnlock()
	var out []collector.SourceState
	for _, f := range feeds {
		if f != nil {
			out = append(out, f.state())
		}
	}
	return out
}

// digestLines are what a digest says about the watch itself. The desk asks with its
// own lock held: the counts are those that the self watch took last.
func (d *Daemon) digestLines() []string {
	var out []string
	if k := d.counted.Load(); k != nil {
		out = append(out, fmt.Sprintf("Judged %d, cannot judge %d, not in normal mode %d, held %d.", k.Judged, k.CannotJudge, k.NotNormal, k.Held))
	}
	if well, why := d.Health(); !well {
		out = append(out, why...)
	}
	return out
}

// Words for the service manager, as sd_notify knows them.
const (
	notifyReady     = "READY=1"
	notifyStopping  = "STOPPING=1"
	notifyReloading = "RELOADING=1"
	notifyWatchdog  = "WATCHDOG=1"
)

const watchdogEvery = 5 * time.Second

// watchdog feeds the watchdog of the service manager for as long as the shards
// turn: it follows the work, not a timer of its own. A source that is down or a
// disk that stalls is no reason to be killed: detection goes on.
func (d *Daemon) watchdog(ctx context.Context) {
	for {
		turning := true
		now := d.clock.ms()
		for _, s := range d.shards {
			turning = turning && now-s.turned.Load() <= partAllowed.Milliseconds()
		}
		if turning {
			d.o.Notify(notifyWatchdog)
		}
		select {
		case <-ctx.Done():
			return
		case <-d.clock.After(watchdogEvery):
		}
	}
}
