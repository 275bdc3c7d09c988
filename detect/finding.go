package detect

import (
	"bytes"
	"encoding/json"
	"math"
	"strconv"
	"time"

	"midwatch/collector"
)

// Kind says what a finding is about.
type Kind string

// Kinds of findings about loops.
const (
	SustainedOffset      Kind = "sustained-offset"
	GrowingOscillation   Kind = "growing-oscillation"
	SustainedOscillation Kind = "sustained-oscillation"
	SluggishRecovery     Kind = "sluggish-recovery"
	OutputSaturation     Kind = "output-saturation"
	ValveStickingKind    Kind = "valve-sticking"
	FrozenPV             Kind = "frozen-pv"
	PVAtRangeEnd         Kind = "pv-at-range-end"
	NotInNormalMode      Kind = "not-in-normal-mode"
	SharedOscillation    Kind = "shared-oscillation"
	StaleData            Kind = "stale-data"
	TuningChanged        Kind = "tuning-changed"
)

// Kinds of findings about the watch itself.
const (
	SourceDown          Kind = "source-down"
	SourceLate          Kind = "source-late"
	SamplesLost         Kind = "samples-lost"
	StoreFailing        Kind = "store-failing"
	SenderFailing       Kind = "sender-failing"
	ClockStepKind       Kind = "clock-step"
	CertificateExpiring Kind = "certificate-expiring"
)

// Cause names why; only where the evidence separates it from the others.
type Cause string

const (
	NoCause                  Cause = ""
	ResetTooShort            Cause = "reset-too-short"
	GainTooHigh              Cause = "gain-too-high"
	ResetTooLong             Cause = "reset-too-long"
	GainTooLow               Cause = "gain-too-low"
	IntegralMissing          Cause = "integral-missing"
	ValveSticking            Cause = "valve-sticking"
	ValveDeadBand            Cause = "valve-dead-band"
	FinalElementNotFollowing Cause = "final-element-not-following"
	ProcessNonlinear         Cause = "process-nonlinear"
	OutsideDisturbance       Cause = "outside-disturbance"
	OutputLimit              Cause = "output-limit"
	WindUp                   Cause = "wind-up"
	MeasurementCause         Cause = "measurement"
	Undetermined             Cause = "undetermined"
)

// ToTell is the cause of a finding of a kind as it is shown: none where nothing is named of a
// kind that has no cause to be named, being a fact.
func (c Cause) ToTell(k Kind) Cause {
	switch k {
	case NotInNormalMode, StaleData, TuningChanged, SourceDown, SourceLate, SamplesLost, StoreFailing, SenderFailing, ClockStepKind, CertificateExpiring:
		if c == Undetermined {
			return NoCause
		}
	}
	return c
}

// Event of a finding: findings are statements of state.
type Event string

const (
	Raised  Event = "raised"
	Updated Event = "updated" // cause changed, confidence moved by 0.1, strength doubled
	Cleared Event = "cleared"
)

// Reasons of a cleared finding.
const (
	Over         = "over"
	OutOfService = "out-of-service"
	Retuned      = "retuned"
	Rejudged     = "rejudged"
)

// Subject is what a finding is about; one field is set.
type Subject struct {
	Loop   string `json:"loop,omitempty"`
	Source string `json:"source,omitempty"`
	Part   string `json:"part,omitempty"`
}

// Measure is one number with its unit in the name.
type Measure struct {
	Name  string
	Value float64
}

// Measures are numbers in the order of the kind's table. In JSON they are an
// object with 4 significant digits; what is not finite is left out.
type Measures []Measure

// Get gives a measure by name.
func (m Measures) Get(name string) (float64, bool) {
	for _, x := range m {
		if x.Name == name {
			return x.Value, true
		}
	}
	return 0, false
}

// MarshalJSON writes the measures in their order.
func (m Measures) MarshalJSON() ([]byte, error) {
	b := []byte{'{'}
	for _, x := range m {
		if math.IsNaN(x.Value) || math.IsInf(x.Value, 0) {
			continue
		}
		if len(b) > 1 {
			b = append(b, ',')
		}
		b = strconv.AppendQuote(b, x.Name)
		b = append(b, ':')
		b = AppendSig(b, x.Value)
	}
	return append(b, '}'), nil
}

