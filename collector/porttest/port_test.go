package porttest

import (
	"fmt"
	"net"
	"testing"
)

// A held port refuses who dials, lets its owner listen again and again, and is
// given to nobody else.
func TestHold(t *testing.T) {
	held := map[int]bool{}
	for range 200 {
		p := Hold(t)
		if held[p] {
			t.Fatalf("port %d came twice", p)
		}
		held[p] = true
	}
	for range 2000 {
		l, err := net.Listen("tcp", "127.0.0.1:0")
		if err != nil {
			t.Fatal(err)
		}
		if p := l.Addr().(*net.TCPAddr).Port; held[p] {
			t.Fatalf("port %d is held and was given away", p)
		}
		l.Close()
	}
	addr := fmt.Sprintf("127.0.0.1:%d", Hold(t))
	for range 2 {
		if c, err := net.Dial("tcp", addr); err == nil {
			c.Close()
			t.Fatal("somebody listens")
		}
		l, err := net.Listen("tcp", addr)
		if err != nil {
			t.Fatal(err)
		}
		c, err := net.Dial("tcp", addr)
		if err != nil {
			t.Fatal(err)
		}
		c.Close()
		l.Close()
	}
}
