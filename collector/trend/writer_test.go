package trend

import (
	"bytes"
	"errors"
	"os"
	"strings"
	"testing"

	"midwatch/collector"
)

func writeFile(t testing.TB, path string, b []byte) {
	t.Helper()
	if err := os.WriteFile(path, b, 0o600); err != nil {
		t.Fatal(err)
	}
}

func TestWriter(t *testing.T) {
	n := collector.NaN32
	f := collector.Frame{Time: day + 6, PV: 94.702, SP: n, OP: 1e-9, Gain: 1.02, Feedforward: n, Position: 0.5,
		Mode: collector.RemoteSP, Flags: collector.Gap | collector.Held}
	for _, c := range []struct {
		name    string
		loop    string
		columns Columns
		want    string
	}{
		{"required", "AIC-204", Columns{}, "time,loop,pv,sp,op\n2026-01-05T00:00:00.006Z,AIC-204,94.702,,1e-09\n"},
		{"all", `a "b", c`, AllColumns, "time,loop,pv,sp,op,mode,flags,gain,reset_s,feedforward,position\n" +
			`2026-01-05T00:00:00.006Z,"a ""b"", c",94.702,,1e-09,remote-sp,held+gap,1.02,,,0.5` + "\n"},
		{"mode, space in front", " x", Columns{Mode: true}, "time,loop,pv,sp,op,mode\n" + `2026-01-05T00:00:00.006Z," x",94.702,,1e-09,remote-sp` + "\n"},
	} {
		var b bytes.Buffer
		w := NewWriter(&b, c.columns)
		if err := w.Write(c.loop, &f); err != nil {
			t.Fatal(err)
		}
		if err := w.Flush(); err != nil {
			t.Fatal(err)
		}
		if b.String() != c.want {
			t.Errorf("%s:\n got %q\nwant %q", c.name, b.String(), c.want)
		}
	}
}

type failing struct{ n int }

var errFull = errors.New("no space left")

func (f *failing) Write(p []byte) (int, error) {
	if f.n--; f.n < 0 {
		return 0, errFull
	}
	return len(p), nil
}

func TestWriterErrors(t *testing.T) {
	f := collector.Frame{Time: day}
	w := NewWriter(&failing{1}, Columns{})
	var err error
	for range 10_000 {
		if err = w.Write("A", &f); err != nil {
			break
		}
	}
	if !errors.Is(err, errFull) || !errors.Is(w.Flush(), errFull) {
		t.Errorf("a full disk: %v", err)
	}
	var b bytes.Buffer
	w = NewWriter(&b, Columns{})
	if err := w.Write("A\nB", &f); err == nil {
		t.Error("a name of two lines is taken")
	}
	f.Time = 1 << 60
	if err := w.Write("A", &f); err == nil || !strings.Contains(err.Error(), "years 0 to 9999") {
		t.Errorf("far time: %v", err)
	}
	if err := w.Flush(); err != nil || b.String() != "time,loop,pv,sp,op\n" {
		t.Errorf("%q %v", b.String(), err)
	}
}

func TestNoAllocationPerRow(t *testing.T) {
	text, names := recorded(t, 10, 4000, AllColumns)
	loops := loopsOf(names...)
	r, err := Open([]string{"-"}, loops, Options{Stdin: bytes.NewReader(text)})
	if err != nil {
		t.Fatal(err)
	}
	defer r.Close()
	for range 1000 {
		if _, _, err := r.Next(); err != nil {
			t.Fatal(err)
		}
	}
	if n := testing.AllocsPerRun(3000, func() {
		if _, _, err := r.Next(); err != nil {
			t.Fatal(err)
		}
	}); n > 0 {
		t.Errorf("%g allocations per row read", n)
	}
}
