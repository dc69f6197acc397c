package config

import (
	"errors"
	"sort"
	"strings"

	"github.com/pelletier/go-toml/v2/unstable"
)

// kind is the kind of a TOML value.
type kind int

const (
	tableKind kind = iota
	listKind
	textKind
	wholeKind
	pointKind
	truthKind
	dateKind // a local date
	timeKind // any other date or time
)

// String returns the kind as a fault names it.
func (k kind) String() string {
	switch k {
	case tableKind:
		return "a table"
	case listKind:
		return "a list"
	case textKind:
		return "text"
	case wholeKind, pointKind:
		return "a number"
	case truthKind:
		return "true or false"
	case dateKind:
		return "a date"
	case timeKind:
		return "a date or time"
	}
	return "unknown"
}

// node is a TOML value with the place where it stands.
type node struct {
	kind   kind
	line   int
	column int
	// text of a scalar: decoded for text, as written for all others.
	text string
	// keys and fields of a table, in order of appearance.
	keys   []string
	fields map[string]*node
	// items of a list.
	items []*node
	// sealed is a list or table written inline, or a table made by dotted
	// keys: no header may extend it. headed is a table that had its header.
	sealed bool
	headed bool
}

func (n *node) set(key string, v *node) {
	if n.fields == nil {
		n.fields = make(map[string]*node)
	}
	n.keys = append(n.keys, key)
	n.fields[key] = v
}

// keyPart is one part of a dotted key.
type keyPart struct {
	name string
	node *node // its place only
}

// treeReader builds the tree of one file.
type treeReader struct {
	*collector
	parser unstable.Parser
	starts []int // offset of each line
}

// readTree returns the root table of a TOML text. Faults of TOML's own rules go
// to the collector; after a fault of syntax the tree is cut off there and ok
// is false.
func readTree(text []byte, c *collector) (root *node, ok bool) {
	r := &treeReader{collector: c, starts: []int{0}}
	for i, b := range text {
		if b == '\n' {
			r.starts = append(r.starts, i+1)
		}
	}
	root = &node{kind: tableKind, line: 1, column: 1}
	current := root
	r.parser.Reset(text)
	for r.parser.NextExpression() {
		e := r.parser.Expression()
		switch e.Kind {
		case unstable.Table:
			current = r.header(root, r.key(e.Key()), false)
		case unstable.ArrayTable:
			current = r.header(root, r.key(e.Key()), true)
		case unstable.KeyValue:
			r.put(current, e)
		case unstable.Invalid, unstable.Comment, unstable.Key, unstable.Array, unstable.InlineTable, unstable.String, unstable.Bool,
			unstable.Float, unstable.Integer, unstable.LocalDate, unstable.LocalTime, unstable.LocalDateTime, unstable.DateTime:
		}
	}
	if err := r.parser.Error(); err != nil {
		r.syntax(err)
		return root, false
	}
	return root, true
}

func (r *treeReader) place(offset int) *node {
	line := sort.SearchInts(r.starts, offset+1)
	return &node{line: line, column: offset - r.starts[line-1] + 1}
}

func (r *treeReader) syntax(err error) {
	var perr *unstable.ParserError
	if !errors.As(err, &perr) {
		r.add(nil, "", "can't be read as TOML: "+err.Error(), "")
		return
	}
	mend := ""
	if perr.Message == "strings must be quoted" || strings.HasPrefix(perr.Message, "unexpected character") {
		mend = `put text between quotation marks, e.g. every = "1d"`
	}
	at := r.place(int(r.parser.Range(perr.Highlight).Offset))
	r.add(at, "", "can't be read as TOML from here on: "+perr.Message, mend)
}

func (r *treeReader) key(it unstable.Iterator) []keyPart {
	var parts []keyPart
	for it.Next() {
		n := it.Node()
		parts = append(parts, keyPart{string(n.Data), r.place(int(n.Raw.Offset))})
	}
	return parts
}

