package opcua

import (
	"context"
	"sync"
	"sync/atomic"
	"time"

	"github.com/gopcua/opcua/ua"
)

// pump keeps publish requests outstanding and hands every answer over, in the
// order in which they came to hand. It ends when its context does.
type pump struct {
	reader reader
	out    chan answer
	live   atomic.Int32
	wg     sync.WaitGroup

	mu   sync.Mutex
	acks []*ua.SubscriptionAcknowledgement
}

// answer is one publish answer, or the error that ended its requests.
type answer struct {
	res  *ua.PublishResponse
	err  error
	took time.Duration
}

// startPump keeps n requests outstanding.
func startPump(ctx context.Context, r reader, n int) *pump {
	p := &pump{reader: r, out: make(chan answer, 64)}
	p.live.Store(int32(n))
	for range n {
		p.wg.Go(func() { p.run(ctx) })
	}
	return p
}

func (p *pump) run(ctx context.Context) {
	for ctx.Err() == nil {
		start := time.Now()
		acks := p.takeAcks()
		res, err := p.reader.publish(ctx, acks)
		if isAny(err, ua.StatusBadTooManyPublishRequests) {
			p.giveBack(acks)
			if p.live.Add(-1) > 0 {
				return // the others suffice
			}
			p.live.Add(1)
			select {
			case <-ctx.Done():
				return
			case <-time.After(time.Second):
			}
			continue
		}
		if ctx.Err() != nil {
			return
		}
		select {
		case p.out <- answer{res, err, time.Since(start)}:
		case <-ctx.Done():
			return
		}
		if err != nil {
			return
		}
	}
}

// acknowledge tells the server, with the next request, that a message has been
// taken over and need not be kept.
func (p *pump) acknowledge(sub, seq uint32) {
	p.giveBack([]*ua.SubscriptionAcknowledgement{{SubscriptionID: sub, SequenceNumber: seq}})
}

func (p *pump) giveBack(acks []*ua.SubscriptionAcknowledgement) {
	p.mu.Lock()
	p.acks = append(p.acks, acks...)
	p.mu.Unlock()
}

func (p *pump) takeAcks() []*ua.SubscriptionAcknowledgement {
	p.mu.Lock()
	defer p.mu.Unlock()
	acks := p.acks
	p.acks = nil
	return acks
}
