package sheet

import (
	"encoding/json"
	"errors"
	"fmt"
	"math"
	"regexp"
	"strconv"
	"strings"

	"github.com/goccy/go-yaml"
	"github.com/goccy/go-yaml/ast"
	"github.com/goccy/go-yaml/lexer"
	"github.com/goccy/go-yaml/parser"
	"github.com/goccy/go-yaml/token"
)

// build turns the text into the tree of its values, or adds a fault.
func (d *Document) build() {
	file, ok := d.parse()
	if !ok {
		return
	}
	var body ast.Node
	for _, doc := range file.Docs {
		if directive, is := doc.Body.(*ast.DirectiveNode); is {
			p := directive.Start.Position
			d.add(p.Line, p.Column, "", "a directive, none is read")
			return
		}
		if doc.Body == nil {
			continue
		}
		if body != nil {
			line, column := 1, 1
			if doc.Start != nil {
				line, column = doc.Start.Position.Line, doc.Start.Position.Column
			}
			d.add(line, column, "", "a second document in the file, want one")
			return
		}
		body = doc.Body
	}
	if body == nil {
		d.add(1, 1, "", "the file is empty")
		return
	}
	b := builder{doc: d, anchors: map[string]*node{}}
	root := b.node(body, nil)
	if b.full {
		return
	}
	if root != nil && root.kind != kindMapping {
		d.add(root.line, root.column, "", "got %s, want key: value lines", root.kind)
		return
	}
	d.root = root
}

// parse runs the YAML parser. Its own faults come out as one fault: YAML that
// is broken at one place cannot be read after it.
func (d *Document) parse() (file *ast.File, ok bool) {
	// A parser that stumbles over hostile text must not take the program down.
	defer func() {
		if r := recover(); r != nil {
			d.add(1, 1, "", "not readable as YAML: %v", r)
			file, ok = nil, false
		}
	}()
	tokens := lexer.Tokenize(d.text)
	if t := tooDeep(tokens); t != nil {
		d.add(t.Position.Line, t.Position.Column, "", "more than %d levels of lists and mappings", MaxDepth)
		return nil, false
	}
	file, err := parser.Parse(tokens, 0, parser.AllowDuplicateMapKey())
	if err == nil {
		return file, true
	}
	line, column, message := 1, 1, err.Error()
	var placed yaml.Error
	if errors.As(err, &placed) {
		message = placed.GetMessage()
		if t := placed.GetToken(); t != nil && t.Position != nil {
			line, column = t.Position.Line, t.Position.Column
		}
	}
	if l, c, found := tabIndent(d.text, line); found {
		line, column, message = l, c, "a tab in the indentation, want spaces"
	}
	d.add(line, column, "", "not readable as YAML: %s", message)
	return nil, false
}

// tooDeep returns the first token that lies too many levels deep for the
// parser to be trusted with, or nil.
func tooDeep(tokens token.Tokens) *token.Token {
	const most = 4 * MaxDepth // the tree is held to MaxDepth itself
	flow, run := 0, 0
	for i, t := range tokens {
		switch t.Type {
		case token.SequenceStartType, token.MappingStartType:
			flow++
		case token.SequenceEndType, token.MappingEndType:
			flow = max(flow-1, 0)
		}
		switch t.Type {
		case token.SequenceEntryType, token.MappingKeyType, token.TagType, token.AnchorType,
			token.SequenceStartType, token.MappingStartType, token.MappingValueType:
			run++
		case token.CommentType:
		default:
			if i == 0 || tokens[i-1].Type != token.AnchorType { // the name of an anchor
				run = 0
			}
		}
		if flow > most || run > most {
			return t
		}
	}
	return nil
}

// tabIndent looks for a tab that opens the given line or the one before it.
func tabIndent(text string, line int) (l, column int, found bool) {
	lines := strings.SplitN(text, "\n", line+1)
	for _, l := range []int{line, line - 1} {
		if l < 1 || l > len(lines) {
			continue
		}
		s := lines[l-1]
		indent := s[:len(s)-len(strings.TrimLeft(s, " \t"))]
		if i := strings.IndexByte(indent, '\t'); i >= 0 {
			return l, i + 1, true
		}
	}
	return 0, 0, false
}

