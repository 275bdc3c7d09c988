//go:build !linux

package store

import (
	"math"
	"os"
)

// freeBytes is not known here: the reserve of free disk is then not kept, the
// cap on the size of the window still is.
func freeBytes(string) (int64, error) { return math.MaxInt64, nil }

// diskBytes is what a file takes on the disk, or a little more.
func diskBytes(st os.FileInfo) int64 { return st.Size() }

// limitMemory is not done here: the deadline of the check bounds it instead.
func limitMemory(uint64) error { return nil }
