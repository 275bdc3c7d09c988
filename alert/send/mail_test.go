package send

import (
	"bytes"
	"context"
	"crypto/tls"
	"encoding/base64"
	"encoding/pem"
	"errors"
	"image/png"
	"io"
	"iter"
	"math"
	"mime"
	"mime/multipart"
	"net"
	"net/http/httptest"
	"net/mail"
	"os"
	"path/filepath"
	"slices"
	"strings"
	"sync"
	"testing"
	"time"

	"github.com/emersion/go-sasl"
	"github.com/emersion/go-smtp"

	"midwatch/alert"
	"midwatch/collector"
	"midwatch/configs"
)

// relay is a real SMTP server that keeps what it takes and refuses as told.
type relay struct {
	mu     sync.Mutex
	mails  []string
	to     []string
	rcpt   func(string) error // nil: taken
	data   error
	needed bool // asks for a login
	hang   chan struct{}
}

func (r *relay) NewSession(*smtp.Conn) (smtp.Session, error) {
	return &session{relay: r}, nil
}

type session struct {
	*relay
	in    bool
	rcpts []string
}

func (s *session) AuthMechanisms() []string {
	if s.needed {
		return []string{sasl.Plain}
	}
	return nil
}
func (s *session) Auth(string) (sasl.Server, error) {
	return sasl.NewPlainServer(func(_, user, password string) error {
		if user != "midwatch" || password != "right" {
			return &smtp.SMTPError{Code: 535, EnhancedCode: smtp.EnhancedCode{5, 7, 8}, Message: "wrong user or password"}
		}
		s.in = true
		return nil
	}), nil
}
func (s *session) Mail(string, *smtp.MailOptions) error {
	if s.hang != nil {
		<-s.hang
	}
	if s.needed && !s.in {
		return smtp.ErrAuthRequired
	}
	return nil
}
func (s *session) Rcpt(to string, _ *smtp.RcptOptions) error {
	if s.rcpt != nil {
		if err := s.rcpt(to); err != nil {
			return err
		}
	}
	s.rcpts = append(s.rcpts, to)
	return nil
}
func (s *session) Data(r io.Reader) error {
	b, err := io.ReadAll(r)
	if err != nil {
		return err
	}
	if s.data != nil {
		return s.data
	}
	s.mu.Lock()
	defer s.mu.Unlock()
	s.mails, s.to, s.rcpts = append(s.mails, string(b)), append(s.to, s.rcpts...), nil
	return nil
}
func (s *session) Reset()        { s.rcpts = nil }
func (s *session) Logout() error { return nil }

func smtpError(code int, x, y, z int) error {
	return &smtp.SMTPError{Code: code, EnhancedCode: smtp.EnhancedCode{x, y, z}, Message: "no"}
}

// serve starts the relay; ca is a file with its authority, empty without TLS.
func (r *relay) serve(t *testing.T, withTLS bool) (addr, ca string) {
	t.Helper()
	srv := smtp.NewServer(r)
	srv.Domain, srv.AllowInsecureAuth = "relay.kestrel-fen.example", true
	srv.ErrorLog = quiet{}
	if withTLS {
		https := httptest.NewUnstartedServer(nil)
		https.StartTLS()
		srv.TLSConfig = &tls.Config{Certificates: https.TLS.Certificates}
		ca = filepath.Join(t.TempDir(), "ca.pem")
		if err := os.WriteFile(ca, pem.EncodeToMemory(&pem.Block{Type: "CERTIFICATE", Bytes: https.Certificate().Raw}), 0o600); err != nil {
			t.Fatal(err)
		}
		https.Close()
	}
	l, err := net.Listen("tcp", "127.0.0.1:0")
	if err != nil {
		t.Fatal(err)
	}
	done := make(chan struct{})
	go func() { defer close(done); _ = srv.Serve(l) }()
	t.Cleanup(func() { _, _ = srv.Close(), l.Close(); <-done })
	return l.Addr().String(), ca
}

type quiet struct{}

func (quiet) Printf(string, ...any) {}
func (quiet) Println(...any)        {}

func mailSender(t *testing.T, c configs.Mail, e Env) alert.Sender {
	t.Helper()
	if c.From == "" {
		c.From = "midwatch <midwatch@kestrel-fen.example>"
	}
	if c.To == nil {
		c.To = []string{"oncall@kestrel-fen.example"}
	}
	s, err := New(configs.Sender{Name: "mail", Mail: &c}, e)
	if err != nil {
		t.Fatal(err)
	}
	return s
}

