package mqtt

import (
	"context"
	"crypto/tls"
	"crypto/x509"
	"errors"
	"fmt"
	"net"
	"net/url"
	"os"
	"strings"
	"time"

	"midwatch/configs"
)

// target is where and how to connect, read from the configuration once; files
// are read again at each connect, so that a renewed certificate or password
// needs no restart.
type target struct {
	addr   string // host:port
	host   string
	secure bool
	cfg    configs.MQTT
}

func parseBroker(cfg configs.MQTT) (target, error) {
	t := target{cfg: cfg}
	raw := cfg.Broker
	if raw == "" {
		return t, errors.New("broker is missing; hint: write broker: \"mqtts://HOST:8883\"")
	}
	if !strings.Contains(raw, "://") {
		return t, fmt.Errorf("broker %q has no scheme; hint: write mqtts://%s, or mqtt://%s for a line without TLS", raw, raw, raw)
	}
	u, err := url.Parse(raw)
	if err != nil {
		return t, fmt.Errorf("broker is no address: %w; hint: write mqtts://HOST:PORT", err)
	}
	port := "1883"
	switch u.Scheme {
	case "mqtt", "tcp":
	case "mqtts", "ssl", "tls", "tcps":
		t.secure, port = true, "8883"
	default:
		return t, fmt.Errorf("broker scheme %q is not supported; hint: use mqtts:// (TLS) or mqtt://", u.Scheme)
	}
	if u.User != nil {
		return t, errors.New("broker carries a user name; hint: use the keys user and password_file")
	}
	if u.Path != "" && u.Path != "/" {
		return t, fmt.Errorf("broker carries a path %q; hint: tags belong into the loop list", u.Path)
	}
	if t.host = u.Hostname(); t.host == "" {
		return t, fmt.Errorf("broker %q has no host; hint: write mqtts://HOST:PORT", raw)
	}
	if u.Port() != "" {
		port = u.Port()
	}
	t.addr = net.JoinHostPort(t.host, port)
	if !t.secure && (cfg.CAFile != "" || cfg.CertFile != "") {
		return t, fmt.Errorf("broker %q is without TLS but certificates are set; hint: write mqtts://", raw)
	}
	if (cfg.CertFile == "") != (cfg.KeyFile == "") {
		return t, errors.New("of cert_file and key_file only one is set; hint: a client certificate needs both")
	}
	return t, nil
}

// dial opens the connection, TLS included.
func (t *target) dial(ctx context.Context) (net.Conn, error) {
	var d net.Dialer
	c, err := d.DialContext(ctx, "tcp", t.addr)
	if err != nil {
		return nil, err
	}
	if !t.secure {
		return c, nil
	}
	cfg, err := t.tlsConfig()
	if err != nil {
		c.Close()
		return nil, err
	}
	tc := tls.Client(c, cfg)
	if err := tc.HandshakeContext(ctx); err != nil {
		c.Close()
		return nil, fmt.Errorf("TLS: %w", err)
	}
	return tc, nil
}

func (t *target) tlsConfig() (*tls.Config, error) {
	cfg := &tls.Config{ServerName: t.host, MinVersion: tls.VersionTLS12}
	if t.cfg.CAFile != "" {
		pem, err := os.ReadFile(t.cfg.CAFile)
		if err != nil {
			return nil, fmt.Errorf("ca_file: %w", err)
		}
		cfg.RootCAs = x509.NewCertPool()
		if !cfg.RootCAs.AppendCertsFromPEM(pem) {
			return nil, fmt.Errorf("ca_file %s holds no certificate in PEM form", t.cfg.CAFile)
		}
	}
	if t.cfg.CertFile != "" {
		pair, err := tls.LoadX509KeyPair(t.cfg.CertFile, t.cfg.KeyFile)
		if err != nil {
			return nil, fmt.Errorf("client certificate: %w", err)
		}
		cfg.Certificates = []tls.Certificate{pair}
	}
	return cfg, nil
}

// password is read at each connect. One trailing newline is an editor's, not the
// password's.
func (t *target) password() (string, error) {
	if t.cfg.PasswordFile == "" {
		return t.cfg.Password, nil
	}
	b, err := os.ReadFile(t.cfg.PasswordFile)
	if err != nil {
		return "", fmt.Errorf("password_file: %w", err)
	}
	s := strings.TrimSuffix(string(b), "\n")
	return strings.TrimSuffix(s, "\r"), nil
}

// certUntil is when the client certificate expires; zero when there is none or it
// cannot be read.
func (t *target) certUntil() time.Time {
	if t.cfg.CertFile == "" {
		return time.Time{}
	}
	pair, err := tls.LoadX509KeyPair(t.cfg.CertFile, t.cfg.KeyFile)
	if err != nil || pair.Leaf == nil {
		return time.Time{}
	}
	return pair.Leaf.NotAfter
}
