package alert

import (
	"encoding/binary"
	"encoding/json"
	"errors"
	"fmt"
	"iter"
)

// Tx is one transaction on named buckets of bytes. Get of what is not there is
// nil. Scan walks the keys that begin with prefix in ascending order; the bucket
// is changed only after the walk.
type Tx interface {
	Get(bucket string, key []byte) []byte
	Put(bucket string, key, value []byte) error
	Delete(bucket string, key []byte) error
	Scan(bucket string, prefix []byte) iter.Seq2[[]byte, []byte]
}

// Store keeps the desk's state. Update is synced when it returns nil.
type Store interface {
	Update(func(Tx) error) error
	View(func(Tx) error) error
}

// On makes a Store of a store whose transactions are of a type of its own.
func On[T Tx](s interface {
	Update(func(T) error) error
	View(func(T) error) error
}) Store {
	return &on[T]{s.Update, s.View}
}

type on[T Tx] struct{ update, view func(func(T) error) error }

func (o *on[T]) Update(f func(Tx) error) error { return o.update(func(t T) error { return f(t) }) }
func (o *on[T]) View(f func(Tx) error) error   { return o.view(func(t T) error { return f(t) }) }

// Buckets of the desk. Values are JSON.
const (
	bucketHeard    = "desk.heard"    // subject 0 kind -> heard
	bucketEpisodes = "desk.episodes" // id -> Episode
	bucketJournal  = "desk.journal"  // id 0 number -> Entry
	bucketSteps    = "desk.steps"    // id 0 number -> step, not yet routed
	bucketTold     = "desk.told"     // id 0 step 0 sender -> told
	bucketOutbox   = "desk.outbox"   // id 0 step 0 sender -> delivery
	bucketWaiting  = "desk.waiting"  // id 0 step 0 sender -> waiting, for the next digest
	bucketHidden   = "desk.hidden"   // loop -> hidden
	bucketShelves  = "desk.shelves"  // loop -> Shelf
	bucketLinks    = "desk.links"    // id 0 step 0 sender -> when the link was used
	bucketNotes    = "desk.notes"    // loop 0 number -> Remark
	bucketOutcomes = "desk.outcomes" // loop 0 onset of a session -> Outcome
	bucketMeta     = "desk.meta"     // the rest
)

func key2(id string, n uint32) []byte {
	return binary.BigEndian.AppendUint32(append([]byte(id), 0), n)
}

func key3(id string, n uint32, sender string) []byte {
	return append(append(key2(id, n), 0), sender...)
}

func put(tx Tx, bucket string, key []byte, v any) error {
	b, err := json.Marshal(v)
	if err != nil {
		return err
	}
	return tx.Put(bucket, key, b)
}

// get reads into v and says whether there was something.
func get(tx Tx, bucket string, key []byte, v any) (bool, error) {
	b := tx.Get(bucket, key)
	if b == nil {
		return false, nil
	}
	if err := json.Unmarshal(b, v); err != nil {
		return false, fmt.Errorf("%s %q: %w", bucket, key, err)
	}
	return true, nil
}

// scan reads a bucket. A value that cannot be read is counted and left alone:
// one spoiled record must not silence the desk.
func scan[V any](tx Tx, bucket string, prefix []byte, f func(key string, v V) error) (spoiled int, err error) {
	for k, b := range tx.Scan(bucket, prefix) {
		var v V
		if json.Unmarshal(b, &v) != nil {
			spoiled++
			continue
		}
		if err := f(string(k), v); err != nil {
			return spoiled, err
		}
	}
	return spoiled, nil
}

// ErrUnknown is returned for an episode or loop that the desk does not have.
var ErrUnknown = errors.New("not known")
