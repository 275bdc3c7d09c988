package daemon

// Buckets of the daemon in the state.
const (
	bucketProfiles = "profiles" // loop -> memory, once a day
	bucketTuning   = "tuning"   // loop -> readings of the tuning in service, see tunings.go
	bucketSessions = "sessions" // hash of a cookie -> who is signed in, see sessions.go
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
