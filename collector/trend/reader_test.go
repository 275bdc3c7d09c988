package trend

import (
	"bytes"
	"compress/gzip"
	"context"
	"errors"
	"fmt"
	"io"
	"math"
	"os"
	"path/filepath"
	"strings"
	"sync"
	"testing"
	"time"

	"go.uber.org/goleak"

	"midwatch/collector"
	"midwatch/configs"
)

func TestMain(m *testing.M) { goleak.VerifyTestMain(m) }

func loopsOf(names ...string) []*configs.Loop {
	var out []*configs.Loop
	for _, n := range names {
		out = append(out, configs.NewLoop(n))
	}
	return out
}

type said struct{ lines []string }

func (s *said) say(t string) { s.lines = append(s.lines, t) }
func (s *said) text() string { return strings.Join(s.lines, "\n") }

// readAll reads texts as files a.csv, b.csv, ...; frames are written as
// "loop seconds pv flags".
func readAll(t *testing.T, loops []*configs.Loop, texts ...string) (frames []string, sum Summary, s *said, err error) {
	t.Helper()
	dir := t.TempDir()
	t.Chdir(dir)
	var paths []string
	for i, x := range texts {
		p := string(rune('a'+i)) + ".csv"
		if err := os.WriteFile(p, []byte(x), 0o600); err != nil {
			t.Fatal(err)
		}
		paths = append(paths, p)
	}
	s = &said{}
	r, err := Open(paths, loops, Options{Say: s.say})
	if err != nil {
		return nil, sum, s, err
	}
	defer func() {
		if err := r.Close(); err != nil {
			t.Error(err)
		}
	}()
	err = r.Each(func(id collector.LoopID, f *collector.Frame) error {
		frames = append(frames, show(loops[id].Name, f))
		return nil
	})
	return frames, r.Summary(), s, err
}

var day = time.Date(2026, 1, 5, 0, 0, 0, 0, time.UTC).UnixMilli()

func show(name string, f *collector.Frame) string {
	v := "-"
	if f.PV == f.PV {
		v = fmt.Sprint(f.PV)
	}
	s := fmt.Sprintf("%s %g %s", name, float64(f.Time-day)/1000, v)
	if f.Flags != 0 {
		s += " " + string(appendFlags(nil, f.Flags))
	}
	return s
}

func at(sec float64) string {
	return time.UnixMilli(day + int64(math.Round(sec*1000))).UTC().Format("2006-01-02T15:04:05.000Z")
}

func rows(header string, r ...string) string {
	return header + "\n" + strings.Join(r, "\n") + "\n"
}

func equal(t *testing.T, got []string, want ...string) {
	t.Helper()
	if g, w := strings.Join(got, "\n"), strings.Join(want, "\n"); g != w {
		t.Errorf("frames\n%s\nwant\n%s", g, w)
	}
}

const full = "time,loop,pv,sp,op,mode,flags"

func TestHeader(t *testing.T) {
	for _, c := range []struct{ name, text, want string }{
		{"missing", "time,loop,pv,op\n", `a.csv:1: no column sp in the header "time,loop,pv,op"; hint: columns are time, loop, pv, sp, op (required), mode, flags, gain, reset_s, feedforward, position (optional)`},
		{"semicolons", "time;loop;pv;sp;op\n", "separated by commas"},
		{"twice", "time,loop,pv,sp,op,pv\n", `column "pv" stands twice`},
		{"empty", "", "the file is empty"},
		{"open quote", `time,"loop,pv` + "\n", "quote that is not closed"},
		{"damaged gzip", "\x1f\x8bnot gzip at all", "gzip: invalid header"},
	} {
		_, _, _, err := readAll(t, loopsOf("A"), c.text)
		if err == nil || !strings.Contains(err.Error(), c.want) {
			t.Errorf("%s: error %v, want %q", c.name, err, c.want)
		}
	}
	if _, err := Open([]string{"nowhere.csv"}, nil, Options{}); !errors.Is(err, os.ErrNotExist) {
		t.Errorf("missing file: %v", err)
	}
	if _, err := Open([]string{"-", "-"}, nil, Options{Stdin: strings.NewReader(full + "\n")}); err == nil {
		t.Error("standard input twice is taken")
	}
}

