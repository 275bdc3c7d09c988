package daemon

import (
	"context"

	"midwatch/alert"
	"midwatch/alert/send"
	"midwatch/configs"
)

// heart is the running heartbeat; it beats only while the watch is well.
type heart struct {
	beat   *send.Heartbeat // nil: none is set
	cancel context.CancelFunc
	done   chan struct{}
}

func (d *Daemon) makeHeart(c *configs.Config, senders map[string]alert.Sender) (*heart, error) {
	b, err := send.NewHeartbeat(c.Heartbeat, senders, func() (bool, string) {
		well, why := d.Health()
		if well {
			return true, ""
		}
		return false, why[0]
	}, d.sendEnv(c))
	return &heart{beat: b}, err
}

func (d *Daemon) startHeart() {
	h := d.beat
	if h.beat == nil {
		return
	}
	ctx, cancel := context.WithCancel(context.Background())
	h.cancel, h.done = cancel, make(chan struct{})
	go func() {
		defer close(h.done)
		h.beat.Run(ctx, d.clock.After)
	}()
}

func (h *heart) stop(ctx context.Context) error {
	if h.cancel == nil {
		return nil
	}
	h.cancel()
	return waitFor(ctx, "heartbeat", h.done)
}
