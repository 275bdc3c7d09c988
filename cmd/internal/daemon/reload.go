package daemon

import (
	"context"
	"errors"
	"fmt"
	"reflect"
	"slices"

	"midwatch/alert/page"
	"midwatch/alert/send"
	"midwatch/collector"
	"midwatch/configs"
	"midwatch/detect"
)

// Apply puts a new configuration in force. First all that can fail is done,
// touching nothing that runs; then the swap. A loop is the same by name, or by
// the name it was: what did not change keeps everything. A source is restarted
// only if its settings or tags changed. The data folder, the page and keep.size
// stay as they are until a restart.
func (d *Daemon) Apply(ctx context.Context, c *configs.Config) error {
	d.life.Lock()
	defer d.life.Unlock()
	ctx, cancel := context.WithCancel(ctx)
	defer cancel()
	defer context.AfterFunc(d.ending, cancel)() // Stop does not wait for a reload
	if d.over || d.started.Load() == 0 {
		return errors.New("the daemon does not run; hint: start it")
	}
	if c.Data != d.cfg.Data {
		return fmt.Errorf("data: %s instead of %s; hint: another data folder needs a restart", c.Data, d.cfg.Data)
	}
	// Memories move by name; a loop that still reads its own past has none yet.
	select {
	case <-d.caught:
	case <-ctx.Done():
		return fmt.Errorf("reload: loops are still catching up: %w", context.Cause(ctx))
	}
	d.o.Notify(notifyReloading)
	defer d.o.Notify(notifyReady)

	p := d.plan(c)
	p.detect = detect.Options{NuisancePerLoopYear: c.Detect.NuisancePerLoopYear}
	p.all = p.detect != d.detectOptions()
	if _, err := collector.New(present(p.roster), collector.Options{}, func(collector.LoopID, *collector.Frame) {}); err != nil {
		return err
	}
	feeds, err := d.makeFeeds(c, p.roster, d.feeds)
	if err != nil {
		return err
	}
	senders, err := send.All(c.Advise.Senders, d.sendEnv(c))
	if err != nil {
		return err
	}
	beat, err := d.makeHeart(c, senders)
	if err == nil {
		err = d.desk.Reload(d.deskSettings(c, senders))
	}
	if err != nil {
		return errors.Join(err, send.Close(senders))
	}

	var waits []string
	if !reflect.DeepEqual(c.Page, d.cfg.Page) {
		waits = append(waits, "page")
	}
	if c.Keep.Size != d.cfg.Keep.Size {
		waits = append(waits, "keep.size")
	}

	// From here on nothing fails but what is logged.
	var late []error
	old := d.senders
	late = append(late, d.beat.stop(ctx))
	for i, f := range d.feeds {
		if f != nil && (i >= len(feeds) || feeds[i] != f) {
			f.cancel()
			late = append(late, waitFor(ctx, "source "+f.conf.Name, f.done))
			f.leave(d.intake)
		}
	}
	anew, err := d.swap(p)
	late = append(late, err, d.remind(p, anew))
	d.mu.Lock()
	before := d.feeds
	d.cfg, d.roster, d.ids, d.feeds, d.senders, d.beat = c, p.roster, p.ids, feeds, senders, beat
	d.mu.Unlock()
	for i, f := range feeds {
		if f != nil && (i >= len(before) || before[i] != f) {
			f.start(d.intake, d.log)
		}
	}
	d.startHeart()
	late = append(late, send.Close(old))
	for _, key := range waits {
		d.log.Warn("a changed setting waits for a restart", "setting", key)
	}
	d.log.Info("reloaded", "loops", len(c.Loops), "unchanged", p.unchanged, "changed", p.changed, "new", p.added, "gone", p.gone)
	if err := errors.Join(late...); err != nil {
		return fmt.Errorf("the new configuration is in force, but: %w", err)
	}
	return nil
}

// reloadPlan is what a reload does to each loop, by id.
type reloadPlan struct {
	roster                          []*configs.Loop
	ids                             map[string]collector.LoopID
	change                          []configs.Change
	was                             []*configs.Loop // before; nil: new
	unchanged, changed, added, gone int
	detect                          detect.Options
	all                             bool // they are new: every loop is judged anew
}

// plan keeps the id of every loop that stays, gives ids that are free to new
// ones, and compares.
func (d *Daemon) plan(c *configs.Config) *reloadPlan {
	p := &reloadPlan{ids: map[string]collector.LoopID{}, was: append([]*configs.Loop(nil), d.roster...)}
	p.roster = make([]*configs.Loop, len(d.roster))
	listed := map[string]bool{}
	for _, l := range c.Loops {
		listed[l.Name] = true
	}
	var fresh []*configs.Loop
	for _, l := range c.Loops {
		id, ok := d.ids[l.Name]
		if !ok && l.Was != "" && !listed[l.Was] {
			id, ok = d.ids[l.Was]
		}
		if !ok {
			fresh = append(fresh, l)
			continue
		}
		p.roster[id], p.ids[l.Name] = l, id
	}
	free := 0
	for _, l := range fresh {
		for free < len(p.roster) && (p.roster[free] != nil || p.was[free] != nil) {
			free++
		}
		if free == len(p.roster) {
			p.roster, p.was = append(p.roster, nil), append(p.was, nil)
		}
		p.roster[free], p.ids[l.Name] = l, collector.LoopID(free)
		p.added++
	}
	p.change = make([]configs.Change, len(p.roster))
	for i, l := range p.roster {
		switch {
		case l == nil && p.was[i] != nil:
			p.gone++
		case l == nil || p.was[i] == nil:
		default:
			p.change[i] = configs.Difference(p.was[i], l)
			if p.change[i] == configs.ChangeNone && p.was[i].Name == l.Name {
				p.unchanged++
			} else {
				p.changed++
			}
		}
	}
	return p
}

