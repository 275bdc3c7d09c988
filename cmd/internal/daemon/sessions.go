package daemon

import (
	"crypto/sha256"
	"encoding/binary"
	"time"

	"midwatch/alert/page"
	"midwatch/store"
)

// sessions keeps who is signed in at the page in the state.
type sessions struct{ *store.State }

const (
	sessionVersion = 1
	sessionRecord  = 1 + sha256.Size + 8 // bytes: version, hash of the token, expiry in ms UTC
)

func (s sessions) Sessions() (map[[sha256.Size]byte]page.Session, error) {
	out := map[[sha256.Size]byte]page.Session{}
	err := s.View(func(tx *store.Tx) error {
		for k, b := range tx.Scan(bucketSessions, nil) {
			if len(k) != sha256.Size || len(b) != sessionRecord || b[0] != sessionVersion {
				continue // of another version: who it is signs in again
			}
			out[[sha256.Size]byte(k)] = page.Session{Token: [sha256.Size]byte(b[1:]), Expires: time.UnixMilli(int64(binary.BigEndian.Uint64(b[1+sha256.Size:])))}
		}
		return nil
	})
	return out, err
}

func (s sessions) KeepSession(id [sha256.Size]byte, x page.Session) error {
	b := append([]byte{sessionVersion}, x.Token[:]...)
	b = binary.BigEndian.AppendUint64(b, uint64(x.Expires.UnixMilli()))
	return s.Update(func(tx *store.Tx) error { return tx.Put(bucketSessions, id[:], b) })
}

func (s sessions) DropSession(id [sha256.Size]byte) error {
	return s.Update(func(tx *store.Tx) error { return tx.Delete(bucketSessions, id[:]) })
}
