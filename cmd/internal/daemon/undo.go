package daemon

import (
	"context"
	"errors"
	"fmt"
	"log/slog"
	"slices"
)

// undo is the stack of named steps that take back what New and Start did, last
// in, first out. One that fails does not keep the next from running.
type undo struct{ steps []undoStep }

type undoStep struct {
	name string
	do   func(context.Context) error
}

func (u *undo) add(name string, do func(context.Context) error) {
	u.steps = append(u.steps, undoStep{name, do})
}

// run runs all steps once; ctx bounds each that waits.
func (u *undo) run(ctx context.Context, log *slog.Logger) error {
	var errs []error
	for _, s := range slices.Backward(u.steps) {
		if err := s.do(ctx); err != nil {
			log.Error("stopping a part failed", "part", s.name, "err", err)
			errs = append(errs, fmt.Errorf("stopping %s: %w", s.name, err))
		}
	}
	u.steps = nil
	return errors.Join(errs...)
}

// waitFor waits until done is closed or ctx ends.
func waitFor(ctx context.Context, what string, done <-chan struct{}) error {
	select {
	case <-done:
		return nil
	default:
	}
	select {
	case <-done:
		return nil
	case <-ctx.Done():
		return fmt.Errorf("%s did not end in time: %w", what, context.Cause(ctx))
	}
}
