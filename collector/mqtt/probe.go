package mqtt

import (
	"context"
	"errors"
	"fmt"
	"math"
	"strings"
	"sync"

	"midwatch/collector"
)

// Probe connects under an id of its own, so that it does not throw out a running
// daemon, and waits until every tag has shown one value or ctx ends. Retained
// values count here, and are marked as such: they prove that the topic is right
// and may be read. It changes nothing at the broker.
func (s *source) Probe(ctx context.Context) ([]collector.ProbeResult, error) {
	cfg := s.cfg
	id, _ := s.clientID()
	cfg.ClientID = id + "-check"
	bindings := make([]collector.Binding, len(s.tags))
	results := make([]collector.ProbeResult, len(s.tags))
	for i, t := range s.tags {
		bindings[i] = t.Binding
		results[i] = collector.ProbeResult{Binding: t.Binding, EULow: math.NaN(), EUHigh: math.NaN()}
	}
	p, err := newSource(cfg, s.name, s.site, s.index, bindings, Options{Logger: s.opts.Logger, Births: readOnlyBirths{s.opts.Births}, Now: s.opts.Now})
	if err != nil {
		return nil, err
	}
	p.pace = s.pace
	index := map[*tag]int{}
	for i, t := range p.tags {
		index[t] = i
	}
	missing, all := len(bindings), make(chan struct{})
	live := make([]bool, len(bindings))
	p.seen = func(t *tag, sample collector.Sample, from raw, retained bool) { // under p.mu
		i := index[t]
		r := &results[i]
		first := r.Text == ""
		if !first && (live[i] || retained) {
			return
		}
		r.Sample, r.Text, live[i] = sample, shown(sample, from), !retained
		if retained {
			r.Text += " (retained: last known)"
		}
		if p.spb != nil {
			p.spb.describe(t, r)
		}
		if first {
			if missing--; missing == 0 {
				close(all)
			}
		}
	}
	running, stop := context.WithCancel(context.WithoutCancel(ctx))
	var run sync.WaitGroup
	run.Go(func() { p.Run(running, nowhere{}) })
	defer run.Wait()
	defer stop()
	select {
	case <-all:
	case <-ctx.Done():
	}
	state := p.State()
	p.mu.Lock()
	defer p.mu.Unlock()
	if missing > 0 && p.watched == 0 {
		if state.Problem == "" {
			state.Problem, state.Hint = "no connection to "+s.target.addr+" in the time given", "check address, port and firewall"
		}
		return results, fmt.Errorf("source %s: %s; hint: %s", s.name, state.Problem, state.Hint)
	}
	p.pace.silentPV, p.pace.silentOther = 0, 0 // what has not come by now is missing
	refused := p.link.refusedFilters()
	for i, t := range p.tags {
		if why := p.whyMissing(t, refused, p.now().UnixMilli()); why != "" {
			results[i].Err = errors.New(why)
		} else if results[i].Text == "" {
			results[i].Err = errors.New("nothing came while waiting; hint: permission, wrong topic, or a tag that reports changes only")
		}
	}
	return results, nil
}

// shown is a value as the source wrote it, shortened.
func shown(s collector.Sample, from raw) string {
	if from.kind == rawMissing {
		return fmt.Sprintf("%g", s.Value)
	}
	if from.kind == rawNull {
		return "null"
	}
	text := strings.TrimSpace(string(from.text[:min(len(from.text), 80)]))
	if text == "" {
		return "(empty)"
	}
	return text
}

// describe adds what the birth says of a metric's range.
func (p *sparkplug) describe(t *tag, r *collector.ProbeResult) {
	_, name, _ := strings.Cut(t.Address, "#")
	if k := p.byTag[t].names[name]; k != nil {
		r.EULow, r.EUHigh, r.Unit = k.low, k.high, k.unit
	}
}

func (l *link) refusedFilters() map[string]bool { l.mu.Lock(); defer l.mu.Unlock(); return l.refused }

// nowhere is an intake that drops everything.
type nowhere struct{}

func (nowhere) Join(collector.Group, []collector.LoopID) {}
func (nowhere) Put([]collector.Sample)                   {}
func (nowhere) Tick(collector.Tick)                      {}

// readOnlyBirths lets a probe use kept names without changing them.
type readOnlyBirths struct{ BirthStore }

func (r readOnlyBirths) Get(key string) ([]byte, error) {
	if r.BirthStore == nil {
		return nil, nil
	}
	return r.BirthStore.Get(key)
}

func (readOnlyBirths) Put(string, []byte) error { return nil }
