package opcua

import (
	"context"
	"errors"
	"fmt"
	"math"

	"github.com/gopcua/opcua/id"
	"github.com/gopcua/opcua/ua"
)

// session is what is known of the server while a session lives: its limits and
// its namespaces. Requests go one after the other, in batches that fit.
type session struct {
	reader
	spaces                                  []string // NamespaceArray
	reads, items, browses, paths, histories int      // most operations per request
}

// Batches when the server announces no limit: large enough to be quick, small
// enough for message limits of 64 KiB to 2 MiB.
const (
	usualBatch = 1000
	usualPaths = 500
)

// meet reads limits and namespaces; it comes before anything else.
func meet(ctx context.Context, r reader) (*session, error) {
	s := &session{reader: r, reads: usualBatch, items: usualBatch, browses: usualBatch, paths: usualPaths, histories: 100}
	limits := []struct {
		node uint32
		to   *int
	}{
		{id.Server_ServerCapabilities_OperationLimits_MaxNodesPerRead, &s.reads},
		{id.Server_ServerCapabilities_OperationLimits_MaxMonitoredItemsPerCall, &s.items},
		{id.Server_ServerCapabilities_OperationLimits_MaxNodesPerBrowse, &s.browses},
		{id.Server_ServerCapabilities_OperationLimits_MaxNodesPerTranslateBrowsePathsToNodeIDs, &s.paths},
		{id.Server_ServerCapabilities_OperationLimits_MaxNodesPerHistoryReadData, &s.histories},
	}
	nodes := []*ua.ReadValueID{value(ua.NewNumericNodeID(0, id.Server_NamespaceArray))}
	for _, l := range limits {
		nodes = append(nodes, value(ua.NewNumericNodeID(0, l.node)))
	}
	got, err := s.readAll(ctx, nodes)
	if err != nil {
		return nil, fmt.Errorf("reading the server's limits and namespaces: %w", err)
	}
	if v := got[0].Value; v != nil {
		s.spaces, _ = v.Value().([]string)
	}
	if s.spaces == nil {
		return nil, fmt.Errorf("the server's list of namespaces (i=2255) cannot be read: %s; hint: let this user read the Server object", statusName(got[0].Status))
	}
	for i, l := range limits {
		if x, _, ok := number(got[i+1].Value, -1); ok && x >= 1 && x <= math.MaxUint32 {
			*l.to = min(*l.to, int(x))
		}
	}
	return s, nil
}

// inBatches calls do for parts of [0, n) that fit into size, and halves the size
// when the server says that a part was too large. What worked is remembered.
func inBatches(size *int, n int, do func(from, to int) error) error {
	for from := 0; from < n; {
		to := min(from+*size, n)
		err := do(from, to)
		switch {
		case err == nil:
			from = to
		case tooLarge(err) && to-from > 1:
			*size = max(1, (to-from)/2)
		default:
			return err
		}
	}
	return nil
}

func tooLarge(err error) bool {
	return isAny(err, ua.StatusBadTooManyOperations, ua.StatusBadRequestTooLarge, ua.StatusBadResponseTooLarge,
		ua.StatusBadEncodingLimitsExceeded, ua.StatusBadTCPMessageTooLarge)
}

func isAny(err error, codes ...ua.StatusCode) bool {
	for _, c := range codes {
		if errors.Is(err, c) {
			return true
		}
	}
	return false
}

func value(node *ua.NodeID) *ua.ReadValueID { return attribute(node, ua.AttributeIDValue) }

func attribute(node *ua.NodeID, a ua.AttributeID) *ua.ReadValueID {
	return &ua.ReadValueID{NodeID: node, AttributeID: a, DataEncoding: &ua.QualifiedName{}}
}

func (s *session) readAll(ctx context.Context, nodes []*ua.ReadValueID) ([]*ua.DataValue, error) {
	return gather(&s.reads, nodes, func(part []*ua.ReadValueID) ([]*ua.DataValue, error) { return s.read(ctx, part) })
}

func (s *session) translateAll(ctx context.Context, paths []*ua.BrowsePath) ([]*ua.BrowsePathResult, error) {
	return gather(&s.paths, paths, func(part []*ua.BrowsePath) ([]*ua.BrowsePathResult, error) { return s.translate(ctx, part) })
}

func (s *session) monitorAll(ctx context.Context, sub uint32, items []*ua.MonitoredItemCreateRequest) ([]*ua.MonitoredItemCreateResult, error) {
	return gather(&s.items, items, func(part []*ua.MonitoredItemCreateRequest) ([]*ua.MonitoredItemCreateResult, error) {
		return s.monitor(ctx, sub, part)
	})
}

func gather[A, B any](size *int, in []A, do func([]A) ([]B, error)) ([]B, error) {
	out := make([]B, 0, len(in))
	err := inBatches(size, len(in), func(from, to int) error {
		part, err := do(in[from:to])
		if err == nil {
			out = append(out, part...)
		}
		return err
	})
	return out, err
}

// children browses nodes along a reference type and its subtypes, following
// continuation points to their end.
func (s *session) children(ctx context.Context, nodes []*ua.NodeID, reference uint32) ([][]*ua.ReferenceDescription, error) {
	what := make([]*ua.BrowseDescription, len(nodes))
	for i, n := range nodes {
		what[i] = &ua.BrowseDescription{NodeID: n, BrowseDirection: ua.BrowseDirectionForward,
			ReferenceTypeID: ua.NewNumericNodeID(0, reference), IncludeSubtypes: true, ResultMask: uint32(ua.BrowseResultMaskAll)}
	}
	var out [][]*ua.ReferenceDescription
	err := inBatches(&s.browses, len(what), func(from, to int) error {
		got, err := s.browse(ctx, what[from:to])
		if err != nil {
			return err
		}
		for _, r := range got {
			refs := r.References
			for point := r.ContinuationPoint; len(point) > 0; {
				next, err := s.browseNext(ctx, [][]byte{point})
				if err != nil {
					return err
				}
				refs = append(refs, next[0].References...)
				point = next[0].ContinuationPoint
			}
			out = append(out, refs)
		}
		return nil
	})
	return out, err
}
