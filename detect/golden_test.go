package detect_test

import (
	"bytes"
	"compress/gzip"
	"encoding/json"
	"flag"
	"math"
	"os"
	"path/filepath"
	"regexp"
	"strings"
	"testing"
	"time"

	"midwatch/collector/trend"
	"midwatch/configs"
	"midwatch/detect"
)

var update = flag.Bool("update", false, "write the trends and golden files of testdata/detect anew")

const goldenDir = "../testdata/detect"

// goldens make the trends: four hours of a loop of Kestrel Fen, a frame every 5 s,
// healthy for the first half.
var goldens = map[string]func() *rig{
	"AIC-204-growing": func() *rig {
		g := goldenRig(plantB.stretched(10), 2, 100, 61)
		g.bumps(4, 900)
		g.run(9000)
		g.each = nil
		g.kc, g.ti = 2.55073, 15
		g.integral = g.op - 50 - g.kc*(g.sp-g.meas)
		g.run(3600)
		return g
	},
	"FIC-301-sticking": func() *rig {
		g := goldenRig(plantB.stretched(8), 2, 80, 62)
		g.bumps(3, 900)
		g.run(9000)
		g.each, g.stick, g.load = nil, 10, 5
		g.run(7200)
		return g
	},
	"LIC-310-saturated": func() *rig {
		g := goldenRig(plantH.stretched(12), 2, 380, 63)
		g.bumps(4, 1800)
		g.run(9000)
		g.each, g.opHi, g.load = nil, 70, -22
		g.run(5400)
		return g
	},
	"AIC-205-offset": func() *rig {
		g := goldenRig(plantF.stretched(6), 1.5, 72, 64)
		g.bumps(6, 900)
		g.run(9000)
		g.each, g.ti, g.load = nil, math.Inf(1), 14
		g.run(7200)
		return g
	},
}

func goldenRig(p plant, kc, ti float64, seed uint64) *rig {
	g := newRig(p, kc, ti, seed)
	g.step, g.logS, g.noiseS, g.noise, g.qPV, g.qOP = 0.5, 5, 5, 0.1, 0.01, 0.05
	return g
}

// The findings on the recorded trends, in the form of replay. After a wished
// change: go test ./detect -run Golden -update, and read the difference.
func TestGolden(t *testing.T) {
	if *update {
		if err := os.MkdirAll(goldenDir, 0o755); err != nil {
			t.Fatal(err)
		}
	}
	for name, run := range goldens {
		t.Run(name, func(t *testing.T) {
			loop := name[:7]
			csv, golden := filepath.Join(goldenDir, name+".csv.gz"), filepath.Join(goldenDir, name+".jsonl")
			if *update {
				writeTrend(t, csv, loop, run())
			}
			f, err := os.Open(filepath.Join(goldenDir, "loops.csv"))
			if err != nil {
				t.Fatal(err)
			}
			defer f.Close()
			all, err := configs.ReadLoopList(f, "loops.csv")
			if err != nil {
				t.Fatal(err)
			}
			var loops []*configs.Loop
			for _, l := range all {
				if l.Name == loop {
					loops = append(loops, l)
				}
			}
			fs := replayFile(t, csv, loops)
			for i := range fs {
				checkFinding(t, &fs[i])
			}
			got := lines(t, fs)
			if *update {
				if err := os.WriteFile(golden, got, 0o644); err != nil {
					t.Fatal(err)
				}
			}
			want, err := os.ReadFile(golden)
			if err != nil {
				t.Fatal(err)
			}
			if len(want) == 0 {
				t.Error("nothing is found on this trend: it proves nothing")
			}
			sameFindings(t, want, got)
		})
	}
}

func writeTrend(t *testing.T, path, loop string, g *rig) {
	t.Helper()
	var b bytes.Buffer
	z, err := gzip.NewWriterLevel(&b, gzip.BestCompression)
	if err != nil {
		t.Fatal(err)
	}
	w := trend.NewWriter(z, trend.Columns{Mode: true})
	for i := range g.out {
		if err := w.Write(loop, &g.out[i]); err != nil {
			t.Fatal(err)
		}
	}
	if err := w.Flush(); err != nil {
		t.Fatal(err)
	}
	if err := z.Close(); err != nil {
		t.Fatal(err)
	}
	if err := os.WriteFile(path, b.Bytes(), 0o644); err != nil {
		t.Fatal(err)
	}
}

var numbers = regexp.MustCompile(`[0-9]+(\.[0-9]+)?`)

// sameFindings compares lines to three digits, times to a frame, and texts but
// for their numbers: machines that fuse multiply and add differ in the last ones.
func sameFindings(t *testing.T, want, got []byte) {
	t.Helper()
	a, b := bytes.Split(bytes.TrimSpace(want), []byte("\n")), bytes.Split(bytes.TrimSpace(got), []byte("\n"))
	if len(a) != len(b) {
		t.Fatalf("%d findings, want %d:\n%s\nwant\n%s", len(b), len(a), got, want)
	}
	for i := range a {
		var x, y detect.Finding
		if err := json.Unmarshal(a[i], &x); err != nil {
			t.Fatal(err)
		}
		if err := json.Unmarshal(b[i], &y); err != nil {
			t.Fatal(err)
		}
		ok := near(float64(x.At), float64(y.At), 5000) && near(float64(x.Since), float64(y.Since), 5000) && near(x.Confidence, y.Confidence, 0.011) &&
			len(x.Measures) == len(y.Measures)
		for j := 0; ok && j < len(x.Measures); j++ {
			ok = x.Measures[j].Name == y.Measures[j].Name && near(x.Measures[j].Value, y.Measures[j].Value, 1e-3*math.Abs(x.Measures[j].Value)+1e-9)
		}
		plain := func(f detect.Finding) string {
			f.At, f.Since, f.Confidence, f.Measures = 0, 0, 0, nil
			f.Text, f.TextShort = numbers.ReplaceAllString(f.Text, "#"), numbers.ReplaceAllString(f.TextShort, "#")
			o, err := json.Marshal(f)
			if err != nil {
				t.Fatal(err)
			}
			return string(o)
		}
		if !ok || plain(x) != plain(y) {
			t.Errorf("finding %d:\n%s\nwant\n%s", i+1, b[i], a[i])
		}
	}
}

func near(a, b, tol float64) bool { return math.Abs(a-b) <= tol }

// Times are RFC 3339 in UTC with three digits, as the contract says.
func TestTimesInJSON(t *testing.T) {
	for ms, want := range map[int64]string{1767493870000: "2026-01-04T02:31:10.000Z", 0: "1970-01-01T00:00:00.000Z", 1767493870007: "2026-01-04T02:31:10.007Z"} {
		got := detect.FormatTime(ms)
		if got != want {
			t.Errorf("%s, want %s", got, want)
		}
		if x, err := time.Parse(time.RFC3339Nano, got); err != nil || x.UnixMilli() != ms || !strings.HasSuffix(got, "Z") {
			t.Errorf("%s is read back as %v, %v", got, x, err)
		}
	}
}
