package alert

import (
	"cmp"
	"errors"
	"fmt"
	"slices"
	"strings"
	"time"

	"midwatch/configs"
	"midwatch/detect"
)

// meta is what dispatch remembers between two wakes. Times are wall time, ms UTC.
type meta struct {
	Daily    int64  `json:"daily,omitempty"`    // when the last one was made
	Weekly   int64  `json:"weekly,omitempty"`   // when the last one was made
	Waiting  int64  `json:"waiting,omitempty"`  // when what waits was last sent without a daily digest
	Standing int64  `json:"standing,omitempty"` // when the list was made
	Pruned   int64  `json:"pruned,omitempty"`   // when the past was last dropped from the store
	Seq      uint64 `json:"seq"`                // of the last delivery
}

// sentAt is one message that reached, or is on its way to, a person.
type sentAt struct {
	Wall  int64 `json:"wall"`
	Night bool  `json:"night,omitempty"` // outside working hours
}

// told says what became of one step for one sender.
type told struct {
	Wall   int64  `json:"wall"`
	Result string `json:"result"` // queued, sent, waits, held back, failed: REASON
}

// waiting is an item that a person is told of in the next digest.
type waiting struct {
	Item
	Sender   string `json:"sender"`
	HeldBack bool   `json:"held_back,omitempty"` // it was to be sent, but the volume was reached
	Person   string `json:"person,omitempty"`    // with Gather
	Gather   int64  `json:"gather,omitempty"`    // wall time at which it is sent with what else was gathered; 0: it is not
}

// Wake does what is due at wall time now and says when it wants to be called
// again, at the latest. It starts senders and does not wait for them.
func (d *Desk) Wake(now time.Time) (next time.Time, err error) {
	d.mu.Lock()
	defer d.mu.Unlock()
	if !d.loaded {
		if err := d.load(); err != nil {
			return now.Add(10 * time.Second), err
		}
	}
	if err := d.recordFinished(now); err != nil {
		return now.Add(10 * time.Second), err
	}
	for _, part := range []func(time.Time) error{d.endShelves, d.route, d.gathered, d.escalate, d.standingList, d.digests, d.dropOrphans, d.foldQueues, d.prune, d.makeLinkKey} {
		if err := part(now); err != nil {
			return now.Add(10 * time.Second), err
		}
	}
	d.send(now)
	return d.nextWake(now), nil
}

// nextWake is the earliest time at which something falls due.
func (d *Desk) nextWake(now time.Time) time.Time {
	next := now.Add(time.Hour)
	at := func(ms int64) {
		if t := time.UnixMilli(ms); t.Before(next) {
			next = t
		}
	}
	for _, steps := range d.mem.steps {
		for i := range steps {
			at(d.settled(&steps[i]))
		}
	}
	for _, s := range d.mem.shelves {
		at(s.Until)
	}
	for i := range d.mem.waiting {
		if t := d.mem.waiting[i].Gather; t != 0 {
			at(t)
		}
	}
	for _, e := range d.mem.episodes {
		if e.Ack != nil && e.Ack.Until != 0 && e.Open() {
			at(e.Ack.Until)
		}
		if t, ok := d.escalation(e); ok {
			at(t)
		}
	}
	for _, c := range d.set.Advise.Senders {
		w := d.way(c.Name)
		if w.busy {
			continue // it stirs when it is done
		}
		for _, x := range d.free(c.Name) {
			at(max(x.Next, w.until))
		}
	}
	local := now.In(d.set.Zone)
	if d.set.daily != nil {
		at(d.set.daily.next(local).UnixMilli())
	} else if d.pressing() {
		if within(d.set.working(), local) {
			at(d.mem.meta.Waiting + time.Hour.Milliseconds())
		} else {
			at(nextChange(d.set.working(), local).UnixMilli())
		}
	}
	if d.set.weekly != nil {
		at(d.set.weekly.next(local).UnixMilli())
	}
	if !next.After(now) {
		// Something is due that this wake could not do; a moment, not a spin.
		next = now.Add(time.Second)
	}
	return next
}

