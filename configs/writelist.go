package configs

import (
	"bufio"
	"io"
	"strings"
)

// WriteLoopList writes the effective loop list in CSV: reading it gives equal
// loops. Columns that no loop uses are left out.
func WriteLoopList(w io.Writer, loops []*Loop) error {
	used := make([]bool, len(columns))
	for i, col := range columns {
		used[i] = col.name == "loop"
		for _, l := range loops {
			if used[i] {
				break
			}
			used[i] = col.get(l) != ""
		}
	}
	b := bufio.NewWriter(w)
	line := func(value func(column) string) {
		first := true
		for i, col := range columns {
			if !used[i] {
				continue
			}
			if !first {
				b.WriteByte(',')
			}
			first = false
			b.WriteString(quoteCSV(value(col)))
		}
		b.WriteByte('\n')
	}
	line(func(c column) string { return c.name })
	for _, l := range loops {
		line(func(c column) string { return c.get(l) })
	}
	return b.Flush()
}

// quoteCSV also quotes what begins with #, which would read as a comment.
func quoteCSV(s string) string {
	if strings.ContainsAny(s, ",\"") || strings.HasPrefix(s, "#") {
		return `"` + strings.ReplaceAll(s, `"`, `""`) + `"`
	}
	return s
}
