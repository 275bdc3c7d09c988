package alert

import (
	"cmp"
	"context"
	"errors"
	"fmt"
	"slices"
	"time"
)

// delivery is one message to one sender, in the outbox until it was taken.
// Times are wall time, ms UTC.
type delivery struct {
	ID       string    `json:"id"` // episode, or of a message about several
	Step     uint32    `json:"step"`
	Seq      uint64    `json:"seq"`
	Sender   string    `json:"sender"`
	Type     Type      `json:"type"`
	Title    string    `json:"title,omitempty"`
	Items    []Item    `json:"items,omitempty"`
	Sections []Section `json:"sections,omitempty"`
	Written  int64     `json:"written"`
	Attempts int       `json:"attempts,omitempty"`
	Next     int64     `json:"next"`
	flying   bool
}

func (x *delivery) key() []byte { return key3(x.ID, x.Step, x.Sender) }

// way is one sender as dispatch sees it.
type way struct {
	busy     bool
	flying   map[string]bool
	failures int   // in a row
	until    int64 // no attempt before, ms UTC
	state    SenderState
}

// SenderState is how a sender does. Times are wall time, ms UTC; 0 is never.
type SenderState struct {
	Name    string            `json:"name"`
	Queued  int               `json:"queued"`
	Oldest  int64             `json:"oldest_queued,omitempty"` // when the oldest of them was written down
	Sent    uint64            `json:"sent"`
	Failed  map[Reason]uint64 `json:"failed,omitempty"` // attempts
	Dropped uint64            `json:"dropped"`          // given up
	LastOK  int64             `json:"last_ok"`
	Since   int64             `json:"failing_since"` // 0: the last attempt was taken
	Problem string            `json:"problem,omitempty"`
}

// Senders tells how all senders do, in order of the configuration.
func (d *Desk) Senders() []SenderState {
	d.mu.Lock()
	defer d.mu.Unlock()
	var out []SenderState
	for _, c := range d.set.Advise.Senders {
		s := d.way(c.Name).state
		s.Name, s.Failed = c.Name, map[Reason]uint64{}
		for r, n := range d.way(c.Name).state.Failed {
			s.Failed[r] = n
		}
		for _, x := range d.mem.queue {
			if x.Sender == c.Name {
				s.Queued++
				if s.Oldest == 0 || x.Written < s.Oldest {
					s.Oldest = x.Written
				}
			}
		}
		out = append(out, s)
	}
	return out
}

func (d *Desk) way(sender string) *way {
	w := d.ways[sender]
	if w == nil {
		w = &way{flying: map[string]bool{}, state: SenderState{Failed: map[Reason]uint64{}}}
		d.ways[sender] = w
	}
	return w
}

func (d *Desk) inFlight(x *delivery) bool { return d.way(x.Sender).flying[string(x.key())] }

// due says whether wall time t has come at now. One more than a day ahead is left
// over from a clock that was wrong: nothing here waits longer.
func due(t, now int64) bool { return t <= now || t > now+day+int64(time.Hour/time.Millisecond) }

// atOnce bounds what one run of a sender takes on.
const atOnce = 64

// free lists the messages for a sender that wait for nothing but their time: not
// under way, and no earlier message of the same episode before them.
func (d *Desk) free(sender string) []*delivery {
	var out []*delivery
	waits := map[string]bool{}
	for _, x := range d.mem.queue {
		if x.Sender != sender {
			continue
		}
		ok := !x.flying
		for i := range x.Items {
			ok = ok && !waits[x.Items[i].Episode]
		}
		for i := range x.Items {
			waits[x.Items[i].Episode] = true
		}
		if ok {
			out = append(out, x)
		}
	}
	return out
}

// send starts every idle sender that has something due.
func (d *Desk) send(now time.Time) {
	if d.ctx.Err() != nil {
		return
	}
	ms := now.UnixMilli()
	for _, c := range d.set.Advise.Senders {
		w, s := d.way(c.Name), d.set.Senders[c.Name]
		if w.busy || s == nil || !due(w.until, ms) {
			continue
		}
		run := slices.DeleteFunc(d.free(c.Name), func(x *delivery) bool { return !due(x.Next, ms) })
		if len(run) == 0 {
			continue
		}
		// What was not tried yet goes first: a message that is refused again and
		// again must not keep the others back.
		slices.SortStableFunc(run, func(a, b *delivery) int { return cmp.Compare(a.Attempts, b.Attempts) })
		run = run[:min(len(run), atOnce)]
		w.busy = true
		msgs := make([]Message, len(run))
		for i, x := range run {
			msgs[i] = d.render(x, now)
			x.flying, w.flying[string(x.key())] = true, true
		}
		keys := make([]string, len(run))
		for i, x := range run {
			keys[i] = string(x.key())
		}
		d.flying.Add(1)
		go d.work(c.Name, s, keys, msgs)
	}
}

