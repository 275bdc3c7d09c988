package plant

import (
	"context"
	"fmt"
	"net"
	"sync/atomic"
	"time"

	"github.com/gopcua/opcua/id"
	"github.com/gopcua/opcua/server"
	"github.com/gopcua/opcua/server/attrs"
	"github.com/gopcua/opcua/ua"
	"github.com/gopcua/opcua/uasc"

	"midwatch/collector"
)

// uaServer is the works behind OPC UA.
type uaServer struct {
	srv      *server.Server
	subs     *subscriptions
	endpoint string
	values   []*uaLoop
	clock    *uaValue
	writes   atomic.Uint64
	calls    atomic.Uint64
}

// uaLoop holds the nodes of a loop; gain, reset and position are nil where the
// works does not publish them.
type uaLoop struct{ pv, sp, op, mode, gain, reset, position *uaValue }

// uaValue is the value of one node: written by the pacing, read by the server.
type uaValue struct {
	node *ua.NodeID
	key  string
	now  atomic.Pointer[ua.DataValue]
}

func (v *uaValue) set(x any, at time.Time) {
	v.now.Store(&ua.DataValue{EncodingMask: ua.DataValueValue | ua.DataValueSourceTimestamp | ua.DataValueServerTimestamp,
		Value: ua.MustVariant(x), SourceTimestamp: at, ServerTimestamp: at})
}

// namespace counts what clients try to write. Nodes are writable on purpose: a
// watch that never writes is only proven where it could have.
type namespace struct {
	*server.NodeNameSpace
	writes *atomic.Uint64
	types  map[string]*ua.NodeID // data types of the variables, by node id
}

// Attribute answers for the data type itself: the library would keep it where it
// also looks for the type definition.
func (n *namespace) Attribute(node *ua.NodeID, attr ua.AttributeID) *ua.DataValue {
	if typ := n.types[node.String()]; attr == ua.AttributeIDDataType && typ != nil {
		return server.DataValueFromValue(typ)
	}
	return n.NodeNameSpace.Attribute(node, attr)
}

// SetAttribute accepts the write and forgets it: the next step of the works
// would overwrite it anyway.
func (n *namespace) SetAttribute(node *ua.NodeID, _ ua.AttributeID, _ *ua.DataValue) ua.StatusCode {
	n.writes.Add(1)
	if n.Node(node) == nil {
		return ua.StatusBadNodeIDUnknown
	}
	return ua.StatusOK
}

// serveOPCUA starts the server on a free loopback port.
func serveOPCUA(ctx context.Context, p *Plant, loops int, now time.Time, clock func() time.Time) (*uaServer, error) {
	port, err := freePort()
	if err != nil {
		return nil, err
	}
	u := &uaServer{endpoint: fmt.Sprintf("opc.tcp://127.0.0.1:%d", port)}
	u.srv = server.New(server.EndPoint("127.0.0.1", port), server.EnableSecurity("None", ua.MessageSecurityModeNone),
		server.EnableAuthMode(ua.UserTokenTypeAnonymous), server.ServerName("Kestrel Fen simulated plant"),
		server.ProductName("simulated plant"), server.ManufacturerName("Kestrel Fen"))
	u.subs = newSubscriptions(ctx, u.srv, clock)
	u.countCalls()
	inner := server.NewNodeNameSpace(u.srv, URI)
	ns := &namespace{NodeNameSpace: inner, writes: &u.writes, types: map[string]*ua.NodeID{}}
	// The library's constructor registers its own namespace; ours stands in
	// its place, under the same index.
	u.srv.Namespaces()[inner.ID()] = ns
	u.build(p, loops, ns, now)
	if err := u.srv.Start(ctx); err != nil {
		return nil, fmt.Errorf("opc ua server on port %d: %w", port, err)
	}
	return u, nil
}

