package daemon

import (
	"context"
	"crypto/tls"
	"errors"
	"fmt"
	"log/slog"
	"net"
	"net/http"
	"os"
	"path/filepath"
	"time"

	"midwatch/alert/page/api"
)

// Serve says how the HTTP interface is served.
type Serve struct {
	// Page makes what is served on page.listen, guards included; nil: the
	// interface for programs alone, to this machine only.
	Page func(d *Daemon, programs http.Handler) (http.Handler, error)
	// NoTCP leaves page.listen alone: only the Unix socket is served.
	NoTCP bool
}

// server is the HTTP interface: a Unix socket in the data folder for the verbs,
// and page.listen for people.
type server struct {
	log  *slog.Logger
	unix net.Listener
	tcp  net.Listener
	cert *certificate // nil: plain
	srv  []*http.Server
	done []chan struct{}
}

// maxSocketPath is what a Unix socket address holds.
const maxSocketPath = 107

// SocketPath is where a daemon with this data folder listens for verbs.
func SocketPath(data string) string { return filepath.Join(data, socketFile) }

// listen opens the addresses; nothing is answered before start.
func (d *Daemon) listen() (_ *server, err error) {
	s := &server{log: d.log}
	defer func() {
		if err != nil {
			err = errors.Join(err, s.close(context.Background()))
		}
	}()
	path := SocketPath(d.cfg.Data)
	if s.unix, err = listenUnix(path); err != nil {
		return s, err
	}
	programs := api.New(api.Options{House: d, Desk: d.people(), Clock: d.clock.Now, Metrics: d.metrics(), Log: d.log})
	s.add(programs)
	if d.o.Serve.NoTCP || d.cfg.Page.Listen == "" {
		return s, nil
	}
	page := onlyHere(programs)
	if d.o.Serve.Page != nil {
		if page, err = d.o.Serve.Page(d, programs); err != nil {
			return s, err
		}
	} else if host, _, _ := net.SplitHostPort(d.cfg.Page.Listen); !loopback(host) {
		return s, fmt.Errorf("page.listen: %s is not of this machine alone; hint: 127.0.0.1:8420", d.cfg.Page.Listen)
	}
	if c := d.cfg.Page; c.CertFile != "" {
		s.cert = &certificate{log: d.log, cert: c.CertFile, key: c.KeyFile}
		if _, err := s.cert.get(nil); err != nil {
			return s, fmt.Errorf("page.cert_file: %w; hint: cert_file and key_file are PEM and belong together", err)
		}
	}
	if s.tcp, err = net.Listen("tcp", d.cfg.Page.Listen); err != nil {
		return s, fmt.Errorf("page.listen: %w; hint: another program may have the port", err)
	}
	s.add(page)
	return s, nil
}

// listenUnix opens the socket. One left behind is removed: the data folder is
// ours by now. Anything else at its place is not touched.
func listenUnix(path string) (net.Listener, error) {
	if len(path) > maxSocketPath {
		return nil, fmt.Errorf("%s is too long for a Unix socket (%d bytes, at most %d); hint: give a data folder with a shorter path", path, len(path), maxSocketPath)
	}
	if st, err := os.Lstat(path); err == nil {
		if st.Mode()&os.ModeSocket == 0 {
			return nil, fmt.Errorf("%s is no socket and is not touched; hint: move it away", path)
		}
		if err := os.Remove(path); err != nil {
			return nil, fmt.Errorf("socket left behind: %w", err)
		}
	}
	l, err := net.Listen("unix", path)
	if err != nil {
		return nil, fmt.Errorf("socket for the verbs: %w", err)
	}
	if err := os.Chmod(path, 0o660); err != nil {
		return nil, errors.Join(fmt.Errorf("socket for the verbs: %w", err), l.Close())
	}
	return l, nil
}

func (s *server) add(h http.Handler) {
	s.srv = append(s.srv, &http.Server{Handler: h, ReadHeaderTimeout: 10 * time.Second, IdleTimeout: 2 * time.Minute, MaxHeaderBytes: 64 << 10,
		ErrorLog: slog.NewLogLogger(s.log.Handler(), slog.LevelWarn)})
}

func (s *server) start() {
	for i, l := range []net.Listener{s.unix, s.tcp} {
		if l == nil {
			continue
		}
		srv, done := s.srv[i], make(chan struct{})
		s.done = append(s.done, done)
		go func() {
			defer close(done)
			var err error
			if i == 1 && s.cert != nil {
				srv.TLSConfig = &tls.Config{MinVersion: tls.VersionTLS12, GetCertificate: s.cert.get}
				err = srv.ServeTLS(l, "", "")
			} else {
				err = srv.Serve(l)
			}
			if !errors.Is(err, http.ErrServerClosed) {
				s.log.Error("the HTTP interface ended", "address", l.Addr().String(), "err", err)
			}
		}()
	}
}

// close ends the interface. Requests under way have a moment.
func (s *server) close(ctx context.Context) error {
	var errs []error
	ctx, cancel := context.WithTimeout(ctx, 2*time.Second)
	defer cancel()
	for _, srv := range s.srv {
		if err := srv.Shutdown(ctx); err != nil {
			errs = append(errs, srv.Close())
		}
	}
	for _, d := range s.done {
		<-d
	}
	for _, l := range []net.Listener{s.unix, s.tcp} {
		if l != nil {
			if err := l.Close(); err != nil && !errors.Is(err, net.ErrClosed) {
				errs = append(errs, err)
			}
		}
	}
	return errors.Join(errs...)
}

// Addr is the TCP address that is served, empty when there is none.
func (d *Daemon) Addr() string {
	if d.server.tcp == nil {
		return ""
	}
	return d.server.tcp.Addr().String()
}

func loopback(host string) bool {
	if host == "localhost" {
		return true
	}
	ip := net.ParseIP(host)
	return ip != nil && ip.IsLoopback()
}

// onlyHere lets requests through that were meant for this machine: a name that
// was bent to it in a browser is refused, and so is a POST of another origin.
func onlyHere(h http.Handler) http.Handler {
	origin := http.NewCrossOriginProtection()
	guarded := origin.Handler(h)
	return http.HandlerFunc(func(w http.ResponseWriter, r *http.Request) {
		host := r.Host
		if name, _, err := net.SplitHostPort(host); err == nil {
			host = name
		}
		if r.URL.Path != "/healthz" && !loopback(host) {
			http.Error(w, "this address is for this machine only; hint: 127.0.0.1", http.StatusForbidden)
			return
		}
		guarded.ServeHTTP(w, r)
	})
}
