package alert

import (
	"cmp"
	"errors"
	"fmt"
	"iter"
	"slices"
	"strings"
	"time"

	"midwatch/detect"
)

// MaxShelf is the longest a loop may be shelved at a time: shelving always ends.
const MaxShelf = 14 * 24 * time.Hour

// Acknowledge says that who has taken notice of the episode. until, when not
// zero, is when the acknowledgement ends if the trouble still stands. Doing it
// again replaces name and reason.
func (d *Desk) Acknowledge(id, who, why string, until time.Time) error {
	if err := signed(who, why); err != nil {
		return err
	}
	if !until.IsZero() && !until.After(d.o.Clock()) {
		return errors.New("the acknowledgement would end in the past; hint: give a later time, or none")
	}
	d.mu.Lock()
	defer d.mu.Unlock()
	return d.update(func(b *batch) error {
		e, err := b.episode(id)
		if err != nil {
			return err
		}
		if e == nil {
			return refusal{fmt.Errorf("episode %q is %w; hint: `midwatch status` lists them", id, ErrUnknown)}
		}
		if e.Into != "" {
			return refusal{fmt.Errorf("episode %q went on in %q; hint: acknowledge that one", id, e.Into)}
		}
		return b.acknowledge(e, clean(who), clean(why), until)
	})
}

func (b *batch) acknowledge(e *Episode, who, why string, until time.Time) error {
	e.Ack = &Mark{Who: who, Why: why, Wall: b.d.wall()}
	if !until.IsZero() {
		e.Ack.Until = until.UnixMilli()
	}
	return b.journal(e, Entry{What: "acknowledged", Who: who, Why: why, Until: e.Ack.Until})
}

// Shelf is a loop nobody wants to hear of for a time.
type Shelf struct {
	Loop string `json:"loop"`
	Mark
}

// Shelve keeps what is found of a loop from people until then. The ledger goes on.
func (d *Desk) Shelve(loop, who, why string, until time.Time) error {
	if err := signed(who, why); err != nil {
		return err
	}
	if strings.TrimSpace(why) == "" {
		return errors.New("no reason given; hint: say why the loop is shelved, for those who find it later")
	}
	now := d.o.Clock()
	if !until.After(now) || until.Sub(now) > MaxShelf {
		return fmt.Errorf("shelving until %s; hint: it ends later than now and within %d days, and can be renewed", until.UTC().Format(time.RFC3339), int(MaxShelf.Hours()/24))
	}
	d.mu.Lock()
	defer d.mu.Unlock()
	if d.set.loops[loop] == nil {
		return fmt.Errorf("loop %q is %w; hint: the loop list has the names", loop, ErrUnknown)
	}
	m := Mark{Who: clean(who), Why: clean(why), Wall: now.UnixMilli(), Until: until.UnixMilli()}
	err := d.update(func(b *batch) error {
		d.mem.shelves[loop] = m
		for _, e := range d.mem.byLoop(loop) {
			e.Shelf = &m
			if err := b.journal(e, Entry{What: "shelved", Who: m.Who, Why: m.Why, Until: m.Until}); err != nil {
				return err
			}
		}
		return put(b.tx, bucketShelves, []byte(loop), m)
	})
	d.stir()
	return err
}

// Unshelve ends the shelving of a loop before its time.
func (d *Desk) Unshelve(loop, who, why string) error {
	if err := signed(who, why); err != nil {
		return err
	}
	d.mu.Lock()
	defer d.mu.Unlock()
	if _, ok := d.mem.shelves[loop]; !ok {
		return fmt.Errorf("loop %q is not shelved; hint: `midwatch status` shows what is", loop)
	}
	err := d.update(func(b *batch) error { return b.unshelve(loop, clean(who), clean(why)) })
	d.stir()
	return err
}

