package page

import (
	"encoding/csv"
	"strings"
	"testing"
)

// What is seen of several loops can be saved: the frames of all of them in the
// span, and the picture.
func TestExportOfSeveralLoops(t *testing.T) {
	h := newFake()
	h.frozen = true
	p := newPage(t, h)
	for id, c := range map[string]struct {
		query string
		loops []string
		rows  int // of each loop
		sp    bool
	}{
		"20260106-0004-kfen": {"", []string{"FIC-118", "PIC-107", "FIC-119"}, 12 * 42, false},
		"cascade:AIC-201":    {"?hours=1", []string{"AIC-201", "FIC-202"}, 720, true},
	} {
		w := call(t, inside(p), "GET", "/episodes/"+id+"/loops.csv"+c.query, "")
		rows, err := csv.NewReader(w.Body).ReadAll()
		if err != nil {
			t.Fatal(err)
		}
		n := map[string]int{}
		for _, r := range rows[1:] {
			n[r[1]]++
		}
		for _, l := range c.loops {
			if n[l] != c.rows || len(n) != len(c.loops) {
				t.Errorf("%s: rows %v, want %d of each of %v", id, n, c.rows, c.loops)
			}
		}
		w = call(t, inside(p), "GET", "/episodes/"+id+"/loops.svg"+c.query, "")
		svg := w.Body.String()
		if w.Code != 200 || xmlProblem(svg) != nil || strings.Count(svg, `class="pv"`) != len(c.loops) || strings.Contains(svg, `class="sp"`) != c.sp {
			t.Errorf("%s: %d, %v, %d traces", id, w.Code, xmlProblem(svg), strings.Count(svg, `class="pv"`))
		}
		if !strings.Contains(w.Header().Get("Content-Disposition"), "attachment") {
			t.Errorf("%s: %v", id, w.Header())
		}
		_, body := got(t, p, "/episodes/"+id+c.query)
		for _, want := range []string{`loops.csv?`, `data-png="loops.png"`, "24 h"} {
			if !strings.Contains(body, want) {
				t.Errorf("%s: no %q", id, want)
			}
		}
	}
	for path, code := range map[string]int{"/episodes/none/loops.csv": 404, "/episodes/cascade:PIC-101/loops.svg": 404, "/episodes/cascade:AIC-201/loops.csv?hours=x": 400,
		"/episodes/" + h.eps[0].ID + "/loops.csv": 404, "/episodes/cascade:none": 404, "/episodes/cascade:AIC-201?from=9&to=3": 400} {
		if w := call(t, inside(p), "GET", path, ""); w.Code != code {
			t.Errorf("%s: %d, want %d", path, w.Code, code)
		}
	}
}