func TestColumnsByName(t *testing.T) {
	var got collector.Frame
	text := "\ufeffPosition, op ,loop,reset_s,note,gain,time,sp,flags,pv,mode,feedforward\r\n" +
		"11.5,30,AIC-204,24.6,hello,1.02," + at(1.5) + ",2.5,held+lost,2.25,cascade,7\r\n"
	s := &said{}
	r, err := Open([]string{"-"}, loopsOf("AIC-204"), Options{Stdin: strings.NewReader(text), Say: s.say})
	if err != nil {
		t.Fatal(err)
	}
	defer r.Close()
	if err := r.Each(func(_ collector.LoopID, f *collector.Frame) error { got = *f; return nil }); err != nil {
		t.Fatal(err)
	}
	want := collector.Frame{Time: day + 1500, PV: 2.25, SP: 2.5, OP: 30, Gain: 1.02, Reset: 24.6, Feedforward: 7, Position: 11.5,
		Mode: collector.Cascade, Flags: collector.Held | collector.Lost}
	if got != want {
		t.Errorf("got %+v\nwant %+v", got, want)
	}
	if len(s.lines) != 1 || !strings.Contains(s.text(), "standard input:1: column note is ignored") {
		t.Errorf("said %q", s.lines)
	}
}

func TestRows(t *testing.T) {
	loops := loopsOf("AIC-204", `odd, "loop"`, " x")
	loops[0].ModeMap = "0=manual;1=auto;16=tracking"
	for _, c := range []struct{ name, row, want string }{
		{"plain", at(1) + ",AIC-204,1,2,3,auto,", "AIC-204 1 1 "},
		{"empty numbers are bad quality", at(1) + ",AIC-204,,,,,", "AIC-204 1 - "},
		{"nan and inf are bad quality", at(1) + ",AIC-204,NaN,Inf,-inf,,", "AIC-204 1 - "},
		{"too big for a float32", at(1) + ",AIC-204,1e60,2,3,,", "AIC-204 1 - "},
		{"negative zero", at(1) + ",AIC-204,-0.0,2,3,,", "AIC-204 1 0 "},
		{"exponent and spaces", at(1) + ", AIC-204 , 1.5e1 ,2,3,auto ,held", "AIC-204 1 15 held"},
		{"quotes", `"` + at(1) + `","AIC-204","1","2","3","auto","held"`, "AIC-204 1 1 held"},
		{"odd name", at(1) + `,"odd, ""loop""",1,2,3,,`, `odd, "loop" 1 1 `},
		{"name with a space in front", at(1) + `," x",1,2,3,,`, " x 1 1 "},
		{"offset", "2026-01-05T02:00:01.5+02:00,AIC-204,1,2,3,,", "AIC-204 1.5 1 "},
		{"offset west, long fraction", "2026-01-04T18:30:01.123456789-05:30,AIC-204,1,2,3,,", "AIC-204 1.123 1 "},
		{"small letters", "2026-01-05t00:00:01z,AIC-204,1,2,3,,", "time \"2026-01-05t00:00:01z\" is not RFC 3339"},
		{"mode as in mode_map", at(1) + ",AIC-204,1,2,3,16,", "AIC-204 1 1 "},
		{"unknown mode", at(1) + ",AIC-204,1,2,3,sleepy,", `mode "sleepy" is unknown; modes are auto, manual`},
		{"unknown flag", at(1) + ",AIC-204,1,2,3,,held+odd", `flag "odd" is unknown; flags are held, uncertain`},
		{"no time", ",AIC-204,1,2,3,,", `time "" is not RFC 3339`},
		{"no day", "2026-02-30T00:00:01Z,AIC-204,1,2,3,,", "is not RFC 3339"},
		{"local time", "2026-01-05 00:00:01,AIC-204,1,2,3,,", "is not RFC 3339"},
		{"no loop", at(1) + ",,1,2,3,,", "no loop"},
		{"no number", at(1) + ",AIC-204,1.2.3,2,3,,", `pv "1.2.3" is no number`},
		{"bad input", at(1) + ",AIC-204,1,Bad Input,3,,", `sp "Bad Input" is no number`},
		{"decimal comma", at(1) + ",AIC-204,1,5,2,3,,", "8 columns where the header has 7"},
		{"few columns", at(1) + ",AIC-204,1,2", "4 columns where the header has 7"},
		{"open quote", at(1) + `,"AIC-204,1,2,3,,`, "a quote is not closed"},
		{"behind the quote", at(1) + `,"AIC-204"x,1,2,3,,`, "a quote is not closed or has text behind it"},
		{"not text", "\x00\xff\xfe", "1 columns where the header has 7"},
	} {
		frames, sum, s, err := readAll(t, loops, rows(full, c.row))
		if want, ok := strings.CutSuffix(c.want, " "); ok || len(frames) == 1 {
			if err != nil || len(frames) != 1 || frames[0] != want {
				t.Errorf("%s: %q %v %s, want %q", c.name, frames, err, s.text(), want)
			}
			continue
		}
		var bad *MalformedError
		if !errors.As(err, &bad) || sum.Malformed != 1 || !strings.Contains(s.text(), c.want) || !strings.HasPrefix(s.lines[0], "a.csv:2: ") {
			t.Errorf("%s: %v, said %q, want %q", c.name, err, s.text(), c.want)
		}
	}
}

