package configs

import (
	"bufio"
	"fmt"
	"io"
	"path/filepath"
	"regexp"
	"strconv"
	"strings"
)

// Show writes the effective settings as YAML that reads back the same, each with
// its origin: the line of the file, or "default". Secrets are named by their
// file and never shown. Loops of the loop list are named by its file; export
// writes them out.
func (c *Config) Show(w io.Writer) error {
	b := bufio.NewWriter(w)
	s := &shower{w: b, c: c, base: filepath.Base(c.File)}
	s.group(settings(c), "", "", "")
	s.loops()
	return b.Flush()
}

type shower struct {
	w    *bufio.Writer
	c    *Config
	base string
}

// line writes "indent key: value", the origin to the right.
func (s *shower) line(indent, text, origin string) {
	s.w.WriteString(indent + text)
	if origin != "" {
		s.w.WriteString(strings.Repeat(" ", max(1, 56-len(indent)-len(text))) + "# " + origin)
	}
	s.w.WriteByte('\n')
}

func (s *shower) origin(path string) string {
	if p, ok := s.c.given[path]; ok {
		return fmt.Sprintf("%s:%d", s.base, p.Line)
	}
	return "default"
}

// group writes the keys below path. first replaces the indent of the first line
// written: "- " of an item of a list.
func (s *shower) group(g group, path, first, indent string) {
	next := func() string {
		if first != "" {
			f := first
			first = ""
			return f
		}
		return indent
	}
	for i := range g {
		f := &g[i]
		key := joinKey(path, f.key)
		switch {
		case f.open != nil && f.present != nil && !f.present():
		case f.open != nil:
			inner := f.open()
			if !s.any(inner, key) {
				continue
			}
			s.line(next(), f.key+":", "")
			s.group(inner, key, "", indent+"  ")
		case f.list != nil && f.list.len() > 0:
			s.line(next(), f.key+":", "")
			for j := range f.list.len() {
				s.group(f.list.item(j), fmt.Sprintf("%s[%d]", key, j+1), indent+"  - ", indent+"    ")
			}
		case f.value != nil && s.shown(f, key):
			origin := s.origin(key)
			if f.secret != nil {
				origin += ", content not shown"
			}
			s.line(next(), f.key+": "+valueText(f.value), origin)
		}
	}
}

// shown leaves out what is neither given nor has a value.
func (s *shower) shown(f *field, key string) bool {
	_, given := s.c.given[key]
	return given || f.value.text() != ""
}

func (s *shower) any(g group, path string) bool {
	found := false
	visit(g, path, func(key string, f *field) { found = found || s.shown(f, key) })
	return found
}

func valueText(v value) string {
	many, ok := v.(manyValue)
	if !ok {
		return quoteYAML(v.text())
	}
	texts := append([]string(nil), many.texts()...)
	for i := range texts {
		texts[i] = quoteYAML(texts[i])
	}
	return "[" + strings.Join(texts, ", ") + "]"
}

var plainYAML = regexp.MustCompile(`^[A-Za-z0-9/_.][A-Za-z0-9/_.+-]*( [A-Za-z0-9/_.+-]+)*$`)

func quoteYAML(s string) string {
	if plainYAML.MatchString(s) && s != "null" {
		return s
	}
	return strconv.Quote(s)
}

// loops writes the loops that stand in the configuration itself.
func (s *shower) loops() {
	listed := 0
	head := false
	for _, l := range s.c.Loops {
		if l.Where.File != s.c.File {
			listed++
			continue
		}
		if !head {
			s.line("", "loops:", "")
			head = true
		}
		first := "  - "
		for _, col := range columns {
			if v := col.get(l); v != "" {
				s.line(first, col.name+": "+quoteYAML(v), "")
				first = "    "
			}
		}
	}
	s.line("", fmt.Sprintf("# %d loops, %d of them from the loop list", len(s.c.Loops), listed), "")
}
