package opcua

import (
	"crypto/x509"
	"os"
	"path/filepath"
	"strings"
	"testing"
	"time"

	"midwatch/configs"
)

func TestSecuredPolicies(t *testing.T) {
	t.Parallel()
	p := startPeer(t, "--loops", "1", "--rate", "2", "--user", "midwatch:secret", "--trust", "list",
		"--policies", "None,Basic256Sha256,Aes128_Sha256_RsaOaep,Aes256_Sha256_RsaPss")
	x := startProxy(t, p.port)
	user := func(security, mode string) configs.OPCUA {
		return configs.OPCUA{Endpoint: p.url, Security: security, Mode: mode, User: "midwatch", Password: "secret"}
	}
	keys := t.TempDir()
	t.Run("an untrusted client learns what to copy where", func(t *testing.T) {
		s, err := newSource(user("Basic256Sha256", "SignAndEncrypt"), "works", 0, bind(1), Options{KeyDir: keys})
		if err != nil {
			t.Fatal(err)
		}
		own := filepath.Join(keys, ownCertFile)
		if _, err = s.Probe(t.Context()); err == nil || !strings.Contains(err.Error(), "copy "+own+" into the server's trusted folder") {
			t.Fatalf("got %v", err)
		}
		b, err := os.ReadFile(own)
		if err != nil {
			t.Fatal(err)
		}
		if err := os.WriteFile(filepath.Join(p.pki, "trusted", "certs", "midwatch.der"), b, 0o600); err != nil {
			t.Fatal(err)
		}
		p.readOnly()
		p.stop()
		if err := os.RemoveAll(filepath.Join(p.pki, "rejected")); err != nil {
			t.Fatal(err)
		}
		p.start(p.args...) // not every machine lets the server watch its folders
		if _, err := s.Probe(t.Context()); err != nil {
			t.Fatal(err)
		}
	})
	t.Run("each policy and mode", func(t *testing.T) {
		for _, c := range []configs.OPCUA{
			user("None", "None"), // the password travels encrypted with the server's key
			user("Basic256Sha256", "Sign"), user("Basic256Sha256", "SignAndEncrypt"),
			user("Aes128_Sha256_RsaOaep", "SignAndEncrypt"), user("Aes256_Sha256_RsaPss", "Sign"), user("Aes256_Sha256_RsaPss", "SignAndEncrypt"),
		} {
			s, err := newSource(c, "works", 0, bind(1), Options{KeyDir: keys})
			if err != nil {
				t.Fatal(err)
			}
			got, err := s.Probe(t.Context())
			if err != nil || len(got) != 4 || got[0].Err != nil {
				t.Errorf("%s %s: %v, %v", c.Security, c.Mode, got, err)
			}
			if st := s.State(); st.CertDays < 3640 || st.CertDays > 3660 {
				t.Errorf("the own certificate is good for %d days, want ten years", st.CertDays)
			}
		}
	})
	t.Run("resumed on a secured link", func(t *testing.T) {
		c := user("Aes256_Sha256_RsaPss", "SignAndEncrypt")
		c.Endpoint = x.url()
		w := run(t, c, bind(1), func(s *Source) { s.keys = keys })
		w.flows(t)
		x.cut()
		eventually(t, "resumed", func() bool { return w.State().Counts["resumed"] > 0 })
		w.flows(t)
		if st := w.State(); st.ServerCertDays <= 0 {
			t.Errorf("days left of the server's certificate: %d", st.ServerCertDays)
		}
	})
	t.Run("wrong password is tried once", func(t *testing.T) {
		c := user("Basic256Sha256", "SignAndEncrypt")
		c.Password = "wrong"
		w := run(t, c, bind(1), func(s *Source) { s.keys = keys })
		eventually(t, "refused", func() bool { return w.State().Problem != "" })
		time.Sleep(1500 * time.Millisecond) // in which a hasty client would try again
		st := w.State()
		if st.Counts["sessions"] != 1 || !strings.Contains(st.Problem, "midwatch") || !strings.Contains(st.Hint, "password_file") {
			t.Errorf("state %+v, want one session, the user's name and a hint", st)
		}
	})
	t.Run("anonymous is refused without a try", func(t *testing.T) {
		s, err := newSource(configs.OPCUA{Endpoint: p.url}, "works", 0, bind(1), Options{})
		if err != nil {
			t.Fatal(err)
		}
		_, err = s.Probe(t.Context())
		if err == nil || !strings.Contains(err.Error(), "set user and password_file") || s.counts.sessions.Load() != 0 {
			t.Errorf("error %v, sessions %d", err, s.counts.sessions.Load())
		}
	})
	t.Run("foreign certificate", func(t *testing.T) {
		dir := t.TempDir()
		file, key := filepath.Join(dir, "other.der"), filepath.Join(dir, "other.key")
		if _, err := makePair(file, key, time.Now()); err != nil {
			t.Fatal(err)
		}
		for _, c := range []configs.OPCUA{
			{Endpoint: p.url, Security: "Basic256Sha256", User: "midwatch", Password: "secret", ServerCertFile: file},
			{Endpoint: p.url, Security: "Basic256Sha256", User: "midwatch", Password: "secret", CAFile: file},
		} {
			w := run(t, c, bind(1), func(s *Source) { s.keys = keys })
			eventually(t, "refused", func() bool { return w.State().Problem != "" })
			time.Sleep(time.Second) // in which a hasty client would try again
			st := w.State()
			if st.Counts["sessions"] != 0 || st.Counts["attempts"] != 1 || !strings.Contains(st.Problem, "not trusted") || st.Hint == "" {
				t.Errorf("state %+v, want no session and one attempt", st)
			}
			w.stop()
		}
	})
	t.Run("remembered certificate", func(t *testing.T) {
		s, err := newSource(user("Basic256Sha256", ""), "other", 0, bind(1), Options{KeyDir: keys})
		if err != nil {
			t.Fatal(err)
		}
		if _, err := s.Probe(t.Context()); err != nil {
			t.Fatal(err)
		}
		b, err := os.ReadFile(filepath.Join(keys, ownCertFile))
		if err != nil {
			t.Fatal(err)
		}
		if err := os.WriteFile(filepath.Join(keys, "server-other.der"), b, 0o600); err != nil {
			t.Fatal(err)
		}
		if _, err := s.Probe(t.Context()); err == nil || !strings.Contains(err.Error(), "not trusted") {
			t.Errorf("a changed certificate gave %v", err)
		}
	})
}