func TestModesOfTheLoopsOwn(t *testing.T) {
	loops := loopsOf("A", "B")
	loops[0].ModeMap, loops[1].ModeMap = "0=manual;1=auto", "0=auto;1=cascade"
	var text []string
	for i := range 10 {
		text = append(text, fmt.Sprintf("%s,A,1,2,3,%d,", at(float64(i)), i%2), fmt.Sprintf("%s,B,1,2,3,%d,", at(float64(i)), i%2))
	}
	r, err := Open([]string{"-"}, loops, Options{Stdin: strings.NewReader(rows(full, text...))})
	if err != nil {
		t.Fatal(err)
	}
	defer r.Close()
	want := [2][2]collector.Mode{{collector.Manual, collector.Auto}, {collector.Auto, collector.Cascade}}
	if err := r.Each(func(id collector.LoopID, f *collector.Frame) error {
		if w := want[id][(f.Time-day)/1000%2]; f.Mode != w {
			t.Errorf("loop %d at %d: %v, want %v", id, f.Time-day, f.Mode, w)
		}
		return nil
	}); err != nil {
		t.Error(err)
	}
}

func TestMergeIsStable(t *testing.T) {
	got, sum, _, err := readAll(t, loopsOf("A", "B", "C"),
		rows(full, at(1)+",A,1,,,,", at(2)+",A,2,,,,", at(4)+",C,3,,,,"),
		rows(full, at(1)+",B,4,,,,", at(2)+",C,5,,,,", at(2)+",B,6,,,,", at(5)+",A,7,,,,"),
		rows(full, at(1)+",C,8,,,,", at(9)+",A,9,,,,"))
	if err != nil {
		t.Fatal(err)
	}
	equal(t, got, "A 1 1", "B 1 4", "C 1 8", "A 2 2", "C 2 5", "B 2 6", "C 4 3", "A 5 7", "A 9 9")
	if sum.Rows != 9 || sum.Frames != 9 || sum.From != day+1000 || sum.To != day+9000 {
		t.Errorf("%+v", sum)
	}
}

