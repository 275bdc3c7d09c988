package configs

import (
	"bytes"
	"errors"
	"io"
	"strconv"
	"strings"

	"go.yaml.in/yaml/v4"
)

// node is a YAML value with its place. The YAML library is used in this file
// only, so that it can be exchanged.
type node struct {
	at     Position
	kind   nodeKind
	text   string // of a scalar, as written
	quoted bool
	keys   []*node // of a mapping
	values []*node // of a mapping or sequence
}

type nodeKind uint8

const (
	scalar nodeKind = iota
	mapping
	sequence
)

// what is the kind in words.
func (n *node) what() string {
	return [...]string{"a single value", "a group of keys", "a list"}[n.kind]
}

// empty says whether a key was written without a value.
func (n *node) empty() bool {
	return n.kind == scalar && !n.quoted && (n.text == "" || n.text == "~" || n.text == "null")
}

// parseYAML reads one YAML document and reports what midwatch does not take:
// second documents, anchors, aliases, merge keys, tags and duplicate keys. It
// returns nil when there is nothing to walk.
func parseYAML(file string, data []byte, c *problemList) *node {
	if !checkEncoding(file, data, "YAML", c) {
		return nil
	}
	loader, err := yaml.NewLoader(bytes.NewReader(data), yaml.WithUniqueKeys(false))
	if err != nil {
		c.add(Position{File: file}, "", "", "cannot read YAML: %v", err)
		return nil
	}
	var doc yaml.Node
	if err := loader.Load(&doc); errors.Is(err, io.EOF) || err == nil && len(doc.Content) == 0 {
		c.add(Position{File: file, Line: 1, Column: 1}, "", "begin with site: {name: NAME} and data: FOLDER", "the file is empty")
		return nil
	} else if err != nil {
		syntaxProblem(file, data, err, c)
		return nil
	}
	root := convert(file, doc.Content[0], "", c)
	var second yaml.Node
	if err := loader.Load(&second); err == nil {
		c.add(Position{file, second.Line, second.Column}, "", "keep one document: remove the line --- and what follows",
			"a second document begins here")
	} else if !errors.Is(err, io.EOF) {
		syntaxProblem(file, data, err, c)
	}
	return root
}

// syntaxProblem says in plain words what the library means by its commonest
// errors.
func syntaxProblem(file string, data []byte, err error, c *problemList) {
	at := Position{File: file}
	what, hint := err.Error(), "check indentation, quotes and brackets here and in the line above"
	var le *yaml.LoadError
	if errors.As(err, &le) {
		at.Line, at.Column, what = le.Mark.Line, le.Mark.Column, le.Message
		if le.ContextMark.Line > 0 && le.ContextMark.Line < at.Line {
			hint = "check indentation, quotes and brackets from line " + strconv.Itoa(le.ContextMark.Line) + " on"
		}
	}
	line := ""
	if lines := strings.Split(string(data), "\n"); at.Line > 0 && at.Line <= len(lines) {
		line = lines[at.Line-1]
	}
	switch {
	case strings.HasPrefix(strings.TrimLeft(line, " "), "\t"):
		what, hint = "the line is indented by a tab", "indent by spaces"
	case strings.Contains(what, "mapping values are not allowed"):
		what, hint = "a second \": \" in one value", "put the value in quotes, or begin a new line for the next key"
	case strings.Contains(what, "did not find expected key"):
		what = "a key is expected here"
	}
	c.add(at, "", hint, "not valid YAML: %s", what)
}

func convert(file string, y *yaml.Node, key string, c *problemList) *node {
	n := &node{at: Position{file, y.Line, y.Column}}
	if y.Anchor != "" {
		c.add(n.at, key, "write the value out where it is needed", "anchors (&%s) are not taken", y.Anchor)
	}
	if y.Style&yaml.TaggedStyle != 0 {
		c.add(n.at, key, "remove the tag; quotes make a text", "tags (%s) are not taken", y.Tag)
	}
	switch y.Kind {
	case yaml.AliasNode:
		c.add(n.at, key, "write the value out", "aliases (*%s) are not taken", y.Value)
		return nil
	case yaml.MappingNode:
		n.kind = mapping
		seen := map[string]Position{}
		for i := 0; i+1 < len(y.Content); i += 2 {
			k, v := y.Content[i], y.Content[i+1]
			at := Position{file, k.Line, k.Column}
			if k.Kind != yaml.ScalarNode {
				c.add(at, key, "write a plain word before the colon", "a key must be a single word")
				continue
			}
			inner := joinKey(key, k.Value)
			if k.Value == "<<" {
				c.add(at, inner, "write the keys out", "merge keys are not taken")
				continue
			}
			if first, dup := seen[k.Value]; dup {
				c.add(at, inner, "keep one of the two", "the key is given twice, first in line %d", first.Line)
				continue
			}
			seen[k.Value] = at
			if val := convert(file, v, inner, c); val != nil {
				n.keys = append(n.keys, &node{at: at, text: k.Value})
				n.values = append(n.values, val)
			}
		}
	case yaml.SequenceNode:
		n.kind = sequence
		for _, v := range y.Content {
			if val := convert(file, v, key, c); val != nil {
				n.values = append(n.values, val)
			}
		}
	default:
		n.text = y.Value
		n.quoted = y.Style&(yaml.DoubleQuotedStyle|yaml.SingleQuotedStyle|yaml.LiteralStyle|yaml.FoldedStyle) != 0
	}
	return n
}

func joinKey(outer, key string) string {
	if outer == "" {
		return key
	}
	return outer + "." + key
}
