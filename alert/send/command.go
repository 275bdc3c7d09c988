package send

import (
	"bytes"
	"context"
	"errors"
	"fmt"
	"os"
	"os/exec"
	"path/filepath"
	"syscall"
	"time"

	"midwatch/alert"
	"midwatch/configs"
)

// command runs a local program: the CloudEvent on standard input, the short text
// in MIDWATCH_TEXT_SHORT. Exit code 0 is taken, 65 (the message itself cannot be
// used) is final, any other is tried again. It gets no other environment than
// PATH, no shell, and is ended with all it started when its time is over.
type command struct {
	path    string
	args    []string
	timeout time.Duration
}

const exitUseless = 65 // EX_DATAERR of sysexits.h

// shortVariable holds the short text, at most 160 characters.
const shortVariable = "MIDWATCH_TEXT_SHORT"

func newCommand(c *configs.Sender, _ Env) (alert.Sender, error) {
	x := &command{path: c.Command.Path, args: c.Command.Args, timeout: c.Command.Timeout}
	if !filepath.IsAbs(x.path) {
		return nil, fmt.Errorf("path %q is not absolute; hint: write the whole path of the program", x.path)
	}
	if x.timeout <= 0 {
		x.timeout = 30 * time.Second
	}
	return x, nil
}

func (x *command) Send(ctx context.Context, m alert.Message) error {
	body, err := event(m)
	if err != nil {
		return &alert.Permanent{Reason: alert.ReasonOther, Err: err}
	}
	ctx, cancel := context.WithTimeout(ctx, x.timeout)
	defer cancel()
	c := exec.CommandContext(ctx, x.path, x.args...)
	c.Stdin = bytes.NewReader(append(body, '\n'))
	c.Env = []string{"PATH=/usr/local/bin:/usr/bin:/bin", shortVariable + "=" + oneLine(m.TextShort), "LANG=C.UTF-8"}
	var said tail
	c.Stderr = &said
	c.SysProcAttr = &syscall.SysProcAttr{Setpgid: true}
	c.Cancel = func() error { return syscall.Kill(-c.Process.Pid, syscall.SIGKILL) }
	c.WaitDelay = time.Second
	err = c.Run()
	switch exit, isExit := errors.AsType[*exec.ExitError](err); {
	case err == nil:
		return nil
	case ctx.Err() != nil:
		return &alert.Failure{Reason: alert.ReasonTimeout, Err: fmt.Errorf("%s did not end in %s and was ended; hint: look at its network or set timeout", x.path, x.timeout)}
	case isExit && exit.ExitCode() == exitUseless:
		return &alert.Permanent{Reason: alert.ReasonClient, Err: fmt.Errorf("%s: %w%s", x.path, err, quoted(said.b))}
	case isExit:
		return &alert.Failure{Reason: alert.ReasonServer, Err: fmt.Errorf("%s: %w%s", x.path, err, quoted(said.b))}
	case errors.Is(err, os.ErrPermission), errors.Is(err, os.ErrNotExist):
		return &alert.Failure{Reason: alert.ReasonRefused, Err: fmt.Errorf("%w; hint: the program must be there and executable for midwatch", err)}
	}
	return &alert.Failure{Reason: alert.ReasonRefused, Err: err}
}

// tail keeps the end of what a program says.
type tail struct{ b []byte }

func (t *tail) Write(p []byte) (int, error) {
	t.b = append(t.b, p...)
	if len(t.b) > 512 {
		t.b = t.b[len(t.b)-512:]
	}
	return len(p), nil
}
