package send

import (
	"context"
	"crypto/tls"
	"errors"
	"fmt"
	"net"
	"net/url"
	"os"
	"strconv"
	"strings"
	"time"
	"unicode/utf8"

	"midwatch/alert"
	"midwatch/configs"
)

// syslogSender writes RFC 5424 messages: over UDP one per packet (RFC 5426), over
// TCP and TLS with octet counting (RFC 6587, RFC 5425), a connection a message.
// Syslog has no answer: taken means handed to the network.
type syslogSender struct {
	network, addr string
	tls           *tls.Config
	facility      int
	host          string
	zone          *time.Location
	clock         func() time.Time
}

var facilities = map[string]int{"": 16, "user": 1, "daemon": 3, "local0": 16, "local1": 17, "local2": 18, "local3": 19,
	"local4": 20, "local5": 21, "local6": 22, "local7": 23}

// udpMost is what every receiver takes (RFC 5426, section 3.2).
const udpMost = 2048

func newSyslog(c *configs.Sender, env Env) (alert.Sender, error) {
	u, err := url.Parse(c.Syslog.Address)
	if err != nil || u.Hostname() == "" {
		return nil, fmt.Errorf("address %q cannot be read; hint: write udp://host:514, tcp://host:601 or tls://host:6514", c.Syslog.Address)
	}
	s := &syslogSender{network: u.Scheme, zone: env.Zone, clock: env.Clock}
	port := u.Port()
	switch u.Scheme {
	case "udp":
		port = or(port, "514")
	case "tcp":
		port = or(port, "601")
	case "tls":
		port = or(port, "6514")
		if s.tls, err = trusted(c.Syslog.CAFile); err != nil {
			return nil, err
		}
		s.tls.ServerName, s.network = u.Hostname(), "tcp"
	default:
		return nil, fmt.Errorf("address %q has no known scheme; hint: udp, tcp or tls", c.Syslog.Address)
	}
	s.addr = net.JoinHostPort(u.Hostname(), port)
	f, ok := facilities[c.Syslog.Facility]
	if !ok {
		return nil, fmt.Errorf("facility %q is not known; hint: user, daemon or local0 to local7", c.Syslog.Facility)
	}
	s.facility = f
	if s.host, err = os.Hostname(); err != nil {
		s.host = ""
	}
	return s, nil
}

func or(a, b string) string {
	if a != "" {
		return a
	}
	return b
}

func (s *syslogSender) Send(ctx context.Context, m alert.Message) error {
	line := s.line(m)
	var conn net.Conn
	var err error
	d := net.Dialer{Timeout: 10 * time.Second}
	if s.tls != nil {
		conn, err = (&tls.Dialer{NetDialer: &d, Config: s.tls}).DialContext(ctx, s.network, s.addr)
	} else {
		conn, err = d.DialContext(ctx, s.network, s.addr)
	}
	if err != nil {
		return failure(err)
	}
	deadline := s.deadline(ctx)
	if err := conn.SetWriteDeadline(deadline); err != nil {
		return failure(errors.Join(err, conn.Close()))
	}
	if s.network == "udp" {
		if len(line) > udpMost {
			line = trimUTF8(line[:udpMost])
		}
	} else {
		line = append([]byte(strconv.Itoa(len(line))+" "), line...)
	}
	_, err = conn.Write(line)
	return failure(errors.Join(err, conn.Close()))
}

// deadline is for the network, which knows nothing of the desk's clock.
func (s *syslogSender) deadline(ctx context.Context) time.Time {
	if t, ok := ctx.Deadline(); ok {
		return t
	}
	return time.Now().Add(10 * time.Second)
}

// severities: an advisory is not an alarm, and asks for no more than a warning.
func severity(m alert.Message) int {
	switch m.Urgency {
	case alert.Now:
		return 4 // warning
	case alert.Morning:
		return 5 // notice
	}
	return 6 // informational
}

func (s *syslogSender) line(m alert.Message) []byte {
	id := string(m.Type)
	if m.Type == alert.TypeAdvisory {
		id += "." + string(m.Event)
	}
	var b strings.Builder
	fmt.Fprintf(&b, "<%d>1 %s %s midwatch %d %s ", s.facility*8+severity(m), s.clock().In(s.zone).Format("2006-01-02T15:04:05.000Z07:00"),
		or(printable(s.host, 255), "-"), os.Getpid(), printable(id, 32))
	// 32473 is the number the registry keeps for examples (RFC 5612).
	b.WriteString("[midwatch@32473")
	for _, p := range [][2]string{{"key", m.Key}, {"episode", m.Episode}, {"loop", m.Loop}, {"urgency", string(m.Urgency)}, {"state", string(m.State)}} {
		if p[1] != "" {
			fmt.Fprintf(&b, ` %s="%s"`, p[0], strings.NewReplacer(`\`, `\\`, `"`, `\"`, `]`, `\]`).Replace(oneLine(p[1])))
		}
	}
	b.WriteString("] \ufeff")
	b.WriteString(oneLine(m.Subject + ". " + m.TextShort))
	return []byte(b.String())
}

// printable is a header field: printable ASCII without spaces.
func printable(s string, most int) string {
	s = strings.Map(func(r rune) rune {
		if r <= ' ' || r > '~' {
			return -1
		}
		return r
	}, s)
	return s[:min(len(s), most)]
}

func oneLine(s string) string {
	return strings.Map(func(r rune) rune {
		if r < ' ' || r == 0x7f {
			return ' '
		}
		return r
	}, strings.ToValidUTF8(s, ""))
}

func trimUTF8(b []byte) []byte {
	for len(b) > 0 && !utf8.Valid(b) {
		b = b[:len(b)-1]
	}
	return b
}