func joinKey(parts []keyPart) string {
	names := make([]string, len(parts))
	for i, p := range parts {
		names[i] = bareKey(p.name)
	}
	return strings.Join(names, ".")
}

// header opens [key] or [[key]]. After a fault it returns a table that leads
// nowhere, so that one fault doesn't cause others.
func (r *treeReader) header(root *node, parts []keyPart, list bool) *node {
	astray := &node{kind: tableKind}
	at := root
	for i, p := range parts[:len(parts)-1] {
		next := at.fields[p.name]
		if next == nil {
			next = &node{kind: tableKind, line: p.node.line, column: p.node.column}
			at.set(p.name, next)
		}
		if next.kind == listKind && !next.sealed {
			next = next.items[len(next.items)-1]
		}
		if next.kind != tableKind || next.sealed {
			r.add(p.node, joinKey(parts[:i+1]), "is no table that a heading can go on with", "")
			return astray
		}
		at = next
	}
	last := parts[len(parts)-1]
	have := at.fields[last.name]
	fresh := &node{kind: tableKind, line: last.node.line, column: last.node.column, headed: true}
	switch {
	case list && have == nil:
		at.set(last.name, &node{kind: listKind, line: fresh.line, column: fresh.column, items: []*node{fresh}})
	case list && have.kind == listKind && !have.sealed:
		have.items = append(have.items, fresh)
	case !list && have == nil:
		at.set(last.name, fresh)
	case !list && have.kind == tableKind && !have.sealed && !have.headed:
		have.headed = true
		return have
	case !list && have.kind == listKind && !have.sealed:
		r.add(last.node, joinKey(parts), "is a list of tables", "write [["+joinKey(parts)+"]]")
		return astray
	default:
		r.add(last.node, joinKey(parts), "stands twice", "keep one")
		return astray
	}
	return fresh
}

// put sets the value of a possibly dotted key.
func (r *treeReader) put(table *node, e *unstable.Node) {
	parts := r.key(e.Key())
	for i, p := range parts[:len(parts)-1] {
		next := table.fields[p.name]
		if next == nil {
			next = &node{kind: tableKind, line: p.node.line, column: p.node.column, headed: true}
			table.set(p.name, next)
		}
		if next.kind != tableKind || next.sealed {
			r.add(p.node, joinKey(parts[:i+1]), "has a value already and can't also be a table", "keep one")
			return
		}
		table = next
	}
	last := parts[len(parts)-1]
	if table.fields[last.name] != nil {
		r.add(last.node, joinKey(parts), "stands twice", "keep one")
		return
	}
	v := r.value(e.Value(), last.node)
	v.line, v.column = last.node.line, last.node.column
	table.set(last.name, v)
}

func (r *treeReader) value(n *unstable.Node, at *node) *node {
	if n.Raw.Length > 0 {
		at = r.place(int(n.Raw.Offset))
	}
	v := &node{line: at.line, column: at.column, text: string(n.Data)}
	switch n.Kind {
	case unstable.String:
		v.kind = textKind
	case unstable.Integer:
		v.kind = wholeKind
	case unstable.Float:
		v.kind = pointKind
	case unstable.Bool:
		v.kind = truthKind
	case unstable.LocalDate:
		v.kind = dateKind
	case unstable.DateTime, unstable.LocalDateTime, unstable.LocalTime:
		v.kind = timeKind
	case unstable.Array:
		v.kind, v.sealed = listKind, true
		for it := n.Children(); it.Next(); {
			v.items = append(v.items, r.value(it.Node(), at))
		}
	case unstable.InlineTable:
		v.kind = tableKind
		for it := n.Children(); it.Next(); {
			r.put(v, it.Node())
		}
		v.sealed = true
	case unstable.Invalid, unstable.Comment, unstable.Key, unstable.Table, unstable.ArrayTable, unstable.KeyValue:
	}
	return v
}
