package alert

import (
	"cmp"
	"slices"
	"strings"

	"midwatch/detect"
)

// heard is what was last said of one subject and kind.
type heard struct {
	At      int64  `json:"at"`
	Episode string `json:"episode,omitempty"`
}

// hidden is what is known of a loop that cannot be seen.
type hidden struct {
	At   int64 `json:"at"` // of the last word about it
	Hold *Hold `json:"hold,omitempty"`
}

// batch is one transaction of the desk.
type batch struct {
	d       *Desk
	tx      Tx
	touched map[string]*Episode
}

// Hear takes a batch of findings. What is not newer than what was heard of the
// same subject and kind is ignored, so that a batch may be given again, whole or
// in part. On an error nothing of the batch was taken.
func (d *Desk) Hear(fs []detect.Finding) error {
	if len(fs) == 0 {
		return nil
	}
	// In order of data time, whatever the shards made of it. What is judged anew goes on as
	// another kind of the same time: that is heard first, so that one episode stays open
	// and keeps who took notice of it.
	anew := func(f *detect.Finding) int {
		if f.Event == detect.Cleared && f.Reason == detect.Rejudged {
			return 1
		}
		return 0
	}
	sorted := slices.Clone(fs)
	slices.SortStableFunc(sorted, func(a, b detect.Finding) int {
		return cmp.Or(cmp.Compare(a.At, b.At), cmp.Compare(anew(&a), anew(&b)), strings.Compare(memberKey(&a), memberKey(&b)))
	})
	d.mu.Lock()
	defer d.mu.Unlock()
	err := d.update(func(b *batch) error {
		for i := range sorted {
			if err := b.hear(&sorted[i]); err != nil {
				return err
			}
		}
		return nil
	})
	if err != nil {
		return err
	}
	if d.mem.newest-d.mem.forgotten > day {
		d.forget()
	}
	d.stir()
	return nil
}

// Sight says that a loop cannot be seen since At (data time, ms UTC), and why
// (manual, tracking, no data, [WhySuppressed], [WhyOutOfService]); with an empty
// Why, that it can be seen again.
type Sight struct {
	Loop string
	At   int64
	Why  string
}

// Visible takes what is known of the sight of loops. Open episodes of a loop
// that cannot be seen are held: neither cleared nor escalated. As Hear, it
// ignores what is not newer than what it knows.
func (d *Desk) Visible(sights ...Sight) error {
	d.mu.Lock()
	defer d.mu.Unlock()
	return d.update(func(b *batch) error {
		for _, s := range sights {
			h := d.mem.hidden[s.Loop]
			if s.Loop == "" || s.At <= h.At {
				continue
			}
			if (h.Hold == nil) == (s.Why == "") && (h.Hold == nil || h.Hold.Why == s.Why) {
				continue
			}
			h = hidden{At: s.At}
			if s.Why != "" {
				h.Hold = &Hold{Since: s.At, Why: s.Why}
			}
			d.mem.hidden[s.Loop] = h
			if err := put(b.tx, bucketHidden, []byte(s.Loop), h); err != nil {
				return err
			}
			if err := b.reholdLoop(s.Loop, s.At); err != nil {
				return err
			}
		}
		return nil
	})
}

// Begin says when the watch began (data time, ms UTC): what is found in the
// first days is standing. Only the first call ever counts; without one, the
// first finding begins it.
func (d *Desk) Begin(at int64) error {
	d.mu.Lock()
	defer d.mu.Unlock()
	if d.loaded && d.mem.began != 0 {
		return nil
	}
	return d.update(func(b *batch) error { return b.begin(at) })
}

func (b *batch) begin(at int64) error {
	if b.d.mem.began != 0 {
		return nil
	}
	b.d.mem.began = at
	return put(b.tx, bucketMeta, []byte("began"), at)
}

