package mqtt

import (
	"context"
	"encoding/json"
	"log/slog"
	"sync"
)

// birthRecord is what is kept of the birth of one device, so that values by alias
// can be named after a restart. It says what was; only a birth or the broker's
// certificate says what is.
type birthRecord struct {
	Version int           `json:"v"`
	BdSeq   int64         `json:"bd"` // of the node; -1 unknown
	Time    uint64        `json:"t"`  // of the birth, ms UTC
	Metrics []birthMetric `json:"m"`
}

type birthMetric struct {
	Alias    *uint64 `json:"a,omitempty"`
	Name     string  `json:"n"`
	Datatype uint32  `json:"d"`
}

const birthVersion = 1

// births writes behind: the decoder must never wait for a disk.
type births struct {
	store   BirthStore
	log     *slog.Logger
	prefix  string
	mu      sync.Mutex
	pending map[string][]byte
	wake    chan struct{}
}

func newBirths(store BirthStore, source string, log *slog.Logger) *births {
	return &births{store: store, log: log, prefix: "birth/" + source + "/", pending: map[string][]byte{}, wake: make(chan struct{}, 1)}
}

// load reads a record; nil when there is none that can be used.
func (b *births) load(key string) *birthRecord {
	var r birthRecord
	if b.get(key, &r); r.Version != birthVersion {
		return nil
	}
	return &r
}

func (b *births) get(key string, into any) {
	if b.store == nil {
		return
	}
	data, err := b.store.Get(b.prefix + key)
	if err == nil && len(data) > 0 {
		err = json.Unmarshal(data, into)
	}
	if err != nil {
		b.log.Warn("a kept Sparkplug birth cannot be read; the next birth replaces it", "key", b.prefix+key, "err", err)
	}
}

// put queues a value; nil deletes. Of several for one key the last is written.
func (b *births) put(key string, v any) {
	if b.store == nil {
		return
	}
	var data []byte
	if v != nil {
		data, _ = json.Marshal(v) // plain structs of numbers and strings cannot fail
	}
	b.mu.Lock()
	b.pending[b.prefix+key] = data
	b.mu.Unlock()
	select {
	case b.wake <- struct{}{}:
	default:
	}
}

// keep writes what is queued until ctx ends, then the rest.
func (b *births) keep(ctx context.Context) {
	for {
		select {
		case <-ctx.Done():
			b.write()
			return
		case <-b.wake:
			b.write()
		}
	}
}

func (b *births) write() {
	b.mu.Lock()
	todo := b.pending
	b.pending = map[string][]byte{}
	b.mu.Unlock()
	for key, data := range todo {
		if err := b.store.Put(key, data); err != nil {
			b.log.Warn("a Sparkplug birth cannot be kept; after a restart its values wait for the next birth", "key", key, "err", err)
		}
	}
}
