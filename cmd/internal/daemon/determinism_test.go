package daemon

import (
	"fmt"
	"slices"
	"strings"
	"testing"
	"time"

	"github.com/google/go-cmp/cmp"

	"midwatch/configs"
	"midwatch/detect"
)

const millSeconds = 2 * 3600

// Live -> window -> export -> replay: the same bytes, whatever the number of
// shards, from an empty folder and from exported memories.
func TestLiveAndReplayAgree(t *testing.T) {
	shardings, workings := []int{1, 2, 7}, []int{1, 2, 7}
	if testing.Short() { // the fewest and the most, against a replay that is neither
		shardings, workings = []int{1, 7}, []int{2}
	}
	for _, shards := range shardings {
		t.Run(fmt.Sprint(shards, " shards"), func(t *testing.T) {
			m := newMill()
			r := newRig(t, m.loops)
			r.shards = shards
			r.start()
			m.run(r, 0, millSeconds)
			r.stop()
			live := r.lines()
			wantKinds(t, live, detect.SustainedOscillation, detect.SharedOscillation, detect.OutputSaturation, detect.StaleData)
			csv, _ := r.exported(time.Time{})
			for _, workers := range workings {
				if d := cmp.Diff(live, replayed(t, m.loops, csv, nil, workers)); d != "" {
					t.Errorf("replay by %d workers differs (-live +replay):\n%s", workers, d)
				}
			}
			// From memories in the middle: what came behind them.
			from := epoch.Add(millSeconds * 3 / 4 * time.Second)
			csv, mem := r.exported(from)
			if len(mem.Loops) != len(m.loops) || mem.Sites == nil {
				t.Fatalf("memories of %d loops, sites %v", len(mem.Loops), mem.Sites != nil)
			}
			if d := cmp.Diff(after(t, live, mem), replayed(t, m.loops, csv, mem, 2)); d != "" {
				t.Errorf("replay from memories differs (-live +replay):\n%s", d)
			}
		})
	}
}

// after keeps the findings of loops that came behind their memories.
func after(t *testing.T, lines []string, m *Memories) []string {
	t.Helper()
	sites := int64(0)
	for _, b := range m.Loops {
		through, err := detect.MemoryThrough(b)
		if err != nil {
			t.Fatal(err)
		}
		sites = max(sites, through)
	}
	return slices.DeleteFunc(slices.Clone(lines), func(line string) bool {
		f := parse(t, line)
		if f.Kind == detect.SharedOscillation {
			g := newGathering([]*configs.Loop{})
			if err := g.load(m.Sites); err != nil {
				t.Fatal(err)
			}
			return f.At <= g.done
		}
		through, err := detect.MemoryThrough(m.Loops[f.Loop])
		if err != nil {
			t.Fatal(err)
		}
		return f.At <= through
	})
}

func parse(t *testing.T, line string) (f detect.Finding) {
	t.Helper()
	if err := f.UnmarshalJSON([]byte(line)); err != nil {
		t.Fatalf("%v: %s", err, line)
	}
	return f
}

func wantKinds(t *testing.T, lines []string, kinds ...detect.Kind) {
	t.Helper()
	for _, k := range kinds {
		if !slices.ContainsFunc(lines, func(l string) bool { return strings.Contains(l, `"kind":"`+string(k)+`"`) }) {
			t.Errorf("no finding of kind %s: the test would prove nothing of it", k)
		}
	}
}

// A stop and a start in between change nothing.
func TestStopAndStartChangeNothing(t *testing.T) {
	m := newMill()
	r := newRig(t, m.loops)
	r.start()
	for _, until := range []int{1000, 2700, 4500, millSeconds} {
		from := int(r.clock.Now().Sub(epoch) / time.Second)
		m.run(r, from, until)
		r.stop()
		r.shards++ // nor does another number of shards
		if until < millSeconds {
			r.start()
		}
	}
	csv, _ := r.exported(time.Time{})
	if d := cmp.Diff(r.lines(), replayed(t, m.loops, csv, nil, 2)); d != "" {
		t.Errorf("stopped and started four times (-live +replay):\n%s", d)
	}
}
