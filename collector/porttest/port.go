// Package porttest gives tests ports of this machine that nobody else takes.
package porttest

import (
	"syscall"
	"testing"
)

// Hold gives a TCP port of 127.0.0.1 that is the test's until its end. Nothing
// listens there: who is told the port may, and may stop and listen again. A port
// that was free a moment ago is no such promise: a parallel test or a connection
// of anybody's may have it by now, and two tests talk to one server.
//
// The port is bound to a socket that never listens. The kernel gives such a port
// to nobody who asks for any, and lets one listen who asks for this one and sets
// SO_REUSEADDR, as servers do.
func Hold(t testing.TB) int {
	t.Helper()
	s, err := syscall.Socket(syscall.AF_INET, syscall.SOCK_STREAM, 0)
	if err != nil {
		t.Fatal(err)
	}
	syscall.CloseOnExec(s)
	t.Cleanup(func() { syscall.Close(s) })
	if err := syscall.SetsockoptInt(s, syscall.SOL_SOCKET, syscall.SO_REUSEADDR, 1); err != nil {
		t.Fatal(err)
	}
	if err := syscall.Bind(s, &syscall.SockaddrInet4{Addr: [4]byte{127, 0, 0, 1}}); err != nil {
		t.Fatal(err)
	}
	at, err := syscall.Getsockname(s)
	if err != nil {
		t.Fatal(err)
	}
	return at.(*syscall.SockaddrInet4).Port
}
