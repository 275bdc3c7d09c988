package mqtt

import (
	"crypto/ecdsa"
	"crypto/elliptic"
	"crypto/rand"
	"crypto/tls"
	"crypto/x509"
	"crypto/x509/pkix"
	"encoding/pem"
	"io"
	"log/slog"
	"math/big"
	"net"
	"os"
	"path/filepath"
	"strings"
	"testing"
	"time"

	mochi "github.com/mochi-mqtt/server/v2"
	"github.com/mochi-mqtt/server/v2/listeners"

	"midwatch/collector"
	"midwatch/configs"
)

// authority signs certificates for one test.
type authority struct {
	t    *testing.T
	dir  string
	cert *x509.Certificate
	key  *ecdsa.PrivateKey
	file string
}

func newAuthority(t *testing.T) *authority {
	a := &authority{t: t, dir: t.TempDir()}
	a.cert, a.key, a.file, _ = a.issue("ca", nil, 30)
	return a
}

// issue makes a certificate for an address, or for none, that ends in so many days.
func (a *authority) issue(name string, ip net.IP, days int) (*x509.Certificate, *ecdsa.PrivateKey, string, string) {
	a.t.Helper()
	key, err := ecdsa.GenerateKey(elliptic.P256(), rand.Reader)
	if err != nil {
		a.t.Fatal(err)
	}
	tpl := &x509.Certificate{SerialNumber: big.NewInt(time.Now().UnixNano()), Subject: pkix.Name{CommonName: name}, NotBefore: time.Now().Add(-time.Hour),
		NotAfter: time.Now().Add(time.Duration(days)*24*time.Hour - time.Hour), ExtKeyUsage: []x509.ExtKeyUsage{x509.ExtKeyUsageServerAuth, x509.ExtKeyUsageClientAuth}}
	if ip != nil {
		tpl.IPAddresses = []net.IP{ip}
	}
	parent, signer := a.cert, a.key
	if parent == nil {
		parent, signer = tpl, key
		tpl.IsCA, tpl.BasicConstraintsValid, tpl.KeyUsage = true, true, x509.KeyUsageCertSign
	}
	der, err := x509.CreateCertificate(rand.Reader, tpl, parent, &key.PublicKey, signer)
	if err != nil {
		a.t.Fatal(err)
	}
	cert, err := x509.ParseCertificate(der)
	if err != nil {
		a.t.Fatal(err)
	}
	keyDER, err := x509.MarshalECPrivateKey(key)
	if err != nil {
		a.t.Fatal(err)
	}
	write := func(suffix, kind string, b []byte) string {
		file := filepath.Join(a.dir, name+suffix)
		if err := os.WriteFile(file, pem.EncodeToMemory(&pem.Block{Type: kind, Bytes: b}), 0o600); err != nil {
			a.t.Fatal(err)
		}
		return file
	}
	return cert, key, write(".pem", "CERTIFICATE", der), write(".key", "EC PRIVATE KEY", keyDER)
}

// secureBroker listens with TLS and a certificate of the authority.
func secureBroker(t *testing.T, a *authority, ip net.IP, wantClient bool) *broker {
	t.Helper()
	_, _, cert, key := a.issue("broker", ip, 30)
	pair, err := tls.LoadX509KeyPair(cert, key)
	if err != nil {
		t.Fatal(err)
	}
	cfg := &tls.Config{Certificates: []tls.Certificate{pair}}
	if wantClient {
		cfg.ClientAuth, cfg.ClientCAs = tls.RequireAndVerifyClientCert, x509.NewCertPool()
		cfg.ClientCAs.AddCert(a.cert)
	}
	srv := mochi.New(&mochi.Options{InlineClient: true, Logger: slog.New(slog.NewTextHandler(io.Discard, nil))})
	srv.AddHook(&gate{}, nil)
	l := listeners.NewTCP(listeners.Config{ID: "tls", Address: "127.0.0.1:0", TLSConfig: cfg})
	if err := srv.AddListener(l); err != nil {
		t.Fatal(err)
	}
	if err := srv.Serve(); err != nil {
		t.Fatal(err)
	}
	b := &broker{t: t, srv: srv, addr: l.Address()}
	t.Cleanup(b.down)
	return b
}

func TestTLS(t *testing.T) {
	t.Parallel()
	home, other := newAuthority(t), newAuthority(t)
	loop := net.IPv4(127, 0, 0, 1)
	good := secureBroker(t, home, loop, false)
	nameless := secureBroker(t, home, nil, false)
	strict := secureBroker(t, home, loop, true)
	plain := newBroker(t, nil)
	_, _, cert, key := home.issue("midwatch", nil, 12)
	cases := []struct {
		name string
		b    *broker
		cfg  configs.MQTT
		want string // in problem and hint; empty: watching
	}{
		{"right", good, configs.MQTT{CAFile: home.file}, ""},
		{"client certificate", strict, configs.MQTT{CAFile: home.file, CertFile: cert, KeyFile: key}, ""},
		{"wrong authority", good, configs.MQTT{CAFile: other.file}, "set ca_file to the authority"},
		{"no subject alternative name", nameless, configs.MQTT{CAFile: home.file}, "subject alternative name"},
		{"missing client certificate", strict, configs.MQTT{CAFile: home.file}, "certificate"},
		{"TLS to a plain port", plain, configs.MQTT{CAFile: home.file}, "TLS"},
		{"plain to a TLS port", good, configs.MQTT{Broker: "mqtt://" + good.addr}, "mqtts://"},
		{"authority file missing", good, configs.MQTT{CAFile: filepath.Join(home.dir, "none.pem")}, "ca_file"},
		{"authority file is none", good, configs.MQTT{CAFile: key}, "no certificate in PEM form"},
	}
	for _, c := range cases {
		t.Run(c.name, func(t *testing.T) {
			t.Parallel()
			if c.cfg.Broker == "" {
				c.cfg.Broker = "mqtts://" + c.b.addr
			}
			s := build(t, c.cfg, Options{}, bind(1, collector.RolePV, "k/pv"))
			s.pace.connect = time.Second
			r := start(t, s)
			if c.want != "" {
				eventually(t, "explained: "+c.want, func() bool {
					st := s.State()
					return st.Problem != "" && strings.Contains(st.Problem+"; "+st.Hint, c.want)
				})
				return
			}
			eventually(t, "watching", watching(s))
			c.b.publish("k/pv", "5", false)
			eventually(t, "a value", func() bool { return len(r.of(1, collector.RolePV)) == 1 })
			if days := s.State().CertDays; c.cfg.CertFile != "" && days != 12 {
				t.Errorf("certificate ends in %d days, want 12", days)
			}
		})
	}
}
