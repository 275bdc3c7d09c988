package opcua

import (
	"bytes"
	"crypto/rand"
	"crypto/rsa"
	"crypto/x509"
	"crypto/x509/pkix"
	"encoding/pem"
	"errors"
	"fmt"
	"math/big"
	"net/url"
	"os"
	"path/filepath"
	"sync"
	"time"
)

// identity is the own certificate and key.
type identity struct {
	cert     *x509.Certificate
	key      *rsa.PrivateKey
	uri      string // application URI: the one in the certificate
	certFile string // what to copy into a server's trusted folder
}

const (
	ownCertFile = "midwatch-opcua.der"
	ownKeyFile  = "midwatch-opcua.key.pem"
	ownYears    = 10
)

// makingPair keeps two sources that start together from making two pairs.
var makingPair sync.Mutex

// needIdentity loads the configured pair, or the one in the key folder, which
// is made when there is none. It is not needed for an unsecured, anonymous link.
func (s *Source) needIdentity() error {
	s.pairing.Lock() // a check may run beside the watch
	defer s.pairing.Unlock()
	if s.own != nil || (s.cfg.Security == "None" && s.cfg.User == "") {
		return nil
	}
	certFile, keyFile := s.cfg.CertFile, s.cfg.KeyFile
	if certFile == "" {
		if s.keys == "" {
			return errors.New("no folder for the own certificate and key is given; hint: set data, or cert_file and key_file")
		}
		certFile, keyFile = filepath.Join(s.keys, ownCertFile), filepath.Join(s.keys, ownKeyFile)
		made, err := makePair(certFile, keyFile, s.now())
		if err != nil {
			return err
		}
		if made {
			s.log.Info("own certificate made; copy it into the server's trusted folder", "file", certFile)
		}
	}
	own, err := loadPair(certFile, keyFile)
	if err != nil {
		return err
	}
	s.own = own
	s.mu.Lock()
	s.certs.own = own.cert.NotAfter
	s.mu.Unlock()
	return nil
}

// makePair makes a key and a self-signed certificate unless the key is there.
// The key is written last and in one step: a pair is whole or absent.
func makePair(certFile, keyFile string, now time.Time) (made bool, err error) {
	makingPair.Lock()
	defer makingPair.Unlock()
	if _, err := os.Stat(keyFile); err == nil {
		return false, nil
	}
	if err := os.MkdirAll(filepath.Dir(keyFile), 0o700); err != nil {
		return false, fmt.Errorf("making the key folder: %w", err)
	}
	host, err := os.Hostname()
	if err != nil || host == "" {
		host = "localhost"
	}
	key, err := rsa.GenerateKey(rand.Reader, 2048)
	if err != nil {
		return false, fmt.Errorf("making the own key: %w", err)
	}
	serial, err := rand.Int(rand.Reader, new(big.Int).Lsh(big.NewInt(1), 127))
	if err != nil {
		return false, fmt.Errorf("making the own certificate: %w", err)
	}
	name := "midwatch on " + host
	if len(name) > 64 { // the longest common name that X.509 allows
		name = "midwatch"
	}
	sample := &x509.Certificate{
		SerialNumber: serial,
		Subject:      pkix.Name{CommonName: name, Organization: []string{"midwatch"}},
		// A box without a clock battery may live in the past when it makes the pair.
		NotBefore: now.AddDate(0, 0, -1), NotAfter: now.AddDate(ownYears, 0, 0),
		KeyUsage:              x509.KeyUsageDigitalSignature | x509.KeyUsageContentCommitment | x509.KeyUsageKeyEncipherment | x509.KeyUsageDataEncipherment | x509.KeyUsageCertSign,
		ExtKeyUsage:           []x509.ExtKeyUsage{x509.ExtKeyUsageClientAuth},
		BasicConstraintsValid: true,
		URIs:                  []*url.URL{{Scheme: "urn", Opaque: url.PathEscape(host) + ":midwatch"}},
		DNSNames:              []string{host},
	}
	der, err := x509.CreateCertificate(rand.Reader, sample, sample, &key.PublicKey, key)
	if err != nil {
		return false, fmt.Errorf("making the own certificate: %w", err)
	}
	pkcs8, err := x509.MarshalPKCS8PrivateKey(key)
	if err != nil {
		return false, fmt.Errorf("making the own key: %w", err)
	}
	if err := writeWhole(certFile, der); err != nil {
		return false, err
	}
	return true, writeWhole(keyFile, pem.EncodeToMemory(&pem.Block{Type: "PRIVATE KEY", Bytes: pkcs8}))
}

