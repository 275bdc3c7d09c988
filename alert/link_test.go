package alert

import (
	"encoding/json"
	"errors"
	"net/url"
	"path"
	"strings"
	"testing"
	"time"

	"midwatch/detect"
)

// tokenOf is what the acknowledge link of a message carries; empty without one.
func tokenOf(t *testing.T, m Message) string {
	t.Helper()
	for _, l := range m.Links {
		if strings.HasPrefix(l.Name, "acknowledge") {
			if !strings.Contains(m.Text, l.URL) || !strings.Contains(m.HTML, l.URL) {
				t.Error("the link is not in the text")
			}
			u, err := url.Parse(l.URL)
			if err != nil || !strings.HasPrefix(u.Path, "/midwatch/acknowledge/") {
				t.Errorf("link %q, %v", l.URL, err)
			}
			return path.Base(u.Path)
		}
	}
	return ""
}

func linkRig(t *testing.T) *rig {
	return newRig(t, func(s *Settings) {
		s.PageURL = "https://watch.kestrel-fen.example/midwatch"
		s.Advise.Links = 2 * time.Hour
	})
}

func refusedLink(t *testing.T, err error, why string) {
	t.Helper()
	if !errors.Is(err, ErrLink) || !strings.Contains(err.Error(), why) || !strings.Contains(err.Error(), "hint:") {
		t.Errorf("%v, want a refusal that says %q and what to do", err, why)
	}
}

func TestLinkAcknowledgesOnce(t *testing.T) {
	r := linkRig(t)
	r.run(start)
	r.hear(urgent("AIC-204", 0))
	r.run(start)
	id := r.desk.Episodes()[0].ID
	for _, m := range r.hook.take() {
		if tokenOf(t, m) != "" {
			t.Error("a link in a message that is no mail")
		}
	}
	token := tokenOf(t, r.mail.take()[0])
	if token == "" {
		t.Fatal("no link in the mail")
	}
	r.open() // the key outlives a restart
	for range 3 {
		if e, err := r.desk.Linked(token); err != nil || e.ID != id || e.Ack != nil {
			t.Fatalf("looking at the link: %+v, %v", e, err)
		}
	}
	if e := r.desk.Episodes()[0]; e.Ack != nil {
		t.Fatal("looking acknowledged it")
	}
	if err := r.desk.AcknowledgeByLink(token, " ", ""); err == nil {
		t.Error("acknowledged without a name")
	}
	if err := r.desk.AcknowledgeByLink(token, "Jo", "on my way"); err != nil {
		t.Fatal(err)
	}
	e, js, err := r.desk.Episode(id)
	if last := js[len(js)-1]; err != nil || e.State() != Acknowledged || last.Who != "Jo" || last.Why != "on my way (by the link in the message to mail)" {
		t.Errorf("state %s, journal %+v, %v", e.State(), last, err)
	}
	r.open()
	refusedLink(t, r.desk.AcknowledgeByLink(token, "Sam", ""), "it was used at")
	_, err = r.desk.Linked(token)
	refusedLink(t, err, "it was used at")
	if e := r.desk.Episodes()[0]; e.Ack.Who != "Jo" {
		t.Error("acknowledged again by", e.Ack.Who)
	}
}

