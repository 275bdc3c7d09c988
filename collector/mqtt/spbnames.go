package mqtt

import (
	"fmt"
	"math"
	"slices"
	"strings"
)

// nodeBirth replaces all names of the node; its devices wait for their births,
// which follow.
func (p *sparkplug) nodeBirth(n *node, self *device, m *message) {
	p.s.counts.births++
	n.bdSeq = p.payload.bdSeq()
	n.seq = -1
	if p.payload.hasSeq {
		n.seq = int(p.payload.seq & 255)
	}
	for _, d := range n.devices {
		p.forget(d)
	}
	if self != nil {
		p.learn(self, confirmed)
		p.save(self)
		p.values(self, m)
	}
}

func (p *sparkplug) deviceBirth(d *device, m *message) {
	p.s.counts.births++
	if d == nil {
		return
	}
	p.learn(d, confirmed)
	p.save(d)
	p.values(d, m)
}

// certificate takes the names of a birth that a Sparkplug-aware broker keeps. Its
// values are old and not used. It confirms names that we had doubts about.
func (p *sparkplug) certificate(t spbTopic) {
	d := t.dev
	if d == nil || d.trust == confirmed || t.kind != "NBIRTH" && t.kind != "DBIRTH" {
		return
	}
	if t.kind == "NBIRTH" {
		t.node.bdSeq = p.payload.bdSeq()
	}
	p.learn(d, confirmed)
	p.save(d)
}

// learn takes the names of the birth in p.payload.
func (p *sparkplug) learn(d *device, how trust) {
	p.clearNames(d)
	d.trust, d.born = how, p.payload.time
	for i := range p.payload.metrics {
		m := &p.payload.metrics[i]
		if len(m.name) == 0 {
			continue
		}
		k := p.define(d, string(m.name), m.alias, m.hasAlias, m.datatype)
		if len(k.tags) > 0 {
			k.low, k.high = rangeOf(m.props)
			_, unit, _ := property(m.props, "engUnit")
			k.unit = string(unit)
		}
	}
}

func rangeOf(props []byte) (low, high float64) {
	low, high = math.NaN(), math.NaN()
	if v, _, ok := property(props, "engLow"); ok {
		low = v
	}
	if v, _, ok := property(props, "engHigh"); ok {
		high = v
	}
	return low, high
}

func (p *sparkplug) define(d *device, name string, alias uint64, hasAlias bool, datatype uint32) *known {
	k := &known{dev: d, name: name, alias: alias, hasAlias: hasAlias, datatype: datatype, tags: d.tags[name],
		low: math.NaN(), high: math.NaN()}
	d.names[name] = k
	if hasAlias {
		d.node.aliases[alias] = k
	}
	return k
}

func (p *sparkplug) clearNames(d *device) {
	for _, k := range d.names {
		if k.hasAlias && d.node.aliases[k.alias] == k {
			delete(d.node.aliases, k.alias)
		}
	}
	clear(d.names)
	d.blind = 0
}

// forget drops the names of a device, kept ones included.
func (p *sparkplug) forget(d *device) {
	p.clearNames(d)
	if d.trust != unborn {
		d.trust = unborn
		p.births.put(d.String(), nil)
	}
}

// discard drops what is not confirmed at a node.
func (p *sparkplug) discard(n *node) {
	for _, d := range n.devices {
		if d.trust == unconfirmed {
			p.forget(d)
		}
	}
}

func (p *sparkplug) save(d *device) {
	if p.births.store == nil {
		return
	}
	r := birthRecord{Version: birthVersion, BdSeq: d.node.bdSeq, Time: d.born}
	for _, k := range d.names {
		m := birthMetric{Name: k.name, Datatype: k.datatype}
		if k.hasAlias {
			m.Alias = &k.alias
		}
		r.Metrics = append(r.Metrics, m)
	}
	slices.SortFunc(r.Metrics, func(a, b birthMetric) int { return strings.Compare(a.Name, b.Name) })
	p.births.put(d.String(), r)
}

// load takes kept names, unconfirmed, and when each node was last heard.
func (p *sparkplug) load() {
	heard := map[string]int64{}
	p.births.get("heard", &heard)
	for _, n := range p.nodes {
		n.heardAt, n.away = heard[n.name], true
		for _, d := range n.devices {
			r := p.births.load(d.String())
			if r == nil {
				continue
			}
			n.bdSeq, d.born, d.trust = r.BdSeq, r.Time, unconfirmed
			for _, m := range r.Metrics {
				if m.Alias != nil {
					p.define(d, m.Name, *m.Alias, true, m.Datatype)
				} else {
					p.define(d, m.Name, 0, false, m.Datatype)
				}
			}
		}
	}
}

// remember keeps when nodes were last heard, now and then.
func (p *sparkplug) remember(now int64) {
	if p.births.store == nil || now-p.remembered < rememberMs {
		return
	}
	p.remembered = now
	heard := map[string]int64{}
	for _, n := range p.nodes {
		if n.heardAt != 0 {
			heard[n.name] = n.heardAt
		}
	}
	p.births.put("heard", heard)
}

// whyMissing says why a tag that was not seen brings nothing.
func (p *sparkplug) whyMissing(t *tag) string {
	d := p.byTag[t]
	_, name, _ := strings.Cut(t.Address, "#")
	switch {
	case d.node.dead:
		return fmt.Sprintf("edge node %s is offline (its death was heard)", d.node.name)
	case d.trust == unborn && d.blind > 0:
		return fmt.Sprintf("waiting for the birth of %s, its values come without names; hint: ask for a rebirth at the plant's own Sparkplug host", d)
	case d.trust == confirmed && !d.declares(name):
		return fmt.Sprintf("the birth of %s has no metric %q", d, name)
	}
	return ""
}

// declares says whether the birth has a metric, or a template that may hold it.
func (d *device) declares(name string) bool {
	for {
		if d.names[name] != nil {
			return true
		}
		i := strings.LastIndexByte(name, '/')
		if i < 0 {
			return false
		}
		name = name[:i]
	}
}

// problem sums up the devices whose values cannot be named.
func (p *sparkplug) problem() (problem, hint string) {
	var waiting []string
	for _, n := range p.nodes {
		for _, d := range n.devices {
			if d.trust == unborn && d.blind > 0 && !n.dead {
				waiting = append(waiting, d.String())
			}
		}
	}
	if len(waiting) == 0 {
		return "", ""
	}
	slices.Sort(waiting)
	first := waiting[0]
	if len(waiting) > 1 {
		first += fmt.Sprintf(" and %d more", len(waiting)-1)
	}
	return "waiting for the birth of " + first + ": values come without names",
		"ask for a rebirth at the plant's own Sparkplug host; this watch only listens and never asks itself"
}