func TestLateRowsAreOfTheirLoopOnly(t *testing.T) {
	got, sum, s, err := readAll(t, loopsOf("A", "B"), rows(full,
		at(1)+",A,1,,,,", at(3)+",A,2,,,,", at(3)+",A,3,,,,", at(2)+",A,4,,,,", at(2)+",B,5,,,,", at(3.0004)+",A,6,,,,", at(4)+",A,7,,,,"))
	if err != nil {
		t.Fatal(err)
	}
	equal(t, got, "A 1 1", "A 3 2", "B 2 5", "A 4 7")
	if sum.Late != 3 || sum.Malformed != 0 {
		t.Errorf("%+v", sum)
	}
	if !strings.Contains(s.text(), "a.csv:4: the row of A is not newer") || !strings.Contains(s.text(), "a.csv:5: the rows go back in time") || len(s.lines) != 2 {
		t.Errorf("said %q", s.lines)
	}
}

func TestForeignLoopsAreNamedOnce(t *testing.T) {
	var r []string
	for i := range 200 {
		r = append(r, fmt.Sprintf("%s,X-%d,1,2,3,,", at(float64(i)), i%25), at(float64(i))+`,"quoted",1,2,3,,`)
	}
	got, sum, s, err := readAll(t, loopsOf("A"), rows(full, append(r, at(300)+",A,1,,,,")...))
	if err != nil {
		t.Fatal(err)
	}
	equal(t, got, "A 300 1")
	if sum.Foreign != 400 || len(sum.Unknown) != 26 || len(s.lines) != 21 {
		t.Errorf("%+v, said %d", sum, len(s.lines))
	}
	if !strings.Contains(s.lines[0], `a.csv:2: loop "X-0" is not in the loop list`) || s.lines[20] != "6 more loops of the files are not in the loop list" {
		t.Errorf("said %q", s.lines)
	}
}

func TestManyMalformedEndInAnError(t *testing.T) {
	make := func(good, bad int) string {
		var r []string
		for i := range bad {
			r = append(r, fmt.Sprint("rubbish ", i))
		}
		for i := range good {
			r = append(r, at(float64(i))+",A,1,,,,")
		}
		return rows(full, r...)
	}
	got, sum, _, err := readAll(t, loopsOf("A"), make(99, 1))
	if err != nil || len(got) != 99 || sum.Malformed != 1 {
		t.Errorf("1 %%: %v %+v", err, sum)
	}
	got, sum, s, err := readAll(t, loopsOf("A"), make(2000, 30))
	var bad *MalformedError
	if !errors.As(err, &bad) || *bad != (MalformedError{30, 2030}) || len(got) != 2000 {
		t.Errorf("more than 1 %%: %v %+v", err, sum)
	}
	if len(s.lines) != 21 || s.lines[20] != "10 more malformed rows are not shown" || !strings.HasPrefix(s.lines[19], "a.csv:21: ") {
		t.Errorf("said %q", s.lines)
	}
}

func TestHeaderInTheMiddleAndEmptyLines(t *testing.T) {
	got, sum, s, err := readAll(t, loopsOf("A"), rows(full, at(1)+",A,1,,,,", "", full, at(2)+",A,2,,,,"))
	if err != nil || sum.Malformed != 0 || sum.Rows != 2 || len(s.lines) != 0 {
		t.Errorf("%v %+v %q", err, sum, s.lines)
	}
	equal(t, got, "A 1 1", "A 2 2")
}

func TestLongLine(t *testing.T) {
	got, sum, s, err := readAll(t, loopsOf("A"), rows(full, at(1)+",A,1,,,,", strings.Repeat("x", 3<<20), at(2)+",A,2,,,,"))
	if sum.Malformed != 1 || !strings.Contains(s.text(), "a.csv:3: a line of more than 1 MiB") {
		t.Errorf("%v %+v %q", err, sum, s.lines)
	}
	equal(t, got, "A 1 1", "A 2 2")
}

func pack(t testing.TB, text string) []byte {
	t.Helper()
	var b bytes.Buffer
	z := gzip.NewWriter(&b)
	if _, err := io.WriteString(z, text); err != nil {
		t.Fatal(err)
	}
	if err := z.Close(); err != nil {
		t.Fatal(err)
	}
	return b.Bytes()
}