// writeWhole writes a file that only its owner can read, in one step.
func writeWhole(name string, b []byte) error {
	f, err := os.CreateTemp(filepath.Dir(name), ".new-*") // mode 0600
	if err != nil {
		return fmt.Errorf("writing %s: %w", name, err)
	}
	_, err = f.Write(b)
	err = errors.Join(err, f.Sync(), f.Close())
	if err == nil {
		err = os.Rename(f.Name(), name)
	}
	if err != nil {
		os.Remove(f.Name())
		return fmt.Errorf("writing %s: %w", name, err)
	}
	return nil
}

func loadPair(certFile, keyFile string) (*identity, error) {
	der, err := readCertificate(certFile)
	if err != nil {
		return nil, fmt.Errorf("own certificate: %w", err)
	}
	cert, err := leaf(der)
	if err != nil {
		return nil, fmt.Errorf("own certificate %s: %w", certFile, err)
	}
	raw, err := os.ReadFile(keyFile)
	if err != nil {
		return nil, fmt.Errorf("own key: %w", err)
	}
	key, err := parseKey(raw)
	if err != nil {
		return nil, fmt.Errorf("own key %s: %w", keyFile, err)
	}
	if pub, ok := cert.PublicKey.(*rsa.PublicKey); !ok || !pub.Equal(&key.PublicKey) {
		return nil, fmt.Errorf("own certificate %s and key %s do not belong together; hint: give the pair that was made together", certFile, keyFile)
	}
	if len(cert.URIs) == 0 {
		return nil, fmt.Errorf("own certificate %s names no application URI; hint: make one with a subject alternative name of the kind URI", certFile)
	}
	return &identity{cert: cert, key: key, uri: cert.URIs[0].String(), certFile: certFile}, nil
}

// parseKey reads an RSA key: PKCS#8 or PKCS#1, PEM or DER.
func parseKey(b []byte) (*rsa.PrivateKey, error) {
	if block, _ := pem.Decode(b); block != nil {
		b = block.Bytes
	}
	if k, err := x509.ParsePKCS1PrivateKey(b); err == nil {
		return k, nil
	}
	k, err := x509.ParsePKCS8PrivateKey(b)
	if err != nil {
		return nil, fmt.Errorf("not readable as PKCS#8 or PKCS#1: %w; hint: an encrypted key must be decrypted first", err)
	}
	r, ok := k.(*rsa.PrivateKey)
	if !ok {
		return nil, fmt.Errorf("it is a %T; hint: these security policies need an RSA key", k)
	}
	return r, nil
}

// readCertificate reads certificates, PEM or DER, as DER one after the other.
func readCertificate(name string) ([]byte, error) {
	b, err := os.ReadFile(name)
	if err != nil {
		return nil, err
	}
	if !bytes.Contains(b, []byte("-----BEGIN")) {
		return b, nil
	}
	var der []byte
	for block, rest := pem.Decode(b); block != nil; block, rest = pem.Decode(rest) {
		if block.Type == "CERTIFICATE" {
			der = append(der, block.Bytes...)
		}
	}
	if der == nil {
		return nil, fmt.Errorf("%s holds no certificate", name)
	}
	return der, nil
}

// leaf is the first of a chain of certificates.
func leaf(der []byte) (*x509.Certificate, error) {
	chain, err := x509.ParseCertificates(der)
	if err != nil {
		return nil, err
	}
	if len(chain) == 0 {
		return nil, errors.New("no certificate")
	}
	return chain[0], nil
}
