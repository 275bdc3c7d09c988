package opcua

import (
	"bytes"
	"context"
	"crypto/sha256"
	"crypto/x509"
	"errors"
	"fmt"
	"net/url"
	"os"
	"path/filepath"
	"slices"
	"strings"
	"time"

	"github.com/gopcua/opcua/ua"
	"github.com/gopcua/opcua/uasc"
)

// errForeign marks a server whose certificate is not the expected one. It is a
// finding for people, not a reason to try again soon.
var errForeign = errors.New("the server's certificate is not trusted")

// errSignature is what a session whose signature does not verify ends with.
var errSignature = errors.New("the server's signature does not match its certificate; hint: something between this machine and the server may be answering in its place")

// enter asks the server what it offers and makes the door to what is configured,
// with a verified certificate, and what is needed to open a session there. Only
// policy, mode, tokens and certificate are taken from the answer; the address
// dialled is always the configured one.
func (s *Source) enter(ctx context.Context) (door, *uasc.SessionConfig, error) {
	offers, err := endpoints(ctx, s.cfg.Endpoint, s.pace.dial, s.pace.call)
	if err != nil {
		return door{}, nil, err
	}
	policy, mode := ua.FormatSecurityPolicyURI(s.cfg.Security), ua.MessageSecurityModeFromString(s.cfg.Mode)
	at := slices.IndexFunc(offers, func(e *ua.EndpointDescription) bool {
		return e.SecurityPolicyURI == policy && e.SecurityMode == mode
	})
	if at < 0 {
		return door{}, nil, fmt.Errorf("the server does not offer security %s with mode %s; hint: it offers %s", s.cfg.Security, s.cfg.Mode, offered(offers))
	}
	offer := offers[at]
	d := door{url: s.cfg.Endpoint, policy: policy, mode: mode, tokens: offer.UserIdentityTokens,
		dial: s.pace.dial, call: s.pace.call, wait: s.publishWait(), token: s.pace.token}
	if s.own != nil {
		d.cert, d.key = s.own.cert.Raw, s.own.key
	}
	token, tokenPolicy, err := s.login(offer)
	if err != nil {
		return door{}, nil, err
	}
	if policy != ua.SecurityPolicyURINone || tokenPolicy != ua.SecurityPolicyURINone {
		if d.server, err = s.verify(offer.ServerCertificate); err != nil {
			return door{}, nil, err
		}
	}
	if u, err := url.Parse(offer.EndpointURL); err == nil {
		if own, _ := url.Parse(s.cfg.Endpoint); own != nil && u.Hostname() != own.Hostname() {
			s.log.Info("the server announces another host name; the configured one is dialled", "announced", u.Host)
		}
	}
	app := &ua.ApplicationDescription{ApplicationURI: "urn:midwatch", ProductURI: "urn:midwatch",
		ApplicationName: ua.NewLocalizedText("midwatch"), ApplicationType: ua.ApplicationTypeClient}
	if s.own != nil {
		app.ApplicationURI = s.own.uri
	}
	return d, &uasc.SessionConfig{
		ClientDescription: app, SessionName: "midwatch " + s.name, SessionTimeout: s.pace.sessionLife,
		LocaleIDs: []string{"en"}, UserIdentityToken: token, UserTokenSignature: &ua.SignatureData{},
		AuthPassword: s.cfg.Password, AuthPolicyURI: tokenPolicy,
	}, nil
}

func offered(offers []*ua.EndpointDescription) string {
	var what []string
	for _, e := range offers {
		what = append(what, e.SecurityPolicyURI[strings.LastIndexByte(e.SecurityPolicyURI, '#')+1:]+" with "+
			strings.TrimPrefix(e.SecurityMode.String(), "MessageSecurityMode"))
	}
	slices.Sort(what)
	if what = slices.Compact(what); len(what) == 0 {
		return "nothing"
	}
	return strings.Join(what, ", ")
}

// login picks the identity token and the policy under which a password travels.
func (s *Source) login(offer *ua.EndpointDescription) (token any, policy string, err error) {
	kind := ua.UserTokenTypeAnonymous
	if s.cfg.User != "" {
		kind = ua.UserTokenTypeUserName
	}
	var best *ua.UserTokenPolicy
	for _, t := range offer.UserIdentityTokens {
		if t.TokenType != kind {
			continue
		}
		p := tokenPolicy(t, offer)
		if best == nil || (tokenPolicy(best, offer) == ua.SecurityPolicyURINone && p != ua.SecurityPolicyURINone) {
			best = t
		}
	}
	if best == nil {
		if kind == ua.UserTokenTypeAnonymous {
			return nil, "", fmt.Errorf("the server does not let anonymous clients in: %w; hint: set user and password_file", ua.StatusBadIdentityTokenInvalid)
		}
		return nil, "", fmt.Errorf("the server does not take a user name at this endpoint: %w; hint: leave out user, or choose another security", ua.StatusBadIdentityTokenInvalid)
	}
	if kind == ua.UserTokenTypeAnonymous {
		return &ua.AnonymousIdentityToken{PolicyID: best.PolicyID}, ua.SecurityPolicyURINone, nil
	}
	policy = tokenPolicy(best, offer)
	if policy == ua.SecurityPolicyURINone && offer.SecurityMode != ua.MessageSecurityModeSignAndEncrypt && !s.cfg.AllowClearPassword {
		return nil, "", errClearPassword
	}
	return &ua.UserNameIdentityToken{PolicyID: best.PolicyID, UserName: s.cfg.User}, policy, nil
}

