package opcua

import (
	"cmp"
	"context"
	"crypto/rsa"
	"errors"
	"fmt"
	"io"
	"net"
	"sync"
	"syscall"
	"time"

	opcualib "github.com/gopcua/opcua"
	"github.com/gopcua/opcua/id"
	"github.com/gopcua/opcua/ua"
	"github.com/gopcua/opcua/uacp"
	"github.com/gopcua/opcua/uasc"
)

// reader is all that this package can ask of a server. It cannot change
// anything there but the subscriptions of its own session.
type reader interface {
	read(ctx context.Context, nodes []*ua.ReadValueID) ([]*ua.DataValue, error)
	browse(ctx context.Context, nodes []*ua.BrowseDescription) ([]*ua.BrowseResult, error)
	browseNext(ctx context.Context, points [][]byte) ([]*ua.BrowseResult, error)
	translate(ctx context.Context, paths []*ua.BrowsePath) ([]*ua.BrowsePathResult, error)
	history(ctx context.Context, span *ua.ReadRawModifiedDetails, nodes []*ua.HistoryReadValueID) ([]*ua.HistoryReadResult, error)
	subscribe(ctx context.Context, req *ua.CreateSubscriptionRequest) (*ua.CreateSubscriptionResponse, error)
	monitor(ctx context.Context, sub uint32, items []*ua.MonitoredItemCreateRequest) ([]*ua.MonitoredItemCreateResult, error)
	publish(ctx context.Context, acks []*ua.SubscriptionAcknowledgement) (*ua.PublishResponse, error)
	republish(ctx context.Context, sub, seq uint32) (*ua.NotificationMessage, error)
}

// door says how to open a secure channel. Certificate of the server is what has
// been verified, never what an answer claims.
type door struct {
	url, policy string
	mode        ua.MessageSecurityMode
	server      []byte // certificate of the server, DER, leaf only
	cert        []byte // own certificate, DER
	key         *rsa.PrivateKey
	tokens      []*ua.UserTokenPolicy
	dial, call  time.Duration
	wait        time.Duration // longest wait for a publish answer
	token       time.Duration // lifetime of the channel's key; 0 = an hour
}

// link is one connection to a server. A link is used once: after an error a
// new one is dialled, since the library lets a foreign certificate replace the
// pinned one inside a client that has failed.
type link struct {
	client *opcualib.Client
	call   time.Duration
	socket *sockets
}

// sockets are the sockets of one dial. The library holds a lock while it renews
// its key, whatever becomes of the context of others: on a dead link only the
// end of the socket frees them at once.
type sockets struct {
	mu  sync.Mutex
	raw []syscall.RawConn
}

func (s *sockets) control(_, _ string, c syscall.RawConn) error {
	s.mu.Lock()
	defer s.mu.Unlock()
	s.raw = append(s.raw, c)
	return nil
}

// hangUp ends the connection at once, without a word to the server.
func (l *link) hangUp() {
	l.socket.mu.Lock()
	defer l.socket.mu.Unlock()
	for _, c := range l.socket.raw {
		_ = c.Control(func(fd uintptr) { // fails on a closed one, which is as well
			_ = syscall.Shutdown(int(fd), syscall.SHUT_RDWR)
		})
	}
}

// ticket is a session that can be resumed on another link.
type ticket struct {
	session *opcualib.Session
	life    time.Duration
}

func (d door) options(s *sockets) []opcualib.Option {
	o := []opcualib.Option{
		opcualib.AutoReconnect(false),
		opcualib.RequestTimeout(d.wait),
		opcualib.Lifetime(cmp.Or(d.token, time.Hour)),
		opcualib.Dialer(&uacp.Dialer{ClientACK: uacp.DefaultClientACK,
			Dialer: &net.Dialer{Timeout: d.dial, KeepAlive: 15 * time.Second, Control: s.control}}),
	}
	if d.policy == "" || d.policy == ua.SecurityPolicyURINone {
		if d.cert != nil { // an encrypted password needs the key even without a secured channel
			o = append(o, opcualib.PrivateKey(d.key))
		}
		return o
	}
	verified := &ua.EndpointDescription{SecurityPolicyURI: d.policy, SecurityMode: d.mode, ServerCertificate: d.server, UserIdentityTokens: d.tokens}
	return append(o, opcualib.SecurityFromEndpoint(verified, ua.UserTokenTypeAnonymous),
		opcualib.Certificate(d.cert), opcualib.PrivateKey(d.key))
}

