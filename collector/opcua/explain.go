package opcua

import (
	"context"
	"errors"
	"io"
	"net"
	"os"
	"strings"
	"syscall"
	"time"

	"github.com/gopcua/opcua/ua"
)

// fault is why a source is down, for people, and how long to leave it alone.
type fault struct {
	problem, hint string
	wait          time.Duration // 0: the usual back-off
}

func (f *fault) Error() string {
	if f.hint == "" {
		return f.problem
	}
	return f.problem + "; hint: " + f.hint
}

// kindOfWait says how soon another try can do harm or good.
type kindOfWait uint8

const (
	backOff  kindOfWait = iota
	distrust            // somebody has to act on the server first
	lockout             // accounts lock after a few wrong tries
)

// sentences say what a status code means for the person at the edge box.
// %cert% stands for the file of the own certificate, %user% for the user name.
var sentences = []struct {
	code          ua.StatusCode
	problem, hint string
	wait          kindOfWait
}{
	{ua.StatusBadCertificateURIInvalid, "the server refuses the own certificate: its application URI is not the one this client states", "give a certificate made for midwatch, or leave out cert_file and key_file to have one made", distrust},
	{ua.StatusBadCertificateUntrusted, "the server does not trust the own certificate yet", "copy %cert% into the server's trusted folder, and take it out of its rejected folder", distrust},
	{ua.StatusBadSecurityChecksFailed, "the server refuses the secure channel, most likely since it does not trust the own certificate yet", "copy %cert% into the server's trusted folder, and take it out of its rejected folder", distrust},
	{ua.StatusBadCertificateTimeInvalid, "the server takes the own certificate for expired or not yet valid", "compare the clocks of both machines; make a new certificate if it has expired", distrust},
	{ua.StatusBadCertificateIssuerTimeInvalid, "the server takes the authority of the own certificate for expired", "renew the authority's certificate on the server", distrust},
	{ua.StatusBadCertificateHostNameInvalid, "the server refuses the own certificate for its host name", "make a certificate that names this machine", distrust},
	{ua.StatusBadCertificateUseNotAllowed, "the server refuses the own certificate: its key usages do not fit", "leave out cert_file and key_file to have a fitting one made", distrust},
	{ua.StatusBadCertificateInvalid, "the server cannot use the own certificate", "give an RSA certificate of 2048 bits or more, or leave out cert_file and key_file to have one made", distrust},
	{ua.StatusBadCertificateRevoked, "the own certificate has been revoked", "ask who keeps the server's certificates for a new one", distrust},
	{ua.StatusBadCertificateChainIncomplete, "the server misses an authority above the own certificate", "give the server the whole chain, or trust %cert% directly", distrust},
	{ua.StatusBadCertificateRevocationUnknown, "the server cannot tell whether the own certificate is revoked", "put the authority's revocation list onto the server", distrust},
	{ua.StatusBadUserAccessDenied, "the server refuses user %user%: wrong user name or password, or no right to read", "check user and password_file; tries are five minutes apart so that the account does not lock", lockout},
	{ua.StatusBadIdentityTokenRejected, "the server rejects the login of user %user%", "check user and password_file; tries are five minutes apart so that the account does not lock", lockout},
	{ua.StatusBadIdentityTokenInvalid, "the server does not accept this kind of login", "set user and password_file if it wants a user name, or leave them out if it does not", lockout},
	{ua.StatusBadTooManySessions, "the server has no session left; midwatch needs one", "close another client or raise the server's limit; a broken session is freed by the server after its timeout", distrust},
	{ua.StatusBadSecurityPolicyRejected, "the server refuses this security policy", "choose one that the server offers", distrust},
	{ua.StatusBadSecurityModeRejected, "the server refuses this security mode", "choose one that the server offers", distrust},
	{ua.StatusBadSecurityModeInsufficient, "the server wants more security for this", "use security Basic256Sha256 with mode SignAndEncrypt", distrust},
	{ua.StatusBadLicenseExpired, "the server's licence has expired", "renew it on the server", distrust},
	{ua.StatusBadTooManySubscriptions, "the server allows no more subscriptions", "close another client or raise the server's limit", distrust},
	{ua.StatusBadTCPEndpointURLInvalid, "the server does not know this address", "compare the path in endpoint with the server's own address", backOff},
	{ua.StatusBadTCPServerTooBusy, "the server is too busy to let anybody in", "", backOff},
	{ua.StatusBadServerHalted, "the server has halted", "", backOff},
	{ua.StatusBadShutdown, "the server is shutting down", "", backOff},
	{ua.StatusBadNoSubscription, "the server has dropped the subscriptions", "they are made anew; if it happens often, look at the server's load and limits", backOff},
	{ua.StatusBadSubscriptionIDInvalid, "the server no longer knows a subscription", "it is made anew", backOff},
	{ua.StatusBadSessionClosed, "the server has closed the session", "a new one is made; if it happens often, look at the server's log", backOff},
	{ua.StatusBadSessionIDInvalid, "the server no longer knows the session", "a new one is made; it has probably restarted", backOff},
	{ua.StatusBadTimeout, "the server did not answer in time", "", backOff},
	{ua.StatusBadTooManyOperations, "the server refuses even one operation per request", "raise its operation limits", distrust},
	{ua.StatusBadNodeIDUnknown, "the server does not know this node", "compare the address with the server's address space; it is asked for again every few minutes", backOff},
	{ua.StatusBadNodeIDInvalid, "the server cannot read this node id", "compare the address with the server's address space", backOff},
	{ua.StatusBadNoMatch, "the server has nothing at this browse path", "compare each name of the path with the server's browse names", backOff},
	{ua.StatusBadAttributeIDInvalid, "this node is a folder or an object and has no value", "address the variable below it", backOff},
	{ua.StatusBadNotReadable, "this user may not read the tag", "give the user the right to read it", backOff},
	{ua.StatusBadTooManyMonitoredItems, "the server allows no more monitored items", "raise its limit, or watch fewer tags", backOff},
}