var errClearPassword = errors.New("the password would travel in clear; hint: use security Basic256Sha256 with mode SignAndEncrypt, or set allow_clear_password: true if the network allows it")

func tokenPolicy(t *ua.UserTokenPolicy, offer *ua.EndpointDescription) string {
	if t.SecurityPolicyURI != "" {
		return t.SecurityPolicyURI
	}
	return offer.SecurityPolicyURI
}

// verify checks the certificate that a server shows against the pinned one,
// the configured authorities, or the one remembered from the first contact, and
// returns its leaf.
func (s *Source) verify(shown []byte) ([]byte, error) {
	cert, err := leaf(shown)
	if err != nil {
		return nil, fmt.Errorf("%w: it cannot be read: %w", errForeign, err)
	}
	s.mu.Lock()
	s.certs.server = cert.NotAfter
	s.mu.Unlock()
	switch {
	case s.cfg.ServerCertFile != "":
		err = sameAs(cert, s.cfg.ServerCertFile, "server_cert_file")
	case s.cfg.CAFile != "":
		err = s.signedBy(shown, cert)
	default:
		err = s.sameAsBefore(cert)
	}
	if err != nil {
		return nil, err
	}
	if now := s.now(); s.cfg.CAFile != "" && s.cfg.ServerCertFile == "" {
		return cert.Raw, nil // dates were checked with the chain
	} else if now.After(cert.NotAfter) {
		s.log.Warn("the server's certificate has expired; hint: renew it on the server", "expired", cert.NotAfter.Format(time.DateOnly))
	}
	return cert.Raw, nil
}

func sameAs(cert *x509.Certificate, file, setting string) error {
	der, err := readCertificate(file)
	if err != nil {
		return fmt.Errorf("%s: %w", setting, err)
	}
	pinned, err := leaf(der)
	if err != nil {
		return fmt.Errorf("%s %s: %w", setting, file, err)
	}
	if bytes.Equal(pinned.Raw, cert.Raw) {
		return nil
	}
	return fmt.Errorf("%w: it is %s, %s holds %s; hint: if the server got a new certificate on purpose, put it into that file, else find out who answers there",
		errForeign, fingerprint(cert), file, fingerprint(pinned))
}

func (s *Source) signedBy(shown []byte, cert *x509.Certificate) error {
	der, err := readCertificate(s.cfg.CAFile)
	if err != nil {
		return fmt.Errorf("ca_file: %w", err)
	}
	roots, err := x509.ParseCertificates(der)
	if err != nil {
		return fmt.Errorf("ca_file %s: %w", s.cfg.CAFile, err)
	}
	o := x509.VerifyOptions{Roots: x509.NewCertPool(), Intermediates: x509.NewCertPool(), CurrentTime: s.now(),
		KeyUsages: []x509.ExtKeyUsage{x509.ExtKeyUsageAny}}
	for _, r := range roots {
		o.Roots.AddCert(r)
	}
	if chain, err := x509.ParseCertificates(shown); err == nil {
		for _, c := range chain[1:] {
			o.Intermediates.AddCert(c)
		}
	}
	if _, err := cert.Verify(o); err != nil {
		return fmt.Errorf("%w: %w (%s); hint: ca_file must hold the authority that signed the server's certificate, and both clocks must be right", errForeign, err, fingerprint(cert))
	}
	return nil
}

// sameAsBefore remembers the certificate of the first contact in the key folder
// and insists on it from then on.
func (s *Source) sameAsBefore(cert *x509.Certificate) error {
	if s.keys == "" {
		return fmt.Errorf("%w: nothing to compare it with; hint: set server_cert_file or ca_file", errForeign)
	}
	file := filepath.Join(s.keys, "server-"+url.PathEscape(s.name)+".der")
	if _, err := os.Stat(file); err == nil {
		return sameAs(cert, file, "remembered certificate")
	}
	if err := os.MkdirAll(s.keys, 0o700); err != nil {
		return fmt.Errorf("remembering the server's certificate: %w", err)
	}
	s.log.Warn("the server's certificate is taken on trust at first contact; hint: compare its fingerprint with the server's, or set server_cert_file", "fingerprint", fingerprint(cert), "file", file)
	return writeWhole(file, cert.Raw)
}

func fingerprint(c *x509.Certificate) string {
	sum := sha256.Sum256(c.Raw)
	return fmt.Sprintf("%q, SHA-256 %X", c.Subject.CommonName, sum[:8])
}