func TestMail(t *testing.T) {
	r := &relay{}
	addr, ca := r.serve(t, true)
	e := env()
	e.Frames = swing{}
	s := mailSender(t, configs.Mail{Server: addr, CAFile: ca}, e)
	conforms(t, s, mailSender(t, configs.Mail{Server: closedPort(t)}, env()))
	r.mu.Lock()
	r.mails = nil
	r.mu.Unlock()
	m := advisory()
	m.Picture = &alert.Picture{Loop: "AIC-204", From: m.Finding.Since - 3600000, To: m.Finding.At, Onset: m.Finding.Since, Unit: "mg/l"}
	m2 := m
	m2.Key, m2.Event = m.Key+"2", "updated"
	for _, x := range []alert.Message{m, m, m2} {
		if err := s.Send(t.Context(), x); err != nil {
			t.Fatal(err)
		}
	}
	var ids, roots []string
	for _, raw := range r.mails {
		x, err := mail.ReadMessage(strings.NewReader(raw))
		if err != nil {
			t.Fatal(err)
		}
		ids, roots = append(ids, x.Header.Get("Message-ID")), append(roots, x.Header.Get("References"))
	}
	if ids[0] != ids[1] || ids[0] == ids[2] {
		t.Errorf("message ids %v: want the same for the same key, another for another", ids)
	}
	if roots[0] == "" || roots[0] != roots[2] {
		t.Errorf("threads %v: want one for the episode", roots)
	}
	x, _ := mail.ReadMessage(strings.NewReader(r.mails[0]))
	dec := new(mime.WordDecoder)
	if got, _ := dec.DecodeHeader(x.Header.Get("Subject")); got != m.Subject {
		t.Errorf("subject %q, want %q", got, m.Subject)
	}
	if x.Header.Get("Auto-Submitted") != "auto-generated" || x.Header.Get("Importance") != "high" {
		t.Errorf("headers %v", x.Header)
	}
	parts := map[string]part{}
	walk(t, x.Header.Get("Content-Type"), x.Body, parts)
	if got := strings.ReplaceAll(string(parts["text/plain"].body), "\r\n", "\n"); strings.TrimSpace(got) != strings.TrimSpace(m.Text) {
		t.Errorf("plain part %q, want %q", got, m.Text)
	}
	html := string(parts["text/html"].body)
	pic := parts["image/png"]
	if !strings.Contains(html, `src="cid:trend.1@midwatch.png"`) || pic.id != "<trend.1@midwatch.png>" || !strings.HasPrefix(pic.disposition, "inline") {
		t.Errorf("picture id %q, disposition %q; html %s", pic.id, pic.disposition, html)
	}
	img, err := png.Decode(bytes.NewReader(pic.body))
	if err != nil || img.Bounds().Dx() < 400 {
		t.Fatalf("picture: %v", err)
	}
	// The onset is drawn in its colour.
	found := false
	for y := range img.Bounds().Dy() {
		for x := range img.Bounds().Dx() {
			r, g, b, _ := img.At(x, y).RGBA()
			found = found || r>>8 == 0xd5 && g>>8 == 0x5e && b>>8 == 0
		}
	}
	if !found {
		t.Error("the onset is not marked")
	}
	if dir := os.Getenv("MIDWATCH_TEST_OUT"); dir != "" {
		_ = os.WriteFile(filepath.Join(dir, "trend.png"), pic.body, 0o600)
		_ = os.WriteFile(filepath.Join(dir, "mail.eml"), []byte(r.mails[0]), 0o600)
	}
}

type part struct {
	body            []byte
	id, disposition string
}

func walk(t *testing.T, contentType string, body io.Reader, out map[string]part) {
	kind, params, err := mime.ParseMediaType(contentType)
	if err != nil {
		t.Fatal(err)
	}
	if !strings.HasPrefix(kind, "multipart/") {
		t.Fatalf("%s is not multipart", kind)
	}
	for r := multipart.NewReader(body, params["boundary"]); ; {
		p, err := r.NextPart()
		if errors.Is(err, io.EOF) {
			return
		}
		if err != nil {
			t.Fatal(err)
		}
		k, _, _ := mime.ParseMediaType(p.Header.Get("Content-Type"))
		if strings.HasPrefix(k, "multipart/") {
			walk(t, p.Header.Get("Content-Type"), p, out)
			continue
		}
		b, err := io.ReadAll(p)
		if err != nil {
			t.Fatal(err)
		}
		if p.Header.Get("Content-Transfer-Encoding") == "base64" {
			if b, err = io.ReadAll(base64.NewDecoder(base64.StdEncoding, bytes.NewReader(b))); err != nil {
				t.Fatal(err)
			}
		}
		out[k] = part{b, p.Header.Get("Content-ID"), p.Header.Get("Content-Disposition")}
	}
}

