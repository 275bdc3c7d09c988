package mqtt

import (
	"errors"
	"fmt"
	"strings"

	"midwatch/collector"
)

// Namespaces of Sparkplug B; later ones speak another encoding.
const (
	spbNamespace   = "spBv1.0"
	spbCertificate = "$sparkplug/certificates/" + spbNamespace
)

// absenceMs is how long a node may be out of sight until kept names are worth
// nothing: long enough for a reboot of the box, too short for a day of
// engineering at the node.
const (
	absenceMs  = 15 * 60 * 1000
	rememberMs = 2 * 60 * 1000
)

// trust in the names of a device.
type trust uint8

const (
	unborn      trust = iota // no names: waiting for a birth
	unconfirmed              // names from before a restart or a lost connection
	confirmed
)

// sparkplug follows the edge nodes that the bindings name, only by listening.
type sparkplug struct {
	s          *source
	births     *births
	nodes      map[string]*node // by group/node
	byTag      map[*tag]*device
	topics     map[string]spbTopic
	payload    payload
	faults     faults
	remembered int64
}

// node is an edge node. Node and devices share one space of aliases.
type node struct {
	name    string // group/node
	seq     int    // of the last message; -1 unknown
	bdSeq   int64  // of the birth; -1 unknown
	dead    bool   // NDEATH was heard
	away    bool   // we were away since it was last heard
	heardAt int64  // ms UTC; 0 never
	aliases map[uint64]*known
	devices map[string]*device // the bound ones; "" is the node itself
}

// device is an edge device, or the node itself, with bound metrics.
type device struct {
	node   *node
	name   string
	trust  trust
	born   uint64 // time of the birth, ms UTC
	tags   map[string][]*tag
	names  map[string]*known
	groups []*group
	blind  uint64 // values that no name was known for since the last birth
}

// known is a metric as its birth declared it.
type known struct {
	dev      *device
	name     string
	alias    uint64
	hasAlias bool
	datatype uint32
	tags     []*tag

	low, high float64 // of the engineering range, NaN where not stated; bound metrics only
	unit      string
}

// spbTopic is a topic taken apart.
type spbTopic struct {
	kind        string // NBIRTH, DDATA, ...; empty: not ours
	node        *node
	dev         *device // nil: no tag of it is bound
	certificate bool
}

func (d *device) String() string {
	if d.name == "" {
		return d.node.name
	}
	return d.node.name + "/" + d.name
}

// bindSparkplug reads addresses group/node/device#metric or group/node#metric.
func (s *source) bindSparkplug(bindings []collector.Binding) (errs []error) {
	p := &sparkplug{s: s, nodes: map[string]*node{}, byTag: map[*tag]*device{}, topics: map[string]spbTopic{},
		births: newBirths(s.opts.Births, s.name, s.log)}
	s.spb = p
	groups := newGrouping(s)
	alive := map[collector.LoopID]*device{}
	for _, b := range bindings {
		d, name, err := p.bind(b)
		if err != nil {
			errs = append(errs, fmt.Errorf("loop %s: %q: %w", b.Name, b.Address, err))
			continue
		}
		t := &tag{Binding: b, filter: d.dataFilter()}
		d.tags[name] = append(d.tags[name], t)
		p.byTag[t] = d
		s.tags = append(s.tags, t)
		if b.Role == collector.RoleAlive {
			alive[b.Loop] = d
		}
	}
	for _, t := range s.tags {
		if t.Role != collector.RolePV {
			continue
		}
		d := p.byTag[t]
		if a := alive[t.Loop]; a != nil {
			d = a
		}
		groups.join(d.String(), t.Loop)
		d.groups = groups.touch(d.groups, d.String())
	}
	p.load()
	for _, n := range p.nodes {
		s.filters = append(s.filters, n.filters()...)
	}
	return errs
}

