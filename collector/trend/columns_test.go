package trend

import (
	"strings"
	"testing"
)

// Help and table name every column and flag with a meaning, and help keeps its width.
func TestColumnsAreDescribed(t *testing.T) {
	help, table := Help(80), Markdown()
	for _, c := range append(columns[:], flagColumns()...) {
		if c.Meaning == "" {
			t.Errorf("%s has no meaning", c.Name)
		}
		if !strings.Contains(help, "\n  "+c.Name+" ") && !strings.HasPrefix(help, "  "+c.Name+" ") {
			t.Errorf("help lacks %s", c.Name)
		}
		if !strings.Contains(table, "| `"+c.Name+"` |") {
			t.Errorf("the table lacks %s", c.Name)
		}
	}
	for i, c := range columns {
		if c.Required != (i < required) {
			t.Errorf("%s: required is %v", c.Name, c.Required)
		}
	}
	for line := range strings.Lines(help) {
		if len(strings.TrimRight(line, "\n")) > 80 {
			t.Errorf("too wide: %q", line)
		}
	}
}
