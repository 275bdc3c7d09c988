package page

import (
	"net/http"
	"net/http/httptest"
	"net/http/httputil"
	"net/url"
	"regexp"
	"strings"
	"testing"

	"github.com/chromedp/chromedp"

	"midwatch/configs"
)

// behind serves a page below /midwatch of another server, which may or may not
// take the prefix off, and gives the address.
func behind(t *testing.T, h *fakeHouse, strip bool, c configs.Page) string {
	t.Helper()
	c.Prefix = "/midwatch"
	_, inner := serve(t, h, c)
	to, err := url.Parse(inner)
	if err != nil {
		t.Fatal(err)
	}
	proxy := &httputil.ReverseProxy{FlushInterval: -1, Rewrite: func(r *httputil.ProxyRequest) {
		r.SetURL(to)
		r.SetXForwarded()
		if strip {
			r.Out.URL.Path = strings.TrimPrefix(r.Out.URL.Path, "/midwatch")
			r.Out.URL.RawPath = strings.TrimPrefix(r.Out.URL.RawPath, "/midwatch")
		}
	}}
	m := http.NewServeMux()
	m.Handle("/midwatch/", proxy)
	m.HandleFunc("/", func(w http.ResponseWriter, r *http.Request) {
		t.Errorf("%s %s was asked for outside the prefix", r.Method, r.URL)
		http.NotFound(w, r)
	})
	srv := httptest.NewServer(m)
	t.Cleanup(srv.Close)
	return srv.URL + "/midwatch/"
}

var linked = regexp.MustCompile(`(?:href|src|action)="([^"#]*)`)

// TestBehindAProxy follows every link of every view: all lead below the prefix
// and to something that is there.
func TestBehindAProxy(t *testing.T) {
	for name, strip := range map[string]bool{"prefix taken off": true, "prefix left on": false} {
		t.Run(name, func(t *testing.T) {
			h := newFake()
			h.frozen = true
			root := behind(t, h, strip, configs.Page{})
			seen := map[string]bool{}
			for _, view := range []string{"", "?span=24&from=4", "loops/AIC-204", "loops/FIC-202", "episodes/20260106-0004-kfen", "episodes/cascade:AIC-201", "watch"} {
				base, err := url.Parse(root + view)
				if err != nil {
					t.Fatal(err)
				}
				for _, m := range linked.FindAllStringSubmatch(fetched(t, base.String()), -1) {
					to, err := base.Parse(strings.ReplaceAll(m[1], "&amp;", "&"))
					if err != nil {
						t.Fatal(err)
					}
					if !strings.HasPrefix(to.String(), root) {
						t.Errorf("/%s leads out of the prefix: %s", view, to)
					}
					to.RawQuery, to.Fragment = "", ""
					// Forms are posted, dossiers take long: where they lead is enough.
					if s := to.String(); !seen[s] && !strings.HasSuffix(s, "acknowledge") && !strings.HasSuffix(s, "shelve") && !strings.HasSuffix(s, "note") && !strings.HasSuffix(s, "dossier") && !strings.HasSuffix(s, ".csv") {
						seen[s] = true
						fetched(t, s)
					}
				}
			}
			if len(seen) < 20 {
				t.Errorf("%d links were followed", len(seen))
			}
		})
	}
}

func fetched(t *testing.T, address string) string {
	t.Helper()
	resp, err := http.Get(address)
	if err != nil {
		t.Fatal(err)
	}
	defer resp.Body.Close()
	var b strings.Builder
	if err := resp.Write(&b); err != nil {
		t.Fatal(err)
	}
	if resp.StatusCode != http.StatusOK {
		t.Errorf("%s: %s", address, resp.Status)
	}
	return b.String()
}

// TestProxyInTheBrowser signs in below a prefix, follows the stream and
// acknowledges.
func TestProxyInTheBrowser(t *testing.T) {
	h := newFake()
	root := behind(t, h, true, configs.Page{TokensFile: tokensFile(t)})
	ctx := tab(t, 1280, 900)
	do(t, ctx, chromedp.Navigate(root+"loops/AIC-204"))
	wait(t, ctx, "document.getElementById('token')")
	do(t, ctx, script("document.getElementById('token').value = 'may-act'; document.querySelector('form').submit()"))
	wait(t, ctx, charted+" && location.pathname == '/midwatch/loops/AIC-204'")
	pulses(t, ctx, 1)
	do(t, ctx, script("document.querySelector('#act form').submit()"))
	wait(t, ctx, "document.querySelector('.done')?.textContent.includes('acknowledged') && location.pathname == '/midwatch/loops/AIC-204'")
	if len(h.acts) != 1 || !strings.Contains(h.acts[0], "A. Reed") {
		t.Errorf("acts %q", h.acts)
	}
	do(t, ctx, chromedp.Navigate(root))
	wait(t, ctx, "document.body.classList.contains('live') && document.querySelector('.strip')")
}
