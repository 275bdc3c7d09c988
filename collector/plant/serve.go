package plant

import (
	"context"
	"errors"
	"fmt"
	"time"
)

// ServeOptions say how the works is put on the wire.
type ServeOptions struct {
	OPCUALoops int              // the first so many loops over OPC UA, the rest over MQTT; 0 = 8
	Factor     float64          // seconds of plant time per second of Clock; 0 = 1
	Clock      func() time.Time // of the works and its servers; nil = time.Now
}

// Server is the works on the wire. Its methods are safe for concurrent use.
type Server struct {
	ua     *uaServer
	mq     *broker
	cancel context.CancelFunc
	paced  chan struct{}
	err    error // of the pacing, read after paced is closed
}

// burst is how many steps are made at once to catch up with the clock: enough
// for a busy machine, few enough not to flood the queues of a client.
const burst = 120

// pause is the time between looks at the clock.
const pause = 5 * time.Millisecond

// Serve starts both servers on free loopback ports and paces the works, from its
// present plant time on, until the context ends or Close is called. The works
// belongs to the server from now on.
func Serve(ctx context.Context, p *Plant, o ServeOptions) (*Server, error) {
	if o.OPCUALoops == 0 {
		o.OPCUALoops = defaultOPCUALoops
	}
	if o.OPCUALoops < 0 || o.OPCUALoops > p.Len() {
		return nil, fmt.Errorf("%d loops over opc ua: the works has %d; hint: 1 to %d", o.OPCUALoops, p.Len(), p.Len())
	}
	if o.Factor == 0 {
		o.Factor = 1
	}
	if o.Factor < 0 {
		return nil, fmt.Errorf("factor %g: plant time cannot run backwards; hint: 60 is a minute a second", o.Factor)
	}
	if o.Clock == nil {
		o.Clock = time.Now
	}
	begin := o.Clock() // what passes until the servers are up is caught up with
	ctx, cancel := context.WithCancel(ctx)
	s := &Server{cancel: cancel, paced: make(chan struct{})}
	var err error
	if s.ua, err = serveOPCUA(ctx, p, o.OPCUALoops, time.UnixMilli(p.Now()).UTC(), o.Clock); err != nil {
		cancel()
		return nil, err
	}
	if s.mq, err = serveMQTT(); err != nil {
		cancel()
		s.ua.close()
		return nil, err
	}
	go s.pace(ctx, p, o, begin)
	return s, nil
}

// pace is the one goroutine that steps the works and tells both servers.
func (s *Server) pace(ctx context.Context, p *Plant, o ServeOptions, begin time.Time) {
	defer close(s.paced)
	t := time.NewTicker(pause)
	defer t.Stop()
	made := int64(0)
	for {
		select {
		case <-ctx.Done():
			return
		case <-t.C:
		}
		due := int64(o.Clock().Sub(begin).Seconds()*o.Factor) - made
		for range min(due, burst) {
			if s.err = s.step(p, o.OPCUALoops); s.err != nil {
				return
			}
			made++
		}
	}
}

func (s *Server) step(p *Plant, uaLoops int) error {
	p.Step()
	for i, l := range p.loops {
		f, ok := p.Frame(i)
		if !ok {
			continue
		}
		if i < uaLoops {
			s.ua.put(i, f)
		} else if err := s.mq.put(l, f); err != nil {
			return fmt.Errorf("publish of %s: %w", l.name, err)
		}
	}
	s.ua.tick(p.Now())
	return nil
}

// Endpoint is the URL of the OPC UA server.
func (s *Server) Endpoint() string { return s.ua.endpoint }

// Broker is the URL of the MQTT broker.
func (s *Server) Broker() string { return s.mq.url }

// Writes counts what clients tried to change over OPC UA: attributes written,
// methods called, history or nodes changed.
func (s *Server) Writes() uint64 { return s.ua.writes.Load() + s.ua.calls.Load() }

// ForeignPublishes counts what clients published to the broker, wills included.
func (s *Server) ForeignPublishes() uint64 { return s.mq.foreign.Load() }

// Dropped counts values that a client was too slow for, over both servers.
func (s *Server) Dropped() uint64 {
	s.ua.subs.mu.Lock()
	defer s.ua.subs.mu.Unlock()
	return s.ua.subs.dropped + uint64(s.mq.srv.Info.Clone().MessagesDropped)
}

// PlantTime is the plant time of the last step, as told to clients.
func (s *Server) PlantTime() time.Time { return s.ua.clock.now.Load().SourceTimestamp }

// Close ends the pacing and both servers and waits for them. Clients should be
// gone before.
func (s *Server) Close() error {
	s.cancel()
	<-s.paced
	s.ua.close()
	return errors.Join(s.err, s.mq.close())
}
