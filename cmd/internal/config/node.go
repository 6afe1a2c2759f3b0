package config

import (
	"errors"
	"fmt"
	"slices"
	"strings"
	"unicode"
	"unicode/utf8"

	"github.com/goccy/go-yaml"
	"github.com/goccy/go-yaml/ast"
	"github.com/goccy/go-yaml/parser"
)

// maxText is the largest file that is read.
const maxText = 1 << 20

// document is one YAML file with the faults found in it.
type document struct {
	name     string
	lines    []string
	faults   []Fault
	warnings []Fault // what is odd and yet usable
}

// node is a value in a document. A key that is not there gives a node without
// value, so that readers need not ask first.
type node struct {
	doc  *document
	ast  ast.Node // nil when the value is not there
	path string
	line int // where faults are shown
	col  int
}

// open parses a file; the node has no value when it cannot be parsed.
func open(f File) node {
	// Windows editors end lines with \r\n, which the library counts twice behind a
	// comment, and begin a file with a mark.
	text := strings.ReplaceAll(strings.TrimPrefix(f.Text, "\ufeff"), "\r\n", "\n")
	doc := &document{name: f.Name, lines: strings.Split(text, "\n")}
	top := node{doc: doc, line: 1, col: 1}
	if at, hint := unreadable(text); hint != "" {
		top.line = 1 + strings.Count(text[:at], "\n")
		top.fault("the file is no plain text", hint)
		return top
	}
	body, err := parse(text)
	var syntax *yaml.SyntaxError
	switch {
	case errors.As(err, &syntax) && syntax.GetToken() != nil:
		position := syntax.GetToken().Position
		top.line, top.col = position.Line, max(1, position.Column)
		top.fault(oneLine(syntax.GetMessage()), "look at this line and the one above: indent with spaces, quote texts that hold \": \" or begin with a sign such as % or *")
	case err != nil:
		top.fault(oneLine(err.Error()), "write it as YAML 1.2")
	case body == nil:
		top.fault("the file is empty", "begin from an example rig file")
	default:
		top.ast = body
	}
	return top
}

// parse gives the body of a text of one YAML document. The library is known to
// have panicked on odd input; that must not take the daemon down on a reload.
func parse(text string) (body ast.Node, err error) {
	defer func() {
		if r := recover(); r != nil {
			body, err = nil, fmt.Errorf("the YAML reader gave up: %v", r)
		}
	}()
	file, err := parser.ParseBytes([]byte(text), 0, parser.AllowDuplicateMapKey())
	if err != nil {
		return nil, err
	}
	for _, doc := range file.Docs {
		switch {
		case doc.Body == nil:
		case body != nil:
			return nil, errors.New("more than one document in the file")
		default:
			body = doc.Body
		}
	}
	return body, nil
}

// unreadable finds what no text editor would show.
func unreadable(text string) (at int, hint string) {
	if len(text) > maxText {
		return 0, "a rig or rule file has at most 1 MiB"
	}
	for i, r := range text {
		if r == utf8.RuneError || unicode.IsControl(r) && r != '\n' && r != '\t' {
			return i, "save it as UTF-8 without control characters, with the line ends of Unix or Windows"
		}
	}
	return 0, ""
}

// oneLine makes one line of a text, with a tab still to be seen.
func oneLine(s string) string {
	return strings.Join(strings.Fields(strings.ReplaceAll(s, "\t", " TAB ")), " ")
}

// is tells whether there is a value.
func (n node) is() bool { return n.ast != nil }

// fault notes a fault at the node.
func (n node) fault(message, hint string) { n.faultAt(n.line, n.col, message, hint) }

func (n node) faultAt(line, col int, message, hint string) {
	n.doc.faults = append(n.doc.faults, Fault{
		File: n.doc.name, Line: line, Column: col, Path: n.path, Message: message, Hint: hint,
	})
}

// warn notes what is odd at the node and yet usable.
func (n node) warn(message, hint string) {
	n.doc.warnings = append(n.doc.warnings, Fault{
		File: n.doc.name, Line: n.line, Column: n.col, Path: n.path, Message: message, Hint: hint,
	})
}

// under gives the node of a value inside n.
func (n node) under(a ast.Node, path string) node {
	child := node{doc: n.doc, path: path, line: n.line, col: n.col}
	switch v := a.(type) {
	case nil:
		return child
	case *ast.AnchorNode, *ast.AliasNode, *ast.TagNode, *ast.MergeKeyNode:
		child.line, child.col = position(a)
		child.fault("anchors, aliases and tags are not read", "write the value out; a channel can take over another with like: ID")
		return child
	case *ast.NullNode:
		child.line, child.col = position(a)
		child.fault("the value is missing", "write a value, or leave the key away")
		return child
	case *ast.MappingNode:
		if !v.IsFlowStyle && len(v.Values) > 0 {
			child.line, child.col = position(v.Values[0].Key)
			break
		}
		child.line, child.col = position(a)
	case *ast.MappingValueNode:
		child.line, child.col = position(v.Key)
	default:
		child.line, child.col = position(a)
	}
	child.ast = a
	return child
}

func position(a ast.Node) (line, col int) {
	if t := a.GetToken(); t != nil && t.Position != nil {
		return max(1, t.Position.Line), max(1, t.Position.Column)
	}
	return 1, 1
}

// fields is a mapping from which keys are taken one by one; what nobody took is
// an unknown key.
type fields struct {
	node
	entries []entry
	taken   []string
	base    *fields // where a key that is not here is looked up, nil = nowhere
	own     []string
}

