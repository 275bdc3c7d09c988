package daemon

import (
	"crypto/tls"
	"log/slog"
	"os"
	"sync"
	"time"
)

// certificate of the page. Its file is looked at with every connection, so that a
// renewed one is taken without a restart; one that cannot be read leaves the one
// before in force.
type certificate struct {
	log       *slog.Logger
	cert, key string // files

	mu     sync.Mutex
	loaded *tls.Certificate
	seen   time.Time // of the certificate's file
	failed string
}

func (c *certificate) get(*tls.ClientHelloInfo) (*tls.Certificate, error) {
	c.mu.Lock()
	defer c.mu.Unlock()
	st, err := os.Stat(c.cert)
	if err == nil && c.loaded != nil && st.ModTime().Equal(c.seen) {
		return c.loaded, nil
	}
	var fresh tls.Certificate
	if err == nil {
		fresh, err = tls.LoadX509KeyPair(c.cert, c.key)
	}
	switch {
	case err == nil:
		c.loaded, c.seen, c.failed = &fresh, st.ModTime(), ""
	case c.loaded == nil:
		return nil, err
	case c.failed != err.Error():
		c.failed = err.Error()
		c.log.Error("page.cert_file: the renewed certificate cannot be used; the one before is", "err", err)
	}
	return c.loaded, nil
}
