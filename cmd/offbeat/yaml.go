package main

import (
	"errors"
	"fmt"
	"slices"
	"strings"
	"unicode/utf8"

	"github.com/goccy/go-yaml"
	"github.com/goccy/go-yaml/ast"
	"github.com/goccy/go-yaml/parser"
	"github.com/goccy/go-yaml/token"
)

// The configuration is read as a tree and taken apart key by key, so that every
// complaint can say on which line it is and what is allowed there.

// fault is one complaint, with its place.
type fault struct {
	line, column int
	msg          string
}

func (f *fault) Error() string { return fmt.Sprintf("%d:%d: %s", f.line, f.column, f.msg) }

func faultAt(n ast.Node, format string, args ...any) *fault {
	return faultAtToken(n.GetToken(), fmt.Sprintf(format, args...))
}

func faultAtToken(t *token.Token, msg string) *fault {
	f := &fault{1, 1, oneLine(msg)}
	if t != nil && t.Position != nil {
		f.line, f.column = t.Position.Line, t.Position.Column
	}
	return f
}

// oneLine keeps a message that quotes the user's text on one line.
func oneLine(s string) string {
	return strings.Join(strings.FieldsFunc(s, func(r rune) bool { return r < ' ' }), " ")
}

// brief is oneLine for what a library says, which may quote the whole file.
func brief(s string) string {
	const most = 200
	if s = oneLine(s); len(s) > most {
		s = strings.ToValidUTF8(s[:most], "") + "…"
	}
	return s
}

// parseYAML reads the one document of a file. It returns nil for an empty one.
func parseYAML(text []byte) (ast.Node, error) {
	if !utf8.Valid(text) {
		return nil, &fault{1, 1, "not text: a configuration is YAML in UTF-8"}
	}
	if f := tooNested(text); f != nil {
		return nil, f
	}
	file, err := parser.ParseBytes(text, 0)
	if err != nil {
		var syntax *yaml.SyntaxError
		if errors.As(err, &syntax) {
			return nil, faultAtToken(syntax.Token, "not valid YAML: "+brief(syntax.Message))
		}
		return nil, &fault{1, 1, "not valid YAML: " + brief(err.Error())}
	}
	var root ast.Node
	for _, d := range file.Docs {
		if d.Body == nil {
			continue
		}
		if root != nil {
			return nil, faultAt(d.Body, "a second document: the configuration is one document")
		}
		root = d.Body
	}
	return root, nil
}

// tooNested refuses text nested deeper than any configuration is, before the
// parser, which recurses, sees it. It counts brackets and dashes, in comments
// and strings too: a limit need not be exact.
func tooNested(text []byte) *fault {
	const most = 64
	for n, line := range strings.Split(string(text), "\n") {
		indent := len(line) - len(strings.TrimLeft(line, " -?:&!|>\t"))
		if indent > 4*most || strings.Count(line, "[") > most || strings.Count(line, "{") > most || strings.Count(line, ": ") > most {
			return &fault{n + 1, 1, "nested too deeply for a configuration"}
		}
	}
	if strings.Count(string(text), "[")-strings.Count(string(text), "]") > most || strings.Count(string(text), "{")-strings.Count(string(text), "}") > most {
		return &fault{1, 1, "nested too deeply for a configuration"}
	}
	return nil
}

// plain returns n unless it is an anchor, an alias or a tag. Those are not
// needed here, and an alias of aliases can grow without bound.
func plain(n ast.Node) (ast.Node, error) {
	switch n.(type) {
	case *ast.AnchorNode, *ast.AliasNode, *ast.TagNode, *ast.MergeKeyNode:
		return nil, faultAt(n, "anchors, aliases and tags are not used in this file: write the value out")
	}
	return n, nil
}

// mapping is the entries of a YAML mapping by key.
type mapping struct {
	at    ast.Node
	value map[string]ast.Node
}

