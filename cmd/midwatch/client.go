package main

import (
	"bytes"
	"context"
	"encoding/json"
	"errors"
	"fmt"
	"io"
	"net"
	"net/http"
	"os"
	"os/user"
	"syscall"
	"time"

	"midwatch/alert/page/api"
	"midwatch/cmd/internal/daemon"
)

// errNotRunning says that no daemon answers on the socket.
var errNotRunning = errors.New("no watch is running on this data folder")

// client asks the running daemon over the socket in its data folder.
type client struct{ http *http.Client }

func dial(data string) client {
	path := daemon.SocketPath(data)
	d := net.Dialer{Timeout: 5 * time.Second}
	return client{&http.Client{Transport: &http.Transport{
		DialContext:       func(ctx context.Context, _, _ string) (net.Conn, error) { return d.DialContext(ctx, "unix", path) },
		DisableKeepAlives: true,
	}}}
}

func (c client) do(ctx context.Context, method, path string, body any) (*http.Response, error) {
	var r io.Reader
	if body != nil {
		b, err := json.Marshal(body)
		if err != nil {
			return nil, err
		}
		r = bytes.NewReader(b)
	}
	req, err := http.NewRequestWithContext(ctx, method, "http://midwatch"+path, r)
	if err != nil {
		return nil, err
	}
	resp, err := c.http.Do(req)
	switch {
	case errors.Is(err, os.ErrNotExist), errors.Is(err, syscall.ECONNREFUSED):
		return nil, errNotRunning
	case errors.Is(err, os.ErrPermission):
		return nil, fmt.Errorf("the socket of the watch may not be used: %w; hint: run this as the user of the watch or in its group", err)
	case err != nil:
		return nil, fmt.Errorf("the watch does not answer: %w", err)
	}
	if resp.StatusCode/100 == 2 {
		return resp, nil
	}
	defer resp.Body.Close()
	var p api.Problem
	if json.NewDecoder(io.LimitReader(resp.Body, 1<<20)).Decode(&p) != nil || p.Error == "" {
		p.Error = resp.Status
	}
	return nil, errors.New(p.Error)
}

func (c client) get(ctx context.Context, path string, v any) error {
	resp, err := c.do(ctx, http.MethodGet, path, nil)
	if err != nil {
		return err
	}
	defer resp.Body.Close()
	if err := json.NewDecoder(resp.Body).Decode(v); err != nil {
		return fmt.Errorf("the answer of the watch cannot be read: %w", err)
	}
	return nil
}

func (c client) post(ctx context.Context, path string, a api.Act) error {
	resp, err := c.do(ctx, http.MethodPost, path, a)
	if errors.Is(err, errNotRunning) {
		return fmt.Errorf("%w; hint: only a running watch takes this: midwatch run", err)
	}
	if err != nil {
		return err
	}
	return resp.Body.Close()
}

// who is the name that goes into the journal where none is given.
func who(given string) string {
	if given != "" {
		return given
	}
	if u, err := user.Current(); err == nil {
		return u.Username
	}
	return os.Getenv("USER")
}
