package daemon

import (
	"context"
	"encoding/binary"
	"log/slog"
	"slices"
	"sync/atomic"
	"time"

	"midwatch/alert/page/api"
	"midwatch/collector"
	"midwatch/configs"
	"midwatch/store"
)

// keeper writes the window, has memories made, keeps profiles in the state, and
// lets go of what is old. One goroutine.
type keeper struct {
	d     *Daemon
	log   *slog.Logger
	clock Clock

	slice   uint32    // open slice at the last flush
	memory  time.Time // up to which hourly memories are due
	hourly  time.Time // of the last hourly work
	daily   time.Time // of the last daily work
	failing string
	oldest  int64                        // data time of the oldest frame at the last hourly work, ms UTC
	short   time.Time                    // when it was last said that keep.size is too small
	tuned   map[string]api.TuningReading // newest kept reading of the tuning, by loop; nil: not read yet

	turned  atomic.Int64 // wall clock of the last turn, ms UTC
	flushed atomic.Int64 // of the last good flush
	since   atomic.Int64 // since which flushes fail; 0: they do not
	problem atomic.Pointer[string]
}

const memoryEvery = time.Hour

func (k *keeper) begin() {
	now := k.clock.Now()
	k.memory, k.hourly, k.daily = now, now, now
	k.flushed.Store(now.UnixMilli())
	k.turned.Store(now.UnixMilli())
	k.slice = k.d.window.Stats().Slice
}

// run works until ctx ends.
func (k *keeper) run(ctx context.Context) {
	for {
		select {
		case <-ctx.Done():
			return
		case <-k.clock.After(k.d.config().Keep.Flush):
		}
		k.turn(ctx)
	}
}

func (k *keeper) turn(ctx context.Context) {
	now := k.clock.Now()
	k.turned.Store(now.UnixMilli())
	k.rememberDue(now)
	k.flush(ctx)
	if now.Sub(k.hourly) >= time.Hour || now.Before(k.hourly) {
		k.hourly = now
		k.noteFlush()
		k.noteRoom(now)
		k.keepTunings(ctx)
		k.expire(now)
	}
	if now.Sub(k.daily) >= 24*time.Hour || now.Before(k.daily) {
		k.daily = now
		k.keepProfiles(ctx)
		k.dropTunings()
		if err := k.d.state.Backup(); err != nil {
			k.log.Error("no backup of the state today", "err", err)
		}
	}
}

// flush writes the window; after a cut every loop leaves its memory in the new
// slice, so that each slice can stand for itself.
func (k *keeper) flush(ctx context.Context) {
	err := k.d.window.Flush(ctx)
	now := k.clock.ms()
	if err != nil {
		if ctx.Err() != nil {
			return
		}
		if text := err.Error(); text != k.failing {
			k.failing = text
			k.log.Error("trends are not written; detection goes on", "err", err)
			k.problem.Store(&text)
		}
		k.since.CompareAndSwap(0, now)
		return
	}
	if k.failing != "" {
		k.failing = ""
		k.problem.Store(nil)
		k.log.Info("trends are written again")
	}
	k.since.Store(0)
	k.flushed.Store(now)
	if s := k.d.window.Stats().Slice; s != k.slice {
		k.slice = s
		k.rememberAll()
	}
}

// rememberDue has the memories made of those loops whose turn within the hour
// has come since the last time.
func (k *keeper) rememberDue(now time.Time) {
	from := k.memory
	k.memory = now
	if now.Before(from) || now.Sub(from) >= memoryEvery {
		k.rememberAll()
		return
	}
	roster := k.d.loops()
	var ids []collector.LoopID
	for i, l := range roster {
		if l == nil {
			continue
		}
		phase := memoryEvery * time.Duration(i) / time.Duration(len(roster))
		due := from.Truncate(memoryEvery).Add(phase)
		if due.Before(from) || due.Equal(from) {
			due = due.Add(memoryEvery)
		}
		if !due.After(now) {
			ids = append(ids, collector.LoopID(i))
		}
	}
	k.d.remember(ids)
}

func (k *keeper) rememberAll() { k.d.remember(all(k.d.loops())) }

func all(roster []*configs.Loop) (ids []collector.LoopID) {
	for i, l := range roster {
		if l != nil {
			ids = append(ids, collector.LoopID(i))
		}
	}
	return ids
}

// remember has the memories of loops made by their shards.
func (d *Daemon) remember(ids []collector.LoopID) {
	by := make([][]collector.LoopID, len(d.shards))
	for _, id := range ids {
		n := int(id) % len(d.shards)
		by[n] = append(by[n], id)
	}
	for n, ids := range by {
		for part := range slices.Chunk(ids, 64) { // samples must not wait long
			d.shards[n].remember(part)
		}
	}
}

// noteFlush keeps the number of the last flush, so that a window that is behind
// is noticed.
func (k *keeper) noteFlush() {
	n := k.d.window.Stats().LastFlush
	err := k.d.state.Update(func(tx *store.Tx) error {
		return tx.Put(bucketDaemon, []byte(keyFlush), binary.BigEndian.AppendUint32(nil, n))
	})
	if err != nil {
		k.log.Error("the state cannot be written", "err", err)
	}
}

// expire drops slices that are older than anything is kept. Frames are not
// thinned: all are kept whole for the longest that is asked of any, so that no
// promise of keep.full, keep.thin or keep.evidence is broken but by keep.size.
func (k *keeper) expire(now time.Time) {
	keep := k.d.config().Keep
	n, err := k.d.window.Expire(now.Add(-max(keep.Full, keep.Thin, keep.Evidence)).UnixMilli())
	if err != nil {
		k.log.Error("old trends cannot be removed", "err", err)
	}
	if n > 0 {
		k.log.Info("old trends were removed", "slices", n)
	}
}

// noteRoom says, once a day, that the oldest trends went although keep.full
// promises them still: keep.size is too small for these loops.
func (k *keeper) noteRoom(now time.Time) {
	was := k.oldest
	k.oldest = k.d.window.Stats().Oldest
	keep := k.d.config().Keep
	age := now.Sub(time.UnixMilli(k.oldest))
	if was == 0 || k.oldest <= was || age >= keep.Full || now.Sub(k.short) < 24*time.Hour {
		return
	}
	k.short = now
	k.log.Warn("keep.size does not hold the trends of keep.full; the oldest were dropped", "held", configs.FormatDuration(age.Truncate(time.Minute)),
		"full", configs.FormatDuration(keep.Full), "size", keep.Size, "hint", "raise keep.size, or lower keep.full")
}

// keepProfiles puts the memory of every loop into the state, some at a time.
func (k *keeper) keepProfiles(ctx context.Context) {
	for part := range slices.Chunk(all(k.d.loops()), 128) {
		if ctx.Err() != nil {
			return
		}
		ms := map[string][]byte{}
		for _, id := range part {
			s := k.d.shardOf(id)
			s.mu.Lock()
			if i := s.lane.at(id); i < len(s.lane.watches) && s.lane.watches[i] != nil && !s.lane.pace[i].late && s.lane.watches[i].Through() != 0 {
				ms[s.lane.names[i]] = s.lane.watches[i].Save(nil)
			}
			s.mu.Unlock()
		}
		err := k.d.state.Update(func(tx *store.Tx) error {
			for name, b := range ms {
				if err := tx.Put(bucketProfiles, []byte(name), b); err != nil {
					return err
				}
			}
			return nil
		})
		if err != nil {
			k.log.Error("profiles are not kept today", "err", err)
			return
		}
	}
}
