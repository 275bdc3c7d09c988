package opcua

import (
	"context"
	"crypto/sha1"
	"encoding/binary"
	"errors"
	"fmt"
	"io"
	"net"
	"net/url"
	"time"

	"github.com/gopcua/opcua/uacp"
	"github.com/gopcua/opcua/uasc"
)

// whyHungUp opens the channel once more, through a relay on loopback that reads
// the server's reason: the library turns every error message of the transport
// into an end of file, and "end of file" helps nobody whose certificate is not
// trusted.
func (d door) whyHungUp(ctx context.Context, hungUp error) error {
	u, err := url.Parse(d.url)
	if err != nil {
		return hungUp
	}
	there, err := (&net.Dialer{Timeout: d.dial}).DialContext(ctx, "tcp", hostPort(u))
	if err != nil {
		return hungUp
	}
	defer there.Close()
	near, far, err := loopbackPair()
	if err != nil {
		return hungUp
	}
	defer near.Close()
	defer far.Close()
	_ = there.SetDeadline(time.Now().Add(d.dial))

	why := make(chan error, 1)
	go func() {
		why <- relayAnswers(far, there)
		far.Close()
	}()
	go func() {
		_, _ = io.Copy(there, far) // ends with either connection
	}()

	conn, err := uacp.NewConn(near, uacp.DefaultClientACK)
	if err != nil {
		return hungUp
	}
	limited, cancel := context.WithTimeout(ctx, d.dial)
	defer cancel()
	if err := conn.Handshake(limited, d.url); err == nil {
		channel, err := uasc.NewSecureChannel(d.url, conn, &uasc.Config{
			SecurityPolicyURI: d.policy, SecurityMode: d.mode, Certificate: d.cert, LocalKey: d.key,
			RemoteCertificate: d.server, Thumbprint: thumbprint(d.server),
			Lifetime: uint32(time.Hour / time.Millisecond), RequestTimeout: d.dial,
		}, make(chan error, 1))
		if err == nil {
			_ = channel.Open(limited)
			_ = channel.Close()
		}
	}
	conn.Close()
	there.Close()
	if reason := <-why; reason != nil {
		return fmt.Errorf("the server hung up: %w", reason)
	}
	return hungUp
}

// relayAnswers copies whole transport messages and returns what an error
// message among them says.
func relayAnswers(to io.Writer, from io.Reader) error {
	var head [8]byte
	for {
		if _, err := io.ReadFull(from, head[:]); err != nil {
			return nil
		}
		size := binary.LittleEndian.Uint32(head[4:])
		if size < 8 || size > 1<<20 {
			return errors.New("the answer is no OPC UA message")
		}
		body := make([]byte, size-8)
		if _, err := io.ReadFull(from, body); err != nil {
			return nil
		}
		if string(head[:3]) == "ERR" {
			said := new(uacp.Error)
			if _, err := said.Decode(body); err != nil {
				return nil
			}
			return said
		}
		if _, err := to.Write(append(head[:], body...)); err != nil {
			return nil
		}
	}
}

func loopbackPair() (near, far *net.TCPConn, err error) {
	l, err := net.ListenTCP("tcp", &net.TCPAddr{IP: net.IPv4(127, 0, 0, 1)})
	if err != nil {
		return nil, nil, err
	}
	defer l.Close()
	if near, err = net.DialTCP("tcp", nil, l.Addr().(*net.TCPAddr)); err != nil {
		return nil, nil, err
	}
	for {
		if far, err = l.AcceptTCP(); err != nil {
			near.Close()
			return nil, nil, err
		}
		if far.RemoteAddr().String() == near.LocalAddr().String() { // not somebody else's
			return near, far, nil
		}
		far.Close()
	}
}

func hostPort(u *url.URL) string {
	if u.Port() == "" {
		return net.JoinHostPort(u.Hostname(), "4840")
	}
	return u.Host
}

// thumbprint names a certificate as the standard has it.
func thumbprint(der []byte) []byte {
	sum := sha1.Sum(der)
	return sum[:]
}
