package daemon

import (
	"bufio"
	"encoding/json"
	"fmt"
	"io"

	"midwatch/detect"
)

// Memories are starting memories of loops, by name, and of the site detectors,
// as export writes them and replay reads them: JSON lines, the first of which
// says what the file is.
type Memories struct {
	Loops map[string][]byte
	Sites []byte
}

const memoriesForm = 1

type memoryLine struct {
	Memories int    `json:"memories,omitempty"` // form, in the first line only
	Engine   int    `json:"engine,omitempty"`
	Loop     string `json:"loop,omitempty"`
	Through  string `json:"through,omitempty"`
	Memory   []byte `json:"memory,omitempty"`
	Sites    []byte `json:"sites,omitempty"`
}

func (m *Memories) of(loop string) ([]byte, bool) {
	if m == nil {
		return nil, false
	}
	b, ok := m.Loops[loop]
	return b, ok
}

func (m *Memories) sites() []byte {
	if m == nil {
		return nil
	}
	return m.Sites
}

// Write writes the memories of the loops named, in that order.
func (m *Memories) Write(w io.Writer, loops []string) error {
	b := bufio.NewWriter(w)
	e := json.NewEncoder(b)
	if err := e.Encode(memoryLine{Memories: memoriesForm, Engine: detect.Engine, Sites: m.Sites}); err != nil {
		return err
	}
	for _, name := range loops {
		mem, ok := m.Loops[name]
		if !ok {
			continue
		}
		t, err := detect.MemoryThrough(mem)
		if err != nil {
			return fmt.Errorf("memory of loop %s: %w", name, err)
		}
		if err := e.Encode(memoryLine{Loop: name, Through: detect.FormatTime(t), Memory: mem}); err != nil {
			return err
		}
	}
	return b.Flush()
}

// ReadMemories reads what Write wrote; name is that of the file, for messages.
func ReadMemories(r io.Reader, name string) (*Memories, error) {
	m := &Memories{Loops: map[string][]byte{}}
	s := bufio.NewScanner(r)
	s.Buffer(nil, 4<<20)
	for line := 1; s.Scan(); line++ {
		var l memoryLine
		if err := json.Unmarshal(s.Bytes(), &l); err != nil {
			return nil, fmt.Errorf("%s:%d: not a line of memories: %w; hint: export writes such files with --memory", name, line, err)
		}
		switch {
		case line == 1 && l.Memories != memoriesForm:
			return nil, fmt.Errorf("%s:1: not a file of memories of form %d; hint: export writes such files with --memory", name, memoriesForm)
		case line == 1:
			m.Sites = l.Sites
		case l.Loop == "":
			return nil, fmt.Errorf("%s:%d: a memory without a loop; hint: the file may be damaged, export it again", name, line)
		default:
			m.Loops[l.Loop] = l.Memory
		}
	}
	if err := s.Err(); err != nil {
		return nil, fmt.Errorf("%s: reading: %w", name, err)
	}
	return m, nil
}
