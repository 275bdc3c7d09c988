package send

import (
	"bytes"
	"crypto/sha256"
	"encoding/hex"
	"encoding/json"
	"net/mail"
	"os"
	"os/exec"
	"path/filepath"
	"strings"
	"testing"
	"time"

	"midwatch/alert"
	"midwatch/configs"
)

const mailPeer = "../../testdata/peers/mail"

// readMail is a mail as an independent MIME parser reads it.
type readMail struct {
	Subject, From, To, ID, Auto, Key, Text, HTML string
	References, Headers                          []string
	Attachments                                  []struct {
		Type, ID, Disposition, Sum string
		Related                    bool
		Size                       int
	}
}

func parseByPeer(t *testing.T, raw string) (m readMail) {
	t.Helper()
	cmd := exec.CommandContext(t.Context(), "node", "read.mjs")
	cmd.Dir, cmd.Stdin = mailPeer, strings.NewReader(raw)
	var out, bad bytes.Buffer
	cmd.Stdout, cmd.Stderr = &out, &bad
	if err := cmd.Run(); err != nil {
		t.Fatalf("%v: %s", err, &bad)
	}
	if err := json.Unmarshal(out.Bytes(), &m); err != nil {
		t.Fatal(err, &out)
	}
	return m
}

// TestMailReadByAnother: an independent parser finds in the mail what the desk
// put in, and nothing else.
func TestMailReadByAnother(t *testing.T) {
	_, missing := os.Stat(filepath.Join(mailPeer, "node_modules", "mailparser"))
	if _, err := exec.LookPath("node"); err != nil {
		missing = err
	}
	if missing != nil {
		if os.Getenv("MIDWATCH_PEERS") != "" {
			t.Fatalf("MIDWATCH_PEERS is set, but the MIME parser is missing: %v; hint: npm ci in testdata/peers/mail", missing)
		}
		t.Skip("the MIME parser is missing; npm ci in testdata/peers/mail")
	}
	r := &relay{}
	addr, ca := r.serve(t, true)
	e := env()
	e.Frames = swing{}
	s := mailSender(t, configs.Mail{Server: addr, CAFile: ca}, e)
	odd := advisory()
	odd.Key, odd.Loop = odd.Key+"-odd", "Zulauf Klärbecken № 4"
	odd.Subject = "[Kestrel Fen] NOW Zulauf Klärbecken № 4 =?utf-8?q?x?= <b>: " + strings.Repeat("very long ", 12) + "水位 swing"
	odd.Text = strings.Repeat("A long line without an end ", 60) + "\n.\n..\nFrom the top\n--\n=3D 100 % ±0.5 °C 水位\n"
	trend := advisory()
	trend.Key += "-trend"
	trend.Picture = &alert.Picture{Loop: "AIC-204", From: trend.Finding.Since - 3600000, To: trend.Finding.At, Onset: trend.Finding.Since, Unit: "mg/l"}
	all := messages(t)
	all["odd"], all["trend"] = odd, trend
	for name, m := range all {
		t.Run(name, func(t *testing.T) {
			r.mails = nil
			if err := s.Send(t.Context(), m); err != nil {
				t.Fatal(err)
			}
			if len(r.mails) != 1 {
				t.Fatalf("%d mails, want one", len(r.mails))
			}
			got := parseByPeer(t, r.mails[0])
			if got.Subject != m.Subject {
				t.Errorf("subject\n%q, want\n%q", got.Subject, m.Subject)
			}
			if from, err := mail.ParseAddress(got.From); err != nil || from.Address != "midwatch@kestrel-fen.example" || got.To != "oncall@kestrel-fen.example" {
				t.Errorf("from %q to %q", got.From, got.To)
			}
			if got.Key != m.Key || got.Auto != "auto-generated" || !strings.HasSuffix(got.ID, "@kestrel-fen.example>") || len(got.References) != 1 {
				t.Errorf("key %q, auto %q, id %q, references %q", got.Key, got.Auto, got.ID, got.References)
			}
			if a, b := strings.TrimSpace(strings.ReplaceAll(got.Text, "\r\n", "\n")), strings.TrimSpace(m.Text); a != b {
				t.Errorf("text\n%q, want\n%q", a, b)
			}
			want, mark, found := strings.Cut(m.HTML, alert.PictureMark)
			html := strings.ReplaceAll(got.HTML, "\r\n", "\n")
			if !strings.HasPrefix(html, want) || found && !strings.Contains(html, strings.TrimSpace(mark)) {
				t.Errorf("html\n%q, want\n%q", html, m.HTML)
			}
			if m.Picture == nil {
				if len(got.Attachments) != 0 {
					t.Errorf("attachments %+v", got.Attachments)
				}
				return
			}
			picture, err := drawTrend(t.Context(), e.Frames, *m.Picture, time.UTC)
			if err != nil {
				t.Fatal(err)
			}
			sum := sha256.Sum256(picture)
			if a := got.Attachments; len(a) != 1 || a[0].Type != "image/png" || a[0].ID != "<trend.1@midwatch.png>" || a[0].Disposition != "inline" ||
				!a[0].Related || a[0].Sum != hex.EncodeToString(sum[:]) {
				t.Errorf("picture %+v, want %d bytes", a, len(picture))
			}
		})
	}
}
