package nexus

import (
	"context"
	"sync"
)

// packed is a chunk on its way: its bytes or an error arrive once.
type packed struct {
	bytes []byte
	err   error
}

// chunks compresses the dataset in workers and appends the chunks in order.
//
// A feeder hands every chunk number, with a channel for its bytes, first to
// the appender's queue and then to the workers. The appender takes the queue
// in order, so the file is the same for any number of workers; the queue's
// length bounds the finished chunks that wait. On an error the context ends,
// the feeder stops, and the workers run out.
func (t *tree) chunks(d *Dataset, size int) error {
	chunk := chunkShape(d.Shape)
	sides, total := grid(d.Shape, chunk)
	ctx, cancel := context.WithCancel(t.ctx)
	type job struct {
		i    int
		done chan packed
	}
	jobs, queue := make(chan job), make(chan job, 2*t.workers)
	var wg sync.WaitGroup
	defer wg.Wait()
	defer cancel()
	for range t.workers {
		p, err := newPacker(d, chunk, size)
		if err != nil {
			return err
		}
		wg.Go(func() {
			for j := range jobs {
				b, err := p.pack(origin(j.i, sides, chunk))
				j.done <- packed{b, err} // buffered: never blocks
			}
		})
	}
	wg.Go(func() {
		defer close(jobs)
		defer close(queue)
		for i := range total {
			j := job{i, make(chan packed, 1)}
			select {
			case queue <- j:
			case <-ctx.Done():
				return
			}
			select {
			case jobs <- j:
			case <-ctx.Done():
				j.done <- packed{nil, ctx.Err()}
				return
			}
		}
	})
	entries := make([]entry, 0, total)
	for j := range queue {
		p := <-j.done
		if p.err != nil {
			return p.err
		}
		entries = append(entries, entry{t.s.off, uint32(len(p.bytes)), origin(j.i, sides, chunk)})
		if t.s.write(p.bytes); t.s.err != nil {
			return t.s.err
		}
	}
	if len(entries) < total {
		return ctx.Err()
	}
	t.place[d] = placed{addr: writeIndex(t.s, entries, chunk, size), chunk: chunk}
	return t.s.err
}