func (b *batch) unshelve(loop, who, why string) error {
	d := b.d
	delete(d.mem.shelves, loop)
	for _, e := range d.mem.byLoop(loop) {
		e.Shelf = nil
		if err := b.journal(e, Entry{What: "unshelved", Who: who, Why: why}); err != nil {
			return err
		}
		if e.Open() {
			if err := b.reminder(e, "no longer shelved, and it still stands"); err != nil {
				return err
			}
		}
	}
	return b.tx.Delete(bucketShelves, []byte(loop))
}

// reminder tells again of what still stands.
func (b *batch) reminder(e *Episode, why string) error {
	if err := b.step(e, detect.Updated, e.Last, false, true); err != nil {
		return err
	}
	steps := b.d.mem.steps[e.ID]
	s := &steps[len(steps)-1]
	s.Why = why
	return put(b.tx, bucketSteps, key2(e.ID, s.Step), *s)
}

// endShelves ends shelving and acknowledgements whose time has come.
func (d *Desk) endShelves(now time.Time) error {
	ms := now.UnixMilli()
	var loops []string
	for l, m := range d.mem.shelves {
		if m.Until <= ms {
			loops = append(loops, l)
		}
	}
	slices.Sort(loops)
	var acks []*Episode
	for _, e := range d.mem.episodes {
		if e.Ack != nil && e.Ack.Until != 0 && e.Ack.Until <= ms && e.Open() {
			acks = append(acks, e)
		}
	}
	if len(loops)+len(acks) == 0 {
		return nil
	}
	slices.SortFunc(acks, func(a, b *Episode) int { return strings.Compare(a.ID, b.ID) })
	return d.update(func(b *batch) error {
		for _, l := range loops {
			if err := b.unshelve(l, "", "its time is over"); err != nil {
				return err
			}
		}
		for _, e := range acks {
			e.Ack = nil
			if err := b.journal(e, Entry{What: "acknowledgement ended", Why: "its time is over"}); err != nil {
				return err
			}
			if err := b.reminder(e, "the acknowledgement ended, and it still stands"); err != nil {
				return err
			}
		}
		return nil
	})
}

// byLoop gives the episodes of a loop that are not over for good.
func (m *memory) byLoop(loop string) []*Episode {
	var out []*Episode
	for _, f := range loopFamilies {
		if e := m.episodes[m.index[place("loop:"+loop, f)]]; e != nil && e.Subject.Loop == loop && e.Into == "" {
			out = append(out, e)
		}
	}
	return out
}

func signed(who, why string) error {
	if strings.TrimSpace(who) == "" {
		return errors.New("no name given; hint: say who does this, it goes into the journal")
	}
	if len(who) > 200 || len(why) > 2000 {
		return errors.New("name or reason is too long; hint: a name has up to 200, a reason up to 2000 bytes")
	}
	return nil
}

// Episodes gives a copy of the episodes in memory (open, or ended in the last
// two days), the most urgent open ones first.
func (d *Desk) Episodes() []Episode {
	d.mu.Lock()
	defer d.mu.Unlock()
	var out []Episode
	for _, e := range d.mem.episodes {
		out = append(out, e.clone())
	}
	local := d.o.Clock().In(d.set.Zone)
	work := d.workAhead(local)
	ranks := map[string]float64{}
	for i := range out {
		ranks[out[i].ID] = d.episodeRank(&out[i], work)
	}
	slices.SortFunc(out, func(a, b Episode) int {
		return cmp.Or(cmp.Compare(ranks[b.ID], ranks[a.ID]), cmp.Compare(b.Last, a.Last), strings.Compare(a.ID, b.ID))
	})
	return out
}

func (e *Episode) clone() Episode {
	c := *e
	c.Members, c.Group = slices.Clone(e.Members), slices.Clone(e.Group)
	return c
}

func (d *Desk) episodeRank(e *Episode, work horizon) float64 {
	it := d.item(e)
	it.Urgency, _ = urgency(&it.Finding, d.set.loops[it.Finding.Loop], work)
	r := d.rank(&it)
	if !e.Open() {
		r -= 1e7
	}
	return r
}

