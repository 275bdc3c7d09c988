package daemon

import (
	"context"
	"errors"

	"midwatch/configs"
)

// makeFeeds makes the sources of a configuration. Those of old that need no
// restart are taken over; a source keeps its index for as long as its name.
func (d *Daemon) makeFeeds(c *configs.Config, roster []*configs.Loop, old []*feed) ([]*feed, error) {
	bindings, err := Bindings(roster)
	if err != nil {
		return nil, err
	}
	out := make([]*feed, len(old))
	for _, s := range c.Sources {
		at := -1
		for i, f := range old {
			if f != nil && f.conf.Name == s.Name {
				at = i
			}
		}
		if at >= 0 && old[at].same(s, bindings[s.Name]) {
			out[at] = old[at]
			continue
		}
		if at < 0 {
			at = len(out)
			out = append(out, nil)
		}
		f := &feed{conf: s, index: uint16(at), bindings: bindings[s.Name], began: d.clock.ms()}
		f.source, err = NewSource(d.o.Sources, s, SourceEnv{Site: c.Site.Name, Index: f.index, Bindings: f.bindings, Data: c.Data,
			Births: births{d.state, "births." + s.Name}, Clock: d.clock.Now, Log: d.log})
		if err != nil {
			return nil, err
		}
		out[at] = f
	}
	return out, nil
}

// stopFeeds ends all sources at once.
func (d *Daemon) stopFeeds(ctx context.Context) error {
	d.mu.RLock()
	feeds := d.feeds
	d.mu.RUnlock()
	var errs []error
	for _, f := range feeds {
		if f != nil {
			f.cancel()
		}
	}
	for _, f := range feeds {
		if f != nil {
			errs = append(errs, waitFor(ctx, "source "+f.conf.Name, f.done))
		}
	}
	return errors.Join(errs...)
}