func (b *batch) hear(f *detect.Finding) error {
	if f.Subject == (detect.Subject{}) || f.Kind == "" || f.At <= 0 {
		// One that cannot be placed must not keep the others of its batch from being heard.
		b.d.o.Log.Error("desk: a finding without subject, kind or time was left out", "kind", string(f.Kind), "loop", f.Loop)
		return nil
	}
	m := &b.d.mem
	if f.At <= m.heard[memberKey(f)].At {
		return nil
	}
	if err := b.begin(f.At); err != nil {
		return err
	}
	if f.Event == detect.Cleared {
		return b.cleared(f)
	}
	family := familyOf(f.Kind)
	e := b.d.home(f, family)
	what, event, quiet := "updated", detect.Updated, false
	switch {
	case e == nil:
		e = &Episode{ID: episodeID(f, family), Subject: f.Subject, Family: family, Since: f.Since, First: f.At, Raised: f.At, Count: 1}
		e.Standing = f.At < m.began+b.d.set.Standing.Milliseconds()
		m.episodes[e.ID] = e
		what, event = "raised", detect.Raised
	case !e.Open():
		e.Count++
		e.Since, e.Raised, e.Cleared, e.Ack = f.Since, f.At, 0, nil
		e.Paged, e.Escalated = 0, 0
		what, event = "came back", detect.Raised
		// One that comes and goes is one trouble: that it is back is told once, then after
		// a day and ever more rarely.
		quiet = e.Count > 2 && f.At-e.Said < max(day, e.Said-e.First)
		if err := b.dropOver(e.ID); err != nil {
			return err
		}
	}
	if t := e.member(f); t != nil {
		*t = b.d.newMember(f)
	} else {
		if what == "updated" {
			what = "folded in"
		}
		e.Members = append(e.Members, b.d.newMember(f))
	}
	if f.Kind == detect.SharedOscillation {
		e.Group = f.Loops
	}
	e.Last = max(e.Last, f.At)
	if e.Since > f.Since {
		e.Since = f.Since
	}
	if s, ok := m.shelves[e.Subject.Loop]; ok {
		e.Shelf = &s
	}
	b.touch(e)
	if f.Kind != detect.SharedOscillation || f.Loop == "" { // else see gather
		m.index[place(subjectKey(f.Subject), family)] = e.ID
	}
	if err := b.hearIn(f, e.ID); err != nil {
		return err
	}
	if err := b.journal(e, Entry{At: f.At, What: what, Finding: f}); err != nil {
		return err
	}
	if err := b.gather(e, f); err != nil {
		return err
	}
	news, worse := true, false
	if event == detect.Updated {
		news, worse, quiet = e.news()
	} else {
		_, worse, _ = e.news() // than when it was last heard of; nothing was told of a new one
		worse = worse && e.Count > 1
		if quiet = quiet && !worse; !quiet {
			e.Said = f.At
		}
	}
	if news {
		if err := b.step(e, event, f.At, quiet, worse); err != nil {
			return err
		}
	}
	if momentary(f.Kind) {
		e.member(f).Open = false
		e.Cleared = f.At
	}
	return b.sightOf(f, e)
}

func (b *batch) cleared(f *detect.Finding) error {
	m := &b.d.mem
	e := m.resolve(m.heard[memberKey(f)].Episode)
	id := ""
	if e != nil {
		id = e.ID
	}
	if err := b.hearIn(f, id); err != nil {
		return err
	}
	if e == nil || e.member(f) == nil || !e.member(f).Open {
		return nil
	}
	t := e.member(f)
	t.Open = false
	// The finding that raised it says more than the one that ended it; only the
	// reason is new.
	t.Finding.Reason = f.Reason
	e.Last = max(e.Last, f.At)
	b.touch(e)
	what := "over in part"
	if !e.Open() {
		what, e.Cleared = "cleared", f.At
	}
	if err := b.journal(e, Entry{At: f.At, What: what, Why: f.Reason, Finding: f}); err != nil {
		return err
	}
	if !e.Open() {
		// What came back once may again: its end is no message, see routePerson.
		if err := b.step(e, detect.Cleared, f.At, e.Count > 1, false); err != nil {
			return err
		}
	}
	return b.sightOf(f, e)
}

