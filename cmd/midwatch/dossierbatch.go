package main

import (
	"bytes"
	"encoding/json"
	"errors"
	"fmt"
	"io"
	"os"
	"path/filepath"
	"runtime"
	"slices"
	"sync"
	"time"

	"midwatch/alert/dossier"
	"midwatch/configs"
)

// indexName is that of the files of the index, without their endings.
const indexName = "index"

// batch makes the dossiers of many loops over all processors, and an index of
// them. What is held in memory are the frames of one loop a processor. A loop of
// which nothing can be made is listed with the reason.
func (h *house) batch(s supply, ls []*configs.Loop, dir string, trends, asJSON bool) error {
	if err := os.MkdirAll(dir, 0o750); err != nil {
		return fmt.Errorf("folder of the dossiers: %w", err)
	}
	began := time.Now()
	index := dossier.Index{Made: began, Version: facts().Version, Rows: make([]dossier.Row, len(ls))}
	bar := newProgress(h.stderr)
	defer bar.clear()
	failed := make([]error, len(ls)) // in the order of the list
	var mu sync.Mutex
	done, at := 0, 0
	pass := s.pass
	if pass <= 0 {
		pass = len(ls)
	}
	for part := range slices.Chunk(ls, pass) {
		input, err := s.open(part)
		if err != nil {
			return err
		}
		next := make(chan int)
		var workers sync.WaitGroup
		for range min(runtime.GOMAXPROCS(0), len(part)) {
			workers.Go(func() {
				for i := range next {
					row, in, err := h.one(input, part[i], dir, trends)
					mu.Lock()
					index.Rows[at+i] = row
					if in.Site != "" {
						index.Site, index.Zone = in.Site, in.Zone
					}
					failed[at+i] = err
					done++
					bar.show(fmt.Sprintf("%d of %d dossiers", done, len(ls)), time.Since(began))
					mu.Unlock()
				}
			})
		}
		for i := range part {
			if h.ctx.Err() != nil {
				break
			}
			next <- i
		}
		close(next)
		workers.Wait()
		if err := h.ctx.Err(); err != nil {
			return fmt.Errorf("stopped by a signal after %d of %d dossiers: %w", done, len(ls), err)
		}
		at += len(part)
	}
	bar.clear()
	js := func(w io.Writer) error {
		e := json.NewEncoder(w)
		e.SetEscapeHTML(false)
		e.SetIndent("", " ")
		return e.Encode(index.Rows)
	}
	page := filepath.Join(dir, indexName+".html")
	if err := errors.Join(writeWhole(page, index.HTML), writeWhole(filepath.Join(dir, indexName+".json"), js)); err != nil {
		return err
	}
	if asJSON {
		if err := js(h.stdout); err != nil {
			return err
		}
	} else {
		made := 0
		for _, r := range index.Rows {
			if r.File != "" {
				made++
			}
		}
		fmt.Fprintf(h.stdout, "%d of %d dossiers in %s; written: %s\n", made, len(ls), time.Since(began).Round(100*time.Millisecond), page)
	}
	return errors.Join(failed...)
}

// one makes and writes the dossier of one loop of a batch. A span without frames
// is no failure.
func (h *house) one(input func(*configs.Loop) (dossier.Input, error), l *configs.Loop, dir string, trends bool) (dossier.Row, dossier.Input, error) {
	row := dossier.Row{Loop: l.Name, Service: l.Service}
	in, err := input(l)
	if err == nil {
		in.Made, in.Version = time.Now(), facts().Version
		var d *dossier.Dossier
		if d, err = dossier.Build(in); err == nil {
			name := fileName(l.Name)
			if name == indexName { // escaped, as no other name is
				name = fmt.Sprintf("%%%02X", name[0]) + name[1:]
			}
			if err = writeDossier(d, filepath.Join(dir, name), ".html", trends); err == nil {
				row = d.Row(name + ".html")
				return row, in, nil
			}
		}
	}
	row.Why = err.Error()
	if errors.Is(err, dossier.ErrNoFrames) {
		err = nil
	}
	return row, in, err
}

// writeDossier writes page and JSON of a dossier, and its trend where wanted, each
// whole or not at all.
func writeDossier(d *dossier.Dossier, base, ext string, trend bool) error {
	write := func(path string, f func(io.Writer) error) error {
		var b bytes.Buffer
		if err := f(&b); err != nil {
			return err
		}
		return writeWhole(path, func(w io.Writer) error { _, err := b.WriteTo(w); return err })
	}
	if trend {
		if err := writeWhole(base+".csv", d.Trend); err != nil {
			return err
		}
	}
	return errors.Join(write(base+".json", d.JSON), write(base+ext, d.HTML))
}