// builder makes the tree of one file.
type builder struct {
	doc     *Document
	anchors map[string]*node // complete ones
	open    []string         // anchors being read
	full    bool             // a limit was passed: stop
}

func (b *builder) fault(at *node, path []step, format string, args ...any) *node {
	at.bad = true
	b.doc.add(at.line, at.column, join(path), format, args...)
	return at
}

// node returns the value of a syntax node; a value that cannot be read comes
// out marked bad.
func (b *builder) node(syntax ast.Node, path []step) *node {
	n := &node{line: 1, column: 1, size: 1}
	if syntax == nil {
		return n
	}
	t := syntax.GetToken()
	n.line, n.column = t.Position.Line, t.Position.Column
	if b.full {
		n.bad = true
		return n
	}
	if len(path) > MaxDepth {
		b.full = true
		return b.fault(n, path, "more than %d levels of lists and mappings", MaxDepth)
	}
	switch x := syntax.(type) {
	case *ast.MappingNode:
		b.mapping(n, x.Values, path)
		if x.Start != nil && x.IsFlowStyle {
			n.line, n.column = x.Start.Position.Line, x.Start.Position.Column
		}
	case *ast.MappingValueNode:
		b.mapping(n, []*ast.MappingValueNode{x}, path)
	case *ast.SequenceNode:
		n.kind = kindList
		for i, v := range x.Values {
			item := b.node(v, append(path[:len(path):len(path)], step{index: i}))
			n.items = append(n.items, item)
			n.size += item.size
		}
	case *ast.LiteralNode:
		n.kind, n.text = kindText, x.Value.Value
	case *ast.AnchorNode:
		return b.anchor(x, path)
	case *ast.AliasNode:
		return b.alias(n, x, path)
	case *ast.TagNode:
		return b.fault(n, path, "tag %s: tags are not read", show(t.Value))
	case *ast.MergeKeyNode, *ast.MappingKeyNode, *ast.DirectiveNode:
		return b.fault(n, path, "%s is not read here", show(t.Value))
	default:
		b.scalar(n, syntax, path)
	}
	if n.size > MaxMarks && !b.full {
		b.full = true
		return b.fault(n, path, "%d values with every alias written out, at most %d are read", n.size, MaxMarks)
	}
	return n
}

func (b *builder) mapping(n *node, entries []*ast.MappingValueNode, path []step) {
	n.kind = kindMapping
	seen := make(map[string]int, len(entries))
	for i, e := range entries {
		t := e.Key.GetToken()
		line, column := t.Position.Line, t.Position.Column
		if i == 0 {
			n.line, n.column = line, column
		}
		at := &node{line: line, column: column}
		name := t.Value
		switch x := e.Key.(type) {
		case *ast.StringNode:
			name = x.Value
		case *ast.MergeKeyNode:
			b.fault(at, path, "merge keys are not read: write the keys out")
			continue
		case *ast.IntegerNode, *ast.FloatNode, *ast.BoolNode, *ast.NullNode:
			// Keys are texts in JSON; 1 and true are taken as "1" and "true".
		default:
			b.fault(at, path, "a key that is not a text")
			continue
		}
		below := append(path[:len(path):len(path)], step{name: name, index: -1})
		if first, twice := seen[name]; twice {
			b.fault(at, below, "key given twice, first in line %d", first)
			continue
		}
		seen[name] = line
		v := b.node(e.Value, below)
		n.keys = append(n.keys, key{name: name, line: line, column: column, value: v})
		n.size += v.size
	}
}

func (b *builder) anchor(x *ast.AnchorNode, path []step) *node {
	name := x.Name.GetToken().Value
	b.open = append(b.open, name)
	n := b.node(x.Value, path)
	b.open = b.open[:len(b.open)-1]
	b.anchors[name] = n
	return n
}

func (b *builder) alias(n *node, x *ast.AliasNode, path []step) *node {
	name := ""
	if x.Value != nil {
		name = x.Value.GetToken().Value
	}
	for _, open := range b.open {
		if open == name {
			return b.fault(n, path, "alias *%s lies inside its own anchor", name)
		}
	}
	target, ok := b.anchors[name]
	if !ok {
		return b.fault(n, path, "alias *%s has no anchor before it", name)
	}
	if len(path)+target.depth() > MaxDepth {
		return b.fault(n, path, "more than %d levels of lists and mappings", MaxDepth)
	}
	copied := *target
	copied.line, copied.column = n.line, n.column
	return &copied
}