// settled is when a step may be routed: until then another finding may fold it
// away.
func (d *Desk) settled(s *step) int64 {
	wait := max(d.o.Settle, time.Duration(s.Wait)*time.Millisecond)
	if s.Finding.Kind == detect.StaleData {
		wait = max(wait, d.o.SettleStale)
	}
	return s.Wall + wait.Milliseconds()
}

// candidate is an item that is to reach a person now.
type candidate struct {
	Item
	sender string
}

// route decides for every settled step who is told, at once or in the digest.
func (d *Desk) route(now time.Time) error {
	ms := now.UnixMilli()
	var due []step
	for _, steps := range d.mem.steps {
		for _, s := range steps {
			// A wall clock that was set back must not hold a step for long.
			if t := d.settled(&s); t <= ms || s.Wall > ms+time.Minute.Milliseconds() {
				due = append(due, s)
			}
		}
	}
	if len(due) == 0 {
		return nil
	}
	slices.SortFunc(due, func(x, y step) int {
		return cmp.Or(cmp.Compare(x.At, y.At), strings.Compare(x.Episode, y.Episode), cmp.Compare(x.Step, y.Step))
	})
	return d.update(func(b *batch) error {
		local := now.In(d.set.Zone)
		people := map[string][]candidate{}
		for i := range due {
			if err := b.routeStep(&due[i], local, people); err != nil {
				return err
			}
		}
		return b.bound(people, local)
	})
}

func (b *batch) routeStep(s *step, local time.Time, people map[string][]candidate) error {
	d := b.d
	it := s.Item
	it.Finding.Event = it.Event
	var why string
	it.Urgency, why = urgency(&it.Finding, d.set.loops[it.Finding.Loop], d.workAhead(local))
	if it.Why == "" {
		it.Why = why
	}
	if err := b.tx.Delete(bucketSteps, key2(it.Episode, it.Step)); err != nil {
		return err
	}
	d.mem.steps[it.Episode] = slices.DeleteFunc(d.mem.steps[it.Episode], func(x step) bool { return x.Step == it.Step })
	if len(d.mem.steps[it.Episode]) == 0 {
		delete(d.mem.steps, it.Episode)
	}
	reached := map[string]bool{}
	for i := range d.set.Advise.Routes {
		r := &d.set.Advise.Routes[i]
		if !d.set.matches(r, &it, local) {
			continue
		}
		for _, to := range r.To {
			if reached[to] {
				continue
			}
			reached[to] = true
			var old told
			if had, err := get(b.tx, bucketTold, key3(it.Episode, it.Step, to), &old); had || err != nil {
				if err != nil {
					return err
				}
				continue
			}
			if !d.set.people[to] {
				if err := b.enqueue(to, TypeAdvisory, []Item{it}, nil, "", local); err != nil {
					return err
				}
				continue
			}
			if err := b.routePerson(s, it, to, r, local, people); err != nil {
				return err
			}
		}
	}
	// Who was told of it hears that it is over, whatever the route says of hours.
	if it.Event == detect.Cleared {
		for _, c := range d.set.Advise.Senders {
			if reached[c.Name] || !b.toldBefore(it.Episode, it.Step, c.Name) {
				continue
			}
			if !d.set.people[c.Name] {
				if err := b.enqueue(c.Name, TypeAdvisory, []Item{it}, nil, "", local); err != nil {
					return err
				}
			} else if err := b.wait(c.Name, it, false); err != nil {
				return err
			}
		}
	}
	return nil
}