// hearIn remembers that f was heard and belongs to the episode id.
func (b *batch) hearIn(f *detect.Finding, id string) error {
	h := b.d.mem.heard[memberKey(f)]
	h = heard{At: max(h.At, f.At), Episode: id}
	b.d.mem.heard[memberKey(f)] = h
	b.d.mem.newest = max(b.d.mem.newest, f.At)
	return put(b.tx, bucketHeard, []byte(memberKey(f)), h)
}

// sightOf follows what a finding says about the sight of loops.
func (b *batch) sightOf(f *detect.Finding, e *Episode) error {
	switch f.Kind {
	case detect.StaleData:
		return b.reholdLoop(f.Loop, f.At)
	case detect.SourceDown:
		for _, l := range b.d.set.bySource[f.Subject.Source] {
			if err := b.reholdLoop(l, f.At); err != nil {
				return err
			}
		}
		return nil
	}
	return b.rehold(e, f.At)
}

func (b *batch) reholdLoop(loop string, at int64) error {
	m := &b.d.mem
	for _, fam := range loopFamilies {
		if e := m.episodes[m.index[place("loop:"+loop, fam)]]; e != nil && e.Open() {
			if err := b.rehold(e, at); err != nil {
				return err
			}
		}
	}
	return nil
}

// rehold works out anew whether the episode can be seen: it cannot when none of
// the loops that hold it open can.
func (b *batch) rehold(e *Episode, at int64) error {
	var hold *Hold
	if e.Family != familyData && e.Family != familyMode && e.Subject.Loop != "" && e.Open() {
		for i := range e.Members {
			if !e.Members[i].Open {
				continue
			}
			h := b.d.hold(e.Members[i].Finding.Loop)
			if h == nil {
				hold = nil
				break
			}
			if hold == nil || h.Since > hold.Since {
				hold = h
			}
		}
	}
	if hold == nil && e.Hold == nil || hold != nil && e.Hold != nil && *hold == *e.Hold {
		return nil
	}
	e.Hold = hold
	b.touch(e)
	if !e.Open() {
		return nil
	}
	if hold == nil {
		return b.journal(e, Entry{At: at, What: "can be seen again"})
	}
	return b.journal(e, Entry{At: at, What: "cannot be seen", Why: hold.Why})
}

// hold says why a loop cannot be seen now; nil when it can.
func (d *Desk) hold(loop string) *Hold {
	m := &d.mem
	if h := m.hidden[loop]; h.Hold != nil {
		return h.Hold
	}
	src := d.set.source[loop]
	for _, s := range []detect.Finding{
		{Subject: detect.Subject{Loop: loop}, Kind: detect.StaleData},
		{Subject: detect.Subject{Source: src}, Kind: detect.SourceDown},
	} {
		if e := m.resolve(m.heard[memberKey(&s)].Episode); e != nil && e.member(&s) != nil && e.member(&s).Open {
			return &Hold{Since: e.member(&s).Finding.Since, Why: whyNoData}
		}
	}
	return nil
}

func (b *batch) touch(e *Episode) { b.touched[e.ID] = e }

// journal appends a line to the episode's journal.
func (b *batch) journal(e *Episode, x Entry) error {
	e.Entries++
	x.Episode, x.Number, x.Wall, x.State = e.ID, e.Entries, b.d.wall(), e.State()
	b.touch(e)
	return put(b.tx, bucketJournal, key2(e.ID, e.Entries), x)
}

// flush writes the episodes that changed.
func (b *batch) flush() error {
	for id, e := range b.touched {
		if err := put(b.tx, bucketEpisodes, []byte(id), e); err != nil {
			return err
		}
	}
	return nil
}