func manyRows(n int) string {
	var b strings.Builder
	b.WriteString(full + "\n")
	for i := range n {
		fmt.Fprintf(&b, "%s,A,%g,2,3,auto,\n", at(float64(i)), float64(i*7919%1000)/8)
	}
	return b.String()
}

func TestGzip(t *testing.T) {
	text := manyRows(50_000)
	z := pack(t, text)
	got, _, _, err := readAll(t, loopsOf("A"), string(z))
	if err != nil || len(got) != 50_000 {
		t.Fatalf("%d frames, %v", len(got), err)
	}
	two := string(z) + string(pack(t, rows(full, at(90_000)+",A,1,,,,")))
	if got, _, _, err = readAll(t, loopsOf("A"), two); err != nil || len(got) != 50_001 {
		t.Errorf("two members: %d frames, %v", len(got), err)
	}
	// From standard input, and closed half read.
	r, err := Open([]string{"-"}, loopsOf("A"), Options{Stdin: bytes.NewReader(z)})
	if err != nil {
		t.Fatal(err)
	}
	if _, f, err := r.Next(); err != nil || f.Time != day {
		t.Error(f, err)
	}
	if err := r.Close(); err != nil {
		t.Error(err)
	}
}

func TestCutFiles(t *testing.T) {
	text := manyRows(50_000)
	z := pack(t, text)
	for _, c := range []struct{ name, text, want string }{
		{"plain", text[:len(text)/2], "the file ends here without an end of line: it may be cut, copy it again"},
		{"gzip", string(z[:len(z)/2]), "the file breaks off within this row"},
		{"gzip, end missing", string(z[:len(z)-4]), "the gzip stream is cut; what came before was read"},
	} {
		got, sum, s, err := readAll(t, loopsOf("A"), c.text)
		if err != nil || sum.Malformed != 1 || len(got) < 20_000 {
			t.Errorf("%s: %v, %d frames, %+v", c.name, err, len(got), sum)
		}
		if len(s.lines) != 1 || !strings.Contains(s.text(), c.want) || !strings.Contains(s.text(), "copy") {
			t.Errorf("%s: said %q", c.name, s.lines)
		}
	}
	spoilt := bytes.Clone(z)
	spoilt[len(spoilt)-6] ^= 1 // in the checksum
	got, _, _, err := readAll(t, loopsOf("A"), string(spoilt))
	if !errors.Is(err, gzip.ErrChecksum) || len(got) != 50_000 || !strings.Contains(err.Error(), "a.csv:50002: reading") {
		t.Errorf("checksum: %d frames, %v", len(got), err)
	}
	// The last row needs no end of line.
	got, sum, s, err := readAll(t, loopsOf("A"), strings.TrimSuffix(rows(full, at(1)+",A,1,,,,"), "\n"))
	if err != nil || len(got) != 1 || sum.Malformed != 0 || len(s.lines) != 0 {
		t.Errorf("no end of line: %v %q %q", err, got, s.lines)
	}
}

const bare = "time,loop,pv,sp,op"

