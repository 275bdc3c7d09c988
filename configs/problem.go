package configs

import (
	"fmt"
	"sort"
	"strconv"
	"strings"
	"unicode"
)

// Position is a place in a file, for messages. Line and Column count from 1,
// Column in characters; 0 is unknown.
type Position struct {
	File         string
	Line, Column int
}

// String is "file:line:column", as far as known.
func (p Position) String() string {
	s := p.File
	if p.Line > 0 {
		s += ":" + strconv.Itoa(p.Line)
		if p.Column > 0 {
			s += ":" + strconv.Itoa(p.Column)
		}
	}
	return s
}

// Problem is one mistake in a configuration or loop list.
type Problem struct {
	Position
	Key  string // key or column, "" when the mistake is the file's
	Loop string // name of the loop, where there is one
	What string // what is wrong
	Hint string // what would be right
}

// String is "file:line:column: key: what; hint".
func (p Problem) String() string {
	var b strings.Builder
	if at := p.Position.String(); at != "" {
		b.WriteString(at + ": ")
	}
	switch {
	case p.Key != "" && p.Loop != "":
		b.WriteString(p.Key + " of " + p.Loop + ": ")
	case p.Key != "":
		b.WriteString(p.Key + ": ")
	case p.Loop != "":
		b.WriteString(p.Loop + ": ")
	}
	b.WriteString(p.What)
	if p.Hint != "" {
		b.WriteString("; " + p.Hint)
	}
	// What a file says may end up on a terminal: no control characters.
	return strings.Map(func(r rune) rune {
		if unicode.IsPrint(r) {
			return r
		}
		return '?'
	}, b.String())
}

// Problems are all mistakes of one run, in the order of files and lines. It is
// the error type of everything in this package that reads a file's contents.
type Problems []Problem

// Error gives one line per problem.
func (p Problems) Error() string {
	lines := make([]string, len(p))
	for i, x := range p {
		lines[i] = x.String()
	}
	return strings.Join(lines, "\n")
}

// mistake is what is wrong with a single value, before it has a place.
type mistake struct{ what, hint string }

func wrong(hint, format string, a ...any) *mistake {
	return &mistake{fmt.Sprintf(format, a...), hint}
}

// problemList gathers problems; it never stops at the first.
type problemList struct{ list Problems }

func (c *problemList) add(at Position, key, hint, format string, a ...any) {
	c.list = append(c.list, Problem{Position: at, Key: key, What: fmt.Sprintf(format, a...), Hint: hint})
}

func (c *problemList) addLoop(at Position, key, loop, hint, format string, a ...any) {
	c.list = append(c.list, Problem{Position: at, Key: key, Loop: loop, What: fmt.Sprintf(format, a...), Hint: hint})
}

// err gives the problems by file (first seen first) and line, or nil.
func (c *problemList) err() error {
	if len(c.list) == 0 {
		return nil
	}
	order := map[string]int{}
	for _, p := range c.list {
		if _, ok := order[p.File]; !ok {
			order[p.File] = len(order)
		}
	}
	sort.SliceStable(c.list, func(i, j int) bool {
		a, b := c.list[i], c.list[j]
		if a.File != b.File {
			return order[a.File] < order[b.File]
		}
		if a.Line != b.Line {
			return a.Line < b.Line
		}
		return a.Column < b.Column
	})
	return c.list
}

// nearest gives the known word nearest to s by edit distance; meant says whether
// it is near enough to be what was meant.
func nearest(s string, known []string) (best string, meant bool) {
	bestD := 1000
	for _, k := range known {
		if d := distance(strings.ToLower(s), strings.ToLower(k)); d < bestD {
			best, bestD = k, d
		}
	}
	return best, bestD <= max(1, len(best)/3)
}

// manyWords is how many words a message can list and still be read.
const manyWords = 12

// didYouMean is the hint for an unknown word: the nearest known one, or all.
func didYouMean(s string, known []string) string {
	n, meant := nearest(s, known)
	switch {
	case meant:
		return "did you mean " + n + "?"
	case len(known) > manyWords:
		return "the nearest known is " + n + "; REFERENCE.md lists all"
	}
	return "known are " + strings.Join(known, ", ")
}

// distance is the edit distance with neighbours swapped counted as one edit.
func distance(a, b string) int {
	// Longer words are nowhere near a key; this bounds the work.
	if len(a) > 64 {
		a = a[:64]
	}
	prev2, prev, cur := make([]int, len(b)+1), make([]int, len(b)+1), make([]int, len(b)+1)
	for j := range prev {
		prev[j] = j
	}
	for i := 1; i <= len(a); i++ {
		cur[0] = i
		for j := 1; j <= len(b); j++ {
			cost := 1
			if a[i-1] == b[j-1] {
				cost = 0
			}
			cur[j] = min(prev[j]+1, cur[j-1]+1, prev[j-1]+cost)
			if i > 1 && j > 1 && a[i-1] == b[j-2] && a[i-2] == b[j-1] {
				cur[j] = min(cur[j], prev2[j-2]+1)
			}
		}
		prev2, prev, cur = prev, cur, prev2
	}
	return prev[len(b)]
}