// explain turns an error into a fault with a sentence for people.
func (s *Source) explain(err error) *fault {
	var f *fault
	if errors.As(err, &f) {
		return f
	}
	if errors.Is(err, errForeign) {
		what, hint, _ := strings.Cut(err.Error(), "; hint: ")
		return &fault{problem: what, hint: hint, wait: s.pace.lockout}
	}
	if errors.Is(err, errClearPassword) {
		what, hint, _ := strings.Cut(err.Error(), "; hint: ")
		return &fault{problem: what, hint: hint, wait: s.pace.lockout}
	}
	for _, w := range sentences {
		if !errors.Is(err, w.code) {
			continue
		}
		f := &fault{problem: s.fill(w.problem), hint: s.fill(w.hint)}
		if what, hint, ok := strings.Cut(err.Error(), "; hint: "); ok {
			f.problem, f.hint = what, hint
		} else {
			f.problem += " (" + statusName(w.code) + ")"
		}
		switch w.wait {
		case distrust:
			f.wait = s.pace.distrust
		case lockout:
			f.wait = s.pace.lockout
		}
		return f
	}
	var dns *net.DNSError
	switch {
	case errors.As(err, &dns):
		return &fault{problem: "the host name " + dns.Name + " cannot be resolved", hint: "write the address as a number, or mend the name service"}
	case errors.Is(err, syscall.ECONNREFUSED):
		return &fault{problem: "nothing listens at " + s.cfg.Endpoint, hint: "is the server running, and is this its port?"}
	case errors.Is(err, errSilent):
		return &fault{problem: err.Error()}
	case errors.Is(err, os.ErrDeadlineExceeded), errors.Is(err, context.DeadlineExceeded), isTimeout(err):
		return &fault{problem: s.cfg.Endpoint + " does not answer", hint: "check cable, route and firewall"}
	case errors.Is(err, io.EOF), errors.Is(err, syscall.ECONNRESET), errors.Is(err, syscall.EPIPE), errors.Is(err, net.ErrClosed):
		return &fault{problem: "the connection was cut"}
	}
	what, hint, _ := strings.Cut(err.Error(), "; hint: ")
	return &fault{problem: what, hint: hint}
}

func (s *Source) fill(text string) string {
	cert := "the own certificate"
	if s.own != nil {
		cert = s.own.certFile
	}
	user := "anonymous"
	if s.cfg.User != "" {
		user = s.cfg.User
	}
	return strings.NewReplacer("%cert%", cert, "%user%", user).Replace(text)
}

func isTimeout(err error) bool {
	var t interface{ Timeout() bool }
	return errors.As(err, &t) && t.Timeout()
}

// statusName is the standard's name of a status code: BadNodeIDUnknown.
func statusName(c ua.StatusCode) string {
	if d, ok := ua.StatusCodes[c]; ok {
		return strings.TrimPrefix(d.Name, "Status")
	}
	return strings.TrimPrefix(c.Error(), "Status")
}
