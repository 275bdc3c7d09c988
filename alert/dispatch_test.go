package alert

import (
	"errors"
	"fmt"
	"strings"
	"testing"
	"time"

	"midwatch/configs"
	"midwatch/detect"
)

func TestToldOnce(t *testing.T) {
	r := newRig(t)
	r.hear(f("AIC-204", detect.SustainedOffset, detect.Raised, 0))
	r.run(start.Add(time.Minute))
	r.run(start.Add(2 * time.Minute))
	r.open()
	r.run(start.Add(3 * time.Minute))
	got := r.hook.take()
	if len(got) != 1 {
		t.Fatalf("told %d times, want once", len(got))
	}
	m := got[0]
	e := only(t, r.desk.Episodes())
	if want := "Kestrel%20Fen/" + e.ID + "/1/hook"; m.Key != want {
		t.Errorf("key %q, want %q", m.Key, want)
	}
	r.hear(f("AIC-204", detect.SustainedOffset, detect.Cleared, 30))
	r.run(start.Add(31 * time.Minute))
	got = r.hook.take()
	if len(got) != 1 || got[0].Event != detect.Cleared || got[0].Episode != e.ID {
		t.Fatalf("after it cleared: %+v, want one cleared message of the same episode", got)
	}
}

// TestCrashAnywhere ends the process before and after each write, from the first
// finding to the last record: every advisory arrives, at most once more, under
// the same key.
func TestCrashAnywhere(t *testing.T) {
	scenario := func(crash int, committed bool) (writes int) {
		r := newRig(t)
		seen := map[string]int{}
		dead := false
		count := func() {
			for _, m := range r.hook.take() {
				seen[m.Key]++
			}
		}
		r.store.fail = func(n int, after bool) error {
			if dead || n == crash && after == committed {
				dead = true // nothing is written any more by this process
				return errDisk
			}
			return nil
		}
		batches := [][]detect.Finding{
			{f("AIC-204", detect.SustainedOffset, detect.Raised, 0), f("PIC-120", detect.GrowingOscillation, detect.Raised, 0)},
			{f("AIC-204", detect.SustainedOffset, detect.Updated, 5, func(x *detect.Finding) { x.Cause = detect.ResetTooLong })},
			{f("AIC-204", detect.SustainedOffset, detect.Cleared, 9)},
		}
		step := func(i int) {
			now := start.Add(time.Duration(i+1) * time.Minute)
			r.clock.set(now)
			for range 6 {
				_ = r.desk.Hear(batches[i])
				_, _ = r.desk.Wake(now)
				r.desk.settle()
				count()
				if dead {
					dead = false
					r.store.fail = nil
					r.open()
				}
			}
		}
		for i := range batches {
			step(i)
		}
		r.run(start.Add(time.Hour))
		count()
		if len(seen) != 4 {
			t.Errorf("crash at write %d (committed %v): %d advisories arrived, want 4: %v", crash, committed, len(seen), seen)
		}
		repeats := 0
		for k, n := range seen {
			if n > 2 {
				t.Errorf("crash at write %d: %s arrived %d times", crash, k, n)
			}
			repeats += n - 1
		}
		if repeats > 1 {
			t.Errorf("crash at write %d: %d messages were repeated, want at most the one under way", crash, repeats)
		}
		if crash == 0 && repeats != 0 {
			t.Errorf("without a crash %d messages were repeated", repeats)
		}
		return r.store.updates
	}
	writes := scenario(0, false)
	if writes < 8 {
		t.Fatalf("only %d writes: the scenario does not reach every step", writes)
	}
	for n := 1; n <= writes; n++ {
		scenario(n, false)
		scenario(n, true)
	}
}