func TestLinksRefused(t *testing.T) {
	r := linkRig(t)
	r.run(start)
	r.hear(urgent("AIC-204", 0))
	r.run(start)
	token := tokenOf(t, r.mail.take()[0])
	raw, err := linkCode.DecodeString(token)
	if err != nil {
		t.Fatal(err)
	}
	// Any bit turned, anything added or cut, and it is refused.
	for i := range raw {
		for _, bit := range []byte{1, 0x80} {
			b := []byte(string(raw))
			b[i] ^= bit
			refusedLink(t, r.desk.AcknowledgeByLink(linkCode.EncodeToString(b), "Jo", ""), "not made here")
		}
	}
	for _, s := range []string{"", "x", token[:len(token)-1], token + "A", token + "=", strings.Repeat("A", 100_000), "../../etc", "%00"} {
		refusedLink(t, r.desk.AcknowledgeByLink(s, "Jo", ""), "not made here")
	}
	// Another box has another key, and another site takes no link of this one.
	other := linkRig(t)
	other.run(start)
	refusedLink(t, other.desk.AcknowledgeByLink(token, "Jo", ""), "not made here")
	r.set.Site = "Other Fen"
	r.open()
	refusedLink(t, r.desk.AcknowledgeByLink(token, "Jo", ""), "not made here")
	r.set.Site = "Kestrel Fen"
	r.open()
	r.clock.set(start.Add(2*time.Hour - time.Second))
	if _, err := r.desk.Linked(token); err != nil {
		t.Error("refused before its time was over:", err)
	}
	r.clock.set(start.Add(2 * time.Hour))
	refusedLink(t, r.desk.AcknowledgeByLink(token, "Jo", ""), "its time was over")
	r.clock.set(start)
	r.set.Advise.Links = 0
	r.open()
	refusedLink(t, r.desk.AcknowledgeByLink(token, "Jo", ""), "switched off")
	for _, e := range r.desk.Episodes() {
		if e.Ack != nil {
			t.Error("acknowledged by a link that was refused")
		}
	}
}

// TestLinkOfAnEarlierComing: what came back is another matter than what the mail
// told of.
func TestLinkOfAnEarlierComing(t *testing.T) {
	r := linkRig(t)
	r.run(start)
	x := urgent("AIC-204", 0)
	r.hear(x)
	r.run(start)
	token := tokenOf(t, r.mail.take()[0])
	x.Event, x.At = detect.Cleared, x.At+60_000
	r.hear(x)
	x.Event, x.At = detect.Raised, x.At+60_000
	r.hear(x)
	refusedLink(t, r.desk.AcknowledgeByLink(token, "Jo", ""), "came back since")
}

// TestLinksOffByDefault: no link, and no key either.
func TestLinksOffByDefault(t *testing.T) {
	r := newRig(t, func(s *Settings) { s.PageURL = "https://watch.kestrel-fen.example/midwatch" })
	r.hear(urgent("AIC-204", 0))
	r.run(start)
	if tokenOf(t, r.mail.take()[0]) != "" || len(r.desk.mem.linkKey) != 0 {
		t.Error("links though they are off")
	}
}

// TestLinkKeyIsSecret: neither the key nor a link goes anywhere but into the mail.
func TestLinkKeyIsSecret(t *testing.T) {
	r := linkRig(t)
	r.run(start)
	r.hear(urgent("AIC-204", 0))
	if _, err := r.desk.Wake(start); err != nil {
		t.Fatal(err)
	}
	r.desk.settle()
	token := tokenOf(t, r.mail.take()[0])
	for k, v := range r.store.data {
		if strings.Contains(v, token) {
			t.Errorf("the link is kept in %q", k)
		}
	}
	es, _ := json.Marshal(r.desk.Episodes())
	key, _ := json.Marshal(r.desk.mem.linkKey)
	if len(key) < 40 || strings.Contains(string(es), strings.Trim(string(key), `"`)) {
		t.Error("no key, or it shows")
	}
}

// TestLinkThroughACrash: a link is used up together with the acknowledgement, or
// not at all.
func TestLinkThroughACrash(t *testing.T) {
	for _, committed := range []bool{false, true} {
		r := linkRig(t)
		r.run(start)
		r.hear(urgent("AIC-204", 0))
		r.run(start)
		token := tokenOf(t, r.mail.take()[0])
		r.store.fail = func(_ int, after bool) error {
			if after == committed {
				return errDisk
			}
			return nil
		}
		if err := r.desk.AcknowledgeByLink(token, "Jo", ""); err == nil {
			t.Fatal("no error")
		}
		r.store.fail = nil
		r.open()
		err := r.desk.AcknowledgeByLink(token, "Jo", "")
		if committed {
			refusedLink(t, err, "it was used")
		} else if err != nil {
			t.Error(err)
		}
		if e := r.desk.Episodes()[0]; e.State() != Acknowledged {
			t.Error("state", e.State())
		}
	}
}