// swap changes loops under the locks of all shards and of the ledger, so that
// every frame is judged by the old list or by the new one.
func (d *Daemon) swap(p *reloadPlan) (anew map[string]int64, err error) {
	for _, s := range d.shards {
		s.mu.Lock()
		defer s.mu.Unlock()
		s.report()
	}
	d.ledger.work()
	d.ledger.turn.Lock()
	defer d.ledger.turn.Unlock()
	anew = map[string]int64{}
	for i, l := range p.roster {
		id := collector.LoopID(i)
		if l != nil && p.was[i] != nil && p.change[i] == configs.ChangeMemory {
			s := d.shardOf(id)
			anew[l.Name] = s.lane.pace[s.lane.at(id)].last
		}
	}
	errs := []error{d.register(p.roster)}
	for _, s := range d.shards {
		errs = append(errs, s.reload(p))
	}
	g := newGathering(p.roster)
	b, err := d.ledger.gather.save()
	if err == nil {
		err = g.load(b)
	}
	d.ledger.gather = g
	return anew, errors.Join(append(errs, err)...)
}

// remind keeps what the loops are now, beside their memories.
func (d *Daemon) remind(p *reloadPlan, anew map[string]int64) error {
	put := map[string]identity{}
	var gone []string
	d.mu.Lock()
	defer d.mu.Unlock()
	for i, l := range p.roster {
		was := p.was[i]
		if was != nil && (l == nil || l.Name != was.Name) {
			gone = append(gone, was.Name)
		}
		if l == nil || was != nil && p.change[i] == configs.ChangeNone && l.Name == was.Name {
			continue
		}
		at := int64(0)
		if was != nil {
			at = max(anew[l.Name], d.anew[was.Name])
		}
		x, err := newIdentity(l, at)
		if err != nil {
			return err
		}
		put[l.Name], d.anew[l.Name] = x, at
	}
	for _, name := range gone {
		if _, again := put[name]; !again {
			delete(d.anew, name)
		}
	}
	gone = slices.DeleteFunc(gone, func(name string) bool { _, again := put[name]; return again })
	return d.keepIdentities(put, gone)
}

// reload changes the loops of a shard; mu is held.
func (s *shard) reload(p *reloadPlan) error {
	keep := func(id collector.LoopID) bool {
		return int(id) < len(p.was) && p.was[id] != nil && p.roster[id] != nil && p.change[id] < configs.ChangeMemory
	}
	if err := s.asm.Reload(present(p.roster), keep); err != nil {
		return err
	}
	var end []said
	for i := s.n; i < len(p.roster); i += s.lane.of {
		id := collector.LoopID(i)
		l, was := p.roster[i], p.was[i]
		k := s.lane.at(id)
		for len(s.hidden) <= k {
			s.hidden, s.marked = append(s.hidden, ""), append(s.marked, false)
		}
		if l == nil && was == nil || !p.all && l != nil && was != nil && p.change[i] == configs.ChangeNone && l.Name == was.Name {
			continue
		}
		old := s.lane.watch(id)
		if was != nil && (l == nil || l.Name != was.Name || p.change[i] == configs.ChangeMemory) {
			why := detect.Rejudged
			if l == nil {
				why = detect.OutOfService
			}
			end = append(end, endings(old, why)...)
		}
		var b []byte
		pace := pace{}
		if k < len(s.lane.pace) {
			pace = s.lane.pace[k]
		}
		if old != nil {
			b = old.Save(nil)
		}
		w := s.lane.put(l, id, p.detect)
		if w == nil || was == nil {
			s.hidden[k], s.marked[k] = "", false
			continue
		}
		if p.change[i] == configs.ChangeMemory {
			s.hidden[k], s.marked[k] = "", true
			continue
		}
		if err := w.Load(b); err != nil {
			return fmt.Errorf("loop %s: %w", l.Name, err)
		}
		fresh := newPace(l)
		pace.least, pace.hold = fresh.least, fresh.hold
		s.lane.pace[k] = pace
		if l.Name != was.Name {
			w.Restate(s.lane.emit)
		}
	}
	if len(end) > 0 {
		s.ledger.put(post{news: news{findings: end}, sites: -1})
	}
	s.report()
	return nil
}

// endings takes back what a watch holds, for a loop that is gone, renamed or
// begins anew.
func endings(w *detect.Watch, why string) (out []said) {
	if w == nil {
		return nil
	}
	for _, f := range w.View().Open {
		f.Event, f.Reason, f.Confidence = detect.Cleared, why, 0
		f.Cause, f.AlsoPossible, f.Measures = detect.NoCause, nil, nil
		f.At = w.Through() + 1
		f.Text, f.TextShort = "The loop is no longer watched as it was: this is no longer judged.", "no longer judged: the loop list changed"
		out = append(out, said{Finding: f, last: true})
	}
	return out
}

// Reload reads the configuration anew by Options.Load and puts it in force.
func (d *Daemon) Reload(ctx context.Context) error {
	if d.o.Load == nil {
		return errors.New("this watch cannot reload; hint: restart it")
	}
	if who := page.VisitorOf(ctx).Name; who != "" {
		d.log.Info("a reload was asked for", "audit", true, "who", who)
	}
	c, err := d.o.Load()
	if err != nil {
		return err
	}
	return d.Apply(ctx, c)
}