// UnmarshalJSON reads an object back, keeping its order.
func (m *Measures) UnmarshalJSON(b []byte) error {
	*m = nil
	d := json.NewDecoder(bytes.NewReader(b))
	if _, err := d.Token(); err != nil {
		return err
	}
	for d.More() {
		k, err := d.Token()
		if err != nil {
			return err
		}
		var v float64
		if err := d.Decode(&v); err != nil {
			return err
		}
		*m = append(*m, Measure{k.(string), v})
	}
	return nil
}

// AppendSig appends v with 4 significant digits, without an exponent where
// plain digits are short.
func AppendSig(b []byte, v float64) []byte {
	r, _ := strconv.ParseFloat(strconv.FormatFloat(v, 'g', 4, 64), 64)
	if r == 0 {
		return append(b, '0')
	}
	if a := math.Abs(r); a >= 1e15 || a < 1e-6 {
		return strconv.AppendFloat(b, r, 'g', -1, 64)
	}
	return strconv.AppendFloat(b, r, 'f', -1, 64)
}

// Finding is one statement of the watch. At is the data time of the decision,
// Since the estimated onset; both ms UTC.
type Finding struct {
	ID           collector.LoopID // of the loop in the list in force; not in JSON
	Subject      Subject
	Loop         string   // name, where there is one
	Loops        []string // of a group
	Kind         Kind
	Event        Event
	At, Since    int64
	Cause        Cause
	Confidence   float64 // 0..1
	AlsoPossible []Cause
	Measures     Measures
	Changed      []Change // in the 24 h before Since, oldest first
	Reason       string   // of cleared
	Text         string
	TextShort    string
}

type findingJSON struct {
	Subject      Subject  `json:"subject"`
	Loop         string   `json:"loop,omitempty"`
	Loops        []string `json:"loops,omitempty"`
	Kind         Kind     `json:"kind"`
	Event        Event    `json:"event"`
	At           string   `json:"at"`
	Since        string   `json:"since"`
	Cause        Cause    `json:"cause,omitempty"`
	Confidence   *float64 `json:"confidence,omitempty"`
	AlsoPossible []Cause  `json:"also_possible,omitempty"`
	Measures     Measures `json:"measures,omitempty"`
	Changed      []Change `json:"changed_before,omitempty"`
	Reason       string   `json:"reason,omitempty"`
	Text         string   `json:"text,omitempty"`
	TextShort    string   `json:"text_short,omitempty"`
}

const timeForm = "2006-01-02T15:04:05.000Z"

// FormatTime writes ms UTC as RFC 3339 with three digits.
func FormatTime(ms int64) string { return time.UnixMilli(ms).UTC().Format(timeForm) }

// MarshalJSON writes the form of the contract.
func (f Finding) MarshalJSON() ([]byte, error) {
	j := findingJSON{Subject: f.Subject, Loop: f.Loop, Loops: f.Loops, Kind: f.Kind, Event: f.Event,
		At: FormatTime(f.At), Since: FormatTime(f.Since), Cause: f.Cause, AlsoPossible: f.AlsoPossible,
		Measures: f.Measures, Changed: f.Changed, Reason: f.Reason, Text: f.Text, TextShort: f.TextShort}
	if f.Event != Cleared {
		c := math.Round(f.Confidence*100) / 100
		j.Confidence = &c
	}
	return json.Marshal(j)
}

// UnmarshalJSON reads the form of the contract; unknown fields are ignored.
func (f *Finding) UnmarshalJSON(b []byte) error {
	var j findingJSON
	if err := json.Unmarshal(b, &j); err != nil {
		return err
	}
	at, err := time.Parse(time.RFC3339Nano, j.At)
	if err != nil {
		return err
	}
	since, err := time.Parse(time.RFC3339Nano, j.Since)
	if err != nil {
		return err
	}
	*f = Finding{Subject: j.Subject, Loop: j.Loop, Loops: j.Loops, Kind: j.Kind, Event: j.Event, At: at.UnixMilli(),
		Since: since.UnixMilli(), Cause: j.Cause, AlsoPossible: j.AlsoPossible, Measures: j.Measures, Changed: j.Changed, Reason: j.Reason,
		Text: j.Text, TextShort: j.TextShort}
	if j.Confidence != nil {
		f.Confidence = *j.Confidence
	}
	return nil
}
