// Package store keeps what midwatch remembers: the [Window] of frames and
// memories of every loop, in one expendable bbolt file per slice of time, and
// the [State] (profiles, episodes, outbox), in one small file that is synced
// per change. It is the only package that knows bbolt.
//
// A slice is cut by flush number, never by data time: the clock of a source may
// do what it likes. It has no clock of its own; times are those of frames, in
// ms UTC, or are passed in. FORMAT.md describes every byte on disk.
//
// Nothing here ends the process for a damaged file or a full disk: a damaged
// file is renamed aside and a new one begun, a full disk costs trends only, and
// both are reported as a [Problem].
package store

import (
	"fmt"
	"math"

	"midwatch/collector"
)

// ProblemKind says what a [Problem] is about.
type ProblemKind string

// Kinds of problems.
const (
	Damaged  ProblemKind = "damaged"   // a file was damaged, renamed aside and replaced
	DiskFull ProblemKind = "disk-full" // no room: trends wait in memory, the oldest are dropped
	DiskBack ProblemKind = "disk-back" // there is room again
	Behind   ProblemKind = "behind"    // the newest slice ends before what was known to be written
	BadSum   ProblemKind = "bad-sum"   // records failed their checksum; they read as gaps
	Dropping ProblemKind = "dropping"  // the oldest frames in memory are given up because flushes fail
)

// Problem is what the store could not do as asked, and what it did instead.
type Problem struct {
	Kind ProblemKind
	Path string
	Text string
}

// Loop registers a loop of the loop list in force. Was is its former name,
// empty if it had none.
type Loop struct {
	ID   collector.LoopID
	Name string
	Was  string
}

// Options of a [Window]. The zero value gives the defaults.
type Options struct {
	SliceFlushes  int   // flushes per slice; default 2700 (6 h at 8 s)
	ChunkFlushes  int   // flushes per chunk; default 75 (600 s at 8 s)
	SliceBytes    int64 // size at which a slice is cut early; default 1 GiB (160 MiB on 32 bits)
	SizeBytes     int64 // size of all slices together; 0 is no cap
	ReserveBytes  int64 // room left free on the file system
	PendingFrames int   // frames a loop keeps in memory while the disk does not take them; default 160
	FillBytes     int64 // encoded history waiting for the next flush; default 32 MiB
	// KnownFlush is the last flush known from elsewhere (State); numbering goes
	// on behind it, and a window that ends before it is reported.
	KnownFlush uint32
	ReadOnly   bool // for programs that look while no daemon runs
	// Beside, with ReadOnly, leaves out the slices that a running program writes:
	// the sealed ones may be read beside it.
	Beside bool
	// Problem is told of problems as they are met, from any goroutine that uses
	// the window. It must not block, nor call anything but Stats.
	Problem func(Problem)

	files files // test seam
}

func (o Options) withDefaults() Options {
	def := func(v *int, d int) {
		if *v <= 0 {
			*v = d
		}
	}
	def(&o.SliceFlushes, 2700)
	def(&o.ChunkFlushes, 75)
	def(&o.PendingFrames, 160)
	// A chunk is one piece: what its flushes can hold at most must fit.
	o.PendingFrames = max(1, min(o.PendingFrames, maxPiece/o.ChunkFlushes))
	if o.SliceBytes <= 0 {
		o.SliceBytes = 1 << 30
		if math.MaxInt == math.MaxInt32 {
			o.SliceBytes = 160 << 20
		}
	}
	// With a quarter at most in the open slice, dropping the oldest always
	// makes room.
	if o.SizeBytes > 0 {
		o.SliceBytes = min(o.SliceBytes, max(o.SizeBytes/4, 1<<18))
	}
	if o.FillBytes <= 0 {
		o.FillBytes = 32 << 20
	}
	if o.Problem == nil {
		o.Problem = func(Problem) {}
	}
	if o.files.free == nil {
		o.files.free = freeBytes
	}
	return o
}

// Stats are counts of a [Window] since it was opened, and its present size.
type Stats struct {
	Flushes      uint64
	LastFlush    uint32 // number of the newest flush on disk; keep it in State, see Options.KnownFlush
	Slices       int
	Slice        uint32 // number of the first flush of the open slice; changes when a slice is cut
	Bytes        int64  // size of all slices
	Frames       uint64 // written
	TailBytes    uint64 // logical bytes of pieces between chunks
	ChunkFrames  uint64
	ChunkBytes   uint64
	MemoryBytes  uint64
	Dropped      uint64 // frames given up because the disk did not take them
	Unregistered uint64 // frames of loops that are not registered
	BadRecords   uint64 // records that failed their checksum
	Pending      int    // frames in memory
	DiskFull     bool
	Oldest       int64 // data time of the oldest frame kept, ms UTC; 0 = none
}

func unknownVersion(path string, v byte) error {
	return fmt.Errorf("%s: format %d: %w", path, v, errVersion)
}