func TestRetries(t *testing.T) {
	r := newRig(t)
	attempts := 0
	r.hook.answer = func(Message) error {
		if attempts++; attempts < 4 {
			return &Failure{ReasonServer, errors.New("500")}
		}
		return nil
	}
	r.hear(f("AIC-204", detect.SustainedOffset, detect.Raised, 0))
	now := start
	for range 40 {
		r.run(now)
		next, err := r.desk.Wake(now)
		if err != nil {
			t.Fatal(err)
		}
		if len(r.hook.got) > 0 {
			break
		}
		if gap := next.Sub(now); gap <= 0 || gap > 40*time.Second {
			t.Fatalf("next attempt after %v, want at most 5 s x 2^n", gap)
		}
		now = next
	}
	if attempts != 4 || len(r.hook.take()) != 1 {
		t.Errorf("%d attempts, want 4 and one message", attempts)
	}
	if s := r.desk.Senders()[0]; s.Failed[ReasonServer] != 3 || s.Sent != 1 || s.Since != 0 {
		t.Errorf("sender state %+v", s)
	}
}

func TestRetryAfterIsHonoured(t *testing.T) {
	r := newRig(t)
	r.hook.answer = func(Message) error {
		return &RetryAfter{After: 7 * time.Minute, Reason: ReasonRateLimited, Err: errors.New("429")}
	}
	r.hear(f("AIC-204", detect.SustainedOffset, detect.Raised, 0))
	r.run(start)
	r.hook.answer = nil
	r.run(start.Add(7*time.Minute - time.Second))
	if n := len(r.hook.take()); n != 0 {
		t.Fatal("sent before the time the other side named")
	}
	r.run(start.Add(7 * time.Minute))
	if n := len(r.hook.take()); n != 1 {
		t.Fatalf("%d messages at that time, want 1", n)
	}
}

func TestPermanentErrorEndsTheMessageOnly(t *testing.T) {
	r := newRig(t)
	r.hook.answer = func(m Message) error {
		if m.Loop == "AIC-204" {
			return &Permanent{ReasonTooLarge, errors.New("413")}
		}
		return nil
	}
	r.hear(f("AIC-204", detect.SustainedOffset, detect.Raised, 0), f("PIC-120", detect.SustainedOffset, detect.Raised, 0))
	r.run(start)
	if got := r.hook.take(); len(got) != 1 || got[0].Loop != "PIC-120" {
		t.Fatalf("got %d messages, want that of PIC-120", len(got))
	}
	if n := r.store.count(bucketOutbox); n != 0 {
		t.Errorf("%d messages left in the outbox, want 0", n)
	}
	for _, e := range r.desk.Episodes() {
		if e.Subject.Loop == "AIC-204" {
			_, js, err := r.desk.Episode(e.ID)
			if err != nil || js[len(js)-1].What != "could not tell hook" {
				t.Errorf("journal ends with %+v, %v; want that it could not be told", js[len(js)-1], err)
			}
		}
	}
}

// TestOrder: a later message of an episode waits for the earlier one, those of
// other episodes do not.
func TestOrder(t *testing.T) {
	r := newRig(t)
	refuse := true
	r.hook.answer = func(m Message) error {
		if refuse && m.Loop == "AIC-204" {
			return errors.New("not now")
		}
		return nil
	}
	r.hear(f("AIC-204", detect.SustainedOffset, detect.Raised, 0), f("PIC-120", detect.SustainedOffset, detect.Raised, 0))
	for i := range 30 {
		r.run(start.Add(time.Duration(i) * time.Minute))
	}
	r.hear(f("AIC-204", detect.SustainedOffset, detect.Cleared, 20))
	r.run(start.Add(31 * time.Minute))
	if got := r.hook.take(); len(got) != 1 || got[0].Loop != "PIC-120" {
		t.Fatalf("while one is refused: %d messages, want that of PIC-120", len(got))
	}
	refuse = false
	for i := 32; i < 60; i++ {
		r.run(start.Add(time.Duration(i) * time.Minute))
	}
	got := r.hook.take()
	if len(got) != 2 || got[0].Event != detect.Raised || got[1].Event != detect.Cleared {
		t.Fatalf("got %d messages, want raised, then cleared", len(got))
	}
}

