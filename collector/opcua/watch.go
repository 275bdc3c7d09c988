package opcua

import (
	"context"
	"errors"
	"fmt"
	"sync"
	"time"

	"github.com/gopcua/opcua/ua"

	"midwatch/collector"
)

// errSilent ends a link on which nothing was heard for two keep-alives and a
// second: TCP alone would notice after many minutes, or never.
var errSilent = errors.New("the server went silent")

// errSubscriptionSilent ends a session one of whose subscriptions is silent
// while others speak.
var errSubscriptionSilent = errors.New("a subscription went silent while others speak")

// watch takes over what the server publishes until the link or the session ends,
// and returns why. It never waits for a request of its own: those run beside it
// and hand their result back as a job. hangUp ends the connection, for requests
// that do not end by themselves.
func (s *Source) watch(ctx context.Context, sess *session, in collector.Intake, hangUp func()) (err error) {
	ctx, cancel := context.WithCancel(ctx)
	pump := startPump(ctx, sess.reader, min(s.pace.maxOutstanding, len(s.subs)+1))
	jobs := make(chan func() error, 1)
	w := &watcher{Source: s, sess: sess, in: in, pump: pump, jobs: jobs, heard: time.Now(), retry: time.Now().Add(s.pace.refused),
		byID: make(map[uint32]*subscription, len(s.subs))}
	for _, sub := range s.subs {
		w.byID[sub.id] = sub
		w.silence = max(w.silence, 2*sub.keepAlive+s.pace.slack)
	}
	s.mu.Lock()
	s.live = sess
	s.mu.Unlock()
	defer func() {
		if ctx.Err() == nil && !needsFresh(err) {
			hangUp() // the link is dead, the session is to be resumed on another
		} else {
			defer time.AfterFunc(2*time.Second, hangUp).Stop()
		}
		cancel()
		pump.wg.Wait()
		w.beside.Wait()
		s.mu.Lock()
		s.live = nil
		s.mu.Unlock()
	}()
	look := time.NewTicker(s.pace.look)
	defer look.Stop()
	for {
		select {
		case <-ctx.Done():
			return ctx.Err()
		case a := <-pump.out:
			err = w.take(a)
		case job := <-jobs:
			w.busy = false
			err = job()
		case <-look.C:
			err = w.look(ctx)
		}
		if err != nil {
			return err
		}
	}
}

// watcher is the state of one watch.
type watcher struct {
	*Source
	sess    *session
	in      collector.Intake
	pump    *pump
	byID    map[uint32]*subscription
	jobs    chan func() error
	busy    bool // a job is under way; one at a time, requests one after the other
	beside  sync.WaitGroup
	heard   time.Time
	silence time.Duration
	retry   time.Time
	batch   []collector.Sample
}

// take takes over one publish answer.
func (w *watcher) take(a answer) error {
	if a.err != nil {
		return fmt.Errorf("waiting for values: %w", a.err)
	}
	now := time.Now()
	w.heard = now
	w.counts.roundTrip.Store(uint64(a.took.Milliseconds()))
	w.mu.Lock()
	w.last = w.now().UnixMilli()
	w.mu.Unlock()
	sub, m := w.byID[a.res.SubscriptionID], a.res.NotificationMessage
	if sub == nil || m == nil {
		w.counts.strays.Add(1)
		return nil
	}
	sub.heard = now
	if len(m.NotificationData) == 0 {
		w.counts.keepAlives.Add(1)
		sub.seq.alive(m.SequenceNumber)
		w.byPublishTime(sub, m)
		return nil
	}
	w.pump.acknowledge(sub.id, m.SequenceNumber)
	if m.SequenceNumber != sub.seq.next {
		w.counts.outOfOrder.Add(1)
	}
	ready, known := sub.seq.take(message{NotificationMessage: m, more: a.res.MoreNotifications})
	if known {
		w.counts.strays.Add(1)
	}
	return w.deliverAll(sub, ready)
}

func (w *watcher) deliverAll(sub *subscription, ready []message) error {
	for _, m := range ready {
		var err error
		if w.batch, err = w.deliver(w.in, sub, m, w.batch); err != nil {
			return err
		}
		if !m.more && !m.again {
			w.byPublishTime(sub, m.NotificationMessage)
		}
	}
	return nil
}

// byPublishTime makes ticks for a server whose clock cannot be watched.
func (w *watcher) byPublishTime(sub *subscription, m *ua.NotificationMessage) {
	if time.Since(sub.clock) < w.silence {
		return
	}
	if t := millis(m.PublishTime); t > 0 && !sub.seq.missing() {
		w.tell(w.in, sub, t-(sub.sampling+sub.interval).Milliseconds(), w.now().UnixMilli())
	}
}