type entry struct {
	key   string
	at    node // the key
	value ast.Node
}

// fields opens a mapping. Without a value, or with one of another kind, it has
// no entries.
func (n node) fields() *fields {
	f := &fields{node: n}
	var values []*ast.MappingValueNode
	switch a := n.ast.(type) {
	case nil:
		return f
	case *ast.MappingNode:
		values = a.Values
	case *ast.MappingValueNode:
		values = []*ast.MappingValueNode{a}
	default:
		n.fault("a group of keys is wanted here", "write key: value, each on its own line or in { }")
		f.ast = nil
		return f
	}
	for _, v := range values {
		at := node{doc: n.doc, path: n.path}
		at.line, at.col = position(v.Key)
		key, ok := v.Key.(ast.ScalarNode)
		if _, merge := v.Key.(*ast.MergeKeyNode); !ok || merge || v.Key.GetToken() == nil {
			at.fault("a key must be a plain word", "anchors and merge keys are not read; a channel can take over another with like: ID")
			continue
		}
		name := key.GetToken().Value
		if slices.ContainsFunc(f.entries, func(e entry) bool { return e.key == name }) {
			at.fault(fmt.Sprintf("key %q is there twice", name), "keep one of them")
			continue
		}
		f.entries = append(f.entries, entry{name, at, v.Value})
	}
	return f
}

// get takes a key that may be absent.
func (f *fields) get(key string) node {
	f.taken = append(f.taken, key)
	for _, e := range f.entries {
		if e.key == key {
			return f.at(e)
		}
	}
	if f.base != nil && !slices.Contains(f.own, key) {
		return f.base.get(key)
	}
	return node{doc: f.doc, path: join(f.path, key), line: f.line, col: f.col}
}

// at gives the value of an entry; a value that cannot be read keeps the place of
// its key.
func (f *fields) at(e entry) node {
	from := f.node
	from.line, from.col = e.at.line, e.at.col
	return from.under(e.value, join(f.path, e.key))
}

// has tells whether a key is there.
func (f *fields) has(key string) bool {
	return slices.ContainsFunc(f.entries, func(e entry) bool { return e.key == key }) ||
		f.base != nil && !slices.Contains(f.own, key) && f.base.has(key)
}

// need takes a key that must be there.
func (f *fields) need(key, hint string) node {
	if f.is() && !f.has(key) {
		f.taken = append(f.taken, key)
		f.fault(fmt.Sprintf("key %q is missing", key), hint)
		return node{doc: f.doc, path: join(f.path, key), line: f.line, col: f.col}
	}
	return f.get(key)
}

// done notes the keys that nobody took.
func (f *fields) done() {
	for _, e := range f.entries {
		if !slices.Contains(f.taken, e.key) {
			e.at.fault(fmt.Sprintf("key %q is not known here", e.key), nearest(e.key, f.taken))
		}
	}
}

// items opens a list; without a value it is empty.
func (n node) items() []node {
	if !n.is() {
		return nil
	}
	list, ok := n.ast.(*ast.SequenceNode)
	if !ok {
		n.fault("a list is wanted here", "write [a, b] or one - per line")
		return nil
	}
	out := make([]node, 0, len(list.Values))
	for i, v := range list.Values {
		out = append(out, n.under(v, fmt.Sprintf("%s[%d]", n.path, i)))
	}
	return out
}

// empty tells whether there is a list without items.
func (n node) empty() bool {
	list, ok := n.ast.(*ast.SequenceNode)
	return ok && len(list.Values) == 0
}

// text gives a scalar as it is written, so that 010 stays 010 and 1.10 stays
// 1.10; "" without a value.
func (n node) text() string {
	switch a := n.ast.(type) {
	case nil:
		return ""
	case *ast.LiteralNode:
		return a.Value.Value
	case *ast.StringNode:
		return a.Value
	case ast.ScalarNode:
		return a.GetToken().Value
	}
	n.fault("a single value is wanted here", "write one word, number or text")
	return ""
}

// scalar tells whether the value is a single one.
func (n node) scalar() bool {
	_, ok := n.ast.(ast.ScalarNode)
	return ok
}

// mapping tells whether the value is a group of keys.
func (n node) mapping() bool {
	switch n.ast.(type) {
	case *ast.MappingNode, *ast.MappingValueNode:
		return true
	}
	return false
}

// inside gives the place of the letter at offset (in bytes) of the text of n.
func (n node) inside(offset int) (line, col int) {
	text, ok := n.ast.(ast.ScalarNode)
	if !ok {
		return n.line, n.col
	}
	if literal, ok := n.ast.(*ast.LiteralNode); ok {
		value := literal.Value.Value
		before := value[:min(offset, len(value))]
		down := strings.Count(before, "\n")
		line = n.line + 1 + down
		if strings.HasPrefix(literal.Start.Value, "|") && line <= len(n.doc.lines) {
			source := n.doc.lines[line-1]
			indent := len(source) - len(strings.TrimLeft(source, " "))
			return line, 1 + indent + utf8.RuneCountInString(before[strings.LastIndexByte(before, '\n')+1:])
		}
		return n.line + 1, 1
	}
	value := n.text()
	col = n.col + utf8.RuneCountInString(value[:min(offset, len(value))])
	if origin := strings.TrimSpace(text.GetToken().Origin); strings.HasPrefix(origin, `"`) || strings.HasPrefix(origin, "'") {
		col++
	}
	return n.line, col
}

func join(path, key string) string {
	if path == "" {
		return key
	}
	return path + "." + key
}