func TestAnotherSenderIsNotHeldUp(t *testing.T) {
	r := newRig(t, func(s *Settings) { s.Advise.Senders[1] = configs.Sender{Name: "mail", Syslog: &configs.Syslog{}} })
	release := make(chan struct{})
	r.hook.answer = func(Message) error { <-release; return nil }
	r.hear(f("AIC-204", detect.SustainedOffset, detect.Raised, 0))
	if _, err := r.desk.Wake(start); err != nil {
		t.Fatal(err)
	}
	// Hearing and the other sender go on while one hangs.
	r.hear(f("PIC-120", detect.SustainedOffset, detect.Raised, 1))
	deadline := time.After(2 * time.Minute)
	for n := 0; n < 2; n += len(r.mail.take()) {
		if _, err := r.desk.Wake(start); err != nil {
			t.Fatal(err)
		}
		select {
		case <-r.desk.Changed():
		case <-deadline:
			t.Fatal("the other sender was held up")
		}
	}
	close(release)
}

func TestSettleFoldsBeforeTelling(t *testing.T) {
	r := newRig(t)
	r.desk.Stop()
	d, err := New(Options{Store: On(r.store), Settings: r.set, Clock: r.clock.now, Seed: 1})
	if err != nil {
		t.Fatal(err)
	}
	r.desk = d
	r.hear(f("AIC-204", detect.StaleData, detect.Raised, 0), f("PIC-120", detect.StaleData, detect.Raised, 0))
	r.run(start.Add(31 * time.Second))
	if n := len(r.hook.take()); n != 0 {
		t.Fatalf("%d messages before the source had its say", n)
	}
	r.hear(source("works", detect.SourceDown, detect.Raised, 1))
	r.run(start.Add(5 * time.Minute))
	got := r.hook.take()
	if len(got) != 1 || got[0].Loop != "source works" || !strings.Contains(got[0].Text, "AIC-204, PIC-120") {
		t.Fatalf("got %d messages, want one of the source that names both loops: %+v", len(got), got)
	}
}

func TestOldNews(t *testing.T) {
	r := newRig(t)
	r.hear(f("AIC-204", detect.SustainedOffset, detect.Raised, 0))
	r.run(start.Add(3 * time.Hour))
	m := r.hook.take()[0]
	if m.Old != 3*time.Hour || !strings.Contains(m.Text, "Old news") || !strings.Contains(m.Subject, "old news") {
		t.Errorf("old %v, subject %q", m.Old, m.Subject)
	}
}

func TestPanickingSenderIsRefused(t *testing.T) {
	r := newRig(t)
	r.hook.answer = func(Message) error { panic("nil map") }
	r.hear(f("AIC-204", detect.SustainedOffset, detect.Raised, 0))
	r.run(start)
	if s := r.desk.Senders()[0]; s.Dropped != 1 || !strings.Contains(s.Problem, "nil map") {
		t.Errorf("state %+v", s)
	}
}

// TestReloadGivesUpWhatHasNoSender: a sender taken out of the configuration must
// not keep messages for ever.
func TestReloadGivesUpWhatHasNoSender(t *testing.T) {
	r := newRig(t)
	r.hook.answer = func(Message) error { return errors.New("down") }
	r.hear(f("AIC-204", detect.SustainedOffset, detect.Raised, 0))
	r.run(start)
	s := r.set
	s.Advise.Senders, s.Advise.Routes = s.Advise.Senders[1:], s.Advise.Routes[1:]
	s.Senders = map[string]Sender{"mail": r.mail}
	if err := r.desk.Reload(s); err != nil {
		t.Fatal(err)
	}
	r.run(start.Add(time.Hour))
	if n := r.store.count(bucketOutbox); n != 0 {
		t.Errorf("%d messages left", n)
	}
}

func TestWallClockStepsBack(t *testing.T) {
	r := newRig(t)
	r.hook.answer = func(Message) error { return errors.New("down") }
	r.hear(f("AIC-204", detect.SustainedOffset, detect.Raised, 0))
	r.run(start.Add(30 * 24 * time.Hour)) // a clock a month ahead
	r.hook.answer = nil
	for i := range 5 {
		r.run(start.Add(time.Duration(i) * time.Minute))
	}
	if n := len(r.hook.take()); n != 1 {
		t.Errorf("%d messages after the clock was set back, want 1", n)
	}
}

func BenchmarkHear(b *testing.B) {
	r := newRig(b)
	i := 0.0
	for b.Loop() {
		i++
		r.hear(f(fmt.Sprintf("XIC-%d", int(i)%500), detect.SustainedOffset, detect.Raised, i))
	}
}
