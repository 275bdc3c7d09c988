package alert

import (
	"bytes"
	"encoding/binary"
	"encoding/json"
	"errors"
	"fmt"
	"slices"
	"strconv"
	"strings"

	"midwatch/detect"
)

// Remark is what a person left written of a loop, such as the record of a tuning:
// what was changed, from what to what, and why.
type Remark struct {
	Wall int64  `json:"wall"` // when it was written, ms UTC
	Who  string `json:"who"`
	Text string `json:"text"`
}

// mostNotes are kept of a loop; a new one drops the oldest.
const mostNotes = 100

// Past is what the desk knows of the past of loops.
type Past struct {
	// Newest are the newest findings of each kind and episode of all loops.
	Newest []detect.Finding   `json:"newest"`
	Loops  map[string]History `json:"loops"`
}

// History is what the desk knows of the past of one loop.
type History struct {
	Findings []detect.Finding `json:"findings"` // all that were told of it
	Sessions []Session        `json:"tuning_sessions"`
	Notes    []Remark         `json:"notes"`
}

// Note keeps what who has to say of a loop.
func (d *Desk) Note(loop, who, text string) error {
	if err := signed(who, text); err != nil {
		return err
	}
	if strings.TrimSpace(text) == "" {
		return errors.New("the note is empty; hint: what was changed, from what to what, and why")
	}
	d.mu.Lock()
	defer d.mu.Unlock()
	if d.set.loops[loop] == nil {
		return fmt.Errorf("loop %q is %w; hint: the loop list has the names", loop, ErrUnknown)
	}
	return d.update(func(b *batch) error {
		var keys [][]byte
		for k := range b.tx.Scan(bucketNotes, append([]byte(loop), 0)) {
			keys = append(keys, slices.Clone(k))
		}
		n := uint32(1)
		if len(keys) > 0 {
			last := keys[len(keys)-1]
			n = binary.BigEndian.Uint32(last[len(last)-4:]) + 1
		}
		for len(keys) >= mostNotes {
			if err := b.tx.Delete(bucketNotes, keys[0]); err != nil {
				return err
			}
			keys = keys[1:]
		}
		return put(b.tx, bucketNotes, key2(loop, n), Remark{d.wall(), clean(who), clean(text)})
	})
}

// dropOldRemarks lets go of what was written of loops that are listed no more, under
// no name, when it is older than what is kept.
func (b *batch) dropOldRemarks(before int64) error {
	listed := map[string]bool{}
	for _, l := range b.d.set.loops {
		listed[l.Name], listed[l.Was] = true, true
	}
	var old [][]byte
	for k, v := range b.tx.Scan(bucketNotes, nil) {
		var n Remark
		if i := bytes.IndexByte(k, 0); i < 0 || listed[string(k[:i])] || json.Unmarshal(v, &n) != nil || n.Wall >= before {
			continue
		}
		old = append(old, bytes.Clone(k))
	}
	for _, k := range old {
		if err := b.tx.Delete(bucketNotes, k); err != nil {
			return err
		}
	}
	return nil
}

// Record is what was written down of one loop beside its findings.
type Record struct {
	Notes []Remark  // oldest first
	Tuned []Session // changes of its tuning that were compared, oldest first
}

// Record gives what was written down of a loop. It reads little: a page may ask
// for it at every look.
func (d *Desk) Record(loop string) (r Record, err error) {
	hide := d.hider()
	of := append([]byte(loop), 0)
	err = d.o.Store.View(func(tx Tx) error {
		if _, err := scan(tx, bucketNotes, of, func(_ string, n Remark) error {
			n.Who = hide(Entry{Who: n.Who, Wall: n.Wall}).Who
			r.Notes = append(r.Notes, n)
			return nil
		}); err != nil {
			return err
		}
		_, err := scan(tx, bucketOutcomes, of, func(key string, o Outcome) error {
			first, err := strconv.ParseInt(key[len(of):], 10, 64)
			if err == nil {
				r.Tuned = append(r.Tuned, Session{Loop: loop, First: first, Last: o.Last, Outcome: o})
			}
			return nil
		})
		return err
	})
	return r, err
}

// Past gives the past of loops since a data time, ms UTC.
func (d *Desk) Past(loops []string, from int64) (Past, error) {
	hide := d.hider()
	d.mu.Lock()
	was := map[string]string{} // what people wrote and what was tuned follows a loop to its new name
	for _, l := range loops {
		if x := d.set.loops[l]; x != nil {
			was[l] = x.Was
		}
	}
	d.mu.Unlock()
	p := Past{Newest: []detect.Finding{}, Loops: map[string]History{}}
	for _, l := range loops {
		p.Loops[l] = History{Findings: []detect.Finding{}, Sessions: []Session{}, Notes: []Remark{}}
	}
	err := d.o.Store.View(func(tx Tx) error {
		of := map[string][]string{} // by loop: its episodes, oldest first
		_, err := scan(tx, bucketEpisodes, nil, func(id string, e Episode) error {
			if e.Into != "" || e.Last < from && !e.Open() {
				return nil
			}
			for i := range e.Members {
				p.Newest = append(p.Newest, e.Members[i].Finding)
			}
			for _, l := range e.Loops() {
				of[l] = append(of[l], id)
			}
			return nil
		})
		if err != nil {
			return err
		}
		changed, err := sessions(tx, 0)
		if err != nil {
			return err
		}
		for l, h := range p.Loops {
			for _, id := range of[l] {
				if _, err := scan(tx, bucketJournal, append([]byte(id), 0), func(_ string, x Entry) error {
					if x.Finding != nil {
						h.Findings = append(h.Findings, *x.Finding)
					}
					return nil
				}); err != nil {
					return err
				}
			}
			for _, s := range changed {
				if s.Loop == l || s.Loop == was[l] {
					h.Sessions = append(h.Sessions, s)
				}
			}
			for _, name := range []string{was[l], l} {
				if name == "" {
					continue
				}
				if _, err := scan(tx, bucketNotes, append([]byte(name), 0), func(_ string, n Remark) error {
					n.Who = hide(Entry{Who: n.Who, Wall: n.Wall}).Who
					h.Notes = append(h.Notes, n)
					return nil
				}); err != nil {
					return err
				}
			}
			p.Loops[l] = h
		}
		return nil
	})
	return p, err
}
