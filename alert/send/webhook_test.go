package send

import (
	"context"
	"encoding/pem"
	"fmt"
	"io"
	"net/http"
	"net/http/httptest"
	"os"
	"path/filepath"
	"strings"
	"sync"
	"testing"
	"time"

	cloudevents "github.com/cloudevents/sdk-go/v2"
	cehttp "github.com/cloudevents/sdk-go/v2/protocol/http"

	"midwatch/alert"
	"midwatch/collector/porttest"
	"midwatch/configs"
)

func hook(t *testing.T, w configs.Webhook) alert.Sender {
	t.Helper()
	s, err := New(configs.Sender{Name: "hook", Webhook: &w}, env())
	if err != nil {
		t.Fatal(err)
	}
	t.Cleanup(func() { s.(io.Closer).Close() })
	return s
}

// closedPort is an address at which nothing listens.
func closedPort(t *testing.T) string {
	return fmt.Sprintf("127.0.0.1:%d", porttest.Hold(t))
}

// TestWebhook reads what is sent back with the official library, and checks the
// signature as a receiver would.
func TestWebhook(t *testing.T) {
	key := []byte("a key of the works")
	var mu sync.Mutex
	var got []cloudevents.Event
	srv := httptest.NewServer(http.HandlerFunc(func(w http.ResponseWriter, r *http.Request) {
		body, err := io.ReadAll(r.Body)
		if err != nil {
			t.Error(err)
		}
		if err := Verify(key, r.Header.Get(TimestampHeader), r.Header.Get(SignatureHeader), body, noon.Add(time.Minute), 5*time.Minute); err != nil {
			t.Error(err)
		}
		r.Body = io.NopCloser(strings.NewReader(string(body)))
		e, err := cehttp.NewEventFromHTTPRequest(r)
		if err != nil {
			t.Errorf("not a CloudEvent: %v: %s", err, body)
			return
		}
		if err := e.Validate(); err != nil {
			t.Error(err)
		}
		if r.Header.Get(KeyHeader) != e.ID() {
			t.Errorf("%s %q, id %q", KeyHeader, r.Header.Get(KeyHeader), e.ID())
		}
		mu.Lock()
		got = append(got, *e)
		mu.Unlock()
		w.WriteHeader(http.StatusNoContent)
	}))
	defer srv.Close()
	conforms(t, hook(t, configs.Webhook{URL: srv.URL, Key: key}), hook(t, configs.Webhook{URL: "http://" + closedPort(t), Timeout: hang}))

	got = nil
	s := hook(t, configs.Webhook{URL: srv.URL, Key: key})
	if err := s.Send(t.Context(), advisory()); err != nil {
		t.Fatal(err)
	}
	e := got[0]
	if e.Type() != "midwatch.advisory.raised" || e.Source() != "/midwatch/Kestrel%20Fen" || e.Subject() != "AIC-204" || !e.Time().Equal(noon) {
		t.Errorf("event %s", e)
	}
	var data struct {
		Loop, Kind, Cause, Episode, State, Urgency, Caution, Text string
		Measures                                                  map[string]float64
	}
	if err := e.DataAs(&data); err != nil {
		t.Fatal(err)
	}
	if data.Loop != "AIC-204" || data.Kind != "growing-oscillation" || data.Cause != "reset-too-short" || data.Episode != "20260105-1200-abc" ||
		data.State != "unacknowledged" || data.Urgency != "now" || data.Caution == "" || data.Measures["period_s"] != 372 || !strings.Contains(data.Text, "<script>") {
		t.Errorf("data %+v", data)
	}
}

// TestSignature is the worked example of the documentation, from outside: the
// value was computed with `printf '1767614400.{}' | openssl dgst -sha256 -hmac key`.
func TestSignature(t *testing.T) {
	const want = "v1=11aa15830ea791232e10b197fb2f05b5b4b4f1458ea806210a7749d5fb6af3c4"
	if got := Sign([]byte("key"), "1767614400", []byte("{}")); got != want {
		t.Errorf("%s, want %s", got, want)
	}
	for _, c := range []struct {
		name, stamp, sig, body string
		now                    time.Time
	}{
		{"other body", "1767614400", want, "{ }", noon},
		{"other time", "1767614401", want, "{}", noon},
		{"no number", "x", want, "{}", noon},
		{"too old", "1767614400", want, "{}", noon.Add(time.Hour)},
		{"from the future", "1767614400", want, "{}", noon.Add(-time.Hour)},
	} {
		if Verify([]byte("key"), c.stamp, c.sig, []byte(c.body), c.now, 5*time.Minute) == nil {
			t.Errorf("%s was taken", c.name)
		}
	}
	if err := Verify([]byte("key"), "1767614400", want, []byte("{}"), noon, time.Minute); err != nil {
		t.Error(err)
	}
}

