package mqtt

import (
	"context"
	"encoding/json"
	"fmt"
	"math"
	"slices"
	"strings"
	"sync"

	"midwatch/configs"
)

// surveyTopics bounds what a survey keeps of a large namespace.
const surveyTopics = 50_000

// surveyWords are the usual last parts of names, without case, and what they mean.
var surveyWords = map[string]string{
	"pv": "pv", "processvalue": "pv", "process_value": "pv", "measurement": "pv",
	"sp": "sp", "setpoint": "sp", "set_point": "sp",
	"op": "op", "mv": "op", "co": "op", "out": "op", "output": "op",
	"mode": "mode", "actualmode": "mode", "actual_mode": "mode",
}

// valueNames are the usual keys of the value in JSON payloads.
var valueNames = []string{"value", "v", "val"}

// Survey listens to everything that the login may read until ctx ends, and drafts
// loops from names that end in the usual words (PV, SP, OP or MV, CO, OUT; mode): as
// topics of one folder, keys of one object or metrics of one device. Only what
// spoke, or is retained, is found. It changes nothing at the broker.
func (s *source) Survey(ctx context.Context) ([]*configs.Loop, error) {
	cfg := s.cfg
	id, _ := s.clientID()
	cfg.ClientID = id + "-survey"
	p, err := newSource(cfg, s.name, s.site, s.index, nil, Options{Logger: s.opts.Logger, Now: s.opts.Now})
	if err != nil {
		return nil, err
	}
	p.pace = s.pace
	found := &finds{cfg: cfg, at: map[string]map[string]find{}}
	topics := map[string]bool{}
	p.filters = []string{"#"}
	if p.spb != nil {
		p.filters = []string{spbNamespace + "/#", spbCertificate + "/#"}
	}
	p.each = func(m *message) { // under p.mu
		if topics[m.topic] && p.spb == nil || len(topics) >= surveyTopics {
			return
		}
		topics[m.topic] = true
		if p.spb != nil {
			found.birth(m, &p.spb.payload)
			return
		}
		found.text(m)
	}
	running, stop := context.WithCancel(context.WithoutCancel(ctx))
	var run sync.WaitGroup
	run.Go(func() { p.Run(running, nowhere{}) })
	defer run.Wait()
	defer stop()
	<-ctx.Done()
	state := p.State()
	refused := p.link.refusedFilters()
	p.mu.Lock()
	defer p.mu.Unlock()
	switch {
	case p.watched == 0:
		return nil, fmt.Errorf("source %s: %s; hint: %s", s.name, orElse(state.Problem, "no connection to "+s.target.addr+" in the time given"), orElse(state.Hint, "check address, port and firewall"))
	case refused[p.filters[0]]:
		return nil, fmt.Errorf("source %s: the broker refuses to let this login read %s; hint: a survey needs that permission, watching does not", s.name, p.filters[0])
	case len(topics) == 0:
		return nil, fmt.Errorf("source %s: nothing was said while listening; hint: permission, or listen longer", s.name)
	}
	return found.loops(s.name), nil
}

func orElse(s, other string) string {
	if s != "" {
		return s
	}
	return other
}

// find is one address that may be a tag of a loop.
type find struct {
	address   string
	low, high float64
	unit      string
}

// finds are addresses by loop (where and base name) and role word.
type finds struct {
	cfg configs.MQTT
	at  map[string]map[string]find
}

// add files an address under the base of its name if the name ends in a usual word.
func (f *finds) add(where, name string, x find) {
	i := strings.LastIndexAny(name, "/.:")
	base, word := "", name
	if i >= 0 {
		base, word = name[:i], name[i+1:]
	}
	role := surveyWords[strings.ToLower(word)]
	if role == "" {
		return
	}
	key := where + "\x00" + base
	if f.at[key] == nil {
		f.at[key] = map[string]find{}
	}
	if _, there := f.at[key][role]; !there {
		f.at[key][role] = x
	}
}

// text looks at one topic of the text forms.
func (f *finds) text(m *message) {
	none := find{low: math.NaN(), high: math.NaN()}
	var object map[string]any
	if json.Unmarshal(m.payload, &object) != nil || len(object) == 0 {
		none.address = m.topic
		f.add("", m.topic, none)
		return
	}
	for key, v := range object {
		if _, deeper := v.(map[string]any); deeper {
			continue
		}
		path := key
		if strings.ContainsAny(key, ".[") {
			path = "['" + key + "']"
		}
		none.address = m.topic + "#" + path
		f.add(m.topic, key, none)
	}
	names := valueNames
	if f.cfg.Value != "" {
		names = []string{f.cfg.Value}
	}
	for _, name := range names {
		if _, there := object[name]; there {
			none.address = m.topic + "#" + name
			f.add("", m.topic, none)
			return
		}
	}
}

// birth looks at a Sparkplug birth, live or as the broker's certificate.
func (f *finds) birth(m *message, p *payload) {
	rest := strings.TrimPrefix(strings.TrimPrefix(m.topic, "$sparkplug/certificates/"), spbNamespace+"/")
	parts := strings.Split(rest, "/")
	if len(parts) < 3 || parts[1] != "NBIRTH" && parts[1] != "DBIRTH" || p.read(m.payload) != nil {
		return
	}
	device := parts[0] + "/" + strings.Join(parts[2:], "/")
	for i := range p.metrics {
		x := &p.metrics[i]
		low, high := rangeOf(x.props)
		_, unit, _ := property(x.props, "engUnit")
		f.add(device, string(x.name), find{address: device + "#" + string(x.name), low: low, high: high, unit: string(unit)})
	}
}

// loops drafts a loop of each place that has a PV and an SP or OP, by name.
func (f *finds) loops(source string) []*configs.Loop {
	var out []*configs.Loop
	taken := map[string]bool{}
	keys := make([]string, 0, len(f.at))
	for k := range f.at {
		keys = append(keys, k)
	}
	slices.Sort(keys)
	for _, key := range keys {
		tags := f.at[key]
		pv, has := tags["pv"]
		if !has || tags["sp"].address == "" && tags["op"].address == "" {
			continue
		}
		where, base, _ := strings.Cut(key, "\x00")
		l := configs.NewLoop(loopName(where, base, taken))
		l.Source = source
		l.PV, l.SP, l.OP, l.ModeTag = pv.address, tags["sp"].address, tags["op"].address, tags["mode"].address
		if pv.low < pv.high {
			l.PVLow, l.PVHigh, l.PVRangeGiven = pv.low, pv.high, true
			l.SPLimitLow, l.SPLimitHigh = pv.low, pv.high
		}
		if op := tags["op"]; op.low < op.high {
			l.OPLow, l.OPHigh, l.OPLimitLow, l.OPLimitHigh = op.low, op.high, op.low, op.high
		}
		l.Unit = pv.unit
		out = append(out, l)
	}
	return out
}

// loopName is the last part of the place, with as much before it as makes it unique.
func loopName(where, base string, taken map[string]bool) string {
	parts := strings.FieldsFunc(where+"/"+base, func(r rune) bool { return r == '/' })
	if len(parts) == 0 {
		parts = []string{"loop"}
	}
	name := ""
	for i := len(parts) - 1; i >= 0; i-- {
		name = strings.Join(parts[i:], ".")
		if !taken[name] {
			break
		}
	}
	r := []rune(name)
	short := string(r[:min(len(r), 60)])
	for n := 2; taken[short]; n++ {
		short = fmt.Sprintf("%s.%d", string(r[:min(len(r), 58)]), n)
	}
	taken[short] = true
	return short
}