// swing is a loop whose frames grow from the middle on, with a gap.
type swing struct{}

func (swing) Frames(_ context.Context, _ string, from, to int64) iter.Seq2[collector.Frame, error] {
	return func(yield func(collector.Frame, error) bool) {
		for t := from; t < to; t += 1000 {
			x := float64(t-from) / float64(to-from)
			f := collector.Frame{Time: t, SP: 2, PV: float32(2 + math.Max(0, x-0.5)*math.Sin(x*120)), OP: float32(50 + 20*math.Cos(x*120)*x)}
			if x > 0.2 && x < 0.25 {
				f.PV = collector.NaN32
			}
			if !yield(f, nil) {
				return
			}
		}
	}
}

func TestRelayThatRefuses(t *testing.T) {
	for _, c := range []struct {
		name   string
		rcpt   error
		data   error
		reason alert.Reason
		final  bool
	}{
		{"no such user", smtpError(550, 5, 1, 1), nil, alert.ReasonRefused, true},
		{"greylisted", smtpError(451, 4, 7, 1), nil, alert.ReasonServer, false},
		{"mailbox full for now", smtpError(452, 4, 2, 2), nil, alert.ReasonServer, false},
		{"mailbox full", smtpError(552, 5, 2, 2), nil, alert.ReasonServer, false},
		{"too large", nil, smtpError(552, 5, 3, 4), alert.ReasonTooLarge, true},
		{"content refused", nil, smtpError(554, 5, 7, 1), alert.ReasonRefused, true},
		{"not now", nil, smtpError(421, 4, 3, 2), alert.ReasonServer, false},
	} {
		t.Run(c.name, func(t *testing.T) {
			r := &relay{data: c.data, rcpt: func(string) error { return c.rcpt }}
			addr, _ := r.serve(t, false)
			err := mailSender(t, configs.Mail{Server: addr, TLS: "never"}, env()).Send(t.Context(), advisory())
			if alert.ReasonOf(err) != c.reason || is[*alert.Permanent](err) != c.final {
				t.Errorf("%v; want reason %q, final %v", err, c.reason, c.final)
			}
		})
	}
}

// TestOneAddressRefused: the others are told, once, also when it is tried again.
func TestOneAddressRefused(t *testing.T) {
	later := true
	r := &relay{}
	r.rcpt = func(to string) error {
		switch {
		case strings.HasPrefix(to, "gone"):
			return smtpError(550, 5, 1, 1)
		case strings.HasPrefix(to, "busy") && later:
			return smtpError(451, 4, 3, 0)
		}
		return nil
	}
	addr, _ := r.serve(t, false)
	s := mailSender(t, configs.Mail{Server: addr, TLS: "never", To: []string{"gone@a.example", "busy@a.example", "well@a.example"}}, env())
	if err := s.Send(t.Context(), advisory()); err == nil || is[*alert.Permanent](err) {
		t.Fatalf("%v, want another try for the busy one", err)
	}
	later = false
	if err := s.Send(t.Context(), advisory()); err != nil {
		t.Fatal(err)
	}
	slices.Sort(r.to)
	if !slices.Equal(r.to, []string{"busy@a.example", "well@a.example"}) {
		t.Errorf("told %v, want each of the two once", r.to)
	}
}