// Urgency of an open episode as it stands now.
func (d *Desk) Urgency(e *Episode) (Urgency, string) {
	d.mu.Lock()
	defer d.mu.Unlock()
	f := e.Lead()
	return urgency(&f, d.set.loops[f.Loop], d.workAhead(d.o.Clock().In(d.set.Zone)))
}

// Episode gives one episode, however old, and its journal, oldest line first.
func (d *Desk) Episode(id string) (Episode, []Entry, error) {
	var e Episode
	hide := d.hider()
	var js []Entry
	err := d.o.Store.View(func(tx Tx) error {
		had, err := get(tx, bucketEpisodes, []byte(id), &e)
		if err == nil && !had {
			err = fmt.Errorf("episode %q is %w", id, ErrUnknown)
		}
		if err != nil {
			return err
		}
		_, err = scan(tx, bucketJournal, append([]byte(id), 0), func(_ string, x Entry) error {
			js = append(js, hide(x))
			return nil
		})
		return err
	})
	return e, js, err
}

// hider leaves out names that were kept long enough. It takes the lock before a
// view of the store is open: a writer that holds the lock may wait for views.
func (d *Desk) hider() func(Entry) Entry {
	d.mu.Lock()
	defer d.mu.Unlock()
	keep, now := d.set.Names.Milliseconds(), d.wall()
	return func(x Entry) Entry {
		if keep > 0 && x.Who != "" && now-x.Wall > keep {
			x.Who = "(name no longer kept)"
		}
		return x
	}
}

// Journal gives every journal line of every episode, by episode and number, for
// export.
func (d *Desk) Journal() iter.Seq2[Entry, error] {
	return func(yield func(Entry, error) bool) {
		hide := d.hider()
		var all []Entry
		err := d.o.Store.View(func(tx Tx) error {
			_, err := scan(tx, bucketJournal, nil, func(_ string, x Entry) error {
				all = append(all, hide(x))
				return nil
			})
			return err
		})
		if err != nil {
			yield(Entry{}, err)
			return
		}
		for _, x := range all {
			if !yield(x, nil) {
				return
			}
		}
	}
}

// Shelves lists what is shelved, the soonest to end first.
func (d *Desk) Shelves() []Shelf {
	d.mu.Lock()
	defer d.mu.Unlock()
	var out []Shelf
	for l, m := range d.mem.shelves {
		out = append(out, Shelf{l, m})
	}
	slices.SortFunc(out, func(a, b Shelf) int {
		return cmp.Or(cmp.Compare(a.Until, b.Until), strings.Compare(a.Loop, b.Loop))
	})
	return out
}

// escalate tells others of what wakes someone and nobody acknowledged.
func (d *Desk) escalate(now time.Time) error {
	ms := now.UnixMilli()
	var late []*Episode
	for _, e := range d.mem.episodes {
		if at, ok := d.escalation(e); ok && at <= ms {
			late = append(late, e)
		}
	}
	slices.SortFunc(late, func(a, b *Episode) int { return strings.Compare(a.ID, b.ID) })
	for _, e := range late {
		x := d.set.Advise.Escalate[e.Escalated]
		err := d.update(func(b *batch) error {
			e.Steps++
			it := d.item(e)
			it.Event, it.Urgency = detect.Updated, Now
			it.Why = "not acknowledged for " + minutes(x.After)
			e.Escalated++
			if err := b.journal(e, Entry{What: "escalated to " + strings.Join(x.To, ", "), Why: it.Why}); err != nil {
				return err
			}
			for _, to := range x.To {
				if err := b.enqueue(to, TypeAdvisory, []Item{it}, nil, "", now); err != nil {
					return err
				}
			}
			return nil
		})
		if err != nil {
			return err
		}
	}
	return nil
}

// escalation is when the next level of escalation falls due for an episode, wall
// time ms UTC; false when there is none.
func (d *Desk) escalation(e *Episode) (int64, bool) {
	levels := d.set.Advise.Escalate
	if e.Paged == 0 || e.Escalated >= len(levels) || e.State() != Unacknowledged {
		return 0, false
	}
	return e.Paged + levels[e.Escalated].After.Milliseconds(), true
}