// open dials the configured address and opens the secure channel.
func (d door) open(ctx context.Context) (*link, error) {
	socket := new(sockets)
	c, err := opcualib.NewClient(d.url, d.options(socket)...)
	if err != nil {
		return nil, err
	}
	ctx, cancel := context.WithTimeout(ctx, d.dial+d.call)
	defer cancel()
	if err := c.Dial(ctx); err != nil {
		if errors.Is(err, io.EOF) && d.policy != "" && d.policy != ua.SecurityPolicyURINone {
			return nil, d.whyHungUp(ctx, err)
		}
		return nil, err
	}
	return &link{client: c, call: d.call, socket: socket}, nil
}

// endpoints asks what the server offers, over an unsecured channel of its own.
func endpoints(ctx context.Context, url string, dial, call time.Duration) ([]*ua.EndpointDescription, error) {
	l, err := door{url: url, dial: dial, call: call, wait: call}.open(ctx)
	if err != nil {
		return nil, err
	}
	defer l.close(call)
	res, err := ask[*ua.GetEndpointsResponse](ctx, l, &ua.GetEndpointsRequest{EndpointURL: url})
	if err != nil {
		return nil, err
	}
	return res.Endpoints, nil
}

// begin makes a session and activates it.
func (l *link) begin(ctx context.Context, cfg *uasc.SessionConfig) error {
	ctx, cancel := context.WithTimeout(ctx, l.call)
	defer cancel()
	s, err := l.client.CreateSession(ctx, cfg)
	if err != nil {
		return err
	}
	if s == nil {
		return errSignature
	}
	return l.activate(ctx, s)
}

// resume puts a session of an earlier link to use on this one.
func (l *link) resume(ctx context.Context, t *ticket) error {
	ctx, cancel := context.WithTimeout(ctx, l.call)
	defer cancel()
	return l.activate(ctx, t.session)
}

func (l *link) activate(ctx context.Context, s *opcualib.Session) error {
	if err := l.client.ActivateSession(ctx, s); err != nil {
		return err
	}
	if l.client.Session() != s { // the library logs some failures and returns nil
		return errSignature
	}
	return nil
}

// leave ends the connection and keeps the session alive on the server.
func (l *link) leave() *ticket {
	s, _ := l.client.DetachSession(context.Background())
	l.close(time.Second)
	if s == nil {
		return nil
	}
	return &ticket{session: s, life: s.RevisedTimeout()}
}

// close ends the session, if there is one, and the connection.
func (l *link) close(limit time.Duration) {
	ctx, cancel := context.WithTimeout(context.Background(), limit)
	defer cancel()
	defer time.AfterFunc(limit+time.Second, l.hangUp).Stop()
	_ = l.client.Close(ctx) // nothing can be done about a failed farewell
}

func ask[T ua.Response](ctx context.Context, l *link, req ua.Request) (T, error) {
	var res T
	ctx, cancel := context.WithTimeout(ctx, l.call)
	defer cancel()
	err := send(ctx, l, req, &res)
	return res, err
}

func send[T ua.Response](ctx context.Context, l *link, req ua.Request, res *T) error {
	return l.client.Send(ctx, req, func(v ua.Response) error {
		r, ok := v.(T)
		if !ok {
			return fmt.Errorf("the server answered %T to %T", v, req)
		}
		*res = r
		return nil
	})
}

// results checks that a server answered as many results as it was asked for.
func results[T any](got []T, want int, err error) ([]T, error) {
	if err == nil && len(got) != want {
		err = fmt.Errorf("the server gave %d results for %d nodes", len(got), want)
	}
	return got, err
}

