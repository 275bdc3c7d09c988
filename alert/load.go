package alert

import (
	"cmp"
	"fmt"
	"slices"
)

// memory mirrors what the store holds of the present: episodes that are open or
// may come back, and all that was heard.
type memory struct {
	heard     map[string]heard
	episodes  map[string]*Episode
	index     map[string]string // place -> episode
	hidden    map[string]hidden
	shelves   map[string]Mark
	began     int64
	newest    int64 // data time
	forgotten int64 // newest when the past was last dropped
	meta      meta
	steps     map[string][]step // by episode
	queue     []*delivery       // in order of Seq
	byKey     map[string]*delivery
	waiting   []waiting
	linkKey   []byte              // of links in mails
	sent      map[string][]sentAt // by person or sender, wall times of what was sent lately
}

// load reads the state of the store. The caller holds the lock.
func (d *Desk) load() error {
	m := memory{heard: map[string]heard{}, episodes: map[string]*Episode{}, index: map[string]string{}, hidden: map[string]hidden{},
		shelves: map[string]Mark{}, sent: map[string][]sentAt{}, steps: map[string][]step{}, byKey: map[string]*delivery{}}
	var spoiled int
	err := d.o.Store.View(func(tx Tx) error {
		count := func(n int, err error) error { spoiled += n; return err }
		if err := count(scan(tx, bucketHeard, nil, func(k string, h heard) error {
			m.heard[k] = h
			m.newest = max(m.newest, h.At)
			return nil
		})); err != nil {
			return err
		}
		if err := count(scan(tx, bucketEpisodes, nil, func(k string, e Episode) error { m.episodes[k] = &e; return nil })); err != nil {
			return err
		}
		if err := count(scan(tx, bucketHidden, nil, func(k string, h hidden) error { m.hidden[k] = h; return nil })); err != nil {
			return err
		}
		if err := count(scan(tx, bucketShelves, nil, func(k string, s Mark) error { m.shelves[k] = s; return nil })); err != nil {
			return err
		}
		if err := count(scan(tx, bucketSteps, nil, func(_ string, s step) error { m.steps[s.Episode] = append(m.steps[s.Episode], s); return nil })); err != nil {
			return err
		}
		if err := count(scan(tx, bucketOutbox, nil, func(_ string, x delivery) error { m.queue = append(m.queue, &x); return nil })); err != nil {
			return err
		}
		if err := count(scan(tx, bucketWaiting, nil, func(_ string, w waiting) error { m.waiting = append(m.waiting, w); return nil })); err != nil {
			return err
		}
		if _, err := get(tx, bucketMeta, []byte("began"), &m.began); err != nil {
			return err
		}
		if _, err := get(tx, bucketMeta, []byte("sent"), &m.sent); err != nil {
			return err
		}
		if _, err := get(tx, bucketMeta, []byte("link-key"), &m.linkKey); err != nil {
			return err
		}
		_, err := get(tx, bucketMeta, []byte("dispatch"), &m.meta)
		return err
	})
	if err != nil {
		return fmt.Errorf("desk: reading what was written: %w", err)
	}
	if spoiled > 0 {
		d.o.Log.Error("desk: records that cannot be read were left alone", "records", spoiled)
	}
	for _, e := range m.episodes {
		if e.Into == "" {
			m.claim(e)
		}
	}
	slices.SortFunc(m.queue, func(a, b *delivery) int { return cmp.Compare(a.Seq, b.Seq) })
	for _, x := range m.queue {
		m.byKey[string(x.key())] = x
		// An attempt under way when the process ended counts as none.
		x.flying = d.inFlight(x)
	}
	d.mem = m
	d.forget()
	d.loaded = true
	return nil
}

// claim puts an episode into the index. An open one goes before one that ended,
// a newer before an older.
func (m *memory) claim(e *Episode) {
	set := func(p string) {
		if o := m.episodes[m.index[p]]; o == nil || before(o, e) {
			m.index[p] = e.ID
		}
	}
	set(place(subjectKey(e.Subject), e.Family))
	for i := range e.Members {
		if f := &e.Members[i].Finding; e.Members[i].Open {
			set(place(subjectKey(f.Subject), familyOf(f.Kind)))
		}
	}
	if e.Into == "" {
		for _, l := range e.Group {
			set(place("loop:"+l, familySwing))
		}
	}
}

func before(a, b *Episode) bool {
	if x, y := a.Open(), b.Open(); x != y {
		return y
	}
	if a.Raised != b.Raised {
		return a.Raised < b.Raised
	}
	return a.ID < b.ID
}

// forget drops from memory what ended long ago. It stays in the store.
func (d *Desk) forget() {
	m := &d.mem
	for id, e := range m.episodes {
		if !e.Open() && m.newest-e.Cleared > 2*day {
			delete(m.episodes, id)
		}
	}
	for p, id := range m.index {
		if m.episodes[id] == nil {
			delete(m.index, p)
		}
	}
	m.forgotten = m.newest
}
