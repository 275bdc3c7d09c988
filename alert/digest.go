package alert

import (
	"cmp"
	"fmt"
	"slices"
	"strings"
	"time"

	"midwatch/detect"
)

// receivers of digests and lists: those named, else all people on a route.
func (d *Desk) receivers() []string {
	if to := d.set.Advise.Digest.To; len(to) > 0 {
		return to
	}
	var out []string
	for i := range d.set.Advise.Routes {
		for _, to := range d.set.Advise.Routes[i].To {
			if d.set.people[to] && !slices.Contains(out, to) {
				out = append(out, to)
			}
		}
	}
	return out
}

// standingList sends, once, what was found before the baseline ended.
func (d *Desk) standingList(now time.Time) error {
	m := &d.mem
	if m.meta.Standing != 0 || m.began == 0 || d.set.Standing <= 0 || now.UnixMilli() < m.began+d.set.Standing.Milliseconds() {
		return nil
	}
	items := d.standing()
	return d.update(func(b *batch) error {
		m.meta.Standing = now.UnixMilli()
		if len(items) > 0 {
			title := fmt.Sprintf("%d standing troubles, found in the first %s of the watch", len(items), duration(d.set.Standing))
			s := []Section{{"Ranked by what they cost and how sure they are", d.itemLines(items, 200)},
				{"What happens to them", []string{"They make no messages of their own unless they get worse. `midwatch status --standing` lists them."}}}
			for _, to := range d.receivers() {
				if err := b.enqueue(to, TypeStanding, nil, s, title, now); err != nil {
					return err
				}
			}
		}
		return put(b.tx, bucketMeta, []byte("dispatch"), m.meta)
	})
}

// StandingItems lists open troubles found before the baseline ended, by rank.
func (d *Desk) StandingItems() []Item {
	d.mu.Lock()
	defer d.mu.Unlock()
	return d.standing()
}

func (d *Desk) standing() []Item {
	return d.openItems(func(e *Episode) bool { return e.Standing })
}

// openItems lists open episodes that keep, by rank.
func (d *Desk) openItems(keep func(*Episode) bool) []Item {
	work := d.workAhead(d.o.Clock().In(d.set.Zone))
	var items []Item
	for _, e := range d.mem.episodes {
		if e.Open() && keep(e) {
			it := d.item(e)
			it.Event = detect.Raised
			it.Urgency, it.Why = urgency(&it.Finding, d.set.loops[it.Finding.Loop], work)
			items = append(items, it)
		}
	}
	d.byRank(items)
	return items
}

func (d *Desk) byRank(items []Item) {
	slices.SortFunc(items, func(a, b Item) int {
		return cmp.Or(cmp.Compare(d.rank(&b), d.rank(&a)), strings.Compare(a.Episode, b.Episode), cmp.Compare(b.Step, a.Step))
	})
}

// digests sends what is due of the daily and the weekly one. Without a daily one,
// what waits goes out in working hours, once an hour at most; what is of note only
// goes along with something that is more.
func (d *Desk) digests(now time.Time) error {
	local := now.In(d.set.Zone)
	ms := now.UnixMilli()
	m := &d.mem
	if m.meta.Daily == 0 || m.meta.Daily > ms {
		// First start, or a clock that was set back: the span begins here.
		m.meta.Daily, m.meta.Weekly = ms, ms
		return d.update(func(b *batch) error {
			m.meta.Daily, m.meta.Weekly = ms, ms
			return put(b.tx, bucketMeta, []byte("dispatch"), m.meta)
		})
	}
	for _, x := range []struct {
		at   *clockTime
		last *int64
		word string
	}{{d.set.weekly, &m.meta.Weekly, "weekly"}, {d.set.daily, &m.meta.Daily, "daily"}} {
		if x.at == nil || x.at.next(time.UnixMilli(*x.last).In(d.set.Zone)).After(now) {
			continue
		}
		since := *x.last
		err := d.update(func(b *batch) error {
			*x.last = ms
			sections := b.digestSections(since, x.word)
			for _, to := range d.receivers() {
				own := sections
				if x.word == "daily" {
					own = append(d.waitingSections(to), sections...)
				}
				if err := b.enqueue(to, TypeDigest, nil, own, x.word+" digest: "+d.headline(to), now); err != nil {
					return err
				}
			}
			if x.word == "daily" {
				if err := b.dropWaiting(); err != nil {
					return err
				}
			}
			return put(b.tx, bucketMeta, []byte("dispatch"), m.meta)
		})
		if err != nil {
			return err
		}
	}
	if d.set.daily != nil || !d.pressing() || !within(d.set.working(), local) || ms-m.meta.Waiting < time.Hour.Milliseconds() && m.meta.Waiting <= ms {
		return nil
	}
	return d.update(func(b *batch) error {
		m.meta.Waiting = ms
		by := map[string][]Item{}
		for _, w := range m.waiting {
			by[w.Sender] = append(by[w.Sender], w.Item)
		}
		for _, c := range d.set.Advise.Senders {
			if items := by[c.Name]; len(items) > 0 {
				d.byRank(items)
				if err := b.enqueue(c.Name, TypeDigest, nil, d.waitingSections(c.Name), "since the last working hours: "+d.headline(c.Name), now); err != nil {
					return err
				}
			}
		}
		return b.dropWaiting()
	})
}

// pressing says whether something waits that is more than of note.
func (d *Desk) pressing() bool {
	return slices.ContainsFunc(d.mem.waiting, func(w waiting) bool { return w.HeldBack || w.Urgency != Note })
}

