package opcua

import (
	"context"
	"errors"
	"fmt"
	"math/rand/v2"
	"time"

	"github.com/gopcua/opcua/ua"

	"midwatch/collector"
)

// kept is what is needed to resume a session on another link.
type kept struct {
	*ticket
	door  door
	sess  *session
	until time.Time // the server forgets it after this
}

// supervise keeps the source watching until the context ends: down, dialling,
// resumed or fresh, watching. It is the one owner of reconnection. Each attempt
// uses a new link; attempts are spread by a growing, jittered back-off, and
// sessions have a ceiling per minute.
func (s *Source) supervise(ctx context.Context, in collector.Intake) {
	var keep *kept
	failures := 0
	for ctx.Err() == nil {
		s.set("connecting", nil)
		s.counts.attempts.Add(1)
		l, k, err := s.connect(ctx, keep, in)
		keep = k
		if err == nil {
			up := time.Now()
			s.set("watching", nil)
			err = s.watch(ctx, keep.sess, in, l.hangUp)
			if time.Since(up) >= s.pace.stable {
				failures = 0
			}
			keep = s.part(ctx, l, keep, err)
		}
		if ctx.Err() != nil {
			break
		}
		f := s.explain(err)
		s.down(in, f)
		wait := s.backOff(failures)
		if keep != nil { // the session does not wait for ever
			wait = min(wait, keep.life/8)
		}
		if f.wait > 0 {
			wait = jitter(f.wait)
		}
		failures++
		sleep(ctx, wait)
	}
	if keep != nil {
		s.farewell(keep)
	}
	s.set("down", nil)
}

// part leaves a link: a session that may live on is kept for the next link, any
// other is closed, so that it does not occupy a place on the server.
func (s *Source) part(ctx context.Context, l *link, k *kept, err error) *kept {
	if ctx.Err() != nil || needsFresh(err) {
		l.close(2 * time.Second)
		return nil
	}
	t := l.leave()
	if t == nil {
		return nil
	}
	return &kept{ticket: t, door: k.door, sess: k.sess, until: time.Now().Add(t.life)}
}

// farewell closes a session that was kept over an outage when the program ends
// meanwhile; a server with few sessions needs the place.
func (s *Source) farewell(k *kept) {
	ctx, cancel := context.WithTimeout(context.Background(), 2*time.Second)
	defer cancel()
	l, err := k.door.open(ctx)
	if err != nil {
		return // the server frees it after its timeout
	}
	if err := l.resume(ctx, k.ticket); err != nil {
		s.log.Debug("the kept session is gone already", "error", err)
	}
	l.close(time.Second)
}

// needsFresh says whether the old session or its subscriptions are gone for good.
func needsFresh(err error) bool {
	var ended errSubscription
	return errors.As(err, &ended) || errors.Is(err, errSignature) || errors.Is(err, errSubscriptionSilent) ||
		isAny(err, ua.StatusBadSessionIDInvalid, ua.StatusBadSessionClosed, ua.StatusBadSessionNotActivated,
			ua.StatusBadNoSubscription, ua.StatusBadSubscriptionIDInvalid, ua.StatusBadNonceInvalid,
			ua.StatusBadApplicationSignatureInvalid, ua.StatusBadServiceUnsupported)
}

// connect resumes the kept session, or makes a fresh one with new subscriptions.
func (s *Source) connect(ctx context.Context, keep *kept, in collector.Intake) (*link, *kept, error) {
	if keep != nil && time.Now().Before(keep.until) {
		l, err := s.resume(ctx, keep, in)
		if err == nil {
			s.counts.resumed.Add(1)
			s.log.Info("session resumed", "endpoint", s.cfg.Endpoint)
			return l, keep, nil
		}
		if !needsFresh(err) {
			return nil, keep, err
		}
		s.log.Info("the old session is gone; making a new one", "reason", err)
	}
	l, k, err := s.enterFresh(ctx)
	if err != nil {
		return nil, nil, err
	}
	if err := s.build(ctx, k.sess); err != nil {
		l.close(2 * time.Second)
		return nil, nil, err
	}
	s.counts.fresh.Add(1)
	s.log.Info("watching", "endpoint", s.cfg.Endpoint, "subscriptions", len(s.subs), "tags", s.counts.watched.Load())
	return l, k, nil
}

// resume brings the session to a new link and fetches what was sent meanwhile
// and never acknowledged.
func (s *Source) resume(ctx context.Context, keep *kept, in collector.Intake) (*link, error) {
	l, err := keep.door.open(ctx)
	if err != nil {
		return nil, err
	}
	if err := l.resume(ctx, keep.ticket); err != nil {
		l.leave()
		return nil, fmt.Errorf("resuming the session: %w", err)
	}
	keep.sess.reader = l
	for _, sub := range s.subs {
		if err := s.catchUp(ctx, keep.sess, sub, in); err != nil {
			if needsFresh(err) {
				l.close(time.Second) // the session is of no more use: free its place
			} else {
				keep.ticket = l.leave()
			}
			return nil, fmt.Errorf("catching up %v: %w", sub, err)
		}
		sub.heard, sub.missing = time.Now(), time.Time{}
	}
	return l, nil
}

