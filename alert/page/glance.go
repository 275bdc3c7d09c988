package page

import (
	"sync"
	"time"
)

// glance keeps what all open pages ask for again and again for a moment, so
// that fifty pages cost little more than one.
type glance struct {
	mu      sync.Mutex
	loops   []LoopState
	loopsAt time.Time
	sum     Summary
	sumAt   time.Time
}

// loopsFor and sumFor are how old an answer may be.
const (
	loopsFor = 5 * time.Second
	sumFor   = streamEvery
)

func (p *Page) loops(now time.Time) []LoopState {
	g := &p.glance
	g.mu.Lock()
	defer g.mu.Unlock()
	if d := now.Sub(g.loopsAt); d < 0 || d >= loopsFor {
		g.loops, g.loopsAt = p.o.House.Loops(), now
	}
	return g.loops
}

func (p *Page) summary(now time.Time) Summary {
	g := &p.glance
	g.mu.Lock()
	defer g.mu.Unlock()
	if d := now.Sub(g.sumAt); d < 0 || d >= sumFor {
		g.sum, g.sumAt = p.o.House.Summary(), now
	}
	return g.sum
}