func TestClearPasswordIsRefused(t *testing.T) {
	s, err := newSource(configs.OPCUA{Endpoint: "opc.tcp://h:1", User: "u", Password: "p"}, "works", 0, nil, Options{})
	if err != nil {
		t.Fatal(err)
	}
	offer := clearOffer()
	if _, _, err := s.login(offer); err == nil || !strings.Contains(err.Error(), "clear") {
		t.Errorf("got %v", err)
	}
	s.cfg.AllowClearPassword = true
	if _, _, err := s.login(offer); err != nil {
		t.Errorf("allowed, yet %v", err)
	}
}

func TestOwnPair(t *testing.T) {
	dir := t.TempDir()
	certFile, keyFile := filepath.Join(dir, "k", ownCertFile), filepath.Join(dir, "k", ownKeyFile)
	now := time.Date(2026, 1, 4, 0, 0, 0, 0, time.UTC)
	if made, err := makePair(certFile, keyFile, now); err != nil || !made {
		t.Fatal(made, err)
	}
	if made, err := makePair(certFile, keyFile, now); err != nil || made {
		t.Fatalf("a second pair was made: %v %v", made, err)
	}
	for _, f := range []string{certFile, keyFile} {
		if st, err := os.Stat(f); err != nil || st.Mode().Perm() != 0o600 {
			t.Errorf("%s: %v %v, want mode 0600", f, st.Mode(), err)
		}
	}
	own, err := loadPair(certFile, keyFile)
	if err != nil {
		t.Fatal(err)
	}
	if !strings.HasPrefix(own.uri, "urn:") || !strings.HasSuffix(own.uri, ":midwatch") {
		t.Errorf("application URI %q", own.uri)
	}
	if own.cert.NotAfter.Year() != 2036 || own.cert.ExtKeyUsage[0] != x509.ExtKeyUsageClientAuth {
		t.Errorf("certificate until %v, usage %v", own.cert.NotAfter, own.cert.ExtKeyUsage)
	}
	want := x509.KeyUsageDigitalSignature | x509.KeyUsageContentCommitment | x509.KeyUsageKeyEncipherment | x509.KeyUsageDataEncipherment
	if own.cert.KeyUsage&want != want {
		t.Errorf("key usage %b", own.cert.KeyUsage)
	}
}
