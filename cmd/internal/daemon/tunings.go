package daemon

import (
	"bytes"
	"context"
	"encoding/binary"
	"fmt"
	"math"
	"slices"
	"time"

	"midwatch/alert/page/api"
	"midwatch/collector"
	"midwatch/configs"
	"midwatch/detect"
	"midwatch/store"
)

// The tuning in service over time. A reading is kept when there was none, when
// gain or reset left the range of the last one, and else once a day: so a change
// is dated to the hour, and a year of a steady loop stays small.
const (
	tuningEvery   = 24 * time.Hour
	tuningVersion = 1
	tuningRecord  = 8 + 6*4 + 1 // bytes: time, six float32, whether read from tags
	maxTunings    = 256         // of one loop; behind that, every second of the older half goes
)

// Tuning gives the kept readings of the tuning in service of a loop since a time
// (ms UTC), oldest first.
func (d *Daemon) Tuning(_ context.Context, loop string, from int64) ([]api.TuningReading, error) {
	was := ""
	if id, ok := d.idOf(loop); ok {
		if l := d.loops()[id]; l != nil {
			was = l.Was
		}
	}
	return keptTuning(d.state, loop, was, from)
}

// keptTuning reads them from the state. was is the former name of the loop, which
// counts until it has readings of its own.
func keptTuning(s *store.State, loop, was string, from int64) (out []api.TuningReading, err error) {
	err = s.View(func(tx *store.Tx) error {
		b := tx.Get(bucketTuning, []byte(loop))
		if b == nil && was != "" {
			b = tx.Get(bucketTuning, []byte(was))
		}
		out, err = readTunings(b)
		return err
	})
	if err != nil {
		return nil, fmt.Errorf("tuning of loop %s: %w", loop, err)
	}
	first, _ := slices.BinarySearchFunc(out, from, func(r api.TuningReading, t int64) int { return int(max(-1, min(1, r.Time-t))) })
	return out[first:], nil
}

func readTunings(b []byte) ([]api.TuningReading, error) {
	if len(b) == 0 {
		return nil, nil
	}
	if b[0] != tuningVersion || (len(b)-1)%tuningRecord != 0 {
		return nil, fmt.Errorf("version %d, %d bytes: not readings this version knows", b[0], len(b))
	}
	var out []api.TuningReading
	for b = b[1:]; len(b) > 0; b = b[tuningRecord:] {
		f := func(i int) float64 { return float64(math.Float32frombits(binary.BigEndian.Uint32(b[8+4*i:]))) }
		out = append(out, api.TuningReading{Time: int64(binary.BigEndian.Uint64(b)), Gain: f(0), GainLow: f(1), GainHigh: f(2),
			ResetS: f(3), ResetLow: f(4), ResetHigh: f(5), Read: b[tuningRecord-1] == 1})
	}
	return out, nil
}

func writeTunings(rs []api.TuningReading) []byte {
	out := make([]byte, 1, 1+len(rs)*tuningRecord)
	out[0] = tuningVersion
	for _, r := range rs {
		out = binary.BigEndian.AppendUint64(out, uint64(r.Time))
		for _, v := range []float64{r.Gain, r.GainLow, r.GainHigh, r.ResetS, r.ResetLow, r.ResetHigh} {
			out = binary.BigEndian.AppendUint32(out, math.Float32bits(float32(v)))
		}
		if out = append(out, 0); r.Read {
			out[len(out)-1] = 1
		}
	}
	return out
}

// tuningOf is the reading that a view gives, false where it gives none. Tags are
// believed before fits.
func tuningOf(v *detect.View) (r api.TuningReading, ok bool) {
	n := math.NaN()
	if v.TagGain > 0 || v.TagReset > 0 {
		r = api.TuningReading{Time: v.Last.Time, Gain: n, GainLow: n, GainHigh: n, ResetS: n, ResetLow: n, ResetHigh: n, Read: true}
		if v.TagGain > 0 {
			r.Gain = v.TagGain
		}
		if v.TagReset > 0 {
			r.ResetS = v.TagReset
		}
		return r, true
	}
	r = api.TuningReading{Time: v.Last.Time, Gain: v.GainPct, GainLow: v.GainLow, GainHigh: v.GainHigh, ResetS: v.ResetS, ResetLow: v.ResetLow, ResetHigh: v.ResetHigh}
	return r, v.Last.Time != 0 && !math.IsNaN(v.GainPct)
}

