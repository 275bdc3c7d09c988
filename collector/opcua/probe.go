package opcua

import (
	"context"
	"errors"
	"fmt"
	"math"
	"strconv"
	"time"

	"github.com/gopcua/opcua/ua"

	"midwatch/collector"
)

// Probe reads every tag once, with its range and unit, on a session of its own
// that is closed at the end. It needs one session; while Run is watching, that
// is one more. The error says why the server could not be asked at all.
func (s *Source) Probe(ctx context.Context) ([]collector.ProbeResult, error) {
	var out []collector.ProbeResult
	err := s.visit(ctx, func(sess *session) error {
		s.adviseOnIndexes(sess)
		for _, sub := range s.subs {
			got, err := s.probeOne(ctx, sess, sub)
			if err != nil {
				return err
			}
			out = append(out, got...)
		}
		return nil
	})
	return out, err
}

// visit opens a session, calls do and closes the session again.
func (s *Source) visit(ctx context.Context, do func(*session) error) error {
	if err := s.needIdentity(); err != nil {
		return err
	}
	l, k, err := s.enterFresh(ctx)
	if err != nil {
		return s.explain(err)
	}
	defer l.close(2 * time.Second)
	s.log.Info("one session is in use at this server; watching needs one, and this check one more while it runs")
	if err := do(k.sess); err != nil {
		return s.explain(err)
	}
	return nil
}

// adviseOnIndexes says that bare namespace indexes may move when the server has
// several namespaces.
func (s *Source) adviseOnIndexes(sess *session) {
	if len(sess.spaces) <= 2 {
		return
	}
	n, first := 0, ""
	for _, sub := range s.subs {
		for _, it := range sub.items {
			if a, err := parseAddress(it.address); err == nil && a.path == nil && a.uri == "" {
				if n++; n == 1 {
					first = it.address
				}
			}
		}
	}
	if n > 0 {
		s.log.Warn("addresses name their namespace by a number, which can change when the server restarts; hint: write nsu= and the name of the namespace", "count", n, "first", first, "namespaces", sess.spaces)
	}
}

func (s *Source) probeOne(ctx context.Context, sess *session, sub *subscription) ([]collector.ProbeResult, error) {
	found, err := s.locate(ctx, sess, sub.items)
	if err != nil {
		return nil, err
	}
	var at []int
	var nodes []*ua.NodeID
	var what []*ua.ReadValueID
	for i, o := range found {
		if o.refusal == nil {
			at = append(at, i)
			nodes = append(nodes, o.to.node)
			what = append(what, value(o.to.node))
		}
	}
	values, err := sess.readAll(ctx, what)
	if err != nil {
		return nil, fmt.Errorf("reading tags: %w", err)
	}
	props, err := sess.properties(ctx, nodes, "EURange", "EngineeringUnits")
	if err != nil {
		return nil, fmt.Errorf("reading ranges and units: %w", err)
	}
	arrived := s.now().UnixMilli()
	results := make(map[int][]collector.ProbeResult, len(found))
	for k, i := range at {
		results[i] = s.probed(found[i], values[k], props[k], arrived)
	}
	var out []collector.ProbeResult
	for i, o := range found {
		if o.refusal != nil {
			for _, b := range o.it.bindings {
				out = append(out, collector.ProbeResult{Binding: b, Err: o.refusal, EULow: math.NaN(), EUHigh: math.NaN()})
			}
			continue
		}
		out = append(out, results[i]...)
	}
	return out, nil
}

func (s *Source) probed(o outcome, v *ua.DataValue, props map[string]any, arrived int64) []collector.ProbeResult {
	one := item{address: o.it.address, bindings: o.it.bindings, index: o.to.index, words: o.words}
	low, high, unit := rangeAndUnit(props)
	samples, _ := s.samples(nil, &one, v, arrived, false)
	var out []collector.ProbeResult
	for i, b := range one.bindings {
		r := collector.ProbeResult{Binding: b, Sample: samples[i], EULow: low, EUHigh: high, Unit: unit}
		switch {
		case quality(v.Status) == collector.Bad:
			f := s.explain(v.Status)
			if f.hint == "" {
				f = &fault{problem: "the server says the value is bad: " + statusName(v.Status), hint: "look at the device or the connection behind this tag"}
			}
			r.Err = f
		case one.quality == collector.Bad && one.text == "":
			r.Err = errors.New(notUsable(v, one.index))
		default:
			r.Text = shown(one.value, one.text, one.words)
		}
		out = append(out, r)
	}
	return out
}

func notUsable(v *ua.DataValue, index int) string {
	if x, _, ok := number(v.Value, index); ok {
		return fmt.Sprintf("the value is %v, which is no number to work with", x)
	}
	return unusable(v.Value, index)
}

func shown(x float64, text string, words map[int64]string) string {
	if text != "" {
		return text
	}
	plain := strconv.FormatFloat(x, 'g', 8, 64)
	if w, ok := words[int64(x)]; ok && x == math.Trunc(x) {
		return plain + " (" + w + ")"
	}
	return plain
}

func rangeAndUnit(props map[string]any) (low, high float64, unit string) {
	low, high = math.NaN(), math.NaN()
	if r, ok := props["EURange"].(*ua.Range); ok && r != nil && r.High > r.Low {
		low, high = r.Low, r.High
	}
	if u, ok := props["EngineeringUnits"].(*ua.EUInformation); ok && u != nil {
		unit = textOf(u.DisplayName)
	}
	return low, high, unit
}

var _ collector.Prober = (*Source)(nil)