// outcome is the answer of a sender to one message.
type outcome struct {
	sender, key string
	err         error
}

// work sends messages one after the other until one fails, and records each
// answer at once.
func (d *Desk) work(name string, s Sender, keys []string, msgs []Message) {
	defer d.flying.Done()
	for i, m := range msgs {
		ctx, cancel := context.WithTimeout(d.ctx, d.o.SendTimeout)
		err := attempt(ctx, s, m)
		cancel()
		d.mu.Lock()
		if d.ctx.Err() != nil && err != nil {
			d.mu.Unlock()
			return // stopped: the attempt does not count
		}
		d.finished = append(d.finished, outcome{name, keys[i], err})
		last := i == len(msgs)-1
		if rerr := d.recordFinished(d.o.Clock()); rerr != nil {
			last = true
			d.o.Log.Error("the answer of a sender could not be written down; it will be tried again", "sender", name, "err", rerr)
		}
		last = last || err != nil && !isPermanent(err)
		if last {
			w := d.way(name)
			w.busy = false
			for _, k := range keys[i+1:] {
				d.land(name, k)
			}
			d.mu.Unlock()
			d.stir()
			return
		}
		d.mu.Unlock()
	}
}

// attempt keeps a sender that panics from ending the watch.
func attempt(ctx context.Context, s Sender, m Message) (err error) {
	defer func() {
		if r := recover(); r != nil {
			err = &Permanent{ReasonOther, fmt.Errorf("the sender failed on this message: %v", r)}
		}
	}()
	return s.Send(ctx, m)
}

func isPermanent(err error) bool {
	_, ok := errors.AsType[*Permanent](err)
	return ok
}

// land says that the message is not under way any more.
func (d *Desk) land(sender, key string) {
	delete(d.way(sender).flying, key)
	if x := d.mem.byKey[key]; x != nil {
		x.flying = false
	}
}

// recordFinished writes down answers of senders. Those it cannot write stay in
// memory, so that a message that was taken is not sent again by this process.
func (d *Desk) recordFinished(now time.Time) error {
	if len(d.finished) == 0 {
		return nil
	}
	done := d.finished
	err := d.update(func(b *batch) error {
		for _, o := range done {
			if x := d.mem.byKey[o.key]; x != nil {
				if err := b.record(x, o.err, now); err != nil {
					return err
				}
			}
		}
		return nil
	})
	if err != nil {
		return err
	}
	d.finished = nil
	for _, o := range done {
		d.land(o.sender, o.key)
		d.count(o, now)
	}
	return nil
}

// record writes one answer into the transaction.
func (b *batch) record(x *delivery, answer error, now time.Time) error {
	d := b.d
	result, entry := "sent", Entry{What: "told " + x.Sender}
	switch {
	case answer == nil:
	case isPermanent(answer):
		result = "failed: " + string(ReasonOf(answer))
	// The number of attempts guards against a wall clock that was set forward.
	case now.UnixMilli()-x.Written > d.o.GiveUp.Milliseconds() && x.Attempts >= 20:
		result = "failed: " + string(ReasonOf(answer)) + ", given up"
	default:
		y := *x
		y.Attempts++
		pause := d.backOff(y.Attempts)
		if r, ok := errors.AsType[*RetryAfter](answer); ok {
			pause = min(max(r.After, pause), 24*time.Hour)
		}
		y.Next = now.Add(pause).UnixMilli()
		*x = y
		return put(b.tx, bucketOutbox, x.key(), &y)
	}
	if answer != nil {
		entry = Entry{What: "could not tell " + x.Sender, Why: answer.Error()}
	}
	for i := range x.Items {
		it := &x.Items[i]
		if err := b.markTold(it.Episode, it.Step, x.Sender, result); err != nil {
			return err
		}
		e, err := b.episode(it.Episode)
		if err != nil {
			return err
		}
		if e != nil {
			if err := b.journal(e, entry); err != nil {
				return err
			}
		}
	}
	d.mem.queue = slices.DeleteFunc(d.mem.queue, func(y *delivery) bool { return y == x })
	delete(d.mem.byKey, string(x.key()))
	return b.tx.Delete(bucketOutbox, x.key())
}