// freePort asks the system for a port. The library's server cannot say which
// port it got for 0, so there is a moment in which another program may take it.
func freePort() (int, error) {
	l, err := net.Listen("tcp", "127.0.0.1:0")
	if err != nil {
		return 0, fmt.Errorf("no free loopback port: %w", err)
	}
	defer l.Close()
	return l.Addr().(*net.TCPAddr).Port, nil
}

// build makes Objects / Kestrel Fen / area / loop / value with its EURange.
func (u *uaServer) build(p *Plant, loops int, ns *namespace, now time.Time) {
	root := ns.Objects()
	n0, _ := u.srv.Namespace(0)
	n0.Objects().AddRef(root, id.Organizes, true)
	areas := map[string]*server.Node{}
	for _, l := range p.loops[:loops] {
		area := areas[l.area]
		if area == nil {
			area = u.folder(ns, root, l.area, l.area)
			areas[l.area] = area
		}
		f := u.folder(ns, area, l.name, l.name+" "+l.service)
		v := &uaLoop{
			pv: u.variable(ns, f, l.name, "PV", id.Double, &ua.Range{Low: l.low, High: l.high}),
			sp: u.variable(ns, f, l.name, "SP", id.Double, &ua.Range{Low: l.low, High: l.high}),
			op: u.variable(ns, f, l.name, "OP", id.Double, &ua.Range{Low: 0, High: 100}), mode: u.variable(ns, f, l.name, "MODE", id.Int32, nil)}
		if l.gainTags {
			v.gain = u.variable(ns, f, l.name, "GAIN", id.Double, nil)
			v.reset = u.variable(ns, f, l.name, "RESET", id.Double, nil)
		}
		if l.positionTag {
			v.position = u.variable(ns, f, l.name, "POSITION", id.Double, &ua.Range{Low: 0, High: 100})
		}
		u.values = append(u.values, v)
		v.set(l.frame(now.UnixMilli()), now)
	}
	u.clock = &uaValue{node: ua.NewNumericNodeID(0, id.Server_ServerStatus_CurrentTime)}
	u.clock.key = u.clock.node.String()
	u.clock.set(now, now)
	// The server's clock is the clock of the plant: it says up to when values
	// have been delivered.
	n0.AddNode(server.NewNode(u.clock.node, server.Attributes{
		ua.AttributeIDBrowseName: server.DataValueFromValue(attrs.BrowseName("CurrentTime")),
		ua.AttributeIDNodeClass:  server.DataValueFromValue(uint32(ua.NodeClassVariable)),
	}, nil, u.clock.now.Load))
}

func (u *uaServer) folder(ns *namespace, parent *server.Node, name, shown string) *server.Node {
	n := ns.node("folder:"+name, name, shown, ua.NodeClassObject, id.FolderType, nil)
	parent.AddRef(n, id.Organizes, true)
	return n
}

func (u *uaServer) variable(ns *namespace, folder *server.Node, loop, name string, typ uint32, eu *ua.Range) *uaValue {
	v := &uaValue{}
	n := ns.node(loop+"."+name, name, name, ua.NodeClassVariable, id.BaseDataVariableType, v.now.Load)
	v.node, v.key = n.ID(), n.ID().String()
	ns.types[v.key] = ua.NewNumericNodeID(0, typ)
	folder.AddRef(n, id.HasComponent, true)
	if eu != nil {
		r := ns.node(loop+"."+name+".EURange", "EURange", "EURange", ua.NodeClassVariable, id.PropertyType,
			func() *ua.DataValue { return server.DataValueFromValue(ua.NewExtensionObject(eu)) })
		ns.types[r.ID().String()] = ua.NewNumericNodeID(0, id.Range)
		n.AddRef(r, id.HasProperty, true)
	}
	return v
}