func (l *link) read(ctx context.Context, nodes []*ua.ReadValueID) ([]*ua.DataValue, error) {
	res, err := ask[*ua.ReadResponse](ctx, l, &ua.ReadRequest{TimestampsToReturn: ua.TimestampsToReturnBoth, NodesToRead: nodes})
	if err != nil {
		return nil, err
	}
	return results(res.Results, len(nodes), nil)
}

func (l *link) browse(ctx context.Context, nodes []*ua.BrowseDescription) ([]*ua.BrowseResult, error) {
	res, err := ask[*ua.BrowseResponse](ctx, l, &ua.BrowseRequest{View: &ua.ViewDescription{ViewID: ua.NewTwoByteNodeID(0)}, NodesToBrowse: nodes})
	if err != nil {
		return nil, err
	}
	return results(res.Results, len(nodes), nil)
}

func (l *link) browseNext(ctx context.Context, points [][]byte) ([]*ua.BrowseResult, error) {
	res, err := ask[*ua.BrowseNextResponse](ctx, l, &ua.BrowseNextRequest{ContinuationPoints: points})
	if err != nil {
		return nil, err
	}
	return results(res.Results, len(points), nil)
}

func (l *link) translate(ctx context.Context, paths []*ua.BrowsePath) ([]*ua.BrowsePathResult, error) {
	res, err := ask[*ua.TranslateBrowsePathsToNodeIDsResponse](ctx, l, &ua.TranslateBrowsePathsToNodeIDsRequest{BrowsePaths: paths})
	if err != nil {
		return nil, err
	}
	return results(res.Results, len(paths), nil)
}

func (l *link) history(ctx context.Context, span *ua.ReadRawModifiedDetails, nodes []*ua.HistoryReadValueID) ([]*ua.HistoryReadResult, error) {
	res, err := ask[*ua.HistoryReadResponse](ctx, l, &ua.HistoryReadRequest{
		HistoryReadDetails: extension(id.ReadRawModifiedDetails_Encoding_DefaultBinary, span),
		TimestampsToReturn: ua.TimestampsToReturnBoth, NodesToRead: nodes,
	})
	if err != nil {
		return nil, err
	}
	return results(res.Results, len(nodes), nil)
}

func (l *link) subscribe(ctx context.Context, req *ua.CreateSubscriptionRequest) (*ua.CreateSubscriptionResponse, error) {
	return ask[*ua.CreateSubscriptionResponse](ctx, l, req)
}

func (l *link) monitor(ctx context.Context, sub uint32, items []*ua.MonitoredItemCreateRequest) ([]*ua.MonitoredItemCreateResult, error) {
	res, err := ask[*ua.CreateMonitoredItemsResponse](ctx, l, &ua.CreateMonitoredItemsRequest{
		SubscriptionID: sub, TimestampsToReturn: ua.TimestampsToReturnBoth, ItemsToCreate: items})
	if err != nil {
		return nil, err
	}
	return results(res.Results, len(items), nil)
}

// publish waits as long as the door's wait: an answer that comes after its
// request was given up would be lost.
func (l *link) publish(ctx context.Context, acks []*ua.SubscriptionAcknowledgement) (*ua.PublishResponse, error) {
	if acks == nil {
		acks = []*ua.SubscriptionAcknowledgement{}
	}
	var res *ua.PublishResponse
	err := send(ctx, l, &ua.PublishRequest{SubscriptionAcknowledgements: acks}, &res)
	return res, err
}

func (l *link) republish(ctx context.Context, sub, seq uint32) (*ua.NotificationMessage, error) {
	res, err := ask[*ua.RepublishResponse](ctx, l, &ua.RepublishRequest{SubscriptionID: sub, RetransmitSequenceNumber: seq})
	if err != nil {
		return nil, err
	}
	return res.NotificationMessage, nil
}

func extension(encoding uint32, value any) *ua.ExtensionObject {
	return &ua.ExtensionObject{EncodingMask: ua.ExtensionObjectBinary,
		TypeID: &ua.ExpandedNodeID{NodeID: ua.NewNumericNodeID(0, encoding)}, Value: value}
}
