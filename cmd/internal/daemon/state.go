package daemon

import (
	"midwatch/alert"
	"midwatch/store"
)

// deskStore gives the desk its transactions on the state.
type deskStore struct{ s *store.State }

func (d deskStore) Update(f func(alert.Tx) error) error {
	return d.s.Update(func(t *store.Tx) error { return f(deskTx{t}) })
}

func (d deskStore) View(f func(alert.Tx) error) error {
	return d.s.View(func(t *store.Tx) error { return f(deskTx{t}) })
}

type deskTx struct{ *store.Tx }

func (t deskTx) Scan(bucket string, prefix []byte, f func(key, value []byte) error) error {
	for k, v := range t.Tx.Scan(bucket, prefix) {
		if err := f(k, v); err != nil {
			return err
		}
	}
	return nil
}

// Buckets of the daemon in the state.
const (
	bucketProfiles = "profiles" // loop -> memory, once a day
	bucketDaemon   = "daemon"   // what is below
	keyFlush       = "flush"    // number of the last flush of the window known to be on disk, uint32
)

// Names in the data folder.
const (
	stateFile  = "state.bolt"
	windowDir  = "window"
	socketFile = "midwatch.sock"
)

// sitesName is under which the window keeps the memory of the site detectors: no
// loop can be called so.
const sitesName = "\x00sites"
