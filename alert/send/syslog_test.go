package send

import (
	"bufio"
	"context"
	"crypto/tls"
	"encoding/pem"
	"io"
	"net"
	"net/http/httptest"
	"os"
	"path/filepath"
	"strings"
	"testing"
	"time"

	"github.com/leodido/go-syslog/v4"
	"github.com/leodido/go-syslog/v4/octetcounting"
	"github.com/leodido/go-syslog/v4/rfc5424"

	"midwatch/alert"
	"midwatch/configs"
)

func syslogTo(t *testing.T, c configs.Syslog) alert.Sender {
	t.Helper()
	s, err := New(configs.Sender{Name: "s", Syslog: &c}, env())
	if err != nil {
		t.Fatal(err)
	}
	return s
}

// check reads a message with an independent parser.
func checkSyslog(t *testing.T, m syslog.Message) {
	t.Helper()
	x, ok := m.(*rfc5424.SyslogMessage)
	if !ok || !x.Valid() {
		t.Fatalf("no valid message: %+v", m)
	}
	if *x.Appname != "midwatch" || *x.FacilityMessage() == "" || x.StructuredData == nil {
		t.Errorf("message %+v", x)
	}
	p := (*x.StructuredData)["midwatch@32473"]
	if p["key"] == "" || p["urgency"] == "" {
		t.Errorf("parameters %v", p)
	}
	if !strings.HasPrefix(*x.Message, "\ufeff") || strings.ContainsAny(*x.Message, "\r\n") {
		t.Errorf("text %q", *x.Message)
	}
}

func TestSyslogOverUDP(t *testing.T) {
	l, err := net.ListenPacket("udp", "127.0.0.1:0")
	if err != nil {
		t.Fatal(err)
	}
	defer l.Close()
	s := syslogTo(t, configs.Syslog{Address: "udp://" + l.LocalAddr().String()})
	conforms(t, s, nil)
	buf := make([]byte, 65536)
	read := func() []byte {
		if err := l.SetReadDeadline(time.Now().Add(hang)); err != nil {
			t.Fatal(err)
		}
		n, _, err := l.ReadFrom(buf)
		if err != nil {
			t.Fatal(err)
		}
		return buf[:n]
	}
	for range 8 {
		m, err := rfc5424.NewParser().Parse(read())
		if err != nil {
			t.Fatal(err)
		}
		checkSyslog(t, m)
	}
	long := advisory()
	long.Loop = `quote " bracket ] back \ slash` + "\nline"
	long.TextShort = strings.Repeat("Ω", 3000)
	if err := s.Send(t.Context(), long); err != nil {
		t.Fatal(err)
	}
	b := read()
	if len(b) > udpMost {
		t.Errorf("%d bytes, more than every receiver takes", len(b))
	}
	m, err := rfc5424.NewParser().Parse(b)
	if err != nil {
		t.Fatal(err)
	}
	checkSyslog(t, m)
	if got := (*m.(*rfc5424.SyslogMessage).StructuredData)["midwatch@32473"]["loop"]; !strings.Contains(got, "quote") {
		t.Errorf("loop %q", got)
	}
}

