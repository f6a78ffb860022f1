package storage

import (
	"container/list"
	"sync"
)

// keptBytes is roughly how much stored form one kind of shared things may take in memory.
const keptBytes = 128 << 20

// shared hands out one value for each key, read once: whoever remembers what follows from a part type or a calibration (a solved one, say) may
// do so by its pointer. Past its limit it forgets what was asked for longest ago; that one is then read anew, as another value.
type shared[K comparable, V any] struct {
	limit int64

	mu    sync.Mutex
	bytes int64
	byKey map[K]*list.Element // of holding
	order *list.List          // last asked for first
}

type holding[K comparable, V any] struct {
	key   K
	value V
	bytes int64
}

func newShared[K comparable, V any](limit int64) shared[K, V] {
	return shared[K, V]{limit: limit, byKey: map[K]*list.Element{}, order: list.New()}
}

// get returns the value of a key, and reads it when it is not at hand: one reader at a time, so that two callers never get two values.
func (s *shared[K, V]) get(key K, read func() (V, int64, error)) (V, error) {
	s.mu.Lock()
	defer s.mu.Unlock()
	if e, ok := s.byKey[key]; ok {
		s.order.MoveToFront(e)
		return e.Value.(holding[K, V]).value, nil
	}
	value, bytes, err := read()
	if err != nil {
		return value, err
	}
	s.byKey[key] = s.order.PushFront(holding[K, V]{key, value, bytes})
	s.bytes += bytes
	for s.bytes > s.limit && s.order.Len() > 1 {
		oldest := s.order.Remove(s.order.Back()).(holding[K, V])
		delete(s.byKey, oldest.key)
		s.bytes -= oldest.bytes
	}
	return value, nil
}