func (b *batch) dropWaiting() error {
	for _, w := range b.d.mem.waiting {
		if err := b.tx.Delete(bucketWaiting, key3(w.Episode, w.Step, w.Sender)); err != nil {
			return err
		}
	}
	b.d.mem.waiting = nil
	return nil
}

func (d *Desk) headline(to string) string {
	open, news := 0, 0
	for _, e := range d.mem.episodes {
		if e.Open() {
			open++
		}
	}
	for _, w := range d.mem.waiting {
		if w.Sender == to {
			news++
		}
	}
	return fmt.Sprintf("%d new, %d open", news, open)
}

// waitingSections is what the sender was not told of at once.
func (d *Desk) waitingSections(to string) []Section {
	var first, note, held []Item
	for _, w := range d.mem.waiting {
		switch {
		case w.Sender != to:
		case w.HeldBack:
			held = append(held, w.Item)
		case w.Urgency == Note:
			note = append(note, w.Item)
		default:
			first = append(first, w.Item)
		}
	}
	var out []Section
	for _, s := range []struct {
		title string
		items []Item
	}{{"To look at this morning", first}, {fmt.Sprintf("Held back, since the volume for a person was reached (%d)", len(held)), held}, {"Of note", note}} {
		if len(s.items) > 0 {
			d.byRank(s.items)
			out = append(out, Section{s.title, d.itemLines(s.items, shownLoops)})
		}
	}
	return out
}

// digestSections is what is the same for all receivers. since is wall time.
func (b *batch) digestSections(since int64, word string) []Section {
	d := b.d
	open := d.openItems(func(*Episode) bool { return true })
	lines := d.itemLines(open, shownLoops)
	if len(lines) == 0 {
		lines = []string{"nothing"}
	}
	out := []Section{{fmt.Sprintf("Open (%d)", len(open)), lines}}
	var came, went int
	trouble := map[string]int{}
	var acks, shelves []string
	for _, e := range d.mem.episodes {
		if e.Raised >= since {
			came++
		}
		if !e.Open() && e.Cleared >= since {
			went++
		}
		if e.Subject.Loop != "" && e.Last >= since {
			trouble[e.Subject.Loop] += e.Count
		}
		if e.Ack != nil && e.Open() {
			acks = append(acks, fmt.Sprintf("%s: %s, by %s on %s", clean(subjectName(&e.Members[0].Finding)), kindWord(e.Lead().Kind), e.Ack.Who, stamp(e.Ack.Wall, d.set.Zone)))
		}
	}
	out = append(out, Section{"Came and went", []string{fmt.Sprintf("%d came, %d went in this %s span", came, went, word)}})
	if len(trouble) > 0 {
		var loops []string
		for l := range trouble {
			loops = append(loops, l)
		}
		slices.SortFunc(loops, func(a, b string) int {
			return cmp.Or(cmp.Compare(trouble[b], trouble[a]), strings.Compare(a, b))
		})
		var ls []string
		for _, l := range loops[:min(len(loops), 10)] {
			ls = append(ls, fmt.Sprintf("%s: %d", clean(l), trouble[l]))
		}
		out = append(out, Section{"Most often in trouble", ls})
	}
	ls, err := b.retunedLines()
	if err != nil {
		d.o.Log.Error("desk: changes of tuning are left out of the digest", "err", err)
	}
	if len(ls) > 0 {
		out = append(out, Section{"Since the tuning was changed", ls[:min(len(ls), shownLoops)]})
	}
	if len(acks) > 0 {
		slices.Sort(acks)
		out = append(out, Section{"Acknowledged and still open", acks})
	}
	for l, s := range d.mem.shelves {
		shelves = append(shelves, fmt.Sprintf("%s until %s, by %s: %s", clean(l), stamp(s.Until, d.set.Zone), s.Who, s.Why))
	}
	if len(shelves) > 0 {
		slices.Sort(shelves)
		out = append(out, Section{"Shelved", shelves})
	}
	alive := []string{fmt.Sprintf("I am alive and watch %d loops.", len(d.set.Loops))}
	if d.set.Health != nil {
		for _, l := range d.set.Health() {
			alive = append(alive, clean(l))
		}
	}
	for _, c := range d.set.Advise.Senders {
		if w := d.way(c.Name); w.state.Since != 0 {
			alive = append(alive, fmt.Sprintf("sender %s fails since %s: %s", c.Name, stamp(w.state.Since, d.set.Zone), clean(w.state.Problem)))
		}
	}
	return append(out, Section{"The watch itself", alive})
}

// NewTrial is the message of check --send: marked, harmless, and in the form of
// a real one.
func NewTrial(s Settings, sender string, now time.Time) (Message, error) {
	set, err := makeSettings(s)
	if err != nil {
		return Message{}, err
	}
	d := &Desk{set: set, o: Options{OldNews: time.Hour}}
	x := &delivery{ID: "trial-" + now.UTC().Format("20060102-150405"), Step: 1, Sender: sender, Type: TypeTrial, Title: "TRIAL: midwatch can reach you",
		Written: now.UnixMilli(), Sections: []Section{{"This is a trial", []string{
			"Somebody ran `midwatch check --send` on " + stamp(now.UnixMilli(), set.Zone) + ". Nothing is wrong with any loop.",
			"An advisory will come this way, through the sender " + clean(sender) + "."}}}}
	return d.render(x, now), nil
}
