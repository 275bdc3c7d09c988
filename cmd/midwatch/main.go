// Command midwatch watches PI control loops and tells the engineer on call what
// it finds. It only ever reads from the plant.
//
// Each verb is one file; verbs.go lists them.
package main

import (
	"context"
	"io"
	"os"
	"os/signal"
	"sync/atomic"
	"syscall"
)

func main() {
	os.Exit(Main())
}

// Main runs the program on the arguments of the process and gives its exit code.
func Main() int {
	// First of all: a signal before this would end the process the hard way.
	sig := make(chan os.Signal, 4)
	signal.Notify(sig, syscall.SIGINT, syscall.SIGTERM, syscall.SIGHUP)
	defer signal.Stop(sig)
	h := newHouse(os.Stdin, os.Stdout, os.Stderr)
	go h.signals(sig)
	return h.run(os.Args[1:])
}

// house is what every verb gets of its surroundings.
type house struct {
	stdin          io.Reader
	stdout, stderr io.Writer
	ctx            context.Context // ends with the first SIGINT or SIGTERM
	cancel         context.CancelFunc
	hurry          chan struct{} // closed by the second
	reload         chan struct{} // SIGHUP, coalesced
	reloads        atomic.Bool   // a verb reads reload; to all others SIGHUP is an end
}

func newHouse(stdin io.Reader, stdout, stderr io.Writer) *house {
	h := &house{stdin: stdin, stdout: stdout, stderr: stderr, hurry: make(chan struct{}), reload: make(chan struct{}, 1)}
	h.ctx, h.cancel = context.WithCancel(context.Background())
	h.reloads.Store(true) // until the verb is known
	return h
}

func (h *house) signals(sig <-chan os.Signal) {
	ends := 0
	for s := range sig {
		if s == syscall.SIGHUP && h.reloads.Load() {
			select {
			case h.reload <- struct{}{}:
			default:
			}
			continue
		}
		h.cancel()
		if ends++; ends == 2 {
			close(h.hurry)
		}
	}
}