func (p *sparkplug) bind(b collector.Binding) (*device, string, error) {
	hint := errors.New("hint: write GROUP/NODE/DEVICE#METRIC, or GROUP/NODE#METRIC for a metric of the node")
	where, name, ok := strings.Cut(b.Address, "#")
	parts := strings.Split(where, "/")
	switch {
	case !ok || name == "":
		return nil, "", fmt.Errorf("names no metric; %w", hint)
	case parts[0] == "spCv4.0" || parts[0] == "spJv4.0":
		return nil, "", fmt.Errorf("the namespace %s is not supported; hint: the node must speak %s", parts[0], spbNamespace)
	case parts[0] == spbNamespace:
		return nil, "", fmt.Errorf("begins with the namespace; %w", hint)
	case len(parts) < 2 || len(parts) > 3:
		return nil, "", fmt.Errorf("has %d parts before #; %w", len(parts), hint)
	}
	for _, part := range parts {
		if part == "" || strings.ContainsAny(part, "+$\x00") {
			return nil, "", fmt.Errorf("%q is no name of a group, node or device; %w", part, hint)
		}
	}
	nodeName := parts[0] + "/" + parts[1]
	n := p.nodes[nodeName]
	if n == nil {
		n = &node{name: nodeName, seq: -1, bdSeq: -1, aliases: map[uint64]*known{}, devices: map[string]*device{}}
		p.nodes[nodeName] = n
	}
	devName := ""
	if len(parts) == 3 {
		devName = parts[2]
	}
	d := n.devices[devName]
	if d == nil {
		d = &device{node: n, name: devName, tags: map[string][]*tag{}, names: map[string]*known{}}
		n.devices[devName] = d
	}
	return d, name, nil
}

// filters of a node: all its messages, since seq counts over all of them, and what
// a Sparkplug-aware broker keeps of its births.
func (n *node) filters() []string {
	group, name, _ := strings.Cut(n.name, "/")
	at := spbNamespace + "/" + group + "/"
	cert := spbCertificate + "/" + group + "/"
	return []string{at + "NBIRTH/" + name, at + "NDEATH/" + name, at + "NDATA/" + name,
		at + "DBIRTH/" + name + "/+", at + "DDEATH/" + name + "/+", at + "DDATA/" + name + "/+",
		cert + "NBIRTH/" + name, cert + "DBIRTH/" + name + "/+"}
}

func (d *device) dataFilter() string {
	group, name, _ := strings.Cut(d.node.name, "/")
	if d.name == "" {
		return spbNamespace + "/" + group + "/NDATA/" + name
	}
	return spbNamespace + "/" + group + "/DDATA/" + name + "/+"
}

// topicOf takes a topic apart, once per topic.
func (p *sparkplug) topicOf(name string) spbTopic {
	if t, ok := p.topics[name]; ok {
		return t
	}
	var t spbTopic
	rest, cert := strings.CutPrefix(name, spbCertificate+"/")
	if !cert {
		rest, _ = strings.CutPrefix(name, spbNamespace+"/")
	}
	if parts := strings.Split(rest, "/"); len(parts) == 3 || len(parts) == 4 {
		t.node = p.nodes[parts[0]+"/"+parts[2]]
		dev := ""
		if len(parts) == 4 {
			dev = parts[3]
		}
		if t.node != nil && (dev == "") == (parts[1][:min(1, len(parts[1]))] == "N") {
			t.kind, t.dev, t.certificate = parts[1], t.node.devices[dev], cert
		}
	}
	if len(p.topics) < ringTopics {
		p.topics[name] = t
	}
	return t
}

