package storage

import (
	"context"
	"fmt"
	"sync"
)

// waiting is one submission, or one request to the recording goroutine, until it is answered.
type waiting struct {
	submission Submission
	ctx        context.Context
	answer     chan answer // holds one: answering never blocks

	request func() error // set instead of a submission
}

// overhead is what a submission costs beside the bytes it declares, so that many small ones are bounded too.
const overhead = 512

func (i *waiting) cost() int64 {
	if i.request != nil {
		return 0
	}
	return i.submission.Bytes + int64(len(i.submission.ID)) + overhead
}

type answer struct {
	result Result
	err    error
}

func (i *waiting) wait(ctx context.Context) (Result, error) {
	select {
	case a := <-i.answer:
		return a.result, a.err
	case <-ctx.Done():
		return Result{}, ctx.Err()
	}
}

// queue holds what waits for the recording goroutine, bounded by bytes.
type queue struct {
	limit int64

	mu     sync.Mutex
	items  []*waiting
	bytes  int64 // of items and of those taken but not yet answered
	taken  int
	closed bool
	room   chan struct{} // closed and replaced whenever bytes fall
	some   chan struct{} // has a token when there may be items, or the queue was closed
}

func newQueue(limit int64) *queue {
	return &queue{limit: limit, room: make(chan struct{}), some: make(chan struct{}, 1)}
}

// put waits for room and appends the item.
func (q *queue) put(ctx context.Context, item *waiting) error {
	size := item.cost()
	if item.submission.Bytes < 0 || size > q.limit {
		return fmt.Errorf("%w: %d bytes, at most %d", ErrTooLarge, size, q.limit)
	}
	for {
		q.mu.Lock()
		if q.closed {
			q.mu.Unlock()
			return ErrClosed
		}
		if q.bytes+size <= q.limit {
			q.items = append(q.items, item)
			q.bytes += size
			q.mu.Unlock()
			q.signal()
			return nil
		}
		room := q.room
		q.mu.Unlock()
		select {
		case <-room:
		case <-ctx.Done():
			return fmt.Errorf("%w: %w", ErrBusy, ctx.Err())
		}
	}
}

func (q *queue) signal() {
	select {
	case q.some <- struct{}{}:
	default:
	}
}

// take waits until something is there and returns as much as one commit should hold; nil says that the queue is closed and empty. A request
// comes alone.
func (q *queue) take(maxItems int, maxBytes int64) []*waiting {
	for {
		q.mu.Lock()
		n, bytes := 0, int64(0)
		for ; n < len(q.items) && n < maxItems; n++ {
			item := q.items[n]
			if n > 0 && (item.request != nil || bytes+item.cost() > maxBytes) {
				break
			}
			bytes += item.cost()
			if item.request != nil {
				n++
				break
			}
		}
		if n > 0 {
			batch := append([]*waiting{}, q.items[:n]...)
			rest := copy(q.items, q.items[n:])
			clear(q.items[rest:])
			q.items = q.items[:rest]
			q.taken = n
			q.mu.Unlock()
			return batch
		}
		closed := q.closed
		q.mu.Unlock()
		if closed {
			return nil
		}
		<-q.some
	}
}

// answered gives back the room of a batch.
func (q *queue) answered(batch []*waiting) {
	q.mu.Lock()
	defer q.mu.Unlock()
	for _, item := range batch {
		q.bytes -= item.cost()
	}
	q.taken = 0
	close(q.room)
	q.room = make(chan struct{})
}

// close refuses what comes from now on. What is there is still taken.
func (q *queue) close() {
	q.mu.Lock()
	q.closed = true
	// Those who wait for room learn that there will be none.
	close(q.room)
	q.room = make(chan struct{})
	q.mu.Unlock()
	q.signal()
}

func (q *queue) size() (items int, bytes int64) {
	q.mu.Lock()
	defer q.mu.Unlock()
	return len(q.items) + q.taken, q.bytes
}
