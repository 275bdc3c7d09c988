// Package plant is the simulated water works Kestrel Fen: some two dozen PI
// control loops as a pure library without clock, and the same works behind a
// real OPC UA server and a real MQTT broker.
//
// [New] makes the works, [Plant.Step] advances it by one second of plant time,
// [Plant.Record] writes a recorded day, [Serve] puts it on the wire. [Process],
// [Controller], [Valve], [Load] and [Sensor] are the parts, usable alone.
//
// Caveats: dynamics are linear but for the titration curves, friction, limits
// and the split range; loops touch each other only where the works says so
// (cascade, pacing, shared header, pump pair).
package plant

import (
	"fmt"
	"math"
	"slices"
	"time"

	"midwatch/collector"
)

// stepMs is the step of plant time, ms.
const stepMs = 1000

// Kestrel Fen starts on this day unless told otherwise.
var defaultStart = time.Date(2026, 1, 5, 0, 0, 0, 0, time.UTC)

// Plant is the works. It is not safe for concurrent use.
type Plant struct {
	loops     []*loop
	start     int64 // ms UTC
	seconds   int64 // since start
	faults    []Fault
	events    []event
	headerAmp float64 // of the swing on the raw water header, %
}

// New makes the works at rest. Equal seeds give equal days.
func New(seed uint64) *Plant { return NewAt(seed, defaultStart) }

// NewAt is New with the plant time of the first frame less one second, rounded
// down to a whole second.
func NewAt(seed uint64, start time.Time) *Plant {
	p := &Plant{start: start.Unix() * 1000}
	dem := demand(p.hour())
	for i, s := range works {
		p.loops = append(p.loops, newLoop(s, seed, uint64(i), dem))
	}
	for _, l := range p.loops {
		if l.with != "" {
			l.peer = p.loops[p.index(l.with)]
		}
		if l.role == standbyPump {
			l.peer.peer = l
		}
	}
	return p
}

// Now is the plant time, ms UTC.
func (p *Plant) Now() int64 { return p.start + p.seconds*stepMs }

// Len is the number of loops.
func (p *Plant) Len() int { return len(p.loops) }

// Name is the name of a loop.
func (p *Plant) Name(i int) string { return p.loops[i].name }

func (p *Plant) index(name string) int {
	return slices.IndexFunc(p.loops, func(l *loop) bool { return l.name == name })
}

func (p *Plant) hour() float64 { return float64(p.Now()/1000%86400) / 3600 }

// Step advances the works by one second.
func (p *Plant) Step() {
	p.seconds++
	p.runEvents()
	dem := demand(p.hour())
	var header float64
	if p.headerAmp > 0 {
		header = p.headerAmp * math.Sin(2*math.Pi*float64(p.seconds)/HeaderPeriodS)
	}
	second := p.Now() / 1000
	for _, l := range p.loops {
		l.step(second, dem, header)
	}
}

// Frame gives what loop i publishes at this second; false when it has nothing
// new (a slow analyser, a data stop).
func (p *Plant) Frame(i int) (collector.Frame, bool) {
	l := p.loops[i]
	return l.frame(p.Now()), l.fresh && !l.stopped
}

// Record runs the works from its present time until plant time to, and emits
// the frames with from <= time < to, in order of time and loop.
func (p *Plant) Record(from, to time.Time, emit func(loop int, f collector.Frame)) error {
	if p.Now() >= from.UnixMilli() && p.seconds > 0 {
		return fmt.Errorf("plant time is %s already; hint: record before the works has passed the start of the span",
			time.UnixMilli(p.Now()).UTC().Format(time.RFC3339))
	}
	for p.Now()+stepMs < to.UnixMilli() {
		p.Step()
		if p.Now() < from.UnixMilli() {
			continue
		}
		for i := range p.loops {
			if f, ok := p.Frame(i); ok {
				emit(i, f)
			}
		}
	}
	return nil
}
