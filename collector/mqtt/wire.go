package mqtt

import (
	"bufio"
	"encoding/binary"
	"errors"
	"fmt"
	"io"
	"net"
	"sync"
	"sync/atomic"
	"time"
)

// MQTT 3.1.1 control packet types (section 2.2.1 of the standard).
const (
	typeConnect    = 1
	typePublish    = 3
	typePuback     = 4
	typeSubscribe  = 8
	typePingreq    = 12
	typeDisconnect = 14
)

// errWriteRefused is returned by the write guard. It should never be seen: it
// means that some code tried to send what a read-only subscriber must not send.
var errWriteRefused = errors.New("refused at the wire: this connection only reads")

// readBuffer saves two of three read calls per message.
const readBuffer = 64 << 10

// wire is a connection to a broker that cannot publish. It lets out only the six
// packets that a subscriber at QoS 0 or 1 needs, and CONNECT only without a
// will, since a will is a publication that the broker makes for us.
//
// On the way in it stamps every read, and cuts the payload off each PUBLISH
// longer than maxPacket: the client would allocate what the header announces, up
// to 256 MiB, and closing the line instead would bring a retained message back
// at each reconnect.
type wire struct {
	net.Conn
	in        *bufio.Reader
	maxPacket int
	now       func() time.Time
	lastRead  atomic.Int64 // ms UTC of the last byte
	made      time.Time    // by the machine's own clock
	heard     atomic.Int64 // ns after made, of the last byte
	wrote     sync.Mutex

	head  []byte // of the packet under way, still to hand out
	rest  int    // bytes of the packet under way to pass on unchanged
	onCut func(topic string, size int)
}

func newWire(c net.Conn, maxPacket int, now func() time.Time, onCut func(topic string, size int)) *wire {
	w := &wire{Conn: c, maxPacket: maxPacket, now: now, made: time.Now(), onCut: onCut}
	w.lastRead.Store(now().UnixMilli())
	w.in = bufio.NewReaderSize(stamped{w}, readBuffer)
	return w
}

// stamped reads from the bare connection and notes when something came.
type stamped struct{ w *wire }

func (s stamped) Read(p []byte) (int, error) {
	n, err := s.w.Conn.Read(p)
	if n > 0 {
		s.w.lastRead.Store(s.w.now().UnixMilli())
		s.w.heard.Store(int64(time.Since(s.w.made)))
	}
	return n, err
}

// silent is how long nothing has come, by the machine's own clock: keep-alive and
// ping run by it, whatever clock values are judged by.
func (w *wire) silent() time.Duration {
	return time.Since(w.made) - time.Duration(w.heard.Load())
}

// Read hands out the broker's packets, oversize ones without their payload.
func (w *wire) Read(p []byte) (int, error) {
	if len(p) == 0 {
		return 0, nil
	}
	if len(w.head) == 0 && w.rest == 0 {
		if err := w.next(); err != nil {
			return 0, err
		}
	}
	if len(w.head) > 0 {
		n := copy(p, w.head)
		w.head = w.head[n:]
		return n, nil
	}
	n, err := w.in.Read(p[:min(len(p), w.rest)])
	w.rest -= n
	return n, err
}

// next reads the fixed header of the next packet and decides what of it passes.
func (w *wire) next() error {
	first, err := w.in.ReadByte()
	if err != nil {
		return err
	}
	head := append(make([]byte, 0, 5), first)
	size := 0
	for shift := 0; ; shift += 7 {
		if shift > 21 {
			return errors.New("the broker sent a packet length that is no MQTT")
		}
		b, err := w.in.ReadByte()
		if err != nil {
			return unexpected(err)
		}
		head = append(head, b)
		size |= int(b&0x7f) << shift
		if b < 0x80 {
			break
		}
	}
	if first>>4 != typePublish || size <= w.maxPacket {
		w.head, w.rest = head, size
		return nil
	}
	return w.cut(first, size)
}

// cut passes on header, topic and id of an oversize PUBLISH and discards its
// payload; the id must pass, or a QoS 1 message would never be acknowledged.
func (w *wire) cut(first byte, size int) error {
	var l [2]byte
	if _, err := io.ReadFull(w.in, l[:]); err != nil {
		return unexpected(err)
	}
	keep := int(binary.BigEndian.Uint16(l[:]))
	topicLen := keep
	if first>>1&3 > 0 {
		keep += 2
	}
	if keep+2 > size {
		return errors.New("the broker sent a message whose topic is longer than the message")
	}
	body := make([]byte, keep)
	if _, err := io.ReadFull(w.in, body); err != nil {
		return unexpected(err)
	}
	if _, err := w.in.Discard(size - 2 - keep); err != nil {
		return unexpected(err)
	}
	head := binary.AppendUvarint([]byte{first}, uint64(2+keep))
	w.head = append(append(head, l[:]...), body...)
	w.rest = 0
	w.onCut(string(body[:topicLen]), size)
	return nil
}

func unexpected(err error) error {
	if errors.Is(err, io.EOF) {
		return io.ErrUnexpectedEOF
	}
	return err
}

// Write lets out whole packets of the allowed kinds and nothing else. The client
// writes each packet in one call; a torn one is refused, since a guard that
// waits for the rest is a guard that can be confused.
func (w *wire) Write(p []byte) (int, error) {
	if err := guard(p); err != nil {
		return 0, err
	}
	w.wrote.Lock()
	defer w.wrote.Unlock()
	return w.Conn.Write(p)
}

func guard(p []byte) error {
	for len(p) > 0 {
		size, n := binary.Uvarint(p[1:])
		if n <= 0 || n > 4 || size > uint64(len(p)-1-n) {
			return fmt.Errorf("%w (a packet in pieces)", errWriteRefused)
		}
		body := p[1+n : 1+n+int(size)]
		switch p[0] >> 4 {
		case typePuback, typeSubscribe, typePingreq, typeDisconnect:
		case typeConnect:
			if len(body) < 8 || string(body[:7]) != "\x00\x04MQTT\x04" {
				return fmt.Errorf("%w (not a CONNECT of MQTT 3.1.1)", errWriteRefused)
			}
			if body[7]&0x04 != 0 {
				return fmt.Errorf("%w (a CONNECT with a will)", errWriteRefused)
			}
		case typePublish:
			return fmt.Errorf("%w (a PUBLISH)", errWriteRefused)
		default:
			return fmt.Errorf("%w (packet type %d)", errWriteRefused, p[0]>>4)
		}
		p = p[1+n+int(size):]
	}
	return nil
}
