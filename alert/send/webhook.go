package send

import (
	"bytes"
	"context"
	"crypto/hmac"
	"crypto/sha256"
	"encoding/hex"
	"errors"
	"fmt"
	"io"
	"net/http"
	"net/url"
	"strconv"
	"strings"
	"time"
	"unicode"

	"midwatch/alert"
	"midwatch/configs"
)

// Headers of a signed message. The signature is "v1=" and the HMAC-SHA256, in
// hex, over the timestamp, a full stop and the body, with the key of key_file.
const (
	TimestampHeader = "Midwatch-Timestamp" // seconds since 1970
	SignatureHeader = "Midwatch-Signature"
	KeyHeader       = "Idempotency-Key" // the message's key: same key, same message
)

// webhook posts CloudEvents.
type webhook struct {
	url    string
	key    []byte
	client *http.Client
	clock  func() time.Time
}

func newWebhook(c *configs.Sender, env Env) (alert.Sender, error) {
	w := c.Webhook
	u, err := url.Parse(w.URL)
	if err != nil || u.Host == "" || u.Scheme != "http" && u.Scheme != "https" {
		return nil, errors.New("url cannot be used; hint: it begins with https:// (or http:// on a network you trust) and names a host")
	}
	conf, err := trusted(w.CAFile)
	if err != nil {
		return nil, err
	}
	timeout := w.Timeout
	if timeout <= 0 {
		timeout = 10 * time.Second
	}
	t := &http.Transport{TLSClientConfig: conf, TLSHandshakeTimeout: timeout, ResponseHeaderTimeout: timeout, MaxIdleConns: 1,
		IdleConnTimeout: 30 * time.Second, Proxy: http.ProxyFromEnvironment, ForceAttemptHTTP2: true}
	return &webhook{url: w.URL, key: w.Key, clock: env.Clock, client: &http.Client{Transport: t, Timeout: timeout,
		// A signed message goes to whom it was meant for, and nowhere else.
		CheckRedirect: func(*http.Request, []*http.Request) error { return http.ErrUseLastResponse }}}, nil
}

// Sign gives the value of the signature header.
func Sign(key []byte, timestamp string, body []byte) string {
	h := hmac.New(sha256.New, key)
	h.Write([]byte(timestamp))
	h.Write([]byte{'.'})
	h.Write(body)
	return "v1=" + hex.EncodeToString(h.Sum(nil))
}

// Verify is what a receiver does: the signature fits, and the timestamp is within
// tolerance of now.
func Verify(key []byte, timestamp, signature string, body []byte, now time.Time, tolerance time.Duration) error {
	s, err := strconv.ParseInt(timestamp, 10, 64)
	if err != nil {
		return fmt.Errorf("%s %q is not a number of seconds", TimestampHeader, timestamp)
	}
	if !hmac.Equal([]byte(signature), []byte(Sign(key, timestamp, body))) {
		return fmt.Errorf("%s does not fit; hint: the same key on both sides, and the body as it came", SignatureHeader)
	}
	if d := now.Sub(time.Unix(s, 0)); d > tolerance || d < -tolerance {
		return fmt.Errorf("the message was signed %s ago; hint: look at the clocks of both sides", d.Round(time.Second))
	}
	return nil
}

func (w *webhook) Send(ctx context.Context, m alert.Message) error {
	body, err := event(m)
	if err != nil {
		return &alert.Permanent{Reason: alert.ReasonOther, Err: err}
	}
	r, err := http.NewRequestWithContext(ctx, http.MethodPost, w.url, bytes.NewReader(body))
	if err != nil {
		return &alert.Permanent{Reason: alert.ReasonOther, Err: err}
	}
	stamp := strconv.FormatInt(w.clock().Unix(), 10)
	r.Header.Set("Content-Type", eventMedia)
	r.Header.Set("User-Agent", "midwatch")
	r.Header.Set(KeyHeader, m.Key)
	r.Header.Set(TimestampHeader, stamp)
	if len(w.key) > 0 {
		r.Header.Set(SignatureHeader, Sign(w.key, stamp, body))
	}
	resp, err := w.client.Do(r)
	if err != nil {
		return failure(err)
	}
	defer resp.Body.Close()
	said, _ := io.ReadAll(io.LimitReader(resp.Body, 512))
	return w.answer(resp, said)
}

// Close ends idle connections.
func (w *webhook) Close() error { w.client.CloseIdleConnections(); return nil }

// answer judges the status. Final is only what speaks against the message
// itself: a receiver that is set up wrong will be mended, and wants its messages
// then.
func (w *webhook) answer(resp *http.Response, said []byte) error {
	code := resp.StatusCode
	if code >= 200 && code < 300 {
		return nil
	}
	err := fmt.Errorf("the receiver answered %s%s", resp.Status, quoted(said))
	var why alert.Reason
	switch {
	case code >= 300 && code < 400:
		return &alert.Failure{Reason: alert.ReasonClient, Err: fmt.Errorf("the receiver answered %s, which is not followed; hint: set url to the address that takes the message", resp.Status)}
	case code == http.StatusUnauthorized, code == http.StatusForbidden, code == http.StatusProxyAuthRequired:
		return &alert.Failure{Reason: alert.ReasonAuth, Err: fmt.Errorf("%w; hint: compare key_file with the receiver's key", err)}
	case code == http.StatusRequestEntityTooLarge:
		return &alert.Permanent{Reason: alert.ReasonTooLarge, Err: err}
	case code == http.StatusTooManyRequests:
		why = alert.ReasonRateLimited
	case code == http.StatusRequestTimeout, code == http.StatusGatewayTimeout:
		why = alert.ReasonTimeout
	case code >= 500:
		why = alert.ReasonServer
	case code == http.StatusNotFound, code == http.StatusMisdirectedRequest, code == http.StatusLocked, code == http.StatusTooEarly:
		why = alert.ReasonClient
	default:
		return &alert.Permanent{Reason: alert.ReasonClient, Err: err}
	}
	if after, ok := retryAfter(resp.Header.Get("Retry-After"), w.clock()); ok {
		return &alert.RetryAfter{After: after, Reason: why, Err: err}
	}
	return &alert.Failure{Reason: why, Err: err}
}

// retryAfter reads seconds or a date.
func retryAfter(s string, now time.Time) (time.Duration, bool) {
	if n, err := strconv.Atoi(strings.TrimSpace(s)); err == nil && n >= 0 {
		return time.Duration(min(n, 7*86400)) * time.Second, true
	}
	if t, err := http.ParseTime(s); err == nil {
		return max(t.Sub(now), 0), true
	}
	return 0, false
}

// quoted makes what the other side said fit for one line of a log.
func quoted(b []byte) string {
	s := strings.Join(strings.FieldsFunc(string(bytes.ToValidUTF8(b, nil)), func(r rune) bool { return unicode.IsSpace(r) || !unicode.IsPrint(r) }), " ")
	if s == "" {
		return ""
	}
	if r := []rune(s); len(r) > 200 {
		s = string(r[:200]) + "…"
	}
	return ": " + s
}
