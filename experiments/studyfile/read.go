// Package studyfile reads study files: YAML with the Markdown texts beside it,
// into the value trees of package study, with the line and column of every key
// and value. Start with Read.
package studyfile

import (
	"errors"
	"fmt"
	"io/fs"
	"math"
	"path"
	"strconv"
	"strings"
	"unicode/utf8"

	"github.com/goccy/go-yaml/ast"
	"github.com/goccy/go-yaml/parser"
	"github.com/goccy/go-yaml/token"

	"distal/experiments/study"
	"distal/experiments/value"
)

// Limits of what is read.
const (
	maxFileBytes = 1 << 20
	maxTextBytes = 100_000
)

// Read reads the study file called name in fsys, with its texts. The study is
// only to be used when the problems have not Failed.
func Read(fsys fs.FS, name string) (*study.Study, study.Problems) {
	text, err := readLimited(fsys, name, maxFileBytes)
	if err != nil {
		return nil, study.Problems{{Pos: value.Pos{File: name}, Message: err.Error()}}
	}
	tree, problems := Parse(text)
	var s *study.Study
	if !problems.Failed() {
		tree, problems = withTexts(fsys, path.Dir(name), tree)
		var more study.Problems
		s, more = study.Decode(tree)
		problems = append(problems, more...).InOrder()
	}
	for i := range problems {
		problems[i].Pos.File = name
	}
	return s, problems
}

func readLimited(fsys fs.FS, name string, limit int64) ([]byte, error) {
	info, err := fs.Stat(fsys, name)
	if errors.Is(err, fs.ErrNotExist) {
		return nil, fmt.Errorf("there is no file %s", name)
	}
	if err != nil {
		return nil, err
	}
	if info.IsDir() || info.Size() > limit {
		return nil, fmt.Errorf("%s is not a file of at most %d bytes", name, limit)
	}
	text, err := fs.ReadFile(fsys, name)
	if err == nil && !utf8.Valid(text) {
		return nil, fmt.Errorf("%s is not written in UTF-8: save it in that encoding", name)
	}
	return text, err
}

// Parse reads YAML into a value tree. Aliases, tags, merge keys, several
// documents, keys that stand twice and keys that are not plain words are
// refused, all of them at once.
func Parse(text []byte) (value.Value, study.Problems) {
	file, err := parse(text)
	if err != nil {
		return value.Value{}, study.Problems{syntaxProblem(err)}
	}
	var c converter
	var body ast.Node
	for _, doc := range file.Docs {
		switch {
		case doc.Body == nil:
		case body == nil:
			body = doc.Body
		default:
			c.problem(doc.Body, "a study file is one YAML document: take out the line ---")
		}
	}
	if body == nil {
		return value.Value{}, study.Problems{{Pos: value.Pos{Line: 1, Column: 1}, Message: "the study file is empty"}}
	}
	v := c.convert(body, 0)
	return v, c.problems.InOrder()
}

// parse guards against panics of the parser on hostile input.
func parse(text []byte) (file *ast.File, err error) {
	defer func() {
		if r := recover(); r != nil {
			err = fmt.Errorf("the YAML cannot be read: %v", r)
		}
	}()
	return parser.ParseBytes(text, 0, parser.AllowDuplicateMapKey())
}

func syntaxProblem(err error) study.Problem {
	p := study.Problem{Pos: value.Pos{Line: 1, Column: 1}, Message: firstLine(err.Error())}
	var located interface{ GetToken() *token.Token }
	if errors.As(err, &located) {
		if t := located.GetToken(); t != nil && t.Position != nil {
			p.Pos = value.Pos{Line: t.Position.Line, Column: t.Position.Column}
			p.Offending = t.Value
		}
	}
	var message interface{ GetMessage() string }
	if errors.As(err, &message) {
		p.Message = message.GetMessage()
	}
	switch {
	case strings.Contains(p.Message, "'\t'"):
		p.Message = "indent with spaces, not with a tabulator"
	case strings.Contains(p.Message, "is not allowed in this context"):
		p.Message += ": look at the indentation of this line and of the one before"
	}
	return p
}

func firstLine(s string) string {
	line, _, _ := strings.Cut(s, "\n")
	return line
}

