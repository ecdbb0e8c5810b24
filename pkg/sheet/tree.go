package sheet

import (
	"encoding/json"
	"fmt"
	"strconv"
	"strings"
)

type kind int

const (
	kindNull kind = iota
	kindBool
	kindNumber
	kindText
	kindList
	kindMapping
)

// String returns the word for a kind in messages.
func (k kind) String() string {
	return [...]string{"nothing", "true or false", "number", "string", "list", "mapping"}[k]
}

// node is one value of a file.
type node struct {
	kind   kind
	line   int // of its first character, counted from 1
	column int // in characters
	text   string
	number json.Number // of kindNumber: finite, at most 17 digits
	truth  bool
	items  []*node // of kindList
	keys   []key   // of kindMapping, in file order, no name twice
	size   int     // values in it, itself included, aliases written out
	bad    bool    // a fault lies on the value itself
}

// key is one entry of a mapping.
type key struct {
	name         string
	line, column int
	value        *node
}

func (n *node) get(name string) (*key, bool) {
	for i := range n.keys {
		if n.keys[i].name == name {
			return &n.keys[i], true
		}
	}
	return nil, false
}

// step is one part of a path: a key or an index.
type step struct {
	name  string
	index int // -1 for a key
}

// find walks a path as text. It returns the value there and its key, or the
// last value on the way and ok false.
func (n *node) find(path string) (at *node, k *key, ok bool) {
	return n.walk(splitPath(path))
}

func (n *node) walk(steps []step) (at *node, k *key, ok bool) {
	for _, s := range steps {
		if s.index < 0 {
			entry, found := n.get(s.name)
			if !found {
				return n, k, false
			}
			k, n = entry, entry.value
			continue
		}
		if s.index >= len(n.items) {
			return n, k, false
		}
		k, n = nil, n.items[s.index]
	}
	return n, k, true
}

// splitPath cuts a path such as a[1].b into steps.
func splitPath(path string) []step {
	var steps []step
	for path != "" {
		if path[0] == '[' {
			if end := strings.IndexByte(path, ']'); end > 0 {
				if i, err := strconv.Atoi(path[1:end]); err == nil && i >= 0 {
					steps = append(steps, step{index: i})
					path = strings.TrimPrefix(path[end+1:], ".")
					continue
				}
			}
		}
		end := len(path)
		if i := strings.IndexAny(path[1:], ".["); i >= 0 {
			end = i + 1
		}
		steps = append(steps, step{name: path[:end], index: -1})
		path = strings.TrimPrefix(path[end:], ".")
	}
	return steps
}

// join writes steps as a path. A key that is no plain word is quoted.
func join(steps []step) string {
	var b strings.Builder
	for _, s := range steps {
		if s.index >= 0 {
			fmt.Fprintf(&b, "[%d]", s.index)
			continue
		}
		if b.Len() > 0 {
			b.WriteByte('.')
		}
		b.WriteString(shortKey(s.name))
	}
	return b.String()
}

// shortKey returns a key as it is shown in a path.
func shortKey(name string) string {
	if len(name) > 60 {
		name = name[:60] + "…"
	}
	for _, r := range name {
		if !(r == '_' || r == '-' || r >= '0' && r <= '9' || r >= 'a' && r <= 'z' || r >= 'A' && r <= 'Z') {
			return strconv.Quote(name)
		}
	}
	if name == "" {
		return `""`
	}
	return name
}

// value returns the node as encoding/json has it, numbers as json.Number. With
// soundOnly, entries that a fault lies on are left out of mappings and null in
// lists.
func (n *node) value(soundOnly bool) any {
	if soundOnly && n.bad {
		return nil
	}
	switch n.kind {
	case kindBool:
		return n.truth
	case kindNumber:
		return n.number
	case kindText:
		return n.text
	case kindList:
		list := make([]any, len(n.items))
		for i, item := range n.items {
			list[i] = item.value(soundOnly)
		}
		return list
	case kindMapping:
		m := make(map[string]any, len(n.keys))
		for _, k := range n.keys {
			if !(soundOnly && k.value.bad) {
				m[k.name] = k.value.value(soundOnly)
			}
		}
		return m
	}
	return nil
}