func (b *batch) routePerson(s *step, it Item, to string, r *configs.Route, local time.Time, people map[string][]candidate) error {
	d := b.d
	if e := d.mem.episodes[it.Episode]; e != nil {
		if s.Wait > 0 && e.Ack != nil { // seen on the page while it waited
			return b.markTold(it.Episode, it.Step, to, string(Acknowledged))
		}
		switch state := e.State(); state {
		case Shelved, SuppressedByDesign, OutOfService, Held, Folded:
			// Somebody decided that, or nobody can act on it. The digest lists it
			// as open, and the end of shelving tells of it.
			if it.Event != detect.Cleared {
				return b.markTold(it.Episode, it.Step, to, string(state))
			}
		}
	}
	asked, person := slices.Contains(r.Urgency, string(it.Urgency)), cmp.Or(r.Person, to)
	switch {
	case it.Standing && !s.Worse && it.Event != detect.Cleared:
		return nil // in the standing list
	case it.Finding.Kind == detect.TuningChanged:
		return b.tuned(it, to, person, asked, local.UnixMilli())
	case s.Quiet && it.Event == detect.Cleared && it.State != Folded && b.toldBefore(it.Episode, it.Step, to):
		return b.wait(to, it, false) // and is dropped should it come back
	case s.Quiet:
		return nil
	case it.Event == detect.Cleared:
		if !within(d.set.working(), local) || !b.toldBefore(it.Episode, it.Step, to) {
			return b.wait(to, it, false)
		}
	case it.Urgency != Now && !asked:
		return b.wait(to, it, false)
	}
	people[person] = append(people[person], candidate{it, to})
	return nil
}

// toldBefore says whether the sender got an earlier step of the episode.
func (b *batch) toldBefore(id string, before uint32, sender string) bool {
	for n := before; n > 0; n-- {
		var t told
		if had, _ := get(b.tx, bucketTold, key3(id, n-1, sender), &t); had && (t.Result == "queued" || t.Result == "sent") {
			return true
		}
	}
	return false
}

// workAhead is the next working hour; inside working hours, the one after they end:
// what goes wrong in the coming night is said before people go home.
func (d *Desk) workAhead(local time.Time) horizon {
	hs := d.set.working()
	next := nextChange(hs, local)
	if !within(hs, local) {
		return horizon{next.UnixMilli(), "the next working hour"}
	}
	return horizon{nextChange(hs, next).UnixMilli(), "work begins again"}
}

// Beyond one message in 10 minutes, several become one; more than ten in 10
// minutes are a flood (EEMUA 191).
const (
	floodSpan  = 10 * time.Minute
	floodCount = 10
)

// bound sends to each person what the volume allows, the highest ranked first,
// and keeps the rest for the digest. It never changes what is found.
func (b *batch) bound(people map[string][]candidate, local time.Time) error {
	d := b.d
	now := local.UnixMilli()
	night := !within(d.set.working(), local)
	who := make([]string, 0, len(people))
	for p := range people {
		who = append(who, p)
	}
	slices.Sort(who)
	for _, p := range who {
		cs := people[p]
		slices.SortStableFunc(cs, func(x, y candidate) int {
			return cmp.Or(cmp.Compare(d.rank(&y.Item), d.rank(&x.Item)), strings.Compare(x.Episode, y.Episode), cmp.Compare(x.Step, y.Step))
		})
		d.mem.sent[p] = slices.DeleteFunc(d.mem.sent[p], func(s sentAt) bool { return s.Wall < now-2*day || s.Wall > now+day })
		left, recent := d.allowance(p, local, night), 0
		for _, s := range d.mem.sent[p] {
			if s.Wall > now-floodSpan.Milliseconds() {
				recent++
			}
		}
		bySender := map[string][]Item{}
		var senders []string
		for _, c := range cs {
			if bySender[c.sender] == nil {
				senders = append(senders, c.sender)
			}
			bySender[c.sender] = append(bySender[c.sender], c.Item)
		}
		distinct := map[string]bool{}
		for _, c := range cs {
			distinct[c.Episode] = true
		}
		one := len(distinct) > left || len(distinct) > floodCount || len(distinct) > 1 && (recent > 0 || allTuning(cs))
		for _, to := range senders {
			items := bySender[to]
			var err error
			switch {
			case left <= 0:
				for _, it := range items {
					if err = b.wait(to, it, true); err != nil {
						return err
					}
				}
			case one && len(items) > 1:
				err = b.enqueue(to, TypeCollected, items, nil, "", local)
			default:
				for _, it := range items {
					if err = b.enqueue(to, TypeAdvisory, []Item{it}, nil, "", local); err != nil {
						return err
					}
				}
			}
			if err != nil {
				return err
			}
		}
		if left > 0 {
			n := len(distinct)
			if one {
				n = 1
			}
			for range n {
				d.mem.sent[p] = append(d.mem.sent[p], sentAt{now, night})
			}
			for _, c := range cs {
				if e := d.mem.episodes[c.Episode]; e != nil && e.Paged == 0 && c.Event != detect.Cleared {
					e.Paged = now
					b.touch(e)
				}
			}
		}
	}
	if len(who) == 0 {
		return nil
	}
	return put(b.tx, bucketMeta, []byte("sent"), d.mem.sent)
}

