// Package alert is the desk: it turns findings into episodes and episodes into
// messages.
//
// The ledger ([Desk.Hear], [Desk.Visible]) knows data time only. It is
// idempotent: a finding that is not newer than what was heard of the same
// subject and kind changes nothing. Episode, journal and the step to be told are
// written in one transaction a batch.
//
// Dispatch ([Desk.Wake]) knows wall time only, and only as it is handed in. It
// routes steps, keeps the volume bearable, and hands messages to senders, which
// run in goroutines of their own and hold up neither the ledger nor each other.
// What is sent was written down before; delivery is at least once, and only a
// crash between the answer of a sender and its record repeats a message, under
// the same key.
//
// An advisory is an alert in the sense of ISA-18.2 / IEC 62682, not an alarm.
package alert

import (
	"context"
	"errors"
	"fmt"
	"log/slog"
	"math/rand/v2"
	"sync"
	"time"

	"midwatch/configs"
)

// Settings are what a reload replaces.
type Settings struct {
	Site     string
	Zone     *time.Location // nil: UTC
	Loops    []*configs.Loop
	Advise   configs.Advise
	Standing time.Duration     // findings before this age of the watch are standing; 0: 14 days, negative: none
	Names    time.Duration     // how long names of people stay in journals; 0: for good
	Keep     time.Duration     // how long episodes stay after they ended; 0: 400 days, negative: for good
	PageURL  string            // for links; empty: no links
	Senders  map[string]Sender // by the name in Advise.Senders
	Health   func() []string   // of the watch, lines for the digest; may be nil
}

// Options of a desk.
type Options struct {
	Store    Store
	Settings Settings
	Clock    func() time.Time // wall clock: stamps journal entries; decisions use the time given to Wake
	Seed     uint64           // of the jitter of retries
	Log      *slog.Logger     // nil: discarded

	Settle      time.Duration // a step waits so long for what folds it into another; 0: 30 s, negative: none
	SettleStale time.Duration // the same for stale-data, so that a dead source speaks once; 0: 2 min
	SettleSwing time.Duration // the most for a swing that may be that of other loops; 0: 4 h
	OldNews     time.Duration // older news is said to be old; 0: 1 h
	SendTimeout time.Duration // of one attempt; 0: 30 s
	RetryFirst  time.Duration // upper bound of the first pause; doubled with each attempt; 0: 5 s
	RetryMost   time.Duration // upper bound of all pauses; 0: 10 min
	GiveUp      time.Duration // a message not delivered for so long is given up; 0: 72 h
}

// Desk is the ledger and dispatch. It is safe for concurrent use.
type Desk struct {
	o       Options
	changed chan struct{}
	ctx     context.Context
	cancel  context.CancelFunc
	flying  sync.WaitGroup

	mu       sync.Mutex
	set      settings
	mem      memory
	loaded   bool // mem mirrors the store
	rand     *rand.Rand
	ways     map[string]*way
	finished []outcome // answers of senders that could not be recorded yet
}

// New makes a desk on what the store holds.
func New(o Options) (*Desk, error) {
	if o.Store == nil {
		return nil, errors.New("desk without a store; hint: give Options.Store")
	}
	if o.Clock == nil {
		return nil, errors.New("desk without a clock; hint: give Options.Clock")
	}
	if o.Log == nil {
		o.Log = slog.New(slog.DiscardHandler)
	}
	for _, d := range []struct {
		p *time.Duration
		v time.Duration
	}{{&o.Settle, 30 * time.Second}, {&o.SettleStale, 2 * time.Minute}, {&o.SettleSwing, 4 * time.Hour}, {&o.OldNews, time.Hour}, {&o.SendTimeout, 30 * time.Second},
		{&o.RetryFirst, 5 * time.Second}, {&o.RetryMost, 10 * time.Minute}, {&o.GiveUp, 72 * time.Hour}} {
		if *d.p == 0 {
			*d.p = d.v
		}
		*d.p = max(*d.p, 0)
	}
	d := &Desk{o: o, changed: make(chan struct{}, 1), rand: rand.New(rand.NewPCG(o.Seed, 0x6d69647761746368)), ways: map[string]*way{}}
	d.ctx, d.cancel = context.WithCancel(context.Background())
	if err := d.Reload(o.Settings); err != nil {
		return nil, err
	}
	d.mu.Lock()
	defer d.mu.Unlock()
	if err := d.load(); err != nil {
		return nil, err
	}
	return d, nil
}

// Reload replaces the settings. Episodes, journals and messages on their way
// stay; a message to a sender that is gone is given up.
func (d *Desk) Reload(s Settings) error {
	set, err := makeSettings(s)
	if err != nil {
		return err
	}
	d.mu.Lock()
	defer d.mu.Unlock()
	d.set = set
	d.stir()
	return nil
}

// Changed is signalled when Wake should be called before the time it asked for.
func (d *Desk) Changed() <-chan struct{} { return d.changed }

// Run calls Wake when it is due until ctx ends, then stops the desk. after is
// time.After in wall time, or what fits the clock of the desk. Errors of Wake
// (a failing store) are logged when they change, and tried again after 10 s.
func (d *Desk) Run(ctx context.Context, after func(time.Duration) <-chan time.Time) {
	defer d.Stop()
	last := ""
	for {
		now := d.o.Clock()
		next, err := d.Wake(now)
		text := ""
		if err != nil {
			text, next = err.Error(), now.Add(10*time.Second)
		}
		if text != last && text != "" {
			d.o.Log.Error("desk cannot work", "err", err)
		}
		last = text
		// An hour at most: a wall clock that was set is noticed by then.
		select {
		case <-ctx.Done():
			return
		case <-d.changed:
		case <-after(min(max(next.Sub(now), 0), time.Hour)):
		}
	}
}

// Stop ends attempts under way and waits for them. What was not delivered stays
// in the outbox.
func (d *Desk) Stop() {
	d.cancel()
	d.flying.Wait()
}

// stir asks for a Wake; it never blocks.
func (d *Desk) stir() {
	select {
	case d.changed <- struct{}{}:
	default:
	}
}

// update runs one transaction. When it fails, memory is read anew before the
// next use: it may be ahead of the store.
func (d *Desk) update(f func(*batch) error) error {
	if !d.loaded {
		if err := d.load(); err != nil {
			return err
		}
	}
	err := d.o.Store.Update(func(tx Tx) error {
		b := &batch{d: d, tx: tx, touched: map[string]*Episode{}}
		if err := f(b); err != nil {
			return err
		}
		return b.flush()
	})
	if r, ok := errors.AsType[refusal](err); ok {
		return r.error
	}
	if err != nil {
		d.loaded = false
		return fmt.Errorf("desk: nothing was written: %w; hint: see whether the data folder can be written and the disk has room", err)
	}
	return nil
}

// refusal is an error of the asker, returned before anything was changed.
type refusal struct{ error }

// wall is the wall clock for journals, ms UTC.
func (d *Desk) wall() int64 { return d.o.Clock().UnixMilli() }
