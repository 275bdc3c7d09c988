package dossier

import (
	_ "embed"
	"fmt"
	"html/template"
	"io"
	"net/url"
	"time"
)

//go:embed index.html
var indexText string

var indexPage = template.Must(template.New("index").Parse(indexText))

// Row is a loop in the index of a batch.
type Row struct {
	Loop    string  `json:"loop"`
	Service string  `json:"service,omitempty"`
	File    string  `json:"file,omitempty"` // of the page; empty: none was made
	Why     string  `json:"why_not,omitempty"`
	Days    float64 `json:"days,omitempty"`
	Frames  int     `json:"frames,omitempty"`
	Summary []Line  `json:"summary,omitempty"`
}

// Row is the line of the dossier in an index; file is where its page is.
func (d *Dossier) Row(file string) Row {
	return Row{Loop: d.Loop, Service: d.Service, File: file, Days: d.Span.Days, Frames: d.Span.Frames, Summary: d.Summary}
}

// Head is the sentence of the row that says where to look first.
func (r Row) Head() string {
	if len(r.Summary) == 0 {
		return ""
	}
	return r.Summary[0].Text
}

// Path is the file as a link: its name may hold per cent signs.
func (r Row) Path() string { return url.PathEscape(r.File) }

// Index is the list of a batch of dossiers, in the order asked for: no order of
// merit, no grade.
type Index struct {
	Site    string
	Zone    *time.Location // nil: UTC
	Made    time.Time
	Version string
	Rows    []Row
}

// When is when the batch was made.
func (x Index) When() string {
	zone := x.Zone
	if zone == nil {
		zone = time.UTC
	}
	return x.Made.In(zone).Format("2 Jan 2006 15:04 MST")
}

// Cautions are those of every dossier.
func (x Index) Cautions() []string { return Cautions }

// HTML writes the index page: one file, no scripts, no other host.
func (x Index) HTML(w io.Writer) error {
	if err := indexPage.Execute(w, x); err != nil {
		return fmt.Errorf("writing the index: %w", err)
	}
	return nil
}