// readMapping checks that n is a mapping with no key but the allowed ones (none
// listed: any), and none twice.
func readMapping(n ast.Node, what string, allowed ...string) (*mapping, error) {
	n, err := plain(n)
	if err != nil {
		return nil, err
	}
	var pairs []*ast.MappingValueNode
	switch m := n.(type) {
	case *ast.MappingNode:
		pairs = m.Values
	case *ast.MappingValueNode:
		pairs = []*ast.MappingValueNode{m}
	default:
		hint := ""
		if len(allowed) > 0 {
			hint = ": " + strings.Join(allowed, ", ")
		}
		if _, null := n.(*ast.NullNode); null {
			return nil, faultAt(n, "%s is empty: it takes keys with values%s", what, hint)
		}
		return nil, faultAt(n, "%s must be keys with values%s", what, hint)
	}
	m := &mapping{n, map[string]ast.Node{}}
	for i, p := range pairs {
		if _, ok := p.Key.(ast.ScalarNode); !ok || p.Key.IsMergeKey() {
			return nil, faultAt(p.Key, "anchors, aliases and tags are not used in this file: write the value out")
		}
		key := p.Key.GetToken().Value
		if i == 0 {
			m.at = p.Key
		}
		if len(allowed) > 0 && !slices.Contains(allowed, key) {
			return nil, faultAt(p.Key, "unknown key %s in %s: allowed are %s", quoted(key), what, strings.Join(allowed, ", "))
		}
		if _, twice := m.value[key]; twice {
			return nil, faultAt(p.Key, "key %s is given twice", quoted(key))
		}
		v, err := plain(p.Value)
		if err != nil {
			return nil, err
		}
		if _, null := v.(*ast.NullNode); null {
			return nil, faultAt(p.Key, "%s has no value: give one or remove the key", key)
		}
		m.value[key] = v
	}
	return m, nil
}

// has reports whether the key is given.
func (m *mapping) has(key string) bool { return m.value[key] != nil }

// where returns the node of a key's value, or of the mapping if it is absent.
func (m *mapping) where(key string) ast.Node {
	if v := m.value[key]; v != nil {
		return v
	}
	return m.at
}

// text returns a scalar as it is written.
func text(n ast.Node, what string) (string, error) {
	n, err := plain(n)
	if err != nil {
		return "", err
	}
	switch n.(type) {
	case *ast.StringNode, *ast.IntegerNode, *ast.FloatNode, *ast.BoolNode, *ast.InfinityNode, *ast.NanNode:
		return n.GetToken().Value, nil
	}
	return "", faultAt(n, "%s must be one value, on one line", what)
}

// list returns the items of a sequence.
func list(n ast.Node, what string) ([]ast.Node, error) {
	n, err := plain(n)
	if err != nil {
		return nil, err
	}
	s, ok := n.(*ast.SequenceNode)
	if !ok {
		return nil, faultAt(n, "%s must be a list", what)
	}
	for _, v := range s.Values {
		if _, err := plain(v); err != nil {
			return nil, err
		}
	}
	return s.Values, nil
}

// scalar reads the value of a key through parse into dst; an absent key leaves
// dst alone.
func scalar[T any](m *mapping, key string, dst *T, parse func(string) (T, error)) error {
	n := m.value[key]
	if n == nil {
		return nil
	}
	s, err := text(n, key)
	if err != nil {
		return err
	}
	v, err := parse(s)
	if err != nil {
		return faultAt(n, "%s: %s", key, err)
	}
	*dst = v
	return nil
}

// parseBool reads true or false.
func parseBool(s string) (bool, error) {
	switch s {
	case "true":
		return true, nil
	case "false":
		return false, nil
	}
	return false, fmt.Errorf("%s: must be true or false", quoted(s))
}

// parseWords reads any text on one line that is not empty.
func parseWords(s string) (string, error) {
	if strings.TrimSpace(s) == "" {
		return "", errors.New("is empty")
	}
	for _, r := range s {
		if r < ' ' || r == 0x7f {
			return "", fmt.Errorf("%s: must not hold control characters", quoted(s))
		}
	}
	return s, nil
}
