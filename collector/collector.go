// Package collector turns what sources deliver into frames.
//
// A source (OPC UA, MQTT) puts [Sample]s and [Tick]s into an [Intake]; the
// assembler makes one [Frame] per controller scan out of them. The frame is the
// border of determinism: everything after it is a pure function of the loop
// list, the starting memory and the sequence of frames.
//
// All times in this package are int64 milliseconds since 1970, UTC.
package collector

import (
	"context"
	"iter"
	"math"
	"time"
)

// LoopID is the index of a loop in the loop list in force. It is not stable
// across reloads; the name of the loop is.
type LoopID uint32

// Role says what a tag means to its loop.
type Role uint8

// Roles of a tag. RoleCond0 to RoleCond0+MaxConds-1 are the tags of
// active_when and suppress_when.
const (
	RolePV Role = iota
	RoleSP
	RoleOP
	RoleMode
	RoleMode2 // second tag of a mode given by two tags ("a & b")
	RoleGain
	RoleReset
	RolePosition
	RoleFeedforward
	RoleAlive
	RoleCond0
)

// MaxConds is the number of condition tags a loop may have: four comparisons
// in active_when and four in suppress_when.
const MaxConds = 8

// Quality of a sample, by the two severity bits of OPC UA or what comes
// closest to them elsewhere.
type Quality uint8

const (
	Good Quality = iota
	Uncertain
	Bad // Value is not used
)

// Sample is one value of one tag as delivered. Value is NaN where the source
// had none. Lost says that samples of this tag are known to be missing before
// this one (queue overflow, sequence gap).
type Sample struct {
	Loop    LoopID
	Role    Role
	Quality Quality
	Lost    bool
	// Unconfirmed says that the name behind the value is not confirmed (a
	// Sparkplug alias map of before).
	Unconfirmed bool
	Time        int64 // source time, ms UTC
	Arrived     int64 // wall clock at arrival, ms UTC
	Value       float64
}

// Group is a life group: loops whose values are known to be alive or not
// together (an OPC UA subscription, an MQTT publisher). Groups are numbered by
// the daemon's sources; the pair of source number and group number is unique.
type Group struct {
	Source uint16 // index of the source in the configuration
	Sub    uint16
}

// Tick says what a life group has delivered: everything up to Through (ms UTC,
// in the time of the values) has arrived. It speaks of delivery, never of what a
// clock says. Alive false means that the link is lost; ticks then stop.
type Tick struct {
	Group   Group
	Through int64
	Arrived int64
	Alive   bool
}

// Intake takes what a source delivers. Implementations never block and copy
// what they keep. Ticks are never dropped; samples may be, and are counted.
type Intake interface {
	// Join says that the PV of these loops lives and dies with the group. It
	// replaces what was said of the group before.
	Join(g Group, loops []LoopID)
	Put([]Sample)
	Tick(Tick)
}

// Binding ties one address of a source to the loop and role it feeds. One
// address may have several bindings.
type Binding struct {
	Loop    LoopID
	Name    string // of the loop, for messages
	Role    Role
	Address string   // as in the loop list, without the source
	Sample  int64    // wished sampling interval, ms
	Modes   *ModeMap // for RoleMode and RoleMode2: what words mean
}

// Source delivers samples of its bindings until the context ends. It owns its
// connection and reconnects by itself; Run returns an error only for what
// cannot mend itself (a wrong configuration).
type Source interface {
	Run(ctx context.Context, in Intake) error
	State() SourceState
}