// look is the watchdog: it looks for silence, for messages that stay away, and
// for refused tags that are due to be asked for again.
func (w *watcher) look(ctx context.Context) error {
	now := time.Now()
	if quiet := now.Sub(w.heard); quiet > w.silence {
		return fmt.Errorf("%w for %s", errSilent, quiet.Round(100*time.Millisecond))
	}
	for _, sub := range w.subs {
		if now.Sub(sub.heard) > 3*w.silence {
			return fmt.Errorf("%w: %v", errSubscriptionSilent, sub)
		}
		switch {
		case !sub.seq.missing():
			sub.missing = time.Time{}
		case sub.missing.IsZero():
			sub.missing = now
		case now.Sub(sub.missing) > sub.interval && !w.busy:
			w.fetch(ctx, sub, sub.seq.next)
			return nil
		}
	}
	if !w.busy && now.After(w.retry) {
		w.askAgain(ctx)
	}
	return nil
}

// fetch republishes a message that did not come; one that is gone is a gap.
func (w *watcher) fetch(ctx context.Context, sub *subscription, n uint32) {
	w.run(ctx, func() func() error {
		m, err := w.sess.republish(ctx, sub.id, n)
		return func() error {
			switch {
			case n != sub.seq.next: // it came meanwhile
				return nil
			case err == nil && m != nil:
				w.counts.republished.Add(1)
				m.SequenceNumber = n
				w.pump.acknowledge(sub.id, n)
				ready, _ := sub.seq.take(message{NotificationMessage: m, more: true, again: true})
				return w.deliverAll(sub, ready)
			case err == nil, isAny(err, ua.StatusBadMessageNotAvailable):
				gap, ready := sub.seq.skip()
				w.counts.gaps.Add(uint64(gap))
				w.log.Warn("messages were lost on the way", "subscription", sub.id, "count", gap)
				sub.mark()
				if err := w.deliverAll(sub, ready); err != nil {
					return err
				}
				w.readAfterGap(ctx, sub)
				return nil
			}
			return fmt.Errorf("fetching a lost message: %w", err)
		}
	})
}

// quietFor is after how many sampling intervals without a value a tag is read
// after a gap.
const quietFor = 10

func (w *watcher) readAfterGap(ctx context.Context, sub *subscription) {
	var quiet []*item
	var nodes []*ua.NodeID
	now := w.now().UnixMilli()
	for _, it := range sub.items {
		if it.watched && now-it.arrived > quietFor*it.sampling.Milliseconds() {
			quiet = append(quiet, it)
			nodes = append(nodes, it.node)
		}
	}
	if len(quiet) == 0 {
		return
	}
	w.run(ctx, func() func() error {
		got, err := w.readQuiet(ctx, w.sess, quiet, nodes)
		return func() error {
			if err != nil {
				return err
			}
			w.batch = w.batch[:0]
			arrived := w.now().UnixMilli()
			for i, v := range got {
				w.batch, _ = w.samples(w.batch, quiet[i], v, arrived, true)
			}
			if len(w.batch) > 0 {
				w.in.Put(w.batch)
			}
			return nil
		}
	})
}

// askAgain tries refused tags once more, subscription by subscription.
func (w *watcher) askAgain(ctx context.Context) {
	w.retry = time.Now().Add(w.pace.refused)
	type part struct {
		sub   *subscription
		items []*item
		got   []outcome
	}
	var parts []part
	for _, sub := range w.subs {
		p := part{sub: sub}
		for _, it := range sub.items {
			if !it.watched {
				p.items = append(p.items, it)
			}
		}
		if p.items != nil {
			parts = append(parts, p)
		}
	}
	if parts == nil {
		return
	}
	w.run(ctx, func() func() error {
		var err error
		for i := range parts {
			p := &parts[i]
			if p.got, err = w.prepare(ctx, w.sess, p.sub.id, p.items, p.sub); err != nil {
				break
			}
		}
		return func() error {
			w.counts.askedAgain.Add(1)
			for _, p := range parts {
				w.apply(p.sub, p.got)
				for _, o := range p.got {
					if o.refusal == nil {
						o.it.first = true
						w.counts.watched.Add(1)
						w.log.Info("a refused tag is watched now", "address", o.it.address)
					}
				}
			}
			if err != nil && !linkIsWell(err) {
				return fmt.Errorf("asking for refused tags again: %w", err)
			}
			return nil
		}
	})
}

// linkIsWell says whether an error is the server's answer and not a broken link.
func linkIsWell(err error) bool {
	var code ua.StatusCode
	return errors.As(err, &code) && !needsFresh(err) && code != ua.StatusBadTimeout
}

// run does a request beside the watch; its result comes back as a job.
func (w *watcher) run(ctx context.Context, request func() func() error) {
	w.busy = true
	w.beside.Go(func() {
		job := request()
		select {
		case w.jobs <- job:
		case <-ctx.Done():
		}
	})
}