func TestMailTLSAndLogin(t *testing.T) {
	plain, _ := (&relay{}).serve(t, false)
	private, ca := (&relay{}).serve(t, true)
	login, loginCA := (&relay{needed: true}).serve(t, true)
	clear, _ := (&relay{needed: true}).serve(t, false)
	for _, c := range []struct {
		name   string
		conf   configs.Mail
		reason alert.Reason // empty: taken
		words  string
	}{
		{"required, none offered", configs.Mail{Server: plain, TLS: "required"}, alert.ReasonTLS, "tls: allowed"},
		{"allowed, none offered", configs.Mail{Server: plain, TLS: "allowed"}, "", ""},
		{"required, unknown authority", configs.Mail{Server: private, TLS: "required"}, alert.ReasonTLS, ""},
		{"required, known authority", configs.Mail{Server: private, TLS: "required", CAFile: ca}, "", ""},
		{"never, though offered", configs.Mail{Server: private, TLS: "never"}, "", ""},
		{"login", configs.Mail{Server: login, CAFile: loginCA, User: "midwatch", Password: "right"}, "", ""},
		{"wrong password", configs.Mail{Server: login, CAFile: loginCA, User: "midwatch", Password: "wrong"}, alert.ReasonAuth, "password_file"},
		{"login needed, none given", configs.Mail{Server: login, CAFile: loginCA}, alert.ReasonAuth, ""},
		{"password in the clear", configs.Mail{Server: clear, TLS: "allowed", User: "midwatch", Password: "right"}, alert.ReasonAuth, "TLS only"},
		{"password in the clear, allowed", configs.Mail{Server: clear, TLS: "never", User: "midwatch", Password: "right", AllowClearPassword: true}, "", ""},
	} {
		t.Run(c.name, func(t *testing.T) {
			err := mailSender(t, c.conf, env()).Send(t.Context(), advisory())
			switch {
			case c.reason == "" && err != nil:
				t.Error(err)
			case c.reason != "" && (alert.ReasonOf(err) != c.reason || !strings.Contains(err.Error(), c.words)):
				t.Errorf("%v; want reason %q with %q", err, c.reason, c.words)
			case err != nil && strings.Contains(err.Error(), c.conf.Password) && c.conf.Password == "right":
				t.Errorf("the error tells the password: %v", err)
			}
		})
	}
	_, err := New(configs.Sender{Name: "m", Mail: &configs.Mail{Server: plain, TLS: "never", User: "u", Password: "p", From: "a@b.example", To: []string{"a@b.example"}}}, env())
	if err == nil || !strings.Contains(err.Error(), "in the clear") {
		t.Errorf("%v, want that a password without TLS is refused", err)
	}
}

func TestRelayThatHangs(t *testing.T) {
	r := &relay{hang: make(chan struct{})}
	addr, _ := r.serve(t, false)
	defer close(r.hang)
	ctx, cancel := context.WithTimeout(t.Context(), 100*time.Millisecond)
	defer cancel()
	if err := mailSender(t, configs.Mail{Server: addr, TLS: "never"}, env()).Send(ctx, advisory()); alert.ReasonOf(err) != alert.ReasonTimeout {
		t.Errorf("%v, want reason timeout", err)
	}
}

func TestHeaderInjection(t *testing.T) {
	r := &relay{}
	addr, _ := r.serve(t, false)
	s := mailSender(t, configs.Mail{Server: addr, TLS: "never"}, env())
	for _, bad := range []string{"x\r\nBcc: all@a.example", "x\nBcc: all@a.example", "x\rBcc: all@a.example"} {
		m := advisory()
		m.Subject = bad
		if err := s.Send(t.Context(), m); !is[*alert.Permanent](err) {
			t.Errorf("%q: %v, want it refused", bad, err)
		}
		_, err := New(configs.Sender{Name: "m", Mail: &configs.Mail{Server: addr, TLS: "never", From: "a@b.example", To: []string{"a@b.example" + bad[1:]}}}, env())
		if err == nil {
			t.Errorf("address with %q was taken", bad)
		}
	}
	if len(r.mails) != 0 {
		t.Errorf("%d mails went out", len(r.mails))
	}
}

func TestPictureWithoutEnoughData(t *testing.T) {
	for _, n := range []int{0, 1, 2} {
		b, err := drawTrend(t.Context(), few(n), alert.Picture{Loop: "X", From: 0, To: 10000, Onset: 1}, time.UTC)
		if err != nil || (b != nil) != (n == 2) {
			t.Errorf("%d frames: %d bytes, %v", n, len(b), err)
		}
	}
}

type few int

func (n few) Frames(context.Context, string, int64, int64) iter.Seq2[collector.Frame, error] {
	return func(yield func(collector.Frame, error) bool) {
		for i := range int(n) {
			if !yield(collector.Frame{Time: int64(i) * 1000, PV: 5, SP: collector.NaN32, OP: 5}, nil) {
				return
			}
		}
	}
}
