package alert

import (
	"bytes"
	"cmp"
	"fmt"
	"slices"

	"midwatch/detect"
)

// Session is a spell in which the tuning of a loop was changed, once or several
// times within a day, and what came of it. Times are data time, ms UTC.
type Session struct {
	Loop  string `json:"loop"`
	First int64  `json:"first"` // onset of the first change
	Last  int64  `json:"last"`  // when the last change was noticed
	// Since and Until are where the tunings before and after it begin and end:
	// with its neighbours; 0: it has none on that side.
	Since   int64   `json:"since,omitempty"`
	Until   int64   `json:"until,omitempty"`
	Outcome Outcome `json:"outcome"`
}

// Outcome is what a comparison of before and after came to.
type Outcome struct {
	Last    int64  `json:"last"` // of the session it is about: a further change begins anew
	Looks   int    `json:"looks"`
	At      int64  `json:"at,omitempty"` // data up to here were looked at; 0: not yet
	Verdict string `json:"verdict,omitempty"`
	Holds   bool   `json:"holds,omitempty"`   // statistically
	Settled bool   `json:"settled,omitempty"` // it will not be looked at again
}

// Sessions gives the sessions with a change since a data time, ms UTC, by loop,
// then oldest first.
func (d *Desk) Sessions(since int64) (out []Session, err error) {
	err = d.o.Store.View(func(tx Tx) error {
		out, err = sessions(tx, since)
		return err
	})
	return out, err
}

// Conclude keeps what a comparison of a session came to.
func (d *Desk) Conclude(s Session, o Outcome) error {
	d.mu.Lock()
	defer d.mu.Unlock()
	o.Last = s.Last
	return d.update(func(b *batch) error { return put(b.tx, bucketOutcomes, sessionKey(&s), o) })
}

func sessionKey(s *Session) []byte {
	return append(append([]byte(s.Loop), 0), fmt.Sprintf("%016d", s.First)...)
}

// sessions joins the changes in the journals of all loops.
func sessions(tx Tx, since int64) ([]Session, error) {
	var ids []string
	if _, err := scan(tx, bucketEpisodes, nil, func(id string, e Episode) error {
		if e.Family == familyTuning && e.Into == "" && e.Last >= since {
			ids = append(ids, id)
		}
		return nil
	}); err != nil {
		return nil, err
	}
	var out []Session
	for _, id := range ids {
		if _, err := scan(tx, bucketJournal, append([]byte(id), 0), func(_ string, x Entry) error {
			if f := x.Finding; f != nil && f.Kind == detect.TuningChanged && f.Event != detect.Cleared && f.Loop != "" {
				out = append(out, Session{Loop: f.Loop, First: min(f.Since, f.At), Last: f.At})
			}
			return nil
		}); err != nil {
			return nil, err
		}
	}
	slices.SortFunc(out, func(a, b Session) int {
		return cmp.Or(cmp.Compare(a.Loop, b.Loop), cmp.Compare(a.Last, b.Last))
	})
	n := 0
	for i, s := range out {
		if i > 0 && out[n-1].Loop == s.Loop && s.Last-out[n-1].Last < day {
			out[n-1].First, out[n-1].Last = min(out[n-1].First, s.First), s.Last
			continue
		}
		out[n] = s
		n++
	}
	out = out[:n]
	for i := range out {
		if i > 0 && out[i-1].Loop == out[i].Loop {
			out[i].First = max(out[i].First, out[i-1].Last)
			out[i-1].Until, out[i].Since = out[i].First, out[i-1].Last
		}
	}
	for i := range out {
		var o Outcome
		if had, err := get(tx, bucketOutcomes, sessionKey(&out[i]), &o); err == nil && had && o.Last == out[i].Last {
			out[i].Outcome = o
		}
	}
	return slices.DeleteFunc(out, func(s Session) bool { return s.Last < since }), nil
}

// dropOldOutcomes lets go of what came of sessions whose episodes were dropped.
func (b *batch) dropOldOutcomes() error {
	all, err := sessions(b.tx, 0)
	if err != nil {
		return err
	}
	there := map[string]bool{}
	for i := range all {
		there[string(sessionKey(&all[i]))] = true
	}
	var old [][]byte
	for k := range b.tx.Scan(bucketOutcomes, nil) {
		if !there[string(k)] {
			old = append(old, bytes.Clone(k))
		}
	}
	for _, k := range old {
		if err := b.tx.Delete(bucketOutcomes, k); err != nil {
			return err
		}
	}
	return nil
}
