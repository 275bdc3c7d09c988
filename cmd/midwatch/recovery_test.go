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
	"midwatch/collector/porttest"
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
	brokerPort, serverPort, pki := porttest.Hold(t), porttest.Hold(t), filepath.Join(t.TempDir(), "pki")
	mosquitto := startMosquitto(t, brokerPort)
	server := startOPCUA(t, serverPort, pki)
	first := startFeed(t, brokerPort, filepath.Join(dir, "first.csv"))
	toBroker, toServer := startRelay(t, brokerPort), startRelay(t, serverPort)
	config := fmt.Sprintf(`
site: {name: Kestrel Fen}
data: data
page: {listen: "127.0.0.1:0"}
keep: {flush: 1s}
sources:
  - {name: gateway, mqtt: {broker: "mqtt://%s", payload: json, time: ts, quality: quality}}
  - {name: works, opcua: {endpoint: "opc.tcp://%s/kestrel-fen", security: None, publish: 1s, keep_alive_count: 2}}
`, toBroker.addr(), toServer.addr())

	// What is watched is what a survey drafts.
	put(t, dir, "midwatch.yaml", config)
	path := filepath.Join(dir, "midwatch.yaml")
	surveyed(t, path, filepath.Join(dir, "loops.csv"), 9)
	put(t, dir, "midwatch.yaml", config+"loop_list: loops.csv\n")
	const byMQTT, byOPCUA = "LIC-0001", "FIC-100"
	w := startWatch(t, dir)
	began := time.Now()
	if s := w.until("it answers", func(*api.Status) bool { return true }); s.Loops.Total != 9 {
		t.Fatalf("the survey found %d loops, want the 4 of the feed and the 5 of the server", s.Loops.Total)
	}
	w.flows(byMQTT, 1)
	heard := w.newest(byMQTT) + 1000 // from here on all scans were published while the watch listened
	w.flows(byMQTT, 5)
	w.flows(byOPCUA, 2)

	// The broker is killed while values flow. What was published after this scan may
	// die with it.
	killed := w.newest(byMQTT) - 1
	mosquitto.end(syscall.SIGKILL)
	w.isDown("gateway")
	if said := in(t, "status", "-c", path); !strings.Contains(said, "ended the connection") && !strings.Contains(said, "nothing listens") {
		t.Errorf("status does not say what is wrong:\n%s", said)
	}
	w.flows(byOPCUA, 3)
	startMosquitto(t, brokerPort)
	w.watchesAgain("gateway")
	second := startFeed(t, brokerPort, filepath.Join(dir, "second.csv"))
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
	var set map[string][]int64
	server.ask(t, "/times", &set)
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
	ended := lastButOne(t, filepath.Join(dir, "second.csv"))
	soon(t, "all has come", func() bool {
		for i := range 4 {
			if w.newest([]string{"LIC-0001", "FIC-0002", "PIC-0003", "AIC-0004"}[i]) < ended {
				return false
			}
		}
		return true
	})
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
	keptAll(t, kept, filepath.Join(dir, "first.csv"), heard, killed)
	keptAll(t, kept, filepath.Join(dir, "second.csv"), 0, ended)
	noHole(t, kept, set, began.Add(2*time.Second).UnixMilli(), stopped.Add(-3*time.Second).UnixMilli())
}

// surveyed drafts a loop list, and listens for twice as long each time until so many
// loops are in it: how long a machine needs to hear them all is not known.
func surveyed(t *testing.T, config, list string, loops int) {
	t.Helper()
	for within := 5 * time.Second; ; within *= 2 {
		var out, errs strings.Builder
		code := newHouse(strings.NewReader(""), &out, &errs).run([]string{"survey", "-c", config, "--within", within.String(), "-o", list})
		if b, _ := os.ReadFile(list); code == exitDone && strings.Count(string(b), "\n") > loops {
			return
		}
		if within > hang {
			t.Fatalf("survey within %s: exit %d\n%s%s", within, code, out.String(), errs.String())
		}
		_ = os.Remove(list)
	}
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

// truthOf is what a feed published, by loop.
func truthOf(t *testing.T, path string) map[string][]trendRow {
	t.Helper()
	f, err := os.Open(path)
	if err != nil {
		t.Fatal(err)
	}
	defer f.Close()
	return readTrend(t, f)
}

// lastButOne is the time of the last scan but one that a feed published, ms UTC.
func lastButOne(t *testing.T, truth string) int64 {
	t.Helper()
	for _, told := range truthOf(t, truth) {
		if len(told) > 1 {
			return told[len(told)-2].at
		}
	}
	t.Fatalf("%s holds no scans", truth)
	return 0
}

// keptAll checks that every scan that a feed published in a span, ms UTC, is a frame,
// with its values.
func keptAll(t *testing.T, kept map[string][]trendRow, truth string, from, to int64) {
	t.Helper()
	rows := 0
	for loop, told := range truthOf(t, truth) {
		at := map[int64]trendRow{}
		for _, r := range kept[loop] {
			at[r.at] = r
		}
		for _, r := range told {
			if r.at < from || r.at > to {
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

// noHole checks that in a span, ms UTC, there is a frame within 2 s of each value that
// the server set, by loop, and none marked as after a loss. The server says itself when
// it set values: on a busy machine it pauses, too.
func noHole(t *testing.T, kept map[string][]trendRow, set map[string][]int64, from, to int64) {
	t.Helper()
	if len(set) != 5 {
		t.Errorf("the server has %d loops, want 5", len(set))
	}
	for loop, times := range set {
		values := 0
		for _, at := range times {
			if at < from || at > to {
				continue
			}
			values++
			if !slices.ContainsFunc(kept[loop], func(r trendRow) bool { return r.pv != "" && r.at > at-2000 && r.at < at+2000 }) {
				t.Errorf("%s: nothing is kept near the value of %s", loop, time.UnixMilli(at).UTC().Format(time.RFC3339Nano))
			}
		}
		if values < 8 {
			t.Errorf("%s: the server set only %d values in the span", loop, values)
		}
		for _, r := range kept[loop] {
			if r.at >= from && r.at <= to && strings.Contains(r.flags, "lost") {
				t.Errorf("%s: flags %q at %s", loop, r.flags, time.UnixMilli(r.at).UTC().Format(time.RFC3339Nano))
			}
		}
	}
}

func same32(a, b string) bool {
	x, err1 := strconv.ParseFloat(a, 32)
	y, err2 := strconv.ParseFloat(b, 32)
	return err1 == nil && err2 == nil && float32(x) == float32(y)
}
