package send

import (
	"bytes"
	"context"
	"encoding/json"
	"errors"
	"os"
	"path/filepath"
	"strings"
	"testing"
	"time"

	"go.uber.org/goleak"

	"midwatch/alert"
	"midwatch/configs"
	"midwatch/detect"
)

func TestMain(m *testing.M) { goleak.VerifyTestMain(m) }

var noon = time.Date(2026, 1, 5, 12, 0, 0, 0, time.UTC)

func env() Env {
	return Env{Site: "Kestrel Fen", Clock: func() time.Time { return noon }, Stdout: &bytes.Buffer{}}
}

// advisory is a message as the desk makes it, with texts that try to break out
// of wherever they are put.
func advisory() alert.Message {
	f := detect.Finding{Subject: detect.Subject{Loop: "AIC-204"}, Loop: "AIC-204", Kind: detect.GrowingOscillation, Event: detect.Raised,
		At: noon.UnixMilli(), Since: noon.Add(-time.Hour).UnixMilli(), Cause: detect.ResetTooShort, Confidence: 0.93,
		Measures: detect.Measures{{Name: "period_s", Value: 372}}, Text: `swings <script>alert(1)</script> & "grows"`, TextShort: "AIC-204 swings, advisory only"}
	return alert.Message{Key: "Kestrel%20Fen/20260105-1200-abc/1/x", Type: alert.TypeAdvisory, Event: detect.Raised, Episode: "20260105-1200-abc",
		Thread: "20260105-1200-abc", Site: "Kestrel Fen", Loop: "AIC-204", Urgency: alert.Now, State: alert.Unacknowledged, Written: noon,
		Subject: "[Kestrel Fen] NOW AIC-204: swing that grows", Text: "AIC-204 swings.\nÄ line with ümlauts.\n.\nA line that was a lone full stop.\n", TextShort: "AIC-204 swings, advisory only",
		HTML: "<!doctype html><html><body><p>AIC-204 swings &lt;script&gt;</p>\n" + alert.PictureMark + "\n</body></html>", Cautions: alert.Cautions,
		Links: []alert.Link{{Name: "episode", URL: "https://10.1.0.9/episodes/1"}}, Finding: &f, Count: 1}
}

// messages are all forms of message that a sender must take.
func messages(t *testing.T) map[string]alert.Message {
	one := advisory()
	over := advisory()
	over.Event, over.Key = detect.Cleared, "Kestrel%20Fen/20260105-1200-abc/2/x"
	many := advisory()
	many.Type, many.Finding, many.Items, many.Key = alert.TypeCollected, nil, []detect.Finding{*one.Finding, *one.Finding}, "Kestrel%20Fen/collected-1/1/x"
	trial, err := alert.NewTrial(alert.Settings{Site: "Kestrel Fen"}, "x", noon)
	if err != nil {
		t.Fatal(err)
	}
	return map[string]alert.Message{"raised": one, "cleared": over, "collected": many, "trial": trial}
}

// hang is when a test gives up on something that must come: far beyond what the
// slowest machine needs, so that no test hangs on how fast it is.
const hang = 5 * time.Minute

// conforms is the suite that every sender passes: it takes every form of
// message, takes one again under the same key, ends soon after its context, and
// answers with errors of the closed set. sick is the same sender with nothing
// at the other end, or nil where that cannot be.
func conforms(t *testing.T, s, sick alert.Sender) {
	t.Helper()
	for name, m := range messages(t) {
		ctx, cancel := context.WithTimeout(t.Context(), hang)
		if err := s.Send(ctx, m); err != nil {
			t.Errorf("%s: %v", name, err)
		}
		if err := s.Send(ctx, m); err != nil {
			t.Errorf("%s again: %v", name, err)
		}
		cancel()
	}
	if sick == nil {
		return
	}
	ctx, cancel := context.WithTimeout(t.Context(), hang)
	defer cancel()
	err := sick.Send(ctx, advisory())
	if err == nil {
		t.Fatal("nothing at the other end, and the message was taken")
	}
	if is[*alert.Permanent](err) {
		t.Errorf("nothing at the other end is no reason to give up: %v", err)
	}
	known := false
	for _, r := range alert.Reasons {
		known = known || r == alert.ReasonOf(err)
	}
	if !known || alert.ReasonOf(err) == alert.ReasonOther {
		t.Errorf("reason %q of %v, want one that says why", alert.ReasonOf(err), err)
	}
	gone, stop := context.WithCancel(t.Context())
	stop()
	began := make(chan error, 1)
	go func() { began <- sick.Send(gone, advisory()) }()
	select {
	case err := <-began:
		if err == nil {
			t.Error("sent with a context that had ended")
		}
	case <-time.After(hang):
		t.Error("does not end with its context")
	}
}

func TestLogSender(t *testing.T) {
	path := filepath.Join(t.TempDir(), "advisories.jsonl")
	s, err := New(configs.Sender{Name: "file", Log: &configs.LogSender{Path: path}}, env())
	if err != nil {
		t.Fatal(err)
	}
	conforms(t, s, nil)
	b, err := os.ReadFile(path)
	if err != nil {
		t.Fatal(err)
	}
	lines := strings.Split(strings.TrimRight(string(b), "\n"), "\n")
	if len(lines) != 8 {
		t.Fatalf("%d lines, want 8", len(lines))
	}
	for i, l := range lines {
		var e struct {
			ID, Type, Subject string
			Data              map[string]any
		}
		if err := json.Unmarshal([]byte(l), &e); err != nil || e.ID == "" || e.Data["caution"] == nil {
			t.Errorf("line %d: %v: %s", i+1, err, l)
		}
	}
	// Moved away, it is made anew.
	if err := os.Rename(path, path+".1"); err != nil {
		t.Fatal(err)
	}
	if err := s.Send(t.Context(), advisory()); err != nil {
		t.Fatal(err)
	}
	if _, err := os.Stat(path); err != nil {
		t.Error(err)
	}
	sick, err := New(configs.Sender{Name: "file", Log: &configs.LogSender{Path: filepath.Join(path, "no", "folder")}}, env())
	if err != nil {
		t.Fatal(err)
	}
	if err := sick.Send(t.Context(), advisory()); err == nil || is[*alert.Permanent](err) {
		t.Errorf("no folder: %v, want an error that is tried again", err)
	}
}

func TestLogToStandardOutput(t *testing.T) {
	e := env()
	s, err := New(configs.Sender{Name: "out", Log: &configs.LogSender{Path: "-"}}, e)
	if err != nil {
		t.Fatal(err)
	}
	if err := s.Send(t.Context(), advisory()); err != nil {
		t.Fatal(err)
	}
	if out := e.Stdout.(*bytes.Buffer).String(); strings.Count(out, "\n") != 1 || !strings.HasSuffix(out, "\n") {
		t.Errorf("want one line, got %q", out)
	}
}

func TestFaultsOfAllSendersAreReported(t *testing.T) {
	_, err := All([]configs.Sender{{Name: "a"}, {Name: "b", Webhook: &configs.Webhook{URL: "ftp://x"}}, {Name: "c", Log: &configs.LogSender{Path: "-"}}}, env())
	if err == nil || !strings.Contains(err.Error(), "sender a") || !strings.Contains(err.Error(), "sender b") {
		t.Errorf("%v, want both faults", err)
	}
	if _, err := New(configs.Sender{Name: "b", Webhook: &configs.Webhook{URL: "https://10.1.0.9", CAFile: "no-such.pem"}}, env()); !errors.Is(err, os.ErrNotExist) {
		t.Errorf("%v, want that the file is missing", err)
	}
}
