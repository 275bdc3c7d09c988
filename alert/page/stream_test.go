package page

import (
	"bufio"
	"context"
	"encoding/json"
	"net/http"
	"strconv"
	"strings"
	"testing"
	"time"

	"go.uber.org/goleak"

	"midwatch/configs"
)

func TestStream(t *testing.T) {
	had := goleak.IgnoreCurrent()
	t.Cleanup(func() { goleak.VerifyNone(t, had) })
	h := newFake()
	_, addr := serve(t, h, configs.Page{})
	ctx, cancel := context.WithTimeout(t.Context(), hang)
	defer cancel()
	r, err := http.NewRequestWithContext(ctx, "GET", addr+"api/stream?loop=AIC-204&after="+strconv.FormatInt(h.clock().UnixMilli()-30000, 10), nil)
	if err != nil {
		t.Fatal(err)
	}
	tr := &http.Transport{}
	defer tr.CloseIdleConnections()
	resp, err := tr.RoundTrip(r)
	if err != nil {
		t.Fatal(err)
	}
	defer resp.Body.Close()
	if resp.Header.Get("Content-Type") != "text/event-stream" {
		t.Fatal(resp.Header)
	}
	pulses, frames, last := 0, 0, int64(0)
	revisions := map[uint64]bool{}
	in := bufio.NewScanner(resp.Body)
	event := ""
	for in.Scan() && (pulses < 3 || frames < 15) {
		if e, ok := strings.CutPrefix(in.Text(), "event: "); ok {
			event = e
		}
		data, ok := strings.CutPrefix(in.Text(), "data: ")
		if !ok {
			continue
		}
		switch event {
		case "pulse":
			var x pulse
			if err := json.Unmarshal([]byte(data), &x); err != nil || x.Judged != 14 || x.Age == "" {
				t.Fatalf("%s: %v", data, err)
			}
			revisions[x.Revision] = true
			pulses++
			if pulses == 1 {
				if err := h.Acknowledge(h.eps[0].ID, "A. Reed", "", time.Time{}); err != nil {
					t.Fatal(err)
				}
			}
		case "fresh":
			var x struct{ T []int64 }
			if err := json.Unmarshal([]byte(data), &x); err != nil {
				t.Fatal(err)
			}
			for _, at := range x.T {
				if at <= last {
					t.Fatalf("frame at %d after %d", at, last)
				}
				last = at
				frames++
			}
		}
	}
	if pulses < 3 || frames < 15 || len(revisions) != 2 {
		t.Errorf("%d pulses, %d frames, revisions %v; %v", pulses, frames, revisions, in.Err())
	}
	cancel()
}

func TestStreamsAreBounded(t *testing.T) {
	h := newFake()
	p := newPage(t, h)
	for range maxStreams {
		p.streams <- struct{}{}
	}
	if w := call(t, p.Handler(), "GET", "/api/stream", ""); w.Code != 503 || w.Header().Get("Retry-After") == "" {
		t.Errorf("answer %d", w.Code)
	}
}
