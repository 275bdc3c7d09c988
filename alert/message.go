package alert

import (
	"context"
	"errors"
	"fmt"
	"time"

	"midwatch/detect"
)

// Urgency of a message.
type Urgency string

// The three levels: Now wakes someone, Morning waits for the morning's digest,
// Note is for the digest only.
const (
	Now     Urgency = "now"
	Morning Urgency = "morning"
	Note    Urgency = "note"
)

// Type says what a message is.
type Type string

// Types of messages.
const (
	TypeAdvisory  Type = "advisory"  // one step of one episode
	TypeCollected Type = "collected" // several advisories in one
	TypeStanding  Type = "standing"  // the ranked list of what was found before the baseline ended
	TypeDigest    Type = "digest"
	TypeTrial     Type = "trial" // of check --send
)

// Link is a named address in a message.
type Link struct {
	Name string `json:"name"`
	URL  string `json:"url"`
}

// Message is what a sender takes. The desk makes all its texts; no text holds a
// control character but line feeds in Text.
type Message struct {
	Key     string // stable: the same message has the same key each time it is sent
	Type    Type
	Event   detect.Event // raised, updated or cleared
	Episode string       // id; empty where there is none
	Thread  string       // same for all messages that belong together
	Site    string
	Loop    string // subject of the message; a source or part where there is no loop
	Urgency Urgency
	State   State
	Written time.Time // wall time at which the desk decided to tell

	Subject   string // one line
	Text      string // all of it as plain text
	TextShort string // at most 160 characters
	HTML      string // all of it as a complete HTML page; without pictures, Picture says which belongs in
	Cautions  []string
	Links     []Link

	Finding *detect.Finding // nil for collected messages
	Items   []detect.Finding
	Count   int // times the episode was raised
	Old     time.Duration
	Picture *Picture
}

// Picture says which trend belongs into a message that can show one.
type Picture struct {
	Loop     string
	From, To int64 // ms UTC, data time
	Onset    int64 // ms UTC
	Unit     string
}

// Sender takes messages out of the house. Send returns nil when the message was
// taken; a *[Permanent] when trying again is useless; a *[RetryAfter] when the
// other side said when; any other error is tried again. It must return soon after
// ctx ends, and may be called with the same message again.
type Sender interface {
	Send(ctx context.Context, m Message) error
}

// Reason of a failure, from a closed set: the label of metrics.
type Reason string

// Reasons.
const (
	ReasonAuth        Reason = "auth"
	ReasonRefused     Reason = "refused" // no connection, or the other side would not take it
	ReasonTimeout     Reason = "timeout"
	ReasonTLS         Reason = "tls"
	ReasonDNS         Reason = "dns"
	ReasonRateLimited Reason = "rate-limited"
	ReasonServer      Reason = "server"
	ReasonClient      Reason = "client"
	ReasonTooLarge    Reason = "too-large"
	ReasonOther       Reason = "other"
)

// Reasons lists the closed set.
var Reasons = []Reason{ReasonAuth, ReasonRefused, ReasonTimeout, ReasonTLS, ReasonDNS, ReasonRateLimited, ReasonServer,
	ReasonClient, ReasonTooLarge, ReasonOther}

// Failure is an error of a sender that is worth another try.
type Failure struct {
	Reason Reason
	Err    error
}

func (f *Failure) Error() string { return fmt.Sprintf("%s: %v", f.Reason, f.Err) }
func (f *Failure) Unwrap() error { return f.Err }

// Permanent is an error that trying again will not mend.
type Permanent struct {
	Reason Reason
	Err    error
}

func (p *Permanent) Error() string { return fmt.Sprintf("%s: %v", p.Reason, p.Err) }
func (p *Permanent) Unwrap() error { return p.Err }

// RetryAfter is an error of a sender that was told when to come back.
type RetryAfter struct {
	After  time.Duration
	Reason Reason
	Err    error
}

func (r *RetryAfter) Error() string {
	return fmt.Sprintf("%s, again in %s: %v", r.Reason, r.After, r.Err)
}
func (r *RetryAfter) Unwrap() error { return r.Err }

// ReasonOf gives the reason an error of a sender carries.
func ReasonOf(err error) Reason {
	if p, ok := errors.AsType[*Permanent](err); ok {
		return p.Reason
	}
	if r, ok := errors.AsType[*RetryAfter](err); ok {
		return r.Reason
	}
	if f, ok := errors.AsType[*Failure](err); ok {
		return f.Reason
	}
	if errors.Is(err, context.DeadlineExceeded) {
		return ReasonTimeout
	}
	return ReasonOther
}
