package daemon

import (
	"bytes"
	"crypto/ecdsa"
	"crypto/elliptic"
	"crypto/rand"
	"crypto/sha256"
	"crypto/tls"
	"crypto/x509"
	"encoding/hex"
	"encoding/pem"
	"io"
	"math/big"
	"net"
	"net/http"
	"net/http/cookiejar"
	"net/url"
	"os"
	"path/filepath"
	"strings"
	"testing"
	"time"
)

// selfSigned writes a certificate for 127.0.0.1 and its key.
func selfSigned(t *testing.T, dir string, serial int64) (cert, key string, pool *x509.CertPool) {
	t.Helper()
	k, err := ecdsa.GenerateKey(elliptic.P256(), rand.Reader)
	if err != nil {
		t.Fatal(err)
	}
	c := &x509.Certificate{SerialNumber: big.NewInt(serial), NotBefore: time.Now().Add(-time.Hour), NotAfter: time.Now().Add(time.Hour), IPAddresses: []net.IP{net.IPv4(127, 0, 0, 1)},
		IsCA: true, BasicConstraintsValid: true, KeyUsage: x509.KeyUsageDigitalSignature | x509.KeyUsageCertSign}
	der, err := x509.CreateCertificate(rand.Reader, c, c, &k.PublicKey, k)
	if err != nil {
		t.Fatal(err)
	}
	priv, err := x509.MarshalPKCS8PrivateKey(k)
	if err != nil {
		t.Fatal(err)
	}
	cert, key, pool = filepath.Join(dir, "page.crt"), filepath.Join(dir, "page.key"), x509.NewCertPool()
	pemCert := pem.EncodeToMemory(&pem.Block{Type: "CERTIFICATE", Bytes: der})
	if err := os.WriteFile(key, pem.EncodeToMemory(&pem.Block{Type: "PRIVATE KEY", Bytes: priv}), 0o600); err != nil {
		t.Fatal(err)
	}
	if err := os.WriteFile(cert, pemCert, 0o644); err != nil {
		t.Fatal(err)
	}
	pool.AppendCertsFromPEM(pemCert)
	return cert, key, pool
}

// TestPageOverTLS is the page as others reach it: on all addresses, with a
// certificate and named tokens. Who is signed in stays so over a restart; a
// renewed certificate is taken without one.
func TestPageOverTLS(t *testing.T) {
	r := newRig(t, manyLoops(1))
	p := &r.config.Page
	var pool *x509.CertPool
	p.CertFile, p.KeyFile, pool = selfSigned(t, r.dir, 1)
	p.Listen, p.TokensFile = "0.0.0.0:0", filepath.Join(r.dir, "tokens")
	sum := sha256.Sum256([]byte("my token"))
	if err := os.WriteFile(p.TokensFile, []byte("name,role,sha256,expires\nA. Reed,act,"+hex.EncodeToString(sum[:])+",2099-01-01\n"), 0o600); err != nil {
		t.Fatal(err)
	}
	begin := func() (address string) {
		t.Helper()
		o := r.options()
		o.Serve.Page = ServePage
		d, err := New(o)
		if err != nil {
			t.Fatal(err)
		}
		r.d = d
		if err := d.Start(); err != nil {
			t.Fatal(err)
		}
		<-d.CaughtUp()
		_, port, err := net.SplitHostPort(d.Addr())
		if err != nil {
			t.Fatal(err)
		}
		return "https://127.0.0.1:" + port + "/"
	}
	// The cookie is for the host: another port after the restart has it, too.
	jar, err := cookiejar.New(nil)
	if err != nil {
		t.Fatal(err)
	}
	client := func() *http.Client {
		tr := &http.Transport{TLSClientConfig: &tls.Config{RootCAs: pool}, DisableKeepAlives: true}
		return &http.Client{Transport: tr, Jar: jar}
	}
	get := func(address string) (*http.Response, string) {
		t.Helper()
		req, _ := http.NewRequest("GET", address, nil)
		req.Header.Set("Accept", "text/html")
		resp, err := client().Do(req)
		if err != nil {
			t.Fatal(err)
		}
		defer resp.Body.Close()
		b, err := io.ReadAll(resp.Body)
		if err != nil {
			t.Fatal(err)
		}
		return resp, string(b)
	}

	root := begin()
	if resp, _ := get(root); resp.StatusCode != 401 || resp.TLS.Version < tls.VersionTLS12 {
		t.Fatalf("without a token: %s, TLS %x", resp.Status, resp.TLS.Version)
	}
	c := client()
	c.CheckRedirect = func(*http.Request, []*http.Request) error { return http.ErrUseLastResponse }
	resp, err := c.PostForm(root+"sign-in", url.Values{"token": {"my token"}})
	if err != nil {
		t.Fatal(err)
	}
	resp.Body.Close()
	if cs := resp.Cookies(); resp.StatusCode != 303 || len(cs) != 1 || !cs[0].Secure || !cs[0].HttpOnly || cs[0].SameSite != http.SameSiteStrictMode {
		t.Fatalf("sign-in: %s, %v", resp.Status, cs)
	}
	resp, body := get(root)
	if resp.StatusCode != 200 || !strings.Contains(body, "signed in as <bdi>A. Reed</bdi>") {
		t.Fatalf("signed in: %s", resp.Status)
	}
	if h := resp.Header.Get("Strict-Transport-Security"); h != "" {
		t.Errorf("Strict-Transport-Security %q would bind other programs of the box", h)
	}
	// In plain nothing is served: no page, no cookie.
	if resp, err := http.Get("http" + strings.TrimPrefix(root, "https")); err == nil {
		b, _ := io.ReadAll(resp.Body)
		resp.Body.Close()
		if resp.StatusCode != 400 || bytes.Contains(b, []byte("Kestrel")) || len(resp.Cookies()) > 0 {
			t.Errorf("in plain: %s, %.100q", resp.Status, b)
		}
	}

	r.stop()
	root = begin()
	if resp, _ := get(root); resp.StatusCode != 200 {
		t.Errorf("after a restart: %s", resp.Status)
	}
	old := pool
	_, _, pool = selfSigned(t, r.dir, 2)
	if err := os.Chtimes(p.CertFile, time.Time{}, time.Now().Add(2*time.Second)); err != nil {
		t.Fatal(err)
	}
	if resp, _ := get(root); resp.StatusCode != 200 || resp.TLS.PeerCertificates[0].SerialNumber.Int64() != 2 {
		t.Errorf("with a renewed certificate: %s, serial %d", resp.Status, resp.TLS.PeerCertificates[0].SerialNumber)
	}
	if err := os.WriteFile(p.CertFile, []byte("nothing"), 0o644); err != nil {
		t.Fatal(err)
	}
	if resp, _ := get(root); resp.StatusCode != 200 {
		t.Errorf("with a file that went wrong: %s", resp.Status)
	}
	pool = old
	if _, err := client().Get(root); err == nil {
		t.Error("a certificate that is not trusted was taken")
	}
	r.stop()
	o := r.options()
	o.Serve.Page = ServePage
	if _, err := New(o); err == nil || !strings.Contains(err.Error(), "page.cert_file") {
		t.Errorf("a start with a file that is no certificate: %v", err)
	}
}
