package daemon

import (
	"bytes"
	"context"
	"encoding/json"
	"errors"
	"fmt"
	"math"
	"strings"

	"midwatch/collector"
	"midwatch/configs"
	"midwatch/detect"
	"midwatch/store"
)

// A memory is only good for the loop it was made of. Beside the memories the
// state keeps what each loop was, so that a change made while no watch ran, or
// just before it was killed, voids them too.

// bucketLoops: loop -> identity.
const bucketLoops = "loops"

// identity is what a loop was when it was last watched.
type identity struct {
	List string `json:"list"` // loop list of this loop alone
	Anew int64  `json:"anew"` // memories and frames up to here are of another loop, ms UTC
}

func newIdentity(l *configs.Loop, anew int64) (identity, error) {
	var b bytes.Buffer
	if err := configs.WriteLoopList(&b, []*configs.Loop{l}); err != nil {
		return identity{}, err
	}
	return identity{b.String(), anew}, nil
}

// loop is the loop as it was.
func (i *identity) loop() (*configs.Loop, error) {
	ls, err := configs.ReadLoopList(strings.NewReader(i.List), "kept loop")
	if err != nil {
		return nil, err
	}
	if len(ls) != 1 {
		return nil, errors.New("kept loop: not one loop")
	}
	return ls[0], nil
}

// keptIdentities reads all of them.
func (d *Daemon) keptIdentities() (map[string]identity, error) {
	out := map[string]identity{}
	err := d.state.View(func(tx *store.Tx) error {
		for k, v := range tx.Scan(bucketLoops, nil) {
			var i identity
			if err := json.Unmarshal(v, &i); err != nil {
				return fmt.Errorf("kept loop %s: %w", k, err)
			}
			out[string(k)] = i
		}
		return nil
	})
	return out, err
}

func (d *Daemon) keepIdentities(put map[string]identity, gone []string) error {
	if len(put) == 0 && len(gone) == 0 {
		return nil
	}
	return d.state.Update(func(tx *store.Tx) error {
		for name, i := range put {
			b, err := json.Marshal(i)
			if err != nil {
				return err
			}
			if err := tx.Put(bucketLoops, []byte(name), b); err != nil {
				return err
			}
		}
		for _, name := range gone {
			if err := errors.Join(tx.Delete(bucketLoops, []byte(name)), tx.Delete(bucketProfiles, []byte(name))); err != nil {
				return err
			}
		}
		return nil
	})
}

// meet compares the loop list with what was watched before. It notes which loops
// begin anew, and what must be taken back of those that changed or are gone.
func (d *Daemon) meet() error {
	kept, err := d.keptIdentities()
	if err != nil {
		return err
	}
	put := map[string]identity{}
	var gone []string
	listed := map[string]bool{}
	for i, l := range d.roster {
		listed[l.Name] = true
		name := l.Name
		was, ok := kept[name]
		if !ok && l.Was != "" {
			name = l.Was
			was, ok = kept[name]
		}
		now, err := newIdentity(l, 0)
		if err != nil {
			return err
		}
		if ok {
			now.Anew = was.Anew
			old, err := was.loop()
			if err != nil {
				d.log.Warn("what a loop was cannot be read: it is taken as unchanged", "loop", name, "err", err)
				old = l
			}
			changed := configs.Difference(old, l) == configs.ChangeMemory
			if changed || name != l.Name {
				d.takeBack(old, l.Name, was.Anew, detect.Rejudged)
			}
			if changed {
				if now.Anew, err = d.newestOf(l.Name); err != nil {
					return err
				}
				d.shardOf(collector.LoopID(i)).mark(collector.LoopID(i))
				d.log.Info("a loop changed and begins anew", "loop", l.Name)
			}
		}
		if !ok || now != was || name != l.Name {
			put[l.Name] = now
		}
		d.anew[l.Name] = now.Anew
	}
	for name, was := range kept {
		if listed[name] {
			continue
		}
		gone = append(gone, name)
		if old, err := was.loop(); err == nil && !d.renamed(name) {
			d.takeBack(old, name, was.Anew, detect.OutOfService)
		}
	}
	return d.keepIdentities(put, gone)
}

func (d *Daemon) renamed(name string) bool {
	for _, l := range d.roster {
		if l.Was == name {
			return true
		}
	}
	return false
}

// newestOf is the time of the newest frame or memory of a loop, ms UTC.
func (d *Daemon) newestOf(name string) (int64, error) {
	from := int64(math.MinInt64)
	_, t, err := d.window.Memory(name)
	switch {
	case err == nil:
		from = t + 1
	case !errors.Is(err, store.ErrNoMemory):
		return 0, err
	}
	newest := t
	for f, err := range d.window.Frames(context.Background(), name, from, math.MaxInt64) {
		if err != nil {
			return 0, err
		}
		newest = max(newest, f.Time)
	}
	return newest, nil
}

// takeBack says that what the newest memory of a loop holds is no longer judged;
// name is the one it has in the window now.
func (d *Daemon) takeBack(old *configs.Loop, name string, anew int64, why string) {
	b, t, err := d.window.Memory(name)
	if err != nil || t <= anew {
		return
	}
	w := detect.New(old, 0, d.detectOptions())
	if w.Load(b) != nil {
		return
	}
	d.ledger.put(post{news: news{findings: endings(w, why)}, sites: -1})
}

func (s *shard) mark(id collector.LoopID) {
	s.mu.Lock()
	defer s.mu.Unlock()
	s.marked[s.lane.at(id)] = true
}