func TestInferredGaps(t *testing.T) {
	const h = 3600.0
	t.Run("own time", func(t *testing.T) {
		got, sum, s, err := readAll(t, loopsOf("A"), rows(bare, at(0)+",A,1,,", at(1800)+",A,2,,", at(1800+4500.001)+",A,3,,", at(6400)+",A,4,,"))
		if err != nil {
			t.Fatal(err)
		}
		// The gap of 1800 s it had makes 4500 s of its limit.
		equal(t, got, "A 0 1", "A 1800 2", "A 6300 - gap", "A 6300.001 3 gap", "A 6400 4")
		if !sum.Inferred || sum.Silent != 1 || len(s.lines) != 1 || !strings.Contains(s.text(), "no column flags: gaps are inferred") {
			t.Errorf("%+v %q", sum, s.lines)
		}
	})
	t.Run("with flags nothing is inferred", func(t *testing.T) {
		got, sum, _, _ := readAll(t, loopsOf("A"), rows(full, at(0)+",A,1,,,,", at(90*h)+",A,2,,,,"))
		equal(t, got, "A 0 1", "A 324000 2")
		if sum.Inferred {
			t.Error("inferred")
		}
	})
	t.Run("dead while others go on", func(t *testing.T) {
		r := []string{at(0) + ",A,1,,", at(0) + ",B,1,,", at(1) + ",B,2,,"}
		for m := 1.0; m <= 60; m++ {
			r = append(r, at(m*60)+",A,1,,")
			if m == 20 {
				r = append(r, at(m*60)+",B,,,") // a row without PV proves nothing
			}
		}
		r = append(r, at(61*60)+",B,,,", at(62*60)+",B,3,,")
		got, sum, _, _ := readAll(t, loopsOf("A", "B"), rows(bare, r...))
		var b []string
		for i, x := range got {
			if x[0] == 'B' {
				b = append(b, x)
			}
			if x == "B 1801 - gap" && (got[i-1] != "A 1800 1" || got[i+1] != "A 1860 1") {
				t.Errorf("out of order: %q", got[i-1:i+2])
			}
		}
		equal(t, b, "B 0 1", "B 1 2", "B 1200 -", "B 1801 - gap", "B 3660 -", "B 3720 3 gap")
		if sum.Silent != 1 {
			t.Errorf("%+v", sum)
		}
	})
	t.Run("only for files without flags", func(t *testing.T) {
		got, sum, _, _ := readAll(t, loopsOf("A", "B"),
			rows(full, at(0)+",A,1,,,,", at(10*h)+",A,2,,,,"), rows(bare, at(1)+",B,1,,", at(9*h)+",B,2,,"))
		equal(t, got, "A 0 1", "B 1 1", "B 1801 - gap", "B 32400 2 gap", "B 34200 - gap", "A 36000 2")
		if !sum.Inferred || sum.Silent != 2 {
			t.Errorf("%+v", sum)
		}
	})
	t.Run("loops one after the other are not dead", func(t *testing.T) {
		var r []string
		for _, l := range []string{"A", "B"} {
			for m := 0.0; m < 300; m++ {
				r = append(r, at(m*60)+","+l+",1,,")
			}
		}
		_, sum, _, _ := readAll(t, loopsOf("A", "B"), rows(bare, r...))
		if sum.Silent != 0 || sum.Late != 0 || sum.Frames != 600 {
			t.Errorf("%+v", sum)
		}
	})
	t.Run("limits", func(t *testing.T) {
		for _, c := range []struct {
			name string
			edit func(*configs.Loop)
			step float64 // s between the first 20 rows
			want float64 // limit, s
		}{
			{"floor", nil, 1, 1800},
			{"exception", func(l *configs.Loop) { l.Report = configs.Exception }, 1, 6 * h},
			{"silence_s", func(l *configs.Loop) { l.SilenceS = 90 }, 30, 90},
			{"sample_s", func(l *configs.Loop) { l.SampleS = 100 }, 1, 4000},
			{"learnt interval", nil, 120, 4800},
		} {
			l := loopsOf("A")
			if c.edit != nil {
				c.edit(l[0])
			}
			for _, over := range []bool{false, true} {
				var r []string
				last := 0.0
				for i := range 20 {
					last = float64(i) * c.step
					r = append(r, at(last)+",A,1,,")
				}
				next := last + c.want
				if over {
					next += 0.001
				}
				got, sum, _, _ := readAll(t, l, rows(bare, append(r, at(next)+",A,2,,")...))
				if flagged := strings.HasSuffix(got[len(got)-1], "gap"); flagged != over || (sum.Silent == 1) != over {
					t.Errorf("%s, %g s: %q, %+v", c.name, next-last, got[len(got)-1], sum)
				}
			}
		}
	})
}