// message follows one message of a node.
func (p *sparkplug) message(m *message) {
	t := p.topicOf(m.topic)
	if t.kind == "" {
		p.s.counts.unmatched++
		return
	}
	if err := p.payload.read(m.payload); err != nil {
		p.s.counts.malformed++
		p.faults.note(m.payload, m.arrived)
		p.lose(t.node)
		return
	}
	birth := t.kind == "NBIRTH" || t.kind == "DBIRTH"
	if t.certificate || (m.retained && birth) {
		p.certificate(t)
		return
	}
	if m.retained {
		p.s.counts.retained++
		return
	}
	n := t.node
	if t.kind != "NDEATH" {
		p.arrive(n, m.arrived)
	}
	switch t.kind {
	case "NBIRTH":
		p.nodeBirth(n, t.dev, m)
	case "DBIRTH":
		p.follow(n)
		p.deviceBirth(t.dev, m)
	case "NDATA", "DDATA":
		p.follow(n)
		if t.dev != nil {
			p.values(t.dev, m)
		}
	case "DDEATH":
		p.follow(n)
		if t.dev != nil {
			p.deviceDeath(t.dev, m)
		}
	case "NDEATH":
		p.nodeDeath(n, m)
	}
}

// arrive notes that a node spoke. After an absence of ours that was too long,
// unconfirmed names are dropped.
func (p *sparkplug) arrive(n *node, at int64) {
	if n.away {
		n.away = false
		if at-n.heardAt > absenceMs {
			p.discard(n)
		}
	}
	n.heardAt, n.dead = at, false
}

// follow checks the sequence number, 0 to 255 over all messages of a node. A gap
// means lost messages: names stay, but every loop of the node is told.
func (p *sparkplug) follow(n *node) {
	if !p.payload.hasSeq {
		return
	}
	seq := int(p.payload.seq & 255)
	if n.seq >= 0 && seq != (n.seq+1)&255 {
		p.s.counts.seqGaps++
		p.lose(n)
	}
	n.seq = seq
}

func (p *sparkplug) lose(n *node) {
	for _, d := range n.devices {
		for _, tags := range d.tags {
			loseTags(tags)
		}
	}
}

// nodeDeath counts only for the birth that it belongs to: the will of an old
// connection may come after the new birth.
func (p *sparkplug) nodeDeath(n *node, m *message) {
	bd := p.payload.bdSeq()
	if bd >= 0 && n.bdSeq >= 0 && bd != n.bdSeq {
		p.s.counts.ignored++
		return
	}
	p.s.counts.deaths++
	n.seq, n.bdSeq, n.dead = -1, -1, true
	for _, d := range n.devices {
		p.forget(d)
		for _, g := range d.groups {
			p.s.end(g, m.arrived)
		}
	}
}

func (p *sparkplug) deviceDeath(d *device, m *message) {
	p.s.counts.deaths++
	p.forget(d)
	for _, g := range d.groups {
		p.s.end(g, m.arrived)
	}
}

// bdSeq of a birth or death, -1 where there is none. Some nodes send it by an
// alias without a name: then it is the only integer.
func (p *payload) bdSeq() int64 {
	nameless := int64(-1)
	for i := range p.metrics {
		m := &p.metrics[i]
		if m.kind != kindInt && m.kind != kindLong {
			continue
		}
		if string(m.name) == "bdSeq" {
			return int64(m.bits & (1<<63 - 1))
		}
		if len(m.name) == 0 && len(p.metrics) == 1 {
			nameless = int64(m.bits & (1<<63 - 1))
		}
	}
	return nameless
}

// linkLost: births may be missed from here on, so nothing stays confirmed.
func (p *sparkplug) linkLost() {
	for _, n := range p.nodes {
		n.seq, n.away = -1, true
		n.doubt()
	}
}

func (n *node) doubt() {
	for _, d := range n.devices {
		if d.trust == confirmed {
			d.trust = unconfirmed
		}
	}
}

// markLost: of dropped messages the sequence number tells, except that a dropped
// birth or death also leaves the names in doubt.
func (p *sparkplug) markLost(topics map[string]struct{}, all bool) {
	for name := range topics {
		if t := p.topicOf(name); t.kind != "" {
			p.lose(t.node)
			if !strings.HasSuffix(t.kind, "DATA") {
				t.node.doubt()
			}
		}
	}
	if all {
		for _, n := range p.nodes {
			p.lose(n)
			n.doubt()
		}
	}
}
