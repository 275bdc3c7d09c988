package main

import (
	"fmt"
	"os"
	"path/filepath"
	"slices"
	"strconv"
	"strings"
	"syscall"
	"testing"
	"time"

	"midwatch/alert/page/api"
	"midwatch/collector"
)

// The watch follows an independent OPC UA server and Mosquitto at once. Links
// stall, the broker is killed, the server is restarted: each time it says so, goes
// on with all other loops, recovers by itself, and keeps every frame that reached
// it or waited for it at the other end. Neither peer is ever asked to change
// anything.
func TestRecoversFromItsPeers(t *testing.T) {
	needPeers(t)
	dir, err := os.MkdirTemp("", "midwatch") // short: it will hold a socket
	if err != nil {
		t.Fatal(err)
	}
	t.Cleanup(func() { os.RemoveAll(dir) })
	brokerPort, serverPort, pki := freePort(t), freePort(t), filepath.Join(t.TempDir(), "pki")
	mosquitto := startMosquitto(t, brokerPort)
	server := startOPCUA(t, serverPort, pki)
	first := startFeed(t, brokerPort, 24, filepath.Join(dir, "first.csv"))
	toBroker, toServer := startRelay(t, brokerPort), startRelay(t, serverPort)
	config := fmt.Sprintf(`
site: {name: Kestrel Fen}
data: data
page: {listen: "127.0.0.1:0"}
keep: {flush: 1s}
sources:
  - {name: gateway, mqtt: {broker: "mqtt://%s", payload: json, time: ts, quality: quality}}
  - {name: works, opcua: {endpoint: "opc.tcp://%s/kestrel-fen", security: None, publish: 500ms, keep_alive_count: 2}}
`, toBroker.addr(), toServer.addr())

	// What is watched is what a survey drafts.
	put(t, dir, "midwatch.yaml", config)
	path := filepath.Join(dir, "midwatch.yaml")
	in(t, "survey", "-c", path, "--within", "6s", "-o", filepath.Join(dir, "loops.csv"))
	put(t, dir, "midwatch.yaml", config+"loop_list: loops.csv\n")
	const byMQTT, byOPCUA = "LIC-0001", "FIC-100"
	w := startWatch(t, dir)
	began := time.Now()
	if s := w.until("it answers", func(*api.Status) bool { return true }); s.Loops.Total != 9 {
		t.Fatalf("the survey found %d loops, want the 4 of the feed and the 5 of the server", s.Loops.Total)
	}
	w.flows(byMQTT, 5)
	w.flows(byOPCUA, 2)

	// The broker is killed while values flow. What was published just before may
	// have died with it.
	killed := time.Now().Add(-time.Second)
	mosquitto.end(syscall.SIGKILL)
	w.isDown("gateway")
	if said := in(t, "status", "-c", path); !strings.Contains(said, "ended the connection") && !strings.Contains(said, "nothing listens") {
		t.Errorf("status does not say what is wrong:\n%s", said)
	}
	w.flows(byOPCUA, 3)
	startMosquitto(t, brokerPort)
	w.watchesAgain("gateway")
	again := time.Now()
	second := startFeed(t, brokerPort, 40, filepath.Join(dir, "second.csv"))
	w.flows(byMQTT, 2)

	// Both links stall: the one to the broker shorter than anybody notices, the
	// other until the watchdog fires.
	toBroker.stalled.Store(true)
	toServer.stalled.Store(true)
	time.Sleep(2 * time.Second) // the stall itself
	toBroker.stalled.Store(false)
	w.flows(byMQTT, 2)
	w.isDown("works")
	toServer.stalled.Store(false)
	w.watchesAgain("works")
	w.flows(byOPCUA, 3)

	// The server is restarted.
	server.readOnly(t)
	stopped := time.Now()
	server.end(syscall.SIGKILL)
	w.isDown("works")
	w.flows(byMQTT, 3)
	server = startOPCUA(t, serverPort, pki)
	w.watchesAgain("works")
	w.flows(byOPCUA, 3)

	for _, s := range w.until("it answers", func(*api.Status) bool { return true }).Sources {
		if s.Counts["dropped"] != 0 || len(s.Refused) != 0 {
			t.Errorf("source %s: %v, refused %v", s.Name, s.Counts, s.Refused)
		}
	}
	server.readOnly(t)
	first.alone(t)
	second.alone(t)
	// The last scan stays open until something comes after it.
	ended := time.Now().Add(-3 * time.Second)
	w.kill(syscall.SIGTERM)
	if code := w.cmd.ProcessState.ExitCode(); code != 0 {
		t.Errorf("exit code %d after SIGTERM", code)
	}
	log := w.log.String()
	for said, times := range map[string]int{"broker: watching": 2, "ended the connection": 1, "the server went silent": 1, "session resumed": 1, "the connection was cut": 1, "stopping": 1} {
		if strings.Count(log, said) < times {
			t.Errorf("the log does not say %d times: %s", times, said)
		}
	}

	f, err := os.Open(export(t, path, filepath.Join(dir, "case")))
	if err != nil {
		t.Fatal(err)
	}
	defer f.Close()
	kept := readTrend(t, f)
	keptAll(t, kept, filepath.Join(dir, "first.csv"), began.Add(time.Second), killed)
	keptAll(t, kept, filepath.Join(dir, "second.csv"), again, ended)
	noHole(t, kept, "-10", began.Add(2*time.Second), stopped.Add(-3*time.Second))
}

