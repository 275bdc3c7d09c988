package main

import (
	"bytes"
	"fmt"
	"net"
	"os"
	"path/filepath"
	"strings"
	"syscall"
	"testing"
	"time"

	"midwatch/alert/page/api"
)

// folder is a short path with a configuration for the feeder: it will hold a
// socket.
func folder(t *testing.T, broker string) string {
	t.Helper()
	dir, err := os.MkdirTemp("", "midwatch")
	if err != nil {
		t.Fatal(err)
	}
	t.Cleanup(func() { os.RemoveAll(dir) })
	put(t, dir, "midwatch.yaml", fmt.Sprintf(`
site: {name: Kestrel Fen}
data: data
page: {listen: "127.0.0.1:0"}
keep: {flush: 1s}
sources: [{name: gateway, mqtt: {broker: "mqtt://%s", payload: json, value: v, time: t}}]
loop_list: loops.csv
detect: {standing: 0s}
advise:
  senders: [{name: log, log: {path: told.jsonl}}]
  routes: [{to: log}]
`, broker))
	put(t, dir, "loops.csv", loopList+row("FIC-118"))
	return dir
}

const loopList = "loop,source,pv,sp,op,mode,action,gain,reset_s,pv_low,pv_high,sample_s\n"

func row(loop string) string {
	topic := "kestrel-fen/" + strings.ToLower(loop) + "#"
	return fmt.Sprintf("%s,gateway,%spv,%ssp,%sop,%smode,reverse,1,30,0,100,1\n", loop, topic, topic, topic, topic)
}

func put(t *testing.T, dir, name, text string) {
	t.Helper()
	if err := os.WriteFile(filepath.Join(dir, name), []byte(text), 0o640); err != nil {
		t.Fatal(err)
	}
}

// in runs the program within this process.
func in(t *testing.T, args ...string) (stdout string) {
	t.Helper()
	var out, errs bytes.Buffer
	h := newHouse(strings.NewReader(""), &out, &errs)
	if code := h.run(args); code != exitDone {
		t.Fatalf("midwatch %s: exit %d\n%s", strings.Join(args, " "), code, &errs)
	}
	return out.String()
}

// A feed of JSON objects over MQTT makes the findings of the CSV that holds the
// same rows.
func TestFeedEqualsItsCSV(t *testing.T) {
	f := newFeeder(t)
	dir := folder(t, f.addr)
	w := startWatch(t, dir)
	w.feed(f, faultAfter+2400)
	w.kill(syscall.SIGTERM)
	put(t, dir, "feed.csv", "time,loop,pv,sp,op,mode,flags\n"+f.csv.String())
	config := filepath.Join(dir, "midwatch.yaml")
	in(t, "export", "-c", config, "--dir", filepath.Join(dir, "case"))
	recorded := in(t, "replay", "-c", config, filepath.Join(dir, "feed.csv"))
	lived := in(t, "replay", "-c", config, filepath.Join(dir, "case", "trend.csv"))
	if !strings.Contains(lived, `"kind":"output-saturation"`) {
		t.Fatalf("the fault was not found: %s", lived)
	}
	if recorded != lived {
		t.Errorf("from the feed:\n%s\nfrom its CSV:\n%s", lived, recorded)
	}
}

// SIGHUP puts a new loop list in force; one with a mistake changes nothing.
func TestHangupReloads(t *testing.T) {
	f := newFeeder(t)
	dir := folder(t, f.addr)
	w := startWatch(t, dir)
	w.feed(f, 200)
	hangup := func() {
		if err := w.cmd.Process.Signal(syscall.SIGHUP); err != nil {
			t.Fatal(err)
		}
	}
	put(t, dir, "loops.csv", loopList+row("AIC-204")+row("FIC-118"))
	hangup()
	w.until("the new loop is there", func(s *api.Status) bool { return s.Loops.Total == 2 && s.Sources[0].Link == "watching" })
	put(t, dir, "loops.csv", loopList+"FIC-118,gateway,a,a,a,,sideways,1,30,0,100,1\n")
	hangup()
	hangup() // several at once are one
	deadline := time.Now().Add(hang)
	for !strings.Contains(w.log.String(), "not reloaded") {
		if time.Now().After(deadline) {
			t.Fatalf("the mistake was not told\n%s", w.log)
		}
		time.Sleep(10 * time.Millisecond)
	}
	if !strings.Contains(w.log.String(), "loops.csv:2:") {
		t.Errorf("the mistake has no place:\n%s", w.log)
	}
	w.until("both loops are still there", func(s *api.Status) bool { return s.Loops.Total == 2 })
	before := w.until("it answers", func(*api.Status) bool { return true }).Counts["frames"]
	f.publish(100)
	w.until("frames go on", func(s *api.Status) bool { return s.Counts["frames"] >= before+90 })
}

// The service manager is told.
func TestServiceManager(t *testing.T) {
	f := newFeeder(t)
	dir := folder(t, f.addr)
	path := filepath.Join(dir, "notify")
	l, err := net.ListenUnixgram("unixgram", &net.UnixAddr{Name: path, Net: "unixgram"})
	if err != nil {
		t.Fatal(err)
	}
	defer l.Close()
	t.Setenv("NOTIFY_SOCKET", path)
	w := startWatch(t, dir)
	await := func(word string) {
		t.Helper()
		b := make([]byte, 4096)
		if err := l.SetReadDeadline(time.Now().Add(hang)); err != nil {
			t.Fatal(err)
		}
		for {
			n, err := l.Read(b)
			if err != nil {
				t.Fatalf("waiting for %s: %v", word, err)
			}
			if strings.Contains(string(b[:n]), word) {
				return
			}
		}
	}
	await("READY=1")
	await("WATCHDOG=1")
	if err := w.cmd.Process.Signal(syscall.SIGHUP); err != nil {
		t.Fatal(err)
	}
	await("RELOADING=1\nMONOTONIC_USEC=")
	await("READY=1")
	w.kill(syscall.SIGTERM)
	await("STOPPING=1")
}

// A damaged state is set aside and its backup used, and that is said.
func TestDamagedStateIsRestored(t *testing.T) {
	f := newFeeder(t)
	dir := folder(t, f.addr)
	config := filepath.Join(dir, "midwatch.yaml")
	w := startWatch(t, dir)
	in(t, "shelve", "-c", config, "FIC-118", "--for", "4h", "--why", "cleaning", "--who", "ida")
	w.kill(syscall.SIGTERM)
	state := filepath.Join(dir, "data", "state.bolt")
	b, err := os.ReadFile(state)
	if err != nil {
		t.Fatal(err)
	}
	if err := os.WriteFile(state+".backup", b, 0o640); err != nil {
		t.Fatal(err)
	}
	// Zeroes where the tree begins; the head is whole.
	clear(b[2*os.Getpagesize():])
	if err := os.WriteFile(state, b, 0o640); err != nil {
		t.Fatal(err)
	}
	w = startWatch(t, dir)
	s := w.until("it answers", func(*api.Status) bool { return true })
	if len(s.Shelves) != 1 || s.Shelves[0].Who != "ida" {
		t.Errorf("shelves after the restore: %+v", s.Shelves)
	}
	w.kill(syscall.SIGTERM)
	if log := w.log.String(); !strings.Contains(log, "damaged") {
		t.Errorf("the damage was not told:\n%s", log)
	}
	if m, err := filepath.Glob(state + ".damaged-*"); err != nil || len(m) != 1 {
		t.Errorf("the damaged file is not kept: %v %v", m, err)
	}
}
