package opcua

import (
	"context"
	"errors"
	"fmt"
	"math"
	"slices"
	"time"

	"github.com/gopcua/opcua/ua"

	"midwatch/collector"
)

// Historian is the optional ability of a source to read what it kept.
type Historian interface {
	// History reads the raw values of the tags of these loops with
	// from <= time < to (ms UTC) and puts them tag by tag, each in the order of
	// time. Tags of which the server keeps no history are left out; it is an
	// error when that is true of all.
	History(ctx context.Context, loops []collector.LoopID, from, to int64, put func([]collector.Sample)) error
}

var _ Historian = (*Source)(nil)

// historyPage is how many values of one tag are asked for at a time.
const historyPage = 1000

// errNotWatching is what history gives while there is no session to read with.
var errNotWatching = errors.New("no history can be read while the source is down")

// History implements [Historian]. It uses the session of the watch: a server may
// not have another to give.
func (s *Source) History(ctx context.Context, loops []collector.LoopID, from, to int64, put func([]collector.Sample)) error {
	s.mu.Lock()
	if s.live == nil {
		s.mu.Unlock()
		return errNotWatching
	}
	sess := *s.live // a copy: the watch changes its own batch sizes
	s.mu.Unlock()
	var nodes []*ua.HistoryReadValueID
	var of []*item
	for _, sub := range s.subs {
		part := &subscription{}
		for _, it := range sub.items {
			wanted := slices.DeleteFunc(slices.Clone(it.bindings), func(b collector.Binding) bool { return !slices.Contains(loops, b.Loop) })
			if len(wanted) > 0 {
				part.items = append(part.items, &item{address: it.address, bindings: wanted, index: -1, named: it.named})
			}
		}
		found, err := s.locate(ctx, &sess, part.items)
		if err != nil {
			return err
		}
		for _, o := range found {
			if o.refusal == nil {
				o.it.index, o.it.words = o.to.index, o.words
				nodes = append(nodes, &ua.HistoryReadValueID{NodeID: o.to.node, DataEncoding: &ua.QualifiedName{}})
				of = append(of, o.it)
			}
		}
	}
	if len(nodes) == 0 {
		return fmt.Errorf("none of these loops has a tag on source %s", s.name)
	}
	h := historyRead{Source: s, sess: &sess, span: &ua.ReadRawModifiedDetails{StartTime: time.UnixMilli(from).UTC(),
		EndTime: time.UnixMilli(to).UTC(), NumValuesPerNode: historyPage}, from: from, to: to, put: put}
	return h.all(ctx, nodes, of)
}

type historyRead struct {
	*Source
	sess     *session
	span     *ua.ReadRawModifiedDetails
	from, to int64
	put      func([]collector.Sample)
	batch    []collector.Sample
}

func (h *historyRead) all(ctx context.Context, nodes []*ua.HistoryReadValueID, of []*item) error {
	kept, refused := 0, ua.StatusCode(0)
	err := inBatches(&h.sess.histories, len(nodes), func(from, to int) error {
		got, err := h.sess.history(ctx, h.span, nodes[from:to])
		if err != nil {
			return err
		}
		for k, r := range got {
			i := from + k
			if r.StatusCode>>30 > 1 {
				refused = r.StatusCode
				continue
			}
			kept++
			for {
				h.page(of[i], r)
				if len(r.ContinuationPoint) == 0 {
					break
				}
				next := *nodes[i]
				next.ContinuationPoint = r.ContinuationPoint
				more, err := h.sess.history(ctx, h.span, []*ua.HistoryReadValueID{&next})
				if err != nil {
					return err
				}
				r = more[0]
			}
		}
		return nil
	})
	if err != nil {
		return fmt.Errorf("reading history: %w", h.explain(err))
	}
	if kept == 0 && refused != 0 {
		return fmt.Errorf("the server keeps no history of these tags (%s); hint: the gap stays a gap, or have the server keep history", statusName(refused))
	}
	return nil
}

// page puts one page of one tag.
func (h *historyRead) page(it *item, r *ua.HistoryReadResult) {
	data, ok := plain(r.HistoryData).(*ua.HistoryData)
	if !ok || data == nil {
		return
	}
	h.batch = h.batch[:0]
	for _, v := range data.DataValues {
		if v == nil {
			continue
		}
		t := millis(v.SourceTimestamp)
		if t == 0 {
			t = millis(v.ServerTimestamp)
		}
		if t < h.from || t >= h.to || (it.seen && t <= it.time) { // bounds, or a page that overlaps
			continue
		}
		q := quality(v.Status)
		x, text := math.NaN(), ""
		if q != collector.Bad {
			x, text, q = usable(v.Value, it.index, q)
		}
		it.seen, it.time = true, t
		h.batch = it.spread(h.batch, collector.Sample{Quality: q, Time: t, Arrived: t, Value: x}, text)
	}
	if len(h.batch) > 0 {
		h.put(h.batch)
	}
}