// isDown waits until a source is known not to deliver, and why.
func (w *watch) isDown(source string) {
	w.t.Helper()
	w.until(source+" is known to be down, and why", func(s *api.Status) bool {
		return slices.ContainsFunc(s.Sources, func(x collector.SourceState) bool {
			return x.Name == source && x.Link != "watching" && x.Problem != ""
		})
	})
}

func (w *watch) watchesAgain(source string) {
	w.t.Helper()
	soon(w.t, source+" is watched again", func() bool {
		s := w.until("it answers", func(*api.Status) bool { return true })
		return slices.ContainsFunc(s.Sources, func(x collector.SourceState) bool { return x.Name == source && x.Link == "watching" && x.Problem == "" })
	})
}

// export gives the path of the trend that the data folder holds.
func export(t *testing.T, config, dir string) string {
	t.Helper()
	in(t, "export", "-c", config, "--dir", dir)
	return filepath.Join(dir, "trend.csv")
}

// keptAll checks that every scan that a feed published in a span is a frame, with
// its values.
func keptAll(t *testing.T, kept map[string][]trendRow, truth string, from, to time.Time) {
	t.Helper()
	f, err := os.Open(truth)
	if err != nil {
		t.Fatal(err)
	}
	defer f.Close()
	rows := 0
	for loop, told := range readTrend(t, f) {
		at := map[int64]trendRow{}
		for _, r := range kept[loop] {
			at[r.at] = r
		}
		for _, r := range told {
			if r.at < from.UnixMilli() || r.at > to.UnixMilli() {
				continue
			}
			rows++
			k, ok := at[r.at]
			if !ok || !same32(k.pv, r.pv) || !same32(k.sp, r.sp) || !same32(k.op, r.op) || strings.Contains(k.flags, "lost") {
				t.Errorf("%s at %s: published %+v, kept %+v", loop, time.UnixMilli(r.at).UTC().Format(time.RFC3339Nano), r, k)
			}
		}
	}
	t.Logf("%s: %d scans compared", filepath.Base(truth), rows)
	if rows < 8 {
		t.Errorf("%s: only %d scans to compare", filepath.Base(truth), rows)
	}
}

// noHole checks that the loops whose name holds a part have a frame at least
// every 3 s in a span, none of them marked as after a loss.
func noHole(t *testing.T, kept map[string][]trendRow, part string, from, to time.Time) {
	t.Helper()
	loops := 0
	for loop, rows := range kept {
		if !strings.Contains(loop, part) {
			continue
		}
		loops++
		last := int64(0)
		for _, r := range rows {
			if r.at < from.UnixMilli() || r.at > to.UnixMilli() {
				continue
			}
			if last != 0 && r.at-last > 3000 || strings.Contains(r.flags, "gap") || strings.Contains(r.flags, "lost") {
				t.Errorf("%s: a hole of %d ms before %s, flags %q", loop, r.at-last, time.UnixMilli(r.at).UTC().Format(time.RFC3339Nano), r.flags)
			}
			last = r.at
		}
		if hole := to.UnixMilli() - last; hole > 3000 {
			t.Errorf("%s: the last frame is %d ms before the end of the span", loop, hole)
		}
	}
	if loops != 5 {
		t.Errorf("%d loops named *%s*, want 5", loops, part)
	}
}

func same32(a, b string) bool {
	x, err1 := strconv.ParseFloat(a, 32)
	y, err2 := strconv.ParseFloat(b, 32)
	return err1 == nil && err2 == nil && float32(x) == float32(y)
}
