package send

import (
	"bytes"
	"encoding/json"
	"fmt"
	"net"
	"os"
	"os/exec"
	"path/filepath"
	"strings"
	"testing"
	"time"

	"midwatch/alert"
	"midwatch/configs"
)

// rsyslogConf takes what comes on one port and writes down how it was read.
const rsyslogConf = `global(workDirectory="%[1]s")
module(load="imudp")
module(load="imtcp")
input(type="imudp" address="127.0.0.1" port="%[2]s")
input(type="imtcp" address="127.0.0.1" port="%[2]s")
template(name="read" type="list" option.jsonf="on") {
  property(outname="facility" name="syslogfacility-text" format="jsonf")
  property(outname="severity" name="syslogseverity-text" format="jsonf")
  property(outname="host" name="hostname" format="jsonf")
  property(outname="app" name="app-name" format="jsonf")
  property(outname="id" name="msgid" format="jsonf")
  property(outname="at" name="timereported" dateFormat="rfc3339" format="jsonf")
  property(outname="data" name="structured-data" format="jsonf")
  property(outname="text" name="msg" format="jsonf")
}
action(type="omfile" file="%[1]s/read" template="read")
`

// TestSyslogReadByRsyslog: the syslog daemon of Debian reads every form of message
// as it was meant, over UDP and TCP.
func TestSyslogReadByRsyslog(t *testing.T) {
	daemon, err := exec.LookPath("rsyslogd")
	if err != nil {
		t.Skip("rsyslogd is missing; apt-get install rsyslog")
	}
	_, port, _ := net.SplitHostPort(closedPort(t))
	dir := t.TempDir()
	conf := filepath.Join(dir, "conf")
	if err := os.WriteFile(conf, fmt.Appendf(nil, rsyslogConf, dir, port), 0o600); err != nil {
		t.Fatal(err)
	}
	cmd := exec.CommandContext(t.Context(), daemon, "-n", "-f", conf, "-i", filepath.Join(dir, "pid"))
	var said bytes.Buffer
	cmd.Stdout, cmd.Stderr = &said, &said
	cmd.WaitDelay = 5 * time.Second
	if err := cmd.Start(); err != nil {
		t.Fatal(err)
	}
	defer func() { _ = cmd.Process.Kill(); _ = cmd.Wait() }()
	wait := func(what string, ok func() bool) {
		t.Helper()
		for deadline := time.Now().Add(hang); !ok(); time.Sleep(20 * time.Millisecond) {
			if time.Now().After(deadline) {
				_ = cmd.Process.Kill()
				_ = cmd.Wait()
				t.Fatalf("%s did not come; rsyslogd said: %s", what, &said)
			}
		}
	}
	wait("the daemon", func() bool {
		c, err := net.Dial("tcp", "127.0.0.1:"+port)
		if err == nil {
			c.Close()
		}
		return err == nil
	})
	type entry struct{ Facility, Severity, Host, App, ID, At, Data, Text string }
	seen := 0
	read := func() []entry {
		b, _ := os.ReadFile(filepath.Join(dir, "read"))
		var out []entry
		for line := range strings.Lines(string(b)) {
			var e entry
			if strings.HasSuffix(line, "\n") && json.Unmarshal([]byte(line), &e) == nil {
				out = append(out, e)
			}
		}
		return out
	}
	for _, proto := range []string{"udp", "tcp"} {
		s := syslogTo(t, configs.Syslog{Address: proto + "://127.0.0.1:" + port, Facility: "local3"})
		for name, m := range messages(t) {
			m.Loop = `odd "name" ] \ №4`
			if err := s.Send(t.Context(), m); err != nil {
				t.Fatal(proto, name, err)
			}
			seen++
			wait(proto+" "+name, func() bool { return len(read()) >= seen })
			e := read()[seen-1]
			if want := map[alert.Urgency]string{alert.Now: "warning", alert.Note: "info"}[m.Urgency]; e.Severity != want {
				t.Errorf("%s %s: severity %q, want %q", proto, name, e.Severity, want)
			}
			if e.Facility != "local3" || e.App != "midwatch" || !strings.Contains(e.Data, "midwatch@32473") || !strings.Contains(e.Data, `key="`+m.Key+`"`) {
				t.Errorf("%s %s: read as %+v", proto, name, e)
			}
			if !strings.Contains(e.Text, strings.TrimSuffix(m.TextShort, "…")) {
				t.Errorf("%s %s: text %q, want %q", proto, name, e.Text, m.TextShort)
			}
			if _, err := time.Parse(time.RFC3339Nano, e.At); err != nil {
				t.Errorf("%s %s: %v", proto, name, err)
			}
		}
	}
}