func TestSpread(t *testing.T) {
	var names, text []string
	for i := range 23 {
		names = append(names, fmt.Sprint("L", i))
	}
	for s := range 2000 {
		for i, n := range names {
			if (s+i)%3 > 0 {
				text = append(text, fmt.Sprintf("%s,%s,%d,2,3", at(float64(s)), n, s))
			}
		}
	}
	loops := loopsOf(names...)
	read := func(n int) map[collector.LoopID][]collector.Frame {
		r, err := Open([]string{"-"}, loops, Options{Stdin: strings.NewReader(rows(bare, text...))})
		if err != nil {
			t.Fatal(err)
		}
		defer r.Close()
		var mu sync.Mutex
		got := map[collector.LoopID][]collector.Frame{}
		through := make([]int64, n)
		if err := r.Spread(context.Background(), n, func(w int, b *Batch) error {
			mu.Lock()
			defer mu.Unlock()
			if b.Through < through[w] {
				t.Error("through goes back")
			}
			through[w] = b.Through
			for _, it := range b.Items {
				if int(it.ID)%n != w {
					t.Errorf("loop %d at worker %d", it.ID, w)
				}
				got[it.ID] = append(got[it.ID], it.Frame)
			}
			return nil
		}); err != nil {
			t.Fatal(err)
		}
		for w := range through {
			if through[w] != r.Summary().To {
				t.Errorf("worker %d ended at %d", w, through[w])
			}
		}
		return got
	}
	want := fmt.Sprint(read(1))
	for _, n := range []int{2, 5} {
		if got := fmt.Sprint(read(n)); got != want {
			t.Errorf("%d workers give other frames", n)
		}
	}

	// Errors of a worker, of reading, and the end of the context.
	boom := errors.New("boom")
	r, _ := Open([]string{"-"}, loops, Options{Stdin: strings.NewReader(rows(bare, text...))})
	defer r.Close()
	if err := r.Spread(context.Background(), 3, func(w int, b *Batch) error { return boom }); err != boom {
		t.Errorf("worker: %v", err)
	}
	bad, _ := Open([]string{"-"}, loops, Options{Stdin: strings.NewReader(rows(bare, "x", "y"))})
	defer bad.Close()
	var m *MalformedError
	if err := bad.Spread(context.Background(), 3, func(int, *Batch) error { return nil }); !errors.As(err, &m) {
		t.Errorf("reading: %v", err)
	}
	ctx, cancel := context.WithCancel(context.Background())
	cancel()
	c, _ := Open([]string{"-"}, loops, Options{Stdin: strings.NewReader(rows(bare, text...))})
	defer c.Close()
	if err := c.Spread(ctx, 3, func(int, *Batch) error { return nil }); err != nil && !errors.Is(err, context.Canceled) {
		t.Errorf("context: %v", err)
	}
}

func TestRecordedRuns(t *testing.T) {
	dir := filepath.Join("..", "..", "testdata", "te")
	var names []string
	for i := range 18 {
		names = append(names, fmt.Sprintf("te%02d", i+1))
	}
	paths, err := filepath.Glob(filepath.Join(dir, "*.csv.gz"))
	if err != nil || len(paths) != 8 {
		t.Fatalf("%d recorded runs, %v", len(paths), err)
	}
	for _, p := range paths {
		r, err := Open([]string{p}, loopsOf(names...), Options{})
		if err != nil {
			t.Fatal(err)
		}
		if err := r.Each(func(collector.LoopID, *collector.Frame) error { return nil }); err != nil {
			t.Errorf("%s: %v", p, err)
		}
		if s := r.Summary(); s.Rows < 10_000 || s.Malformed+s.Late+s.Foreign+s.Silent != 0 || s.Frames != s.Rows {
			t.Errorf("%s: %+v", p, s)
		}
		if err := r.Close(); err != nil {
			t.Error(err)
		}
	}
}
