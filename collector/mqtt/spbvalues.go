package mqtt

import (
	"math"

	"midwatch/collector"
)

// values emits the samples of p.payload. A device counts as alive only if its
// values can be named: one that speaks in unknown aliases must not keep an old
// value in sight.
func (p *sparkplug) values(d *device, m *message) {
	named := d.trust != unborn
	for i := range p.payload.metrics {
		x := &p.payload.metrics[i]
		k, tags, ok := p.resolve(d, x)
		if !ok {
			p.unknown(d)
			continue
		}
		named = true
		p.metric(d, x, k, tags, len(x.name) == 0 && d.trust == unconfirmed, m)
	}
	if named && (d.trust != unborn || len(p.payload.metrics) > 0) {
		for _, g := range d.groups {
			g.heard(m.arrived)
		}
	}
}

// resolve finds what a metric is called, by its name or by its alias.
func (p *sparkplug) resolve(d *device, x *metric) (k *known, tags []*tag, ok bool) {
	if len(x.name) > 0 {
		if k = d.names[string(x.name)]; k != nil {
			return k, k.tags, true
		}
		return nil, d.tags[string(x.name)], true
	}
	if x.hasAlias {
		if k = d.node.aliases[x.alias]; k != nil && k.dev == d {
			return k, k.tags, true
		}
	}
	return nil, nil, false
}

// unknown handles a value that cannot be named. Names that were not confirmed are
// then wrong altogether; after a birth that we heard it is the node's own mistake.
func (p *sparkplug) unknown(d *device) {
	p.s.counts.unresolved++
	d.blind++
	if d.trust == unconfirmed {
		p.discard(d.node)
	}
}

// metric emits one metric to its tags.
func (p *sparkplug) metric(d *device, x *metric, k *known, tags []*tag, unsure bool, m *message) {
	datatype := x.datatype
	if datatype == 0 && k != nil {
		datatype = k.datatype
	}
	if k != nil && k.datatype != 0 && !x.fits(k.datatype) {
		p.s.counts.malformed++
		p.faults.note(m.payload, m.arrived)
		if d.trust == unconfirmed {
			p.discard(d.node)
			return
		}
		x.kind = kindNone
	}
	if x.kind == kindTemplate && !x.null {
		name := x.name
		if k != nil {
			name = []byte(k.name)
		}
		p.template(d, string(name), x, unsure, m, 0)
		return
	}
	if len(tags) == 0 {
		return
	}
	if x.historical {
		// Past values may not move detectors, and the window has closed over them.
		p.s.counts.historical++
		return
	}
	own, has := int64(x.time), x.hasTime
	if !has {
		own, has = int64(p.payload.time), p.payload.hasTime
	}
	at := p.s.settle(own, has, m)
	at.unsure = unsure
	q := collector.Good
	if len(x.props) > 0 {
		if v, _, ok := property(x.props, "Quality"); ok {
			q = qualityOfNumber(v)
		}
	}
	for _, t := range tags {
		p.emit(t, x, datatype, q, at)
	}
}

func (p *sparkplug) emit(t *tag, x *metric, datatype uint32, q collector.Quality, at stamp) {
	t.why = ""
	var r raw
	v, ok := math.NaN(), false
	switch {
	case x.null:
		r = raw{kind: rawNull}
	case x.kind == kindString:
		r = raw{kind: rawText, text: x.text}
	case x.kind == kindBool && x.bits != 0:
		r = raw{kind: rawBool, text: []byte("true")}
	case x.kind == kindBool:
		r = raw{kind: rawBool, text: []byte("false")}
	default:
		v, ok = x.number(datatype)
	}
	if !ok {
		var strange bool
		if v, strange = t.number(r, p.s.cfg.DecimalComma); strange {
			t.why = "a text that is no number and no known word: " + excerpt(x.text)
		} else if math.IsNaN(v) && x.kind != kindNone && !x.null {
			t.why = "the metric is of a type that holds no number"
		}
	}
	p.s.emit(t, v, q, at, r)
}

// template emits the members of a template as Metric/Member, however deep.
func (p *sparkplug) template(d *device, name string, x *metric, unsure bool, m *message, depth int) {
	if depth > 8 {
		p.s.counts.malformed++
		return
	}
	for b := x.text; len(b) > 0; {
		f, n := nextField(b)
		if n < 0 {
			p.s.counts.malformed++
			p.faults.note(m.payload, m.arrived)
			return
		}
		b = b[n:]
		if f.num != 2 || len(f.data) == 0 {
			continue
		}
		var member metric
		if err := member.read(f.data); err != nil {
			p.s.counts.malformed++
			p.faults.note(m.payload, m.arrived)
			return
		}
		path := name + "/" + string(member.name)
		if !member.hasTime {
			member.time, member.hasTime = x.time, x.hasTime
		}
		member.historical = member.historical || x.historical
		if member.kind == kindTemplate {
			p.template(d, path, &member, unsure, m, depth+1)
			continue
		}
		p.metric(d, &member, nil, d.tags[path], unsure, m)
	}
}