// episode gives an episode from memory or, if it ended long ago, from the store.
func (b *batch) episode(id string) (*Episode, error) {
	if e := b.d.mem.episodes[id]; e != nil {
		return e, nil
	}
	if e := b.touched[id]; e != nil {
		return e, nil
	}
	var e Episode
	if had, err := get(b.tx, bucketEpisodes, []byte(id), &e); !had || err != nil {
		return nil, err
	}
	return &e, nil
}

// backOff is a pause with full jitter: between nothing and a bound that doubles.
func (d *Desk) backOff(attempts int) time.Duration {
	bound := d.o.RetryMost
	if n := min(attempts-1, 20); d.o.RetryFirst<<n < bound {
		bound = d.o.RetryFirst << n
	}
	return time.Duration(d.rand.Int64N(int64(bound) + 1))
}

// count keeps the tally of a sender and logs changes, not attempts.
func (d *Desk) count(o outcome, now time.Time) {
	w := d.way(o.sender)
	if o.err == nil {
		if w.failures > 0 {
			d.o.Log.Info("sender works again", "sender", o.sender, "failed_attempts", w.failures)
		}
		w.state.Sent++
		w.state.LastOK, w.state.Since, w.state.Problem = now.UnixMilli(), 0, ""
		w.failures, w.until = 0, 0
		return
	}
	reason := ReasonOf(o.err)
	w.state.Failed[reason]++
	if w.state.Since == 0 {
		w.state.Since = now.UnixMilli()
	}
	if w.state.Problem != o.err.Error() {
		w.state.Problem = o.err.Error()
		d.o.Log.Warn("sender failed", "sender", o.sender, "reason", string(reason), "err", o.err)
	}
	if x := d.mem.byKey[o.key]; x == nil {
		w.state.Dropped++ // the message was refused for good: the way itself may be well
		return
	}
	w.failures++
	pause := d.backOff(w.failures)
	if r, ok := errors.AsType[*RetryAfter](o.err); ok {
		pause = min(max(r.After, pause), 24*time.Hour)
	}
	w.until = now.Add(pause).UnixMilli()
}

// dropOrphans gives up what is for senders that are gone.
func (d *Desk) dropOrphans(now time.Time) error {
	var gone []*delivery
	for _, x := range d.mem.queue {
		if d.set.Senders[x.Sender] == nil && !x.flying {
			gone = append(gone, x)
		}
	}
	if len(gone) == 0 {
		return nil
	}
	return d.update(func(b *batch) error {
		for _, x := range gone {
			if err := b.record(x, &Permanent{ReasonOther, errors.New("the sender is not in the configuration any more")}, now); err != nil {
				return err
			}
		}
		return nil
	})
}

// foldQueues makes one message of the many that piled up for a person while
// their sender did not work.
func (d *Desk) foldQueues(now time.Time) error {
	for _, c := range d.set.Advise.Senders {
		if !d.set.people[c.Name] || d.way(c.Name).busy {
			continue
		}
		var pile []*delivery
		for _, x := range d.mem.queue {
			if x.Sender == c.Name && !x.flying && (x.Type == TypeAdvisory || x.Type == TypeCollected) {
				pile = append(pile, x)
			}
		}
		if len(pile) <= floodCount || now.UnixMilli()-pile[0].Written < floodSpan.Milliseconds() {
			continue
		}
		err := d.update(func(b *batch) error {
			var items []Item
			for _, x := range pile {
				items = append(items, x.Items...)
				delete(d.mem.byKey, string(x.key()))
				if err := b.tx.Delete(bucketOutbox, x.key()); err != nil {
					return err
				}
			}
			d.mem.queue = slices.DeleteFunc(d.mem.queue, func(x *delivery) bool { return slices.Contains(pile, x) })
			return b.enqueue(c.Name, TypeCollected, items, nil, "", now)
		})
		if err != nil {
			return err
		}
	}
	return nil
}