// catchUp republishes from the next number until there is nothing more.
func (s *Source) catchUp(ctx context.Context, sess *session, sub *subscription, in collector.Intake) error {
	var batch []collector.Sample
	for {
		m, err := sess.republish(ctx, sub.id, sub.seq.next)
		if isAny(err, ua.StatusBadMessageNotAvailable) {
			return nil
		}
		if err != nil {
			return err
		}
		if m == nil {
			return nil
		}
		m.SequenceNumber = sub.seq.next // some servers leave it out when they repeat
		s.counts.republished.Add(1)
		ready, _ := sub.seq.take(message{NotificationMessage: m, more: true, again: true})
		for _, r := range ready {
			if batch, err = s.deliver(in, sub, r, batch); err != nil {
				return err
			}
		}
	}
}

// enterFresh makes a session within the ceiling.
func (s *Source) enterFresh(ctx context.Context) (*link, *kept, error) {
	if err := s.underCeiling(ctx); err != nil {
		return nil, nil, err
	}
	d, cfg, err := s.enter(ctx)
	if err != nil {
		return nil, nil, err
	}
	l, err := d.open(ctx)
	if err != nil {
		return nil, nil, err
	}
	s.counts.sessions.Add(1)
	s.mu.Lock()
	s.sessions = append(s.sessions, time.Now())
	s.mu.Unlock()
	err = l.begin(ctx, cfg)
	var sess *session
	if err == nil {
		sess, err = meet(ctx, l)
	}
	if err != nil {
		l.close(2 * time.Second)
		return nil, nil, err
	}
	return l, &kept{door: d, sess: sess}, nil
}

// underCeiling waits until another session may be made: a server that restarts
// must not be flooded by its watchdog.
func (s *Source) underCeiling(ctx context.Context) error {
	for {
		s.mu.Lock()
		now, wait := time.Now(), time.Duration(0)
		for len(s.sessions) > 0 && now.Sub(s.sessions[0]) >= time.Minute {
			s.sessions = s.sessions[1:]
		}
		if len(s.sessions) >= s.pace.sessionsPerMinute {
			wait = s.sessions[0].Add(time.Minute).Sub(now)
		}
		s.mu.Unlock()
		if wait == 0 {
			return nil
		}
		s.counts.throttled.Add(1)
		if !sleep(ctx, wait) {
			return ctx.Err()
		}
	}
}

// backOff doubles from the shortest to the longest wait. The first try after a
// link that stood long comes at once.
func (s *Source) backOff(failures int) time.Duration {
	if failures == 0 {
		return jitter(s.pace.backoffMin / 10)
	}
	return jitter(min(s.pace.backoffMax, s.pace.backoffMin<<min(failures-1, 16)))
}

// jitter spreads a wait over 75 to 125 % of itself, so that the clients of a
// restarted server do not all come at once.
func jitter(d time.Duration) time.Duration {
	return d*3/4 + rand.N(d/2+1)
}

func sleep(ctx context.Context, d time.Duration) bool {
	t := time.NewTimer(d)
	defer t.Stop()
	select {
	case <-ctx.Done():
		return false
	case <-t.C:
		return true
	}
}

// down tells everybody that the link is lost, once per change.
func (s *Source) down(in collector.Intake, f *fault) {
	s.mu.Lock()
	was := s.fault
	s.mu.Unlock()
	if was == nil || was.problem != f.problem { // else: told already
		s.log.Warn("source is down", "problem", f.problem, "hint", f.hint)
	}
	s.set("down", f)
	now := s.now().UnixMilli()
	for _, sub := range s.subs {
		in.Tick(collector.Tick{Group: sub.group, Through: sub.through, Arrived: now})
	}
}

// set notes the state of the link. While it is dialled, the last problem stays.
func (s *Source) set(link string, f *fault) {
	s.mu.Lock()
	defer s.mu.Unlock()
	if s.link != link {
		s.link, s.since = link, s.now().UnixMilli()
	}
	if link != "connecting" {
		s.fault = f
	}
	s.live = nil
}

// publishWait is how long a publish request may wait for its answer: all that
// are outstanding may be answered by keep-alives only.
func (s *Source) publishWait() time.Duration {
	return time.Duration(s.pace.maxOutstanding+1)*s.cfg.Publish*time.Duration(s.cfg.KeepAliveCount) + 30*time.Second
}