func TestSyslogOverTCPAndTLS(t *testing.T) {
	https := httptest.NewUnstartedServer(nil)
	https.StartTLS()
	cert, conf := https.Certificate(), https.TLS.Certificates
	https.Close()
	ca := filepath.Join(t.TempDir(), "ca.pem")
	if err := os.WriteFile(ca, pem.EncodeToMemory(&pem.Block{Type: "CERTIFICATE", Bytes: cert.Raw}), 0o600); err != nil {
		t.Fatal(err)
	}
	for _, scheme := range []string{"tcp", "tls"} {
		t.Run(scheme, func(t *testing.T) {
			l, err := net.Listen("tcp", "127.0.0.1:0")
			if err != nil {
				t.Fatal(err)
			}
			defer l.Close()
			if scheme == "tls" {
				l = tls.NewListener(l, &tls.Config{Certificates: conf})
			}
			got := make(chan string, 100)
			go func() {
				for {
					c, err := l.Accept()
					if err != nil {
						return
					}
					b, _ := io.ReadAll(bufio.NewReader(c))
					_ = c.Close()
					if len(b) > 0 {
						got <- string(b)
					}
				}
			}()
			s := syslogTo(t, configs.Syslog{Address: scheme + "://" + l.Addr().String(), CAFile: ca, Facility: "local3"})
			conforms(t, s, syslogTo(t, configs.Syslog{Address: scheme + "://" + closedPort(t), CAFile: ca}))
			for range 8 {
				select {
				case b := <-got:
					n := 0
					octetcounting.NewParser(syslog.WithListener(func(r *syslog.Result) {
						if r.Error != nil {
							t.Errorf("%v in %q", r.Error, b)
							return
						}
						n++
						checkSyslog(t, r.Message)
						if f := *r.Message.(*rfc5424.SyslogMessage).Facility; f != 19 {
							t.Errorf("facility %d, want 19", f)
						}
					})).Parse(strings.NewReader(b))
					if n != 1 {
						t.Errorf("%d messages in one connection", n)
					}
				case <-time.After(hang):
					t.Fatal("nothing came")
				}
			}
			if scheme == "tls" {
				err := syslogTo(t, configs.Syslog{Address: "tls://" + l.Addr().String()}).Send(t.Context(), advisory())
				if alert.ReasonOf(err) != alert.ReasonTLS {
					t.Errorf("unknown authority: %v", err)
				}
			}
		})
	}
}

func script(t *testing.T, body string) string {
	p := filepath.Join(t.TempDir(), "tell")
	if err := os.WriteFile(p, []byte("#!/bin/sh\n"+body), 0o700); err != nil {
		t.Fatal(err)
	}
	return p
}

func TestCommand(t *testing.T) {
	out := filepath.Join(t.TempDir(), "out")
	run := func(path string, args ...string) alert.Sender {
		s, err := New(configs.Sender{Name: "c", Command: &configs.Command{Path: path, Args: args, Timeout: hang}}, env())
		if err != nil {
			t.Fatal(err)
		}
		return s
	}
	s := run(script(t, `cat > "$1"; printf '%s' "$MIDWATCH_TEXT_SHORT" > "$1.short"; env > "$1.env"`), out)
	conforms(t, s, run("/no/such/program"))
	t.Setenv("SECRET_OF_THE_HOUSE", "x")
	if err := s.Send(t.Context(), advisory()); err != nil {
		t.Fatal(err)
	}
	b, _ := os.ReadFile(out)
	if !strings.Contains(string(b), `"text_short":"AIC-204 swings, advisory only"`) {
		t.Errorf("standard input %s", b)
	}
	if b, _ := os.ReadFile(out + ".short"); string(b) != advisory().TextShort {
		t.Errorf("short text %q", b)
	}
	if b, _ := os.ReadFile(out + ".env"); strings.Contains(string(b), "SECRET") {
		t.Errorf("the environment of midwatch was handed on: %s", b)
	}
	for _, c := range []struct {
		name, body string
		reason     alert.Reason
		final      bool
	}{
		{"fails", "echo no modem >&2; exit 1", alert.ReasonServer, false},
		{"message useless", "exit 65", alert.ReasonClient, true},
		{"does not read", "exit 0", "", false},
	} {
		err := run(script(t, c.body)).Send(t.Context(), advisory())
		if c.reason == "" {
			if err != nil {
				t.Errorf("%s: %v", c.name, err)
			}
			continue
		}
		if alert.ReasonOf(err) != c.reason || is[*alert.Permanent](err) != c.final {
			t.Errorf("%s: %v", c.name, err)
		}
	}
	ctx, cancel := context.WithTimeout(t.Context(), 200*time.Millisecond)
	defer cancel()
	began := time.Now()
	// Both sleep for far longer than hang, and hold what the command writes to.
	if err := run(script(t, "sleep 600 & sleep 600")).Send(ctx, advisory()); alert.ReasonOf(err) != alert.ReasonTimeout {
		t.Errorf("hanging: %v", err)
	}
	if d := time.Since(began); d > hang {
		t.Errorf("ended after %v only", d)
	}
	if _, err := New(configs.Sender{Name: "c", Command: &configs.Command{Path: "tell"}}, env()); err == nil {
		t.Error("a path that is not absolute was taken")
	}
}