// SourceState is what a source says of itself. It is safe to ask at any time.
type SourceState struct {
	Name     string            `json:"name"`
	Kind     string            `json:"kind"`
	Link     string            `json:"link"`                // "down", "connecting", "watching"
	Since    int64             `json:"since"`               // of Link, ms UTC wall clock
	LastData int64             `json:"last_data"`           // wall clock of the last sign of life, ms UTC; 0 = never
	Problem  string            `json:"problem,omitempty"`   // why it is down or degraded, in words
	Hint     string            `json:"hint,omitempty"`      // how to mend it
	Counts   map[string]uint64 `json:"counts,omitempty"`    // values, dropped, duplicates, gaps, ...
	LagMs    int64             `json:"lag_ms"`              // arrival minus source time, running median
	Refused  []RefusedTag      `json:"refused,omitempty"`   // tags the source cannot deliver
	CertDays int               `json:"cert_days,omitempty"` // days until the own certificate expires; negative: it has

	ClockOffsetMs  int64 `json:"clock_offset_ms"`            // arrival minus the server's own time, running median
	ServerCertDays int   `json:"server_cert_days,omitempty"` // days until the server's certificate expires; negative: it has
}

// DaysLeft is how long a certificate is valid yet, in days: at least 1 while it is,
// at most -1 after. Zero stands for a certificate that is not there.
func DaysLeft(until, now time.Time) int {
	if until.IsZero() {
		return 0
	}
	d := until.Sub(now).Hours() / 24
	if d > 0 {
		return int(math.Ceil(d))
	}
	return min(-1, int(math.Floor(d)))
}

// RefusedTag is a tag that the source cannot deliver, and why.
type RefusedTag struct {
	Loop    string `json:"loop"`
	Address string `json:"address"`
	Why     string `json:"why"`
}

// Prober is the optional ability of a source to read every tag once.
type Prober interface {
	// Probe reads each binding once and reports what came. It never changes
	// anything on the server.
	Probe(ctx context.Context) ([]ProbeResult, error)
}

// ProbeResult is the answer to the probe of one binding.
type ProbeResult struct {
	Binding Binding
	Sample  Sample
	Text    string // the value as the source shows it
	Err     error  // nil, or why there is no value, with a hint
	// EULow and EUHigh are the range the source states for the tag, NaN when
	// it states none; Unit is its unit of measurement.
	EULow, EUHigh float64
	Unit          string
}

// Frame is all that one controller scan of one loop says. PV, SP and OP are in
// the units of the source; NaN is bad quality or no value, and is always the
// same NaN; -0 is 0. Gain and Reset are as read from tags, in the loop list's
// internal form (gain in %/%, reset in seconds); 0 is unchanged or not read.
// Feedforward and Position are NaN where the loop has none.
type Frame struct {
	Time        int64 // ms UTC
	PV, SP, OP  float32
	Gain, Reset float32
	Feedforward float32
	Position    float32
	Mode        Mode
	Flags       Flags
}

// NaN32 is the one NaN that frames hold.
var NaN32 = float32(math.NaN())

// Clean32 rounds a value to what a frame holds: float32, one NaN (infinities
// included), no negative zero.
func Clean32(v float64) float32 {
	f := float32(v)
	if f != f || f > math.MaxFloat32 || f < -math.MaxFloat32 {
		return NaN32
	}
	if f == 0 {
		return 0
	}
	return f
}

// Flags qualify a frame.
type Flags uint16

const (
	Held        Flags = 1 << iota // PV did not arrive anew: the source lives and says nothing changed
	UncertainPV                   // PV is of uncertain quality
	Gap                           // the loop was out of sight before this frame; on a frame without values: from here on
	Lost                          // samples are known to be missing before this frame
	ClockStep                     // time of the source stepped before this frame
	Suppressed                    // suppress_when holds: advisories suppressed by design
	Inactive                      // active_when does not hold: the law cannot act
	Backfilled                    // read from history, not live
	Unconfirmed                   // the names of the values are not confirmed (Sparkplug alias map of before)
	Thinned                       // frames were left out on purpose before this one
	Marked                        // the loop's range, action, process, sampling or tags changed here
)

// FlagWords are the words of the flags in a trend CSV, in bit order.
var FlagWords = [...]string{"held", "uncertain", "gap", "lost", "clock-step", "suppressed", "inactive", "backfilled", "unconfirmed", "thinned", "mark"}

// FrameReader reads the kept frames of one loop, oldest first, with
// from <= Time < to. An error ends the sequence.
type FrameReader interface {
	Frames(ctx context.Context, loop string, from, to int64) iter.Seq2[Frame, error]
}
