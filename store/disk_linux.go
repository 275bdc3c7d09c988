package store

import (
	"os"
	"syscall"
)

// freeBytes is what an ordinary user may still write to the file system that
// holds dir.
func freeBytes(dir string) (int64, error) {
	var st syscall.Statfs_t
	if err := syscall.Statfs(dir, &st); err != nil {
		return 0, err
	}
	return int64(uint64(st.Bavail) * uint64(st.Bsize)), nil
}

// diskBytes is what a file takes on the disk: files grow in steps, with holes.
func diskBytes(st os.FileInfo) int64 {
	if s, ok := st.Sys().(*syscall.Stat_t); ok {
		return s.Blocks * 512
	}
	return st.Size()
}

// limitMemory bounds what this process may allocate from now on.
func limitMemory(bytes uint64) error {
	return syscall.Setrlimit(syscall.RLIMIT_DATA, &syscall.Rlimit{Cur: bytes, Max: bytes})
}
