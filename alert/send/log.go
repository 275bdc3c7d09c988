package send

import (
	"context"
	"errors"
	"fmt"
	"io"
	"os"
	"sync"
	"syscall"

	"midwatch/alert"
	"midwatch/configs"
)

// logFile writes each message as one line: the CloudEvent other programs get.
// The file is opened for every line, so that it may be moved away at any time.
type logFile struct {
	path string
	mu   sync.Mutex
	out  io.Writer // standard output, or nil
}

func newLog(c *configs.Sender, env Env) (alert.Sender, error) {
	if c.Log.Path == "" {
		return nil, errors.New(`no path; hint: name a file, or "-" for standard output`)
	}
	l := &logFile{path: c.Log.Path}
	if l.path == "-" {
		if env.Stdout == nil {
			return nil, errors.New("there is no standard output here; hint: name a file")
		}
		l.out = env.Stdout
	}
	return l, nil
}

func (l *logFile) Send(_ context.Context, m alert.Message) (err error) {
	line, err := event(m)
	if err != nil {
		return &alert.Permanent{Reason: alert.ReasonOther, Err: err}
	}
	line = append(line, '\n')
	l.mu.Lock()
	defer l.mu.Unlock()
	if l.out != nil {
		_, err = l.out.Write(line)
		return failure(err)
	}
	f, err := os.OpenFile(l.path, os.O_APPEND|os.O_CREATE|os.O_WRONLY, 0o640)
	if err != nil {
		return failure(fmt.Errorf("%w; hint: the folder must exist and be writable for midwatch", err))
	}
	_, err = f.Write(line)
	if err == nil {
		// The desk forgets the message once it is taken.
		err = f.Sync()
	}
	if errors.Is(err, syscall.EINVAL) {
		err = nil // a pipe or device cannot be synced
	}
	return failure(errors.Join(err, f.Close()))
}