// position is where n begins: a group of keys begins with its first key.
func position(n ast.Node) value.Pos {
	switch n := n.(type) {
	case *ast.MappingNode:
		if !n.IsFlowStyle && len(n.Values) > 0 {
			return position(n.Values[0].Key)
		}
	case *ast.MappingValueNode:
		return position(n.Key)
	}
	if t := n.GetToken(); t != nil && t.Position != nil {
		return value.Pos{Line: t.Position.Line, Column: t.Position.Column}
	}
	return value.Pos{}
}

// converter makes value trees of YAML and collects what is refused.
type converter struct{ problems study.Problems }

func (c *converter) problem(n ast.Node, message string) {
	p := study.Problem{Pos: position(n), Message: message}
	if t := n.GetToken(); t != nil {
		p.Offending = t.Value
	}
	c.problems = append(c.problems, p)
}

const maxDepth = 40

func (c *converter) convert(n ast.Node, depth int) value.Value {
	if depth > maxDepth {
		c.problem(n, "nested too deeply")
		return value.Value{}
	}
	v := c.node(n, depth)
	v.Pos = position(n)
	return v
}

func (c *converter) node(n ast.Node, depth int) value.Value {
	switch n := n.(type) {
	case *ast.NullNode:
	case *ast.BoolNode:
		v := value.Bool(n.Value)
		v.Raw = n.Token.Value
		return v
	case *ast.IntegerNode:
		return c.number(n, n.Token.Value)
	case *ast.FloatNode:
		return c.number(n, n.Token.Value)
	case *ast.InfinityNode, *ast.NanNode:
		c.problem(n, "a finite number is needed")
	case *ast.StringNode:
		v := value.String(n.Value)
		v.Raw = n.Token.Value
		return v
	case *ast.LiteralNode:
		v := value.String(n.Value.Value)
		v.Raw = firstLine(n.Value.Value)
		return v
	case *ast.SequenceNode:
		v := value.List()
		for _, item := range n.Values {
			v.Items = append(v.Items, c.convert(item, depth+1))
		}
		return v
	case *ast.MappingNode:
		return c.mapping(n.Values, depth)
	case *ast.MappingValueNode:
		return c.mapping([]*ast.MappingValueNode{n}, depth)
	case *ast.AnchorNode, *ast.AliasNode:
		c.problem(n, "anchors and aliases are not used in study files: write the value again")
	case *ast.TagNode:
		c.problem(n, "tags (!) are not used in study files")
	default:
		c.problem(n, "this kind of YAML is not used in study files")
	}
	return value.Value{}
}

func (c *converter) number(n ast.Node, text string) value.Value {
	clean := strings.ReplaceAll(text, "_", "")
	x, err := strconv.ParseFloat(clean, 64)
	if err != nil {
		whole, errWhole := strconv.ParseInt(clean, 0, 64)
		if errWhole != nil {
			c.problem(n, "this number cannot be read")
			return value.Value{}
		}
		x = float64(whole)
	}
	if math.IsInf(x, 0) || math.IsNaN(x) {
		c.problem(n, "a finite number is needed")
	}
	v := value.Number(x)
	v.Raw = text
	return v
}

func (c *converter) mapping(list []*ast.MappingValueNode, depth int) value.Value {
	v := value.Object()
	first := map[string]int{} // line of each key
	for _, m := range list {
		key, ok := keyText(m.Key)
		if !ok {
			c.problem(m.Key, badKey(m.Key))
			continue
		}
		pos := position(m.Key)
		if line, twice := first[key]; twice {
			c.problem(m.Key, "the key "+strconv.Quote(key)+" stands twice: first in line "+strconv.Itoa(line))
			continue
		}
		first[key] = pos.Line
		v.Members = append(v.Members, value.Member{Key: key, KeyPos: pos, Value: c.convert(m.Value, depth+1)})
	}
	return v
}

func badKey(n ast.MapKeyNode) string {
	switch n.(type) {
	case *ast.MergeKeyNode:
		return "merge keys (<<) are not used in study files: write the values again"
	case *ast.NullNode:
		return "this word means nothing in YAML: choose another name"
	}
	return "keys are plain words"
}

func keyText(n ast.MapKeyNode) (string, bool) {
	switch k := n.(type) {
	case *ast.StringNode:
		return k.Value, true
	case *ast.IntegerNode:
		return k.Token.Value, true
	case *ast.BoolNode: // YAML 1.1 habits: yes, no, on and off stay words
		return k.Token.Value, true
	}
	return "", false
}
