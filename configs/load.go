package configs

import (
	"fmt"
	"os"
	"path/filepath"
	"strings"
	_ "time/tzdata" // an edge box may have no zone files
)

// Load reads the configuration, the loop list and the secrets it names, fills in
// the defaults and checks all of it. env gives environment variables (os.Getenv);
// only CREDENTIALS_DIRECTORY is asked for. The error is a Problems unless the
// configuration itself cannot be read.
func Load(path string, env func(string) string) (*Config, error) {
	return load(path, env, true)
}

// LoadWithoutSecrets reads as Load does, but opens none of the files that hold
// secrets or certificates: for replay and for checking on another machine.
func LoadWithoutSecrets(path string, env func(string) string) (*Config, error) {
	return load(path, env, false)
}

func load(path string, env func(string) string, files bool) (*Config, error) {
	data, err := os.ReadFile(path)
	if err != nil {
		return nil, fmt.Errorf("cannot read the configuration: %w", err)
	}
	c, d := decode(path, data)
	if c == nil {
		return nil, d.err()
	}
	d.resolvePaths(settings(c), "", filepath.Dir(path), env, files)
	entries := append(d.readList(c), d.entries...)
	c.Loops = loopsOf(entries)
	checkLoopNames(entries, &d.problemList)
	d.checkTags(c, entries)
	d.checkSources(c)
	d.checkSenders(c)
	d.checkRoutes(c)
	d.checkPage(c)
	d.checkKeep(c)
	if err := d.err(); err != nil {
		return nil, err
	}
	c.Warnings = warnings(c)
	return c, nil
}

// decode reads YAML into a configuration without touching any other file.
func decode(path string, data []byte) (*Config, *decoder) {
	d := &decoder{file: path, given: map[string]Position{}}
	root := parseYAML(path, withoutBOM(data), &d.problemList)
	if root == nil {
		return nil, d
	}
	c := &Config{File: path, given: d.given}
	d.group(root, settings(c), "")
	for i := range c.Sources {
		if o := c.Sources[i].OPCUA; o != nil && o.Mode == "" {
			o.Mode = "SignAndEncrypt"
			if o.Security == "None" {
				o.Mode = "None"
			}
		}
	}
	return c, d
}

// walkLoops reads the entries of loops: columns of the loop list as keys.
func walkLoops(d *decoder, n *node, key string) {
	if n.empty() {
		return
	}
	if n.kind != sequence {
		d.add(n.at, key, "write a list: each loop begins with - loop: NAME", "%s where a list is expected", n.what())
		return
	}
	for i, item := range n.values {
		at := fmt.Sprintf("%s[%d]", key, i+1)
		if item.kind != mapping {
			d.add(item.at, at, "begin with loop: NAME", "%s where the columns of a loop are expected", item.what())
			continue
		}
		cells := map[string]cell{}
		for j, k := range item.keys {
			v := item.values[j]
			switch _, known := columnIndex[k.text]; {
			case !known:
				d.add(k.at, joinKey(at, k.text), unknownColumn(k.text), "unknown key")
			case v.kind != scalar:
				d.add(v.at, joinKey(at, k.text), "write one value", "%s where a single value is expected", v.what())
			case v.empty():
				d.add(k.at, joinKey(at, k.text), "write a value or remove the key", "the key has no value")
			case strings.TrimSpace(v.text) != "":
				cells[k.text] = cell{strings.TrimSpace(v.text), v.at}
			}
		}
		d.entries = append(d.entries, readLoop(cells, item.at, &d.problemList))
	}
}

// readList reads the loop list that the configuration names.
func (d *decoder) readList(c *Config) []*entry {
	if c.LoopList == "" {
		return nil
	}
	data, err := os.ReadFile(c.LoopList)
	if err != nil {
		d.add(d.place("loop_list"), "loop_list", "relative paths count from the folder of the configuration", "cannot read it: %v", err)
		return nil
	}
	return readLoopCSV(c.LoopList, data, &d.problemList)
}

// place is where a key stands, or the nearest key above it that is given.
func (d *decoder) place(key string) Position {
	for key != "" {
		if p, ok := d.given[key]; ok {
			return p
		}
		i := strings.LastIndex(key, ".")
		key = key[:max(i, 0)]
	}
	return Position{File: d.file}
}

// visit calls do for every single value below g, lists and optional groups as
// far as they are there.
func visit(g group, path string, do func(key string, f *field)) {
	for i := range g {
		f := &g[i]
		key := joinKey(path, f.key)
		switch {
		case f.value != nil:
			do(key, f)
		case f.open != nil && (f.present == nil || f.present()):
			visit(f.open(), key, do)
		case f.list != nil:
			for j := range f.list.len() {
				visit(f.list.item(j), fmt.Sprintf("%s[%d]", key, j+1), do)
			}
		}
	}
}

const credentials = "$CREDENTIALS_DIRECTORY/"

// resolvePaths makes paths absolute and reads the secrets.
func (d *decoder) resolvePaths(g group, path, dir string, env func(string) string, files bool) {
	visit(g, path, func(key string, f *field) {
		file := f.value.text()
		if f.path == noPath || file == "" || file == "-" {
			return
		}
		if rest, ok := strings.CutPrefix(file, credentials); ok {
			folder := env("CREDENTIALS_DIRECTORY")
			if folder == "" {
				if files {
					d.add(d.place(key), key, "run it as a systemd unit with LoadCredential=, or name a file", "CREDENTIALS_DIRECTORY is not set")
				}
				return
			}
			file = filepath.Join(folder, rest)
		} else if strings.Contains(file, "${") || strings.HasPrefix(file, "$") {
			d.add(d.place(key), key, "write the path out; only "+credentials+" is known", "variables are not expanded")
			return
		}
		if !filepath.IsAbs(file) {
			file = filepath.Join(dir, file)
		}
		if abs, err := filepath.Abs(file); err == nil {
			file = abs
		}
		if m := f.value.parse(file); m != nil {
			return // told at decoding
		}
		if files && f.path != plainPath {
			d.readFile(key, file, f)
		}
	})
}

// maxSecret is far beyond any password or key.
const maxSecret = 64 << 10

func (d *decoder) readFile(key, file string, f *field) {
	info, err := os.Stat(file)
	if err != nil {
		d.add(d.place(key), key, "relative paths count from the folder of the configuration", "cannot read it: %v", err)
		return
	}
	if info.IsDir() {
		d.add(d.place(key), key, "name a file", "%s is a folder", file)
		return
	}
	if f.path == secretPath && info.Mode().Perm()&0o007 != 0 {
		d.add(d.place(key), key, "chmod 0640 "+file+" and give it to the group midwatch", "everybody on this machine can read the secret %s", file)
	}
	if info.Size() > maxSecret && f.secret != nil {
		d.add(d.place(key), key, "name the file that holds the secret alone", "%s is too large for a secret", file)
		return
	}
	content, err := os.ReadFile(file)
	if err != nil {
		d.add(d.place(key), key, "give the user midwatch the right to read it", "cannot read it: %v", err)
		return
	}
	if f.secret == nil {
		return
	}
	content = []byte(strings.TrimSuffix(strings.TrimSuffix(string(content), "\n"), "\r"))
	if len(content) == 0 {
		d.add(d.place(key), key, "write the secret into it, on one line", "the file %s is empty", file)
		return
	}
	f.secret(content)
}
