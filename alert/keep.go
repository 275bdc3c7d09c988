package alert

import (
	"bytes"
	"encoding/json"
	"slices"
	"time"
)

// leastKept is longer than any trouble can come back, be shelved, or wait for a
// sender: what is dropped after it is never asked for again.
const leastKept = 30 * 24 * time.Hour

// prune drops, once a day and in one transaction, episodes that ended long ago,
// with their journals and what was told of them. What stands, is shelved, has
// woken someone and was never acknowledged, or has a message on its way stays.
func (d *Desk) prune(now time.Time) error {
	m, ms := &d.mem, now.UnixMilli()
	if d.set.Keep < 0 || m.meta.Pruned != 0 && m.meta.Pruned <= ms && ms-m.meta.Pruned < day {
		return nil
	}
	// The older of the two clocks: one that ran ahead must not cost the journal.
	before := min(m.newest, ms) - d.set.Keep.Milliseconds()
	d.forget()
	gone := 0
	err := d.update(func(b *batch) error {
		m.meta.Pruned = ms
		if err := put(b.tx, bucketMeta, []byte("dispatch"), m.meta); err != nil || before <= 0 {
			return err
		}
		if err := b.dropOldNotes(before); err != nil {
			return err
		}
		ended := b.endedBefore(before, ms)
		gone = len(ended)
		for _, id := range ended {
			if err := b.dropEpisode(id); err != nil {
				return err
			}
		}
		if err := b.dropOldOutcomes(); err != nil {
			return err
		}
		if err := b.dropOldRemarks(before); err != nil {
			return err
		}
		return b.dropHeard(before)
	})
	if err == nil && gone > 0 {
		d.o.Log.Info("episodes that ended long ago were dropped", "episodes", gone, "kept", d.set.Keep.String())
	}
	return err
}

// endedBefore lists episodes that may go.
func (b *batch) endedBefore(before, now int64) []string {
	busy := b.d.mem.onTheirWay()
	// Ids begin with the minute an episode was first raised, and come in order: the
	// walk ends where none can have ended in time.
	last := time.UnixMilli(before).UTC().Format("20060102-1504-~")
	var out []string
	for k, v := range b.tx.Scan(bucketEpisodes, nil) {
		id := string(k)
		if id > last {
			break
		}
		var e Episode
		if json.Unmarshal(v, &e) != nil {
			continue // left alone, as everywhere
		}
		end := max(e.Cleared, e.Last)
		if e.Ack != nil {
			end = max(end, e.Ack.Wall)
		}
		switch {
		case e.Open(), b.d.mem.episodes[id] != nil, busy[id], end >= before,
			e.Shelf != nil && e.Shelf.Until > now,
			e.Into == "" && e.Paged != 0 && e.Ack == nil && e.Family != familyTuning:
			continue
		}
		out = append(out, id)
	}
	return out
}

// onTheirWay names the episodes of which something is still to be told.
func (m *memory) onTheirWay() map[string]bool {
	out := map[string]bool{}
	for id := range m.steps {
		out[id] = true
	}
	for _, x := range m.queue {
		for i := range x.Items {
			out[x.Items[i].Episode] = true
		}
	}
	for i := range m.waiting {
		out[m.waiting[i].Episode] = true
	}
	return out
}

func (b *batch) dropEpisode(id string) error {
	prefix := append([]byte(id), 0)
	for _, bucket := range []string{bucketJournal, bucketTold, bucketLinks} {
		var keys [][]byte
		for k := range b.tx.Scan(bucket, prefix) {
			keys = append(keys, bytes.Clone(k))
		}
		for _, k := range keys {
			if err := b.tx.Delete(bucket, k); err != nil {
				return err
			}
		}
	}
	return b.tx.Delete(bucketEpisodes, []byte(id))
}

// dropOldNotes lets go of notes that no digest ever took along: where there is
// none a day, they wait for something that is more.
func (b *batch) dropOldNotes(before int64) error {
	m := &b.d.mem
	old := func(w waiting) bool { return w.Urgency == Note && !w.HeldBack && w.At < before }
	for _, w := range m.waiting {
		if old(w) {
			if err := b.tx.Delete(bucketWaiting, key3(w.Episode, w.Step, w.Sender)); err != nil {
				return err
			}
		}
	}
	m.waiting = slices.DeleteFunc(m.waiting, old)
	return nil
}

// dropHeard forgets of whom nothing was heard for as long and whose episode is gone.
func (b *batch) dropHeard(before int64) error {
	m := &b.d.mem
	for k, h := range m.heard {
		if h.At >= before || h.Episode != "" && b.tx.Get(bucketEpisodes, []byte(h.Episode)) != nil {
			continue
		}
		delete(m.heard, k)
		if err := b.tx.Delete(bucketHeard, []byte(k)); err != nil {
			return err
		}
	}
	return nil
}
