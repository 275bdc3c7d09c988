package alert

import (
	"cmp"
	"slices"
	"time"

	"midwatch/detect"
)

// tuningSpan is how long changes of tuning are gathered: whoever tunes changes
// many things in an hour, and who asked to hear of it wants one message.
const tuningSpan = time.Hour

// tuned keeps a change of tuning for one message about all of the hour, where the
// route asks for one, else for the next digest. Of one episode only the last
// change waits: it counts those before it.
func (b *batch) tuned(it Item, to, person string, asked bool, now int64) error {
	w := waiting{Item: it, Sender: to}
	if asked {
		w.Person, w.Gather = person, now+tuningSpan.Milliseconds()
	}
	m := &b.d.mem
	for _, x := range m.waiting {
		if asked && x.Person == person && x.Gather != 0 {
			w.Gather = min(w.Gather, x.Gather)
		}
	}
	before := func(x waiting) bool { return x.Sender == to && x.Episode == it.Episode && !x.HeldBack }
	for _, x := range m.waiting {
		if before(x) {
			if err := b.tx.Delete(bucketWaiting, key3(x.Episode, x.Step, x.Sender)); err != nil {
				return err
			}
		}
	}
	m.waiting = slices.DeleteFunc(m.waiting, before)
	return b.waitFor(w)
}

// gathered sends what was gathered for an hour.
func (d *Desk) gathered(now time.Time) error {
	ms := now.UnixMilli()
	ready := func(w waiting) bool { return w.Gather != 0 && due(w.Gather, ms) }
	if !slices.ContainsFunc(d.mem.waiting, ready) {
		return nil
	}
	return d.update(func(b *batch) error {
		people := map[string][]candidate{}
		for _, w := range d.mem.waiting {
			if !ready(w) {
				continue
			}
			people[w.Person] = append(people[w.Person], candidate{w.Item, w.Sender})
			if err := b.tx.Delete(bucketWaiting, key3(w.Episode, w.Step, w.Sender)); err != nil {
				return err
			}
		}
		d.mem.waiting = slices.DeleteFunc(d.mem.waiting, ready)
		return b.bound(people, now.In(d.set.Zone))
	})
}

// allTuning says whether all are changes of tuning: they go out as one.
func allTuning(cs []candidate) bool {
	return !slices.ContainsFunc(cs, func(c candidate) bool { return c.Finding.Kind != detect.TuningChanged })
}

// changes is how many changes of tuning the items count.
func changes(items []Item) (n int) {
	for i := range items {
		n += cmp.Or(items[i].Count, 1)
	}
	return n
}
