package configs

import (
	"fmt"
	"math"
)

// Loop is one loop of the loop list, as written and as understood. Numbers that
// were not given are NaN; texts that were not given are empty. Every column of
// the loop list has one field here.
type Loop struct {
	// What and where.
	Name    string // 1 to 64 printable characters, unique
	Was     string // name before a rename
	Service string // what it does, in the plant's words
	Area    string
	Source  string // name of the source of the tags; a tag may name another as "source!address"

	PV, SP, OP, ModeTag string
	ModeMap             string
	AliveTag            string
	GainTag, ResetTag   string
	Position            string // actual stem, speed or stroke

	// Ranges. PVLow..OPHigh are the scale (defaults 0 and 100).
	PVLow, PVHigh, OPLow, OPHigh float64
	PVRangeGiven                 bool    // false: the range is the default, a guess
	OPLimitLow, OPLimitHigh      float64 // as set in the controller, in OP units (default the range)
	SPLimitLow, SPLimitHigh      float64
	PVAlarmLow, PVAlarmHigh      float64 // NaN where none
	Unit                         string  // of PV

	// Controller, as the faceplate shows it.
	Action     Action
	Gain       float64
	GainUnit   GainUnit
	Reset      float64 // NaN where not given; see PropOnly
	ResetUnit  ResetUnit
	Rate       float64
	RateUnit   RateUnit
	Form       Form
	ResetGiven bool
	PropOnly   bool    // reset "none": P-only by design
	ResetS     float64 // seconds; as given in reset_s, or converted
	RateS      float64 // seconds; as given in rate_s, or converted; 0 = none
	GainPct    float64 // gain of the ideal form in %/%, NaN where unknown: what detection uses
	IdealReset float64 // reset time of the ideal form, s, NaN where unknown: what detection uses
	ScanS      float64 // controller interval, s; NaN unknown
	SampleS    float64 // interval of the data, s; NaN: learnt
	Report     Report
	SilenceS   float64 // s without a sign of life until stale-data; NaN: default
	PVFilterS  float64 // s; NaN unknown
	SPRamp     float64 // PV units per second; NaN none

	// Process.
	Process         Process
	Element         string // valve, actuator, pump, drive, heater, inner-loop or empty
	StrokeS         float64
	OPSplit         float64 // OP at which a split range changes over; NaN none
	Inner           string  // loop whose SP this OP sets
	Feedforward     string  // tag
	FeedforwardKind string  // add, multiply or empty

	// What is normal.
	NormalMode   string // word of a mode, default auto
	Duty         Duty
	OffsetOK     float64 // PV units; NaN none
	RecoveryS    float64 // s; NaN: learnt
	ActiveWhen   Condition
	SuppressWhen Condition
	Priority     string

	Where Position // of the row or entry, for messages
}

// Action of the controller: reverse means that OP falls when PV rises.
type Action uint8

const (
	ActionUnknown Action = iota
	Reverse
	Direct
)

// GainUnit is how the faceplate shows the gain.
type GainUnit uint8

const (
	GainPctPct  GainUnit = iota // gain: % of OP per % of PV
	GainBand                    // proportional band, %
	GainOPPerPV                 // OP units per PV unit
)

// ResetUnit is how the faceplate shows the integral action.
type ResetUnit uint8

const (
	ResetSeconds ResetUnit = iota
	ResetMinutes
	ResetRepeatsPerMinute
	ResetRepeatsPerSecond
	ResetPerSecond // parallel form: integral gain, 1/s
	ResetPerMinute // parallel form: integral gain, 1/min
)

// RateUnit is how the faceplate shows the derivative action.
type RateUnit uint8

const (
	RateSeconds RateUnit = iota
	RateMinutes
)

// Form of the control law.
type Form uint8

const (
	Ideal Form = iota
	Series
	Parallel
)

// Report says when a source sends values.
type Report uint8

const (
	Periodic Report = iota
	Exception
)

// Process is the class of the process; unknown is learnt where it can be.
type Process uint8

const (
	ProcessUnknown Process = iota
	SelfRegulating
	Integrating
	Runaway
)

// Duty is what the loop is for; it decides which kinds are judged, and how.
type Duty uint8

const (
	Tight Duty = iota
	Averaging
	GapDuty
	Batch
	StartStop
	Ratio
	Selector
	Standby
)

// Condition is up to four comparisons joined by and/or; the zero value is none.
type Condition struct {
	Terms []Term
	// Or joins all terms by or; otherwise by and. Mixed forms are read with
	// "and" binding tighter: Group numbers the and-groups.
	Text string
}

// Term is one comparison of a tag with a number or word. Terms with equal Group
// are joined by and; groups are joined by or.
type Term struct {
	Tag   string
	Op    string // = != < <= > >=
	Value float64
	Word  string // when the right side is a word
	Group int
}

// Sign is +1 for reverse action, -1 for direct, 0 unknown: the sign a on e with
// which OP follows a*e.
func (l *Loop) Sign() float64 {
	switch l.Action {
	case Reverse:
		return 1
	case Direct:
		return -1
	}
	return 0
}

// PVSpan and OPSpan are the spans of the scale in the units of the source.
func (l *Loop) PVSpan() float64 { return l.PVHigh - l.PVLow }
func (l *Loop) OPSpan() float64 { return l.OPHigh - l.OPLow }

// RangeTaken says which range PV is taken to have where none was given; empty: one was.
func (l *Loop) RangeTaken() string {
	if l.PVRangeGiven {
		return ""
	}
	return fmt.Sprintf("no PV range: %s to %s taken", formatNumber(l.PVLow), formatNumber(l.PVHigh))
}

// NewLoop is a loop with the defaults of the loop list and only a name.
func NewLoop(name string) *Loop {
	n := math.NaN()
	return &Loop{Name: name, PVHigh: 100, OPHigh: 100, OPLimitLow: 0, OPLimitHigh: 100,
		SPLimitLow: 0, SPLimitHigh: 100, PVAlarmLow: n, PVAlarmHigh: n, Gain: n, Reset: n, Rate: n,
		ResetS: n, RateS: 0, GainPct: n, IdealReset: n, ScanS: n, SampleS: n, SilenceS: n, PVFilterS: n,
		SPRamp: n, StrokeS: n, OPSplit: n, NormalMode: "auto", OffsetOK: n, RecoveryS: n}
}
