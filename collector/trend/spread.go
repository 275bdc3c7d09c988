package trend

import (
	"context"
	"io"

	"golang.org/x/sync/errgroup"

	"midwatch/collector"
)

// Item is one frame on its way to a worker.
type Item struct {
	ID    collector.LoopID
	Frame collector.Frame
}

// Batch is what a worker gets at once: the frames of its loops, in order.
type Batch struct {
	Items   []Item
	Through int64 // time of the newest frame given to any worker so far, ms UTC
}

const (
	spreadRows = 4096 // per worker and batch, on average
	spreadLead = 4    // batches a worker may be behind
)

// Spread gives all frames to n workers, by loop id modulo n: each loop's frames
// go to one worker in their order, and every worker gets its batches (empty ones
// too) at the same points of the stream. A batch is only lent. The first error
// of a worker or of reading ends it; ctx ends it early.
func (r *Reader) Spread(ctx context.Context, n int, work func(worker int, b *Batch) error) error {
	n = max(n, 1)
	g, ctx := errgroup.WithContext(ctx)
	full, free := make([]chan *Batch, n), make([]chan *Batch, n)
	for w := range n {
		full[w], free[w] = make(chan *Batch, spreadLead), make(chan *Batch, spreadLead)
		for range spreadLead {
			free[w] <- &Batch{Items: make([]Item, 0, 2*spreadRows)}
		}
		g.Go(func() error {
			for b := range full[w] {
				if err := work(w, b); err != nil {
					return err
				}
				b.Items = b.Items[:0]
				free[w] <- b
			}
			return nil
		})
	}
	g.Go(func() error {
		defer func() {
			for _, c := range full {
				close(c)
			}
		}()
		return r.deal(ctx, full, free)
	})
	return g.Wait()
}

func (r *Reader) deal(ctx context.Context, full, free []chan *Batch) error {
	n := len(full)
	now := make([]*Batch, n)
	for {
		for w := range now {
			select {
			case now[w] = <-free[w]:
			case <-ctx.Done():
				return context.Cause(ctx)
			}
		}
		var err error
		for range spreadRows * n {
			var id collector.LoopID
			var f *collector.Frame
			if id, f, err = r.Next(); err != nil {
				break
			}
			b := now[int(id)%n]
			b.Items = append(b.Items, Item{id, *f})
		}
		for w, b := range now {
			b.Through = r.sum.To
			full[w] <- b // never blocks: there are no more batches than room
		}
		if err == io.EOF {
			return nil
		}
		if err != nil {
			return err
		}
	}
}
