package page

import (
	"bytes"
	"log/slog"
	"strings"
	"testing"

	"midwatch/configs"
)

// TestLinkFromAMail: without a token of the page, looking asks and only the form
// acknowledges.
func TestLinkFromAMail(t *testing.T) {
	h := newFake()
	h.frozen = true
	var log bytes.Buffer
	p, err := New(Options{House: h, Page: configs.Page{Listen: "127.0.0.1:0", TokensFile: tokensFile(t), Prefix: "/midwatch"}, Clock: h.clock, Log: slog.New(slog.NewTextHandler(&log, nil))})
	if err != nil {
		t.Fatal(err)
	}
	g := p.Handler()
	good := "/midwatch/acknowledge/good-" + h.eps[0].ID
	mail := []string{"Accept", "text/html", "Sec-Fetch-Site", "cross-site", "Sec-Fetch-Mode", "navigate"}
	form := []string{"Accept", "text/html", "Sec-Fetch-Site", "same-origin", "Content-Type", formType}
	for _, c := range []struct {
		name, method, path, body string
		head                     []string
		code                     int
		want                     string
		acts                     int
	}{
		{"opened from the mail", "GET", good, "", mail, 200, `<form method="post" action=""`, 0},
		{"looked at by a program", "HEAD", good, "", nil, 200, "", 0},
		{"opened again", "GET", good, "", mail, 200, "your name", 0},
		{"no name", "POST", good, "who=+", form, 400, "Say who you are", 0},
		{"sent from another site", "POST", good, "who=Jo", []string{"Sec-Fetch-Site", "cross-site", "Content-Type", formType}, 403, "another site", 0},
		{"forged", "POST", "/midwatch/acknowledge/bad", "who=Jo", form, 403, "cannot be used", 0},
		{"sent", "POST", good, "who=Jo&why=on+it", form, 200, "the journal has your name", 1},
		{"sent again", "POST", good, "who=Sam", form, 403, "cannot be used", 1},
		{"opened after", "GET", good, "", mail, 403, "cannot be used", 1},
		{"nothing else opens", "GET", "/midwatch/episodes/" + h.eps[0].ID, "", []string{"Accept", "text/html"}, 401, "Your token", 1},
		{"nor by a way around", "GET", "/midwatch/acknowledge/../watch", "", []string{"Accept", "text/html"}, 307, "", 1},
	} {
		w := call(t, g, c.method, c.path, c.body, c.head...)
		if w.Code != c.code || !strings.Contains(w.Body.String(), c.want) || len(h.acts) != c.acts {
			t.Errorf("%s: got %d %.600s, acts %q; want %d %q", c.name, w.Code, w.Body, h.acts, c.code, c.want)
		}
	}
	if strings.Contains(log.String(), "good-") {
		t.Errorf("a link in the log:\n%s", log.String())
	}
	if !strings.Contains(log.String(), `msg="acknowledged by link" audit=true who=Jo`) {
		t.Errorf("no audit event:\n%s", log.String())
	}
	refused := 0
	for range 30 {
		if call(t, g, "GET", "/midwatch/acknowledge/guess", "", mail...).Code == 429 {
			refused++
		}
	}
	if refused < 20 {
		t.Errorf("%d of 30 guesses slowed down", refused)
	}
}
