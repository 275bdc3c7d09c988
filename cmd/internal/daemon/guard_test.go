package daemon

import (
	"bytes"
	"context"
	"crypto/sha256"
	"fmt"
	"log/slog"
	"net"
	"net/http"
	"os"
	"path/filepath"
	"strings"
	"sync"
	"sync/atomic"
	"testing"

	"midwatch/configs"
)

// Over the network a reload needs a token of the role act, and is put down to
// its name; on the Unix socket the file's permissions guard it.
func TestReloadNeedsTheRoleAct(t *testing.T) {
	r := newRig(t, newMill().loops)
	r.config.Page.Listen = "127.0.0.1:0"
	r.config.Page.TokensFile = filepath.Join(r.dir, "page.tokens")
	var tokens strings.Builder
	tokens.WriteString("name,role,sha256,expires\n")
	for _, role := range []string{"view", "act"} {
		fmt.Fprintf(&tokens, "ida-%s,%s,%x,2027-06-30\n", role, role, sha256.Sum256([]byte("secret-"+role)))
	}
	if err := os.WriteFile(r.config.Page.TokensFile, []byte(tokens.String()), 0o600); err != nil {
		t.Fatal(err)
	}
	var loads atomic.Int32
	var log journal
	o := r.options()
	o.Serve.Page = ServePage
	o.Logger = slog.New(slog.NewTextHandler(&log, nil))
	o.Load = func() (*configs.Config, error) {
		loads.Add(1)
		c := *r.config
		c.Keep.Size *= 2
		return &c, nil
	}
	d, err := New(o)
	if err != nil {
		t.Fatal(err)
	}
	r.d = d
	if err := d.Start(); err != nil {
		t.Fatal(err)
	}
	defer r.stop()
	<-d.CaughtUp()

	socket := func(ctx context.Context, _, _ string) (net.Conn, error) {
		return new(net.Dialer).DialContext(ctx, "unix", SocketPath(r.config.Data))
	}
	for _, c := range []struct {
		name, token string
		header      [2]string
		dial        func(context.Context, string, string) (net.Conn, error)
		want        int
	}{
		{"no token", "", [2]string{}, nil, http.StatusUnauthorized},
		{"an unknown token", "secret-none", [2]string{}, nil, http.StatusUnauthorized},
		{"may only look", "secret-view", [2]string{}, nil, http.StatusForbidden},
		{"from another site", "secret-act", [2]string{"Sec-Fetch-Site", "cross-site"}, nil, http.StatusForbidden},
		{"may act", "secret-act", [2]string{}, nil, http.StatusOK},
		{"the socket", "", [2]string{}, socket, http.StatusOK},
	} {
		before := loads.Load()
		req, err := http.NewRequest(http.MethodPost, "http://"+d.Addr()+"/api/reload", nil)
		if err != nil {
			t.Fatal(err)
		}
		if c.token != "" {
			req.Header.Set("Authorization", "Bearer "+c.token)
		}
		if c.header[0] != "" {
			req.Header.Set(c.header[0], c.header[1])
		}
		client := http.Client{Transport: &http.Transport{DisableKeepAlives: true, DialContext: c.dial}}
		resp, err := client.Do(req)
		if err != nil {
			t.Fatal(err)
		}
		resp.Body.Close()
		if resp.StatusCode != c.want {
			t.Errorf("%s: status %d, want %d", c.name, resp.StatusCode, c.want)
		}
		if did := loads.Load() > before; did != (c.want == http.StatusOK) {
			t.Errorf("%s: reloaded is %v", c.name, did)
		}
	}
	said := log.String()
	if strings.Count(said, "a reload was asked for") != 1 || !strings.Contains(said, "who=ida-act") {
		t.Errorf("the journal does not name who reloaded:\n%s", said)
	}
	if !strings.Contains(said, "waits for a restart") || !strings.Contains(said, "setting=keep.size") {
		t.Errorf("a setting that is not in force yet is not told:\n%s", said)
	}
}

// journal takes a log while the test looks at it.
type journal struct {
	mu sync.Mutex
	b  bytes.Buffer
}

func (j *journal) Write(p []byte) (int, error) {
	j.mu.Lock()
	defer j.mu.Unlock()
	return j.b.Write(p)
}

func (j *journal) String() string {
	j.mu.Lock()
	defer j.mu.Unlock()
	return j.b.String()
}
