package daemon

import (
	"context"
	"fmt"
	"io"
	"iter"
	"time"

	"midwatch/alert/page/api"
	"midwatch/collector"
	"midwatch/configs"
	"midwatch/detect"
)

var _ api.House = (*Daemon)(nil)

// Status is the state of the watch in numbers.
func (d *Daemon) Status() api.Status {
	c, n := d.config(), d.counts()
	now := d.clock.ms()
	s := api.Status{Running: true, Version: d.o.Version, Site: c.Site.Name, Started: detect.FormatTime(d.started.Load()), Now: detect.FormatTime(now),
		Sources: d.sourceStates(), Senders: d.desk.Senders(), Shelves: d.desk.Shelves(), Episodes: openOnly(api.Episodes(d.desk))}
	s.Well, s.Unwell = d.Health()
	s.Loops = d.loopCounts()
	for _, p := range d.parts() {
		s.Parts = append(s.Parts, api.Part{Name: p.name, AgeS: float64(now-p.last) / 1000, State: p.state})
	}
	s.Trends = trends(n.window.Bytes, c.Keep.Size, n.window.Frames, n.window.Dropped, n.window.Oldest)
	s.Trends.Flushed = detect.FormatTime(d.keeper.flushed.Load())
	if p := d.keeper.problem.Load(); p != nil {
		s.Trends.Problem = *p
	}
	s.Counts = n.all()
	return s
}

// loopCounts are remembered for a moment: every open page asks for them.
func (d *Daemon) loopCounts() api.LoopCounts {
	now := d.clock.ms()
	if k := d.counted.Load(); k != nil && now-k.at < 1000 && now >= k.at && k.CatchingUp == 0 {
		return k.LoopCounts
	}
	k := &countedLoops{at: now}
	for _, l := range d.Loops() {
		k.Add(l.State)
	}
	k.CatchingUp = int(d.catching.Load())
	d.counted.Store(k)
	return k.LoopCounts
}

type countedLoops struct {
	api.LoopCounts
	at int64 // wall clock, ms UTC
}

func trends(bytes, limit int64, frames, dropped uint64, oldest int64) api.Trends {
	t := api.Trends{Bytes: bytes, Limit: limit, Frames: frames, Dropped: dropped}
	if oldest != 0 {
		t.Oldest = detect.FormatTime(oldest)
	}
	return t
}

func openOnly(es []api.Episode) (out []api.Episode) {
	for _, e := range es {
		if e.Open {
			out = append(out, e)
		}
	}
	return out
}

// Loops gives the loops in the order of the loop list with their states.
func (d *Daemon) Loops() []api.LoopState {
	loops := d.config().Loops
	out := make([]api.LoopState, 0, len(loops))
	clocks := d.clockSpots()
	for _, l := range loops {
		s := api.LoopState{Loop: l, State: detect.NoData}
		if id, ok := d.idOf(l.Name); ok {
			if v, ok := d.shardOf(id).view(id); ok {
				s.State, s.Why, s.Blind = v.State, v.Why, append(v.BlindSpots, clocks[l.Source]...)
			}
		}
		out = append(out, s)
	}
	return out
}

// View is what the watch of a loop knows now; false for an unknown loop.
func (d *Daemon) View(loop string) (detect.View, bool) {
	id, ok := d.idOf(loop)
	if !ok {
		return detect.View{}, false
	}
	v, ok := d.shardOf(id).view(id)
	if ls := d.config().Loops; ok && int(id) < len(ls) && ls[id].Name == loop {
		v.BlindSpots = append(v.BlindSpots, d.clockSpots()[ls[id].Source]...)
	}
	return v, ok
}

// clockApart is from which difference between the clocks, ms, findings are dated wrongly
// by more than they are vague (a few samples of a usual loop).
const clockApart = 5000

// clockSpots says by source that its clock differs from that of this machine.
func (d *Daemon) clockSpots() map[string][]string {
	out := map[string][]string{}
	for _, st := range d.sourceStates() {
		off, word := st.ClockOffsetMs, "behind"
		if off < 0 {
			off, word = -off, "ahead"
		}
		if off >= clockApart {
			out[st.Name] = []string{fmt.Sprintf("the clock of source %s is %s %s: what is found is dated by it, and may not meet the times of other records",
				st.Name, detect.Duration(float64(off)/1000), word)}
		}
	}
	return out
}

// Explain gives the evidence held of a loop; false for an unknown loop.
func (d *Daemon) Explain(loop string) ([]string, bool) {
	id, ok := d.idOf(loop)
	if !ok {
		return nil, false
	}
	return d.shardOf(id).explain(id)
}

// Frames reads kept frames of a loop, oldest first, from <= Time < to.
func (d *Daemon) Frames(ctx context.Context, loop string, from, to int64) iter.Seq2[collector.Frame, error] {
	return d.window.Frames(ctx, loop, from, to)
}

// Export writes trends, the loop list or memories.
func (d *Daemon) Export(ctx context.Context, w io.Writer, e api.Export) error {
	return writeExport(ctx, w, d.window, d.config().Loops, e)
}

// Config is the configuration in force.
func (d *Daemon) Config() *configs.Config { return d.config() }

// Sources tells how the sources are.
func (d *Daemon) Sources() []collector.SourceState { return d.sourceStates() }

// Started is when Start was called; Now is the clock of the daemon.
func (d *Daemon) Started() time.Time { return time.UnixMilli(d.started.Load()) }
func (d *Daemon) Now() time.Time     { return d.clock.Now() }

// CatchingUp is the number of loops that have not caught up since the start.
func (d *Daemon) CatchingUp() int { return int(d.catching.Load()) }

// counts are the numbers of status and metrics.
type counts struct {
	samples, dropped, frames, stale, heard, lost uint64
	waiting                                      int
	asm                                          collector.Counts
	window                                       storeStats
}

func (d *Daemon) counts() (c counts) {
	in := d.intake.Counts()
	c.samples, c.dropped, c.waiting = in.Put, in.Dropped, in.Waiting
	for _, s := range d.shards {
		c.frames += s.frames.Load()
		c.stale += s.stale.Load()
		s.mu.Lock()
		t := s.asm.Totals()
		s.mu.Unlock()
		c.asm.Held += t.Held
		c.asm.Gaps += t.Gaps
		c.asm.Late += t.Late
		c.asm.Duplicates += t.Duplicates
		c.asm.Clock += t.Clock
		c.asm.Lost += t.Lost
		c.asm.Thinned += t.Thinned
	}
	c.heard, c.lost = d.ledger.heard.Load(), d.ledger.lost.Load()
	c.window = d.window.Stats()
	return c
}

func (c *counts) all() map[string]uint64 {
	return map[string]uint64{"samples": c.samples, "samples_dropped": c.dropped, "frames": c.frames, "frames_held": c.asm.Held,
		"frames_gap": c.asm.Gaps, "frames_stale": c.stale, "samples_late": c.asm.Late, "samples_duplicate": c.asm.Duplicates,
		"clock_corrections": c.asm.Clock, "losses_reported": c.asm.Lost, "frames_thinned": c.asm.Thinned,
		"findings": c.heard, "findings_lost": c.lost}
}
