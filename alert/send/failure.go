package send

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
	"syscall"

	"midwatch/alert"
)

// failure says why something on the network failed, in words of the closed set.
// It is always worth another try.
func failure(err error) error {
	if err == nil {
		return nil
	}
	// The address may hold a secret; what failed does not.
	if u, ok := errors.AsType[*url.Error](err); ok {
		err = u.Err
	}
	return &alert.Failure{Reason: reason(err), Err: err}
}

func reason(err error) alert.Reason {
	var t interface{ Timeout() bool }
	switch {
	case is[*net.DNSError](err):
		return alert.ReasonDNS
	case is[*tls.CertificateVerificationError](err), is[x509.UnknownAuthorityError](err), is[x509.HostnameError](err),
		is[x509.CertificateInvalidError](err), is[tls.RecordHeaderError](err), is[tls.AlertError](err),
		strings.Contains(err.Error(), "tls: "), strings.Contains(err.Error(), "x509: "):
		return alert.ReasonTLS
	case errors.Is(err, context.DeadlineExceeded), errors.Is(err, os.ErrDeadlineExceeded), errors.As(err, &t) && t.Timeout():
		return alert.ReasonTimeout
	case errors.Is(err, syscall.ECONNREFUSED), errors.Is(err, syscall.ECONNRESET), errors.Is(err, syscall.EHOSTUNREACH), errors.Is(err, syscall.ENETUNREACH), errors.Is(err, syscall.EPIPE):
		return alert.ReasonRefused
	}
	return alert.ReasonOther
}

func is[E error](err error) bool {
	_, ok := errors.AsType[E](err)
	return ok
}

// trusted makes TLS settings that trust the authorities of a file, or those of
// the machine where no file is given. There is no way to trust everything.
func trusted(caFile string) (*tls.Config, error) {
	c := &tls.Config{MinVersion: tls.VersionTLS12}
	if caFile == "" {
		return c, nil
	}
	pem, err := os.ReadFile(caFile)
	if err != nil {
		return nil, fmt.Errorf("ca_file: %w; hint: name a file with the certificate of the authority in PEM form", err)
	}
	c.RootCAs = x509.NewCertPool()
	if !c.RootCAs.AppendCertsFromPEM(pem) {
		return nil, fmt.Errorf("ca_file %s holds no certificate; hint: it must be in PEM form, beginning with -----BEGIN CERTIFICATE-----", caFile)
	}
	return c, nil
}
