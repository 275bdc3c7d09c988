package page

import (
	"context"
	"errors"
	"io"
	"iter"
	"time"

	"midwatch/alert"
	"midwatch/alert/page/api"
	"midwatch/collector"
	"midwatch/configs"
	"midwatch/detect"
)

// House is what the page looks at: the running daemon, or a fake of it. All
// methods are safe for concurrent use, quick unless said otherwise, and return
// what the caller may keep.
type House interface {
	// Site is where the box stands; Zone is not nil.
	Site() configs.Site
	// Summary is the state of the watch in a few numbers. It is asked for every
	// two seconds by every open page.
	Summary() Summary
	// Watch is the whole state of the watch itself.
	Watch() WatchState
	// Loops gives all loops in the order of the loop list. States may be some
	// seconds old.
	Loops() []LoopState
	// View is what the watch of a loop knows now; false for an unknown loop.
	View(loop string) (detect.View, bool)
	// Explain gives the evidence held of a loop, a line each.
	Explain(loop string) ([]string, error)
	// Frames reads kept frames of a loop, oldest first, from <= Time < to. It
	// may take a while and ends with ctx.
	Frames(ctx context.Context, loop string, from, to int64) iter.Seq2[collector.Frame, error]
	// Tuning gives readings of the tuning in service since a time, oldest first;
	// nil where none are kept.
	Tuning(ctx context.Context, loop string, from int64) ([]api.TuningReading, error)
	// Picture is the evidence held of a loop that can be drawn over its trend.
	Picture(loop string) detect.Picture
	// Settings writes the effective configuration, secrets masked.
	Settings(w io.Writer) error
	Desk
}

// ErrUnknownLoop is the error for a name that is not in the loop list.
var ErrUnknownLoop = errors.New("there is no loop of this name in the list")

// Desk is the part of [alert.Desk] that the page uses.
type Desk interface {
	Episodes() []alert.Episode
	Episode(id string) (alert.Episode, []alert.Entry, error)
	Urgency(e *alert.Episode) (alert.Urgency, string)
	Linked(token string) (alert.Episode, error)
	AcknowledgeByLink(token, who, why string) error
	Acknowledge(id, who, why string, until time.Time) error
	Shelve(loop, who, why string, until time.Time) error
	Unshelve(loop, who, why string) error
	Shelves() []alert.Shelf
	Past(loops []string, from int64) (alert.Past, error)
	Record(loop string) (alert.Record, error)
	Note(loop, who, text string) error
}

// LoopState is a loop of the list and the state of its watch.
type LoopState struct {
	Loop  *configs.Loop
	State detect.State
	Why   string // where State is not Judged
}

// Summary is the head line. The four counts add up to the number of loops.
type Summary struct {
	Judged      int
	CannotJudge int
	NotNormal   int
	Held        int
	CatchingUp  int    // loops of the four counts that have not caught up
	Newest      int64  // arrival of the newest value of any source, wall clock ms UTC; 0: none yet
	Sources     int    // configured
	Alive       int    // sources that are alive
	Revision    uint64 // grows with every change of an episode, an acknowledgement or a shelf
}

// WatchState is what the view of the watch itself shows. What is not known is
// left zero. Times are wall clock, ms UTC.
type WatchState struct {
	Version string
	Started int64
	Sources []collector.SourceState
	Rate    float64 // frames per second, all sources together
	Parts   []Part
	Store   StoreState
	Senders []SenderState
	Clock   ClockState
}

// Part is a part of the watch that reports its age.
type Part struct {
	Name  string
	Last  int64  // last sign of life
	State string // a word or two
	Well  bool
}

// StoreState is the trend store and the disk below it. Sizes in bytes.
type StoreState struct {
	Bytes     int64 // of trend files
	Limit     int64 // keep.size
	DiskFree  int64
	LastFlush int64
	Dropped   uint64 // frames given up because the disk did not take them
	Problem   string
}

// SenderState is one way out and its queue.
type SenderState struct {
	Name    string
	Kind    string
	Waiting int
	Oldest  int64 // written down, of the oldest waiting message; 0: none
	Last    int64 // last message taken; 0: none yet
	Problem string
}

// ClockState compares the clocks.
type ClockState struct {
	Steps    uint64 // steps of any source's clock seen since the start
	LastStep int64  // when a clock, a source's or our own, was last seen to step; 0: not since the start
}
