package dossier_test

import (
	"os"
	"testing"
	"time"
)

func TestScratch(t *testing.T) {
	w := quietWeek()
	fs := w.frames()
	_ = fs
	t0 := time.Now()
	d, err := build(w)
	t.Log(time.Since(t0))
	if err != nil {
		t.Fatal(err)
	}
	for _, l := range d.Summary {
		t.Log(l.About, ": ", l.Text)
	}
	f, _ := os.Create("/tmp/dossier/run/week.html")
	if err := d.HTML(f); err != nil {
		t.Fatal(err)
	}
	f.Close()
	f, _ = os.Create("/tmp/dossier/run/week.json")
	d.JSON(f)
	f.Close()
	t.Log(time.Since(t0))
}