func TestMisbehavingReceiver(t *testing.T) {
	for _, c := range []struct {
		name   string
		status int
		header [2]string
		reason alert.Reason
		final  bool
		after  time.Duration
	}{
		{"500", 500, [2]string{}, alert.ReasonServer, false, 0},
		{"503 with seconds", 503, [2]string{"Retry-After", "90"}, alert.ReasonServer, false, 90 * time.Second},
		{"429 with seconds", 429, [2]string{"Retry-After", "120"}, alert.ReasonRateLimited, false, 2 * time.Minute},
		{"429 with a date", 429, [2]string{"Retry-After", noon.Add(time.Hour).Format(http.TimeFormat)}, alert.ReasonRateLimited, false, time.Hour},
		{"429 with nonsense", 429, [2]string{"Retry-After", "soon"}, alert.ReasonRateLimited, false, 0},
		{"redirect", 307, [2]string{"Location", "/elsewhere"}, alert.ReasonClient, false, 0},
		{"401", 401, [2]string{}, alert.ReasonAuth, false, 0},
		{"404", 404, [2]string{}, alert.ReasonClient, false, 0},
		{"400", 400, [2]string{}, alert.ReasonClient, true, 0},
		{"413", 413, [2]string{}, alert.ReasonTooLarge, true, 0},
	} {
		t.Run(c.name, func(t *testing.T) {
			calls := 0
			srv := httptest.NewServer(http.HandlerFunc(func(w http.ResponseWriter, r *http.Request) {
				if calls++; r.URL.Path == "/elsewhere" {
					t.Error("the redirect was followed")
				}
				if c.header[0] != "" {
					w.Header().Set(c.header[0], c.header[1])
				}
				w.WriteHeader(c.status)
				_, _ = io.WriteString(w, "what\r\nis \x1b[31mthis")
			}))
			defer srv.Close()
			err := hook(t, configs.Webhook{URL: srv.URL}).Send(t.Context(), advisory())
			if err == nil {
				t.Fatal("taken")
			}
			if got := alert.ReasonOf(err); got != c.reason {
				t.Errorf("reason %q, want %q: %v", got, c.reason, err)
			}
			if got := is[*alert.Permanent](err); got != c.final {
				t.Errorf("final %v, want %v: %v", got, c.final, err)
			}
			var after time.Duration
			if is[*alert.RetryAfter](err) {
				after = asRetry(err).After
			}
			if after != c.after {
				t.Errorf("again after %v, want %v", after, c.after)
			}
			if strings.ContainsAny(err.Error(), "\r\n\x1b") {
				t.Errorf("the error holds control characters: %q", err)
			}
			if calls != 1 {
				t.Errorf("%d calls, want 1", calls)
			}
		})
	}
}

func asRetry(err error) *alert.RetryAfter {
	r, _ := err.(*alert.RetryAfter)
	return r
}

func TestReceiverThatHangs(t *testing.T) {
	release := make(chan struct{})
	srv := httptest.NewServer(http.HandlerFunc(func(w http.ResponseWriter, r *http.Request) { <-release }))
	defer srv.Close()
	defer close(release)
	err := hook(t, configs.Webhook{URL: srv.URL, Timeout: 100 * time.Millisecond}).Send(t.Context(), advisory())
	if alert.ReasonOf(err) != alert.ReasonTimeout {
		t.Errorf("own timeout: %v", err)
	}
	ctx, cancel := context.WithTimeout(t.Context(), 50*time.Millisecond)
	defer cancel()
	if err := hook(t, configs.Webhook{URL: srv.URL}).Send(ctx, advisory()); alert.ReasonOf(err) != alert.ReasonTimeout {
		t.Errorf("end of the context: %v", err)
	}
}

func TestReceiverWithAWrongCertificate(t *testing.T) {
	srv := httptest.NewTLSServer(http.HandlerFunc(func(w http.ResponseWriter, r *http.Request) {}))
	defer srv.Close()
	srv.Config.ErrorLog = nil
	if err := hook(t, configs.Webhook{URL: srv.URL}).Send(t.Context(), advisory()); alert.ReasonOf(err) != alert.ReasonTLS || is[*alert.Permanent](err) {
		t.Errorf("unknown authority: %v, want reason tls and another try", err)
	}
	ca := filepath.Join(t.TempDir(), "ca.pem")
	if err := os.WriteFile(ca, pem.EncodeToMemory(&pem.Block{Type: "CERTIFICATE", Bytes: srv.Certificate().Raw}), 0o600); err != nil {
		t.Fatal(err)
	}
	if err := hook(t, configs.Webhook{URL: srv.URL, CAFile: ca}).Send(t.Context(), advisory()); err != nil {
		t.Errorf("with its authority: %v", err)
	}
	other := strings.Replace(srv.URL, "127.0.0.1", "localhost", 1)
	if err := hook(t, configs.Webhook{URL: other, CAFile: ca}).Send(t.Context(), advisory()); alert.ReasonOf(err) != alert.ReasonTLS {
		t.Errorf("another name: %v, want reason tls", err)
	}
}

func TestReceiverWithoutAName(t *testing.T) {
	err := hook(t, configs.Webhook{URL: "http://no-such-host.invalid/?token=secret", Timeout: hang}).Send(t.Context(), advisory())
	if alert.ReasonOf(err) != alert.ReasonDNS || strings.Contains(err.Error(), "secret") {
		t.Errorf("%v, want reason dns and no secret", err)
	}
}