// allowance is how many more items the person may get: of the day, and of the
// night, which lasts from noon to noon so that a weekend is not one night.
func (d *Desk) allowance(person string, local time.Time, night bool) int {
	noon := func(t time.Time) string { return t.Add(-12 * time.Hour).Format(time.DateOnly) }
	today, tonight := 0, 0
	for _, s := range d.mem.sent[person] {
		t := time.UnixMilli(s.Wall).In(d.set.Zone)
		if t.Format(time.DateOnly) == local.Format(time.DateOnly) {
			today++
		}
		if s.Night && noon(t) == noon(local) {
			tonight++
		}
	}
	left := d.set.Advise.Day - today
	if night {
		left = min(left, d.set.Advise.Night-tonight)
	}
	return left
}

// wait keeps an item for the next digest of the sender.
func (b *batch) wait(to string, it Item, heldBack bool) error {
	return b.waitFor(waiting{Item: it, Sender: to, HeldBack: heldBack})
}

func (b *batch) waitFor(w waiting) error {
	b.d.mem.waiting = append(b.d.mem.waiting, w)
	result := "waits"
	if w.HeldBack {
		result = "held back"
	}
	if err := b.markTold(w.Episode, w.Step, w.Sender, result); err != nil {
		return err
	}
	if w.HeldBack {
		if e := b.d.mem.episodes[w.Episode]; e != nil {
			if err := b.journal(e, Entry{What: "held back from " + w.Sender, Why: "the volume for a person is reached"}); err != nil {
				return err
			}
		}
	}
	return put(b.tx, bucketWaiting, key3(w.Episode, w.Step, w.Sender), w)
}

// dropOver forgets that people wait to hear of the end of an episode: it is none.
func (b *batch) dropOver(id string) error {
	var err error
	over := func(w waiting) bool { return w.Episode == id && w.Event == detect.Cleared }
	for _, w := range b.d.mem.waiting {
		if over(w) {
			err = errors.Join(err, b.tx.Delete(bucketWaiting, key3(w.Episode, w.Step, w.Sender)))
		}
	}
	b.d.mem.waiting = slices.DeleteFunc(b.d.mem.waiting, over)
	return err
}

func (b *batch) markTold(id string, n uint32, to, result string) error {
	return put(b.tx, bucketTold, key3(id, n, to), told{Wall: b.d.wall(), Result: result})
}

// enqueue puts a message into the outbox. Items that it holds are told with it.
func (b *batch) enqueue(to string, t Type, items []Item, sections []Section, title string, now time.Time) error {
	d := b.d
	d.mem.meta.Seq++
	x := &delivery{Seq: d.mem.meta.Seq, Sender: to, Type: t, Items: items, Sections: sections, Title: title,
		Written: now.UnixMilli(), Next: now.UnixMilli()}
	if t == TypeAdvisory {
		x.ID, x.Step = items[0].Episode, items[0].Step
	} else {
		// Written down with the message, so the key stays the same; the number keeps
		// apart what is made in one minute.
		x.ID = fmt.Sprintf("%s-%s-%d", t, now.UTC().Format("20060102-1504"), x.Seq)
	}
	for i := range items {
		if err := b.markTold(items[i].Episode, items[i].Step, to, "queued"); err != nil {
			return err
		}
	}
	if d.mem.byKey[string(x.key())] != nil {
		return nil // on its way already
	}
	d.mem.queue = append(d.mem.queue, x)
	d.mem.byKey[string(x.key())] = x
	if err := put(b.tx, bucketMeta, []byte("dispatch"), d.mem.meta); err != nil {
		return err
	}
	return put(b.tx, bucketOutbox, x.key(), x)
}