// The core schema of YAML 1.2, section 10.3.2.
var (
	wholeNumber  = regexp.MustCompile(`^[-+]?[0-9]+$`)
	leadingZero  = regexp.MustCompile(`^[-+]?0[0-9]+(\.[0-9]*)?$`)
	basedNumber  = regexp.MustCompile(`^(0o[0-7]+|0x[0-9a-fA-F]+)$`)
	floatNumber  = regexp.MustCompile(`^[-+]?(\.[0-9]+|[0-9]+(\.[0-9]*)?)([eE][-+]?[0-9]+)?$`)
	jsonFraction = regexp.MustCompile(`^-?[0-9]+\.[0-9]+$`)
	noNumber     = regexp.MustCompile(`^([-+]?\.(inf|Inf|INF)|\.(nan|NaN|NAN))$`)
	nothingWords = map[string]bool{"": true, "~": true, "null": true, "Null": true, "NULL": true}
	truthWords   = map[string]bool{"true": true, "True": true, "TRUE": true, "false": false, "False": false, "FALSE": false}
)

// scalar resolves a value that is neither list nor mapping.
func (b *builder) scalar(n *node, syntax ast.Node, path []step) {
	t := syntax.GetToken()
	n.kind, n.text = kindText, t.Value
	if s, ok := syntax.(*ast.StringNode); ok {
		n.text = s.Value
		if t.Type == token.SingleQuoteType || t.Type == token.DoubleQuoteType {
			return
		}
	}
	if _, null := syntax.(*ast.NullNode); null && t.Type == token.ImplicitNullType {
		n.kind, n.text = kindNull, ""
		return
	}
	plain := n.text
	truth, isTruth := truthWords[plain]
	switch {
	case nothingWords[plain]:
		n.kind = kindNull
	case isTruth:
		n.kind, n.truth = kindBool, truth
	case noNumber.MatchString(plain):
		b.fault(n, path, "%s is not a finite number", plain)
	case leadingZero.MatchString(plain):
		b.fault(n, path, "%s: a number with a leading zero (quote it if it is a text)", show(plain))
	case wholeNumber.MatchString(plain), basedNumber.MatchString(plain), floatNumber.MatchString(plain):
		n.kind = kindNumber
		n.number = number(plain)
		if n.number == "" {
			b.fault(n, path, "%s is not a finite number", show(plain))
		}
	}
}

// number returns plain in the form of JSON, empty if it is beyond a float64.
// Whole numbers keep their digits where 64 bits hold them, decimal fractions
// keep theirs; an exponent is written out or brought to the range of float64,
// since the validator counts with exact fractions.
func number(plain string) json.Number {
	if i, err := strconv.ParseInt(strings.TrimPrefix(plain, "+"), 10, 64); err == nil {
		return json.Number(strconv.FormatInt(i, 10))
	}
	if basedNumber.MatchString(plain) {
		i, err := strconv.ParseUint(plain, 0, 64)
		if err != nil {
			return ""
		}
		return json.Number(strconv.FormatUint(i, 10))
	}
	v, err := strconv.ParseFloat(plain, 64)
	if err != nil || math.IsInf(v, 0) || math.IsNaN(v) {
		return ""
	}
	if len(plain) <= 40 && jsonFraction.MatchString(strings.TrimPrefix(plain, "+")) && v != math.Trunc(v) {
		return json.Number(strings.TrimPrefix(plain, "+"))
	}
	if v == math.Trunc(v) && math.Abs(v) < 1<<53 {
		return json.Number(fmt.Sprintf("%d", int64(v)))
	}
	return json.Number(strconv.FormatFloat(v, 'g', -1, 64))
}

// depth returns the number of levels below n.
func (n *node) depth() int {
	deepest := 0
	for _, item := range n.items {
		deepest = max(deepest, 1+item.depth())
	}
	for _, k := range n.keys {
		deepest = max(deepest, 1+k.value.depth())
	}
	return deepest
}