// tuningNews says whether a reading is to be kept behind the last one.
func tuningNews(last, now *api.TuningReading) bool {
	if now.Time <= last.Time {
		return false
	}
	left := func(v, was, low, high float64) bool {
		if math.IsNaN(v) || math.IsNaN(was) {
			return !math.IsNaN(v)
		}
		if math.IsNaN(low) || math.IsNaN(high) {
			low, high = was, was
		}
		return v < low*0.99 || v > high*1.01
	}
	return now.Time-last.Time >= tuningEvery.Milliseconds() || now.Read != last.Read ||
		left(now.Gain, last.Gain, last.GainLow, last.GainHigh) || left(now.ResetS, last.ResetS, last.ResetLow, last.ResetHigh)
}

// boundedTunings lets go of what is older than oldest (ms UTC) and of too many.
func boundedTunings(rs []api.TuningReading, oldest int64) []api.TuningReading {
	rs = slices.DeleteFunc(rs, func(r api.TuningReading) bool { return r.Time < oldest })
	if len(rs) <= maxTunings {
		return rs
	}
	old := rs[:len(rs)/2]
	kept := make([]api.TuningReading, 0, maxTunings)
	for i := range old {
		if i%2 == 0 {
			kept = append(kept, old[i])
		}
	}
	return append(kept, rs[len(old):]...)
}

// keepTunings looks at the tuning of every loop and writes down what is new.
func (k *keeper) keepTunings(ctx context.Context) {
	roster := k.d.loops()
	if k.tuned == nil {
		k.tuned = map[string]api.TuningReading{}
		if err := k.d.state.View(func(tx *store.Tx) error {
			for name, b := range tx.Scan(bucketTuning, nil) {
				if rs, err := readTunings(b); err == nil && len(rs) > 0 {
					k.tuned[string(name)] = rs[len(rs)-1]
				}
			}
			return nil
		}); err != nil {
			k.tuned = nil
			k.log.Error("readings of the tuning are not kept", "err", err)
			return
		}
	}
	for part := range slices.Chunk(all(roster), 256) {
		if ctx.Err() != nil {
			return
		}
		fresh := map[string]api.TuningReading{}
		for _, id := range part {
			v, ok := k.d.shardOf(id).view(id)
			if !ok {
				continue
			}
			name := roster[id].Name
			now, ok := tuningOf(&v)
			last, had := k.tuned[name]
			if ok && (!had || tuningNews(&last, &now)) {
				fresh[name] = now
			}
		}
		if err := k.addTunings(roster, part, fresh); err != nil {
			k.log.Error("readings of the tuning are not kept", "err", err)
			return
		}
	}
}

func (k *keeper) addTunings(roster []*configs.Loop, part []collector.LoopID, fresh map[string]api.TuningReading) error {
	if len(fresh) == 0 {
		return nil
	}
	oldest := k.tuningsSince()
	err := k.d.state.Update(func(tx *store.Tx) error {
		for _, id := range part {
			l := roster[id]
			r, ok := fresh[l.Name]
			if !ok {
				continue
			}
			b := tx.Get(bucketTuning, []byte(l.Name))
			if b == nil && l.Was != "" {
				b = tx.Get(bucketTuning, []byte(l.Was)) // renamed: its past comes along
			}
			rs, err := readTunings(b)
			if err != nil {
				rs = nil // of another version: begun anew
			}
			if err := tx.Put(bucketTuning, []byte(l.Name), writeTunings(boundedTunings(append(rs, r), oldest))); err != nil {
				return err
			}
		}
		return nil
	})
	if err == nil {
		for name, r := range fresh {
			k.tuned[name] = r
		}
	}
	return err
}

// tuningsSince is up to when readings are kept: as long as trends at the longest.
func (k *keeper) tuningsSince() int64 {
	keep := k.d.config().Keep
	return k.clock.Now().Add(-max(keep.Full, keep.Thin, keep.Evidence)).UnixMilli()
}

// dropTunings lets go of the readings of loops that have left the list, when the
// newest is as old as anything is kept: a loop that comes back finds its past.
func (k *keeper) dropTunings() {
	listed := map[string]bool{}
	for _, l := range k.d.loops() {
		if l != nil {
			listed[l.Name] = true
		}
	}
	oldest := k.tuningsSince()
	err := k.d.state.Update(func(tx *store.Tx) error {
		var gone [][]byte
		for name, b := range tx.Scan(bucketTuning, nil) {
			rs, err := readTunings(b)
			if !listed[string(name)] && (err != nil || len(rs) == 0 || rs[len(rs)-1].Time < oldest) {
				gone = append(gone, bytes.Clone(name))
			}
		}
		for _, name := range gone {
			if err := tx.Delete(bucketTuning, name); err != nil {
				return err
			}
			delete(k.tuned, string(name))
		}
		return nil
	})
	if err != nil {
		k.log.Error("old readings of the tuning cannot be removed", "err", err)
	}
}