// node makes a node of the namespace. The library's own constructors give no
// type definition, and the one for folders panics.
func (n *namespace) node(key, name, shown string, class ua.NodeClass, typ uint32, value server.ValueFunc) *server.Node {
	access := byte(ua.AccessLevelTypeCurrentRead | ua.AccessLevelTypeCurrentWrite)
	text := &ua.LocalizedText{EncodingMask: ua.LocalizedTextText}
	node := server.NewNode(ua.NewStringNodeID(n.ID(), key), server.Attributes{
		ua.AttributeIDNodeClass:   server.DataValueFromValue(uint32(class)),
		ua.AttributeIDBrowseName:  server.DataValueFromValue(&ua.QualifiedName{NamespaceIndex: n.ID(), Name: name}),
		ua.AttributeIDDisplayName: server.DataValueFromValue(attrs.DisplayName(shown, "en")),
	}, server.References{{
		ReferenceTypeID: ua.NewNumericNodeID(0, id.HasTypeDefinition), IsForward: true, NodeID: ua.NewNumericExpandedNodeID(0, typ),
		BrowseName: &ua.QualifiedName{}, DisplayName: text, NodeClass: ua.NodeClassObjectType, TypeDefinition: ua.NewNumericExpandedNodeID(0, 0),
	}}, value)
	if class == ua.NodeClassVariable {
		for a, x := range map[ua.AttributeID]any{ua.AttributeIDAccessLevel: access, ua.AttributeIDUserAccessLevel: access, ua.AttributeIDValueRank: int32(-1)} {
			// The library stores the attribute and answers with an error all the same.
			_ = node.SetAttribute(a, server.DataValueFromValue(x))
		}
	}
	return n.AddNode(node)
}

// countCalls counts the services by which a client could change something,
// beside Write, and refuses them.
func (u *uaServer) countCalls() {
	for _, t := range []uint16{id.CallRequest_Encoding_DefaultBinary, id.HistoryUpdateRequest_Encoding_DefaultBinary,
		id.AddNodesRequest_Encoding_DefaultBinary, id.AddReferencesRequest_Encoding_DefaultBinary,
		id.DeleteNodesRequest_Encoding_DefaultBinary, id.DeleteReferencesRequest_Encoding_DefaultBinary} {
		u.srv.RegisterHandler(t, u.refuse)
	}
}

func (u *uaServer) refuse(_ *uasc.SecureChannel, r ua.Request, _ uint32) (ua.Response, error) {
	u.calls.Add(1)
	return u.subs.serviceFault(r, ua.StatusBadServiceUnsupported)
}

var modeCode = map[collector.Mode]int32{collector.Manual: 0, collector.Auto: 1, collector.Cascade: 2, collector.RemoteSP: 3,
	collector.RemoteOutput: 4, collector.Tracking: 16, collector.OutOfService: 99}

// set stores what a frame says, without telling anyone.
func (v *uaLoop) set(f collector.Frame, at time.Time) {
	v.pv.set(float64(f.PV), at)
	v.sp.set(float64(f.SP), at)
	v.op.set(float64(f.OP), at)
	v.mode.set(modeCode[f.Mode], at)
	if v.gain != nil {
		v.gain.set(float64(f.Gain), at)
		v.reset.set(float64(f.Reset), at)
	}
	if v.position != nil {
		v.position.set(float64(f.Position), at)
	}
}

// put stores a frame and notifies whoever watches. SP, OP and mode go before PV,
// which opens the frame of a watcher.
func (u *uaServer) put(i int, f collector.Frame) {
	v := u.values[i]
	v.set(f, time.UnixMilli(f.Time).UTC())
	for _, x := range []*uaValue{v.mode, v.gain, v.reset, v.position, v.sp, v.op, v.pv} {
		if x != nil {
			u.subs.notify(x.node, x.key)
		}
	}
}

// tick tells the time of the plant.
func (u *uaServer) tick(ms int64) {
	at := time.UnixMilli(ms).UTC()
	u.clock.set(at, at)
	u.subs.notify(u.clock.node, u.clock.key)
}

func (u *uaServer) close() {
	_ = u.srv.Close()
	u.subs.wg.Wait()
}
