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
	tree, problem := Parse(text)
	if problem != nil {
		problem.Pos.File = name
		return nil, study.Problems{*problem}
	}
	tree, problems := withTexts(fsys, path.Dir(name), tree)
	s, more := study.Decode(tree)
	problems = append(problems, more...)
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
	return fs.ReadFile(fsys, name)
}

// Parse reads YAML into a value tree. Aliases, tags, merge keys, several
// documents and keys that are not plain words are refused.
func Parse(text []byte) (value.Value, *study.Problem) {
	file, err := parse(text)
	if err != nil {
		return value.Value{}, syntaxProblem(err)
	}
	var body ast.Node
	for _, doc := range file.Docs {
		if doc.Body == nil {
			continue
		}
		if body != nil {
			return value.Value{}, problemAt(doc.Body, "a study file is one YAML document")
		}
		body = doc.Body
	}
	if body == nil {
		return value.Value{}, &study.Problem{Pos: value.Pos{Line: 1, Column: 1}, Message: "the study file is empty"}
	}
	return convert(body, 0)
}

// parse guards against panics of the parser on hostile input.
func parse(text []byte) (file *ast.File, err error) {
	defer func() {
		if r := recover(); r != nil {
			err = fmt.Errorf("the YAML cannot be read: %v", r)
		}
	}()
	return parser.ParseBytes(text, 0)
}

func syntaxProblem(err error) *study.Problem {
	p := &study.Problem{Pos: value.Pos{Line: 1, Column: 1}, Message: firstLine(err.Error())}
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
	return p
}

func firstLine(s string) string {
	line, _, _ := strings.Cut(s, "\n")
	return line
}

func position(n ast.Node) value.Pos {
	if t := n.GetToken(); t != nil && t.Position != nil {
		return value.Pos{Line: t.Position.Line, Column: t.Position.Column}
	}
	return value.Pos{}
}

func problemAt(n ast.Node, message string) *study.Problem {
	p := &study.Problem{Pos: position(n), Message: message}
	if t := n.GetToken(); t != nil {
		p.Offending = t.Value
	}
	return p
}

const maxDepth = 40

func convert(n ast.Node, depth int) (value.Value, *study.Problem) {
	if depth > maxDepth {
		return value.Value{}, problemAt(n, "nested too deeply")
	}
	v, problem := convertNode(n, depth)
	if v.Pos.Line == 0 {
		v.Pos = position(n)
	}
	return v, problem
}

func convertNode(n ast.Node, depth int) (value.Value, *study.Problem) {
	switch n := n.(type) {
	case *ast.NullNode:
		return value.Value{}, nil
	case *ast.BoolNode:
		v := value.Bool(n.Value)
		v.Raw = n.Token.Value
		return v, nil
	case *ast.IntegerNode:
		return numeric(n, n.Token.Value)
	case *ast.FloatNode:
		return numeric(n, n.Token.Value)
	case *ast.InfinityNode, *ast.NanNode:
		return value.Value{}, problemAt(n, "a finite number is needed")
	case *ast.StringNode:
		v := value.String(n.Value)
		v.Raw = n.Token.Value
		return v, nil
	case *ast.LiteralNode:
		v := value.String(n.Value.Value)
		v.Raw = firstLine(n.Value.Value)
		return v, nil
	case *ast.SequenceNode:
		v := value.List()
		v.Pos = position(n)
		for _, item := range n.Values {
			converted, problem := convert(item, depth+1)
			if problem != nil {
				return v, problem
			}
			v.Items = append(v.Items, converted)
		}
		return v, nil
	case *ast.MappingNode:
		return mapping(n, n.Values, depth)
	case *ast.MappingValueNode:
		return mapping(n, []*ast.MappingValueNode{n}, depth)
	case *ast.AnchorNode, *ast.AliasNode:
		return value.Value{}, problemAt(n, "anchors and aliases are not used in study files: write the value again")
	case *ast.TagNode:
		return value.Value{}, problemAt(n, "tags (!) are not used in study files")
	}
	return value.Value{}, problemAt(n, "this kind of YAML is not used in study files")
}

func numeric(n ast.Node, text string) (value.Value, *study.Problem) {
	clean := strings.ReplaceAll(text, "_", "")
	x, err := strconv.ParseFloat(clean, 64)
	if err != nil {
		whole, errWhole := strconv.ParseInt(clean, 0, 64)
		if errWhole != nil {
			return value.Value{}, problemAt(n, "this number cannot be read")
		}
		x = float64(whole)
	}
	if math.IsInf(x, 0) || math.IsNaN(x) {
		return value.Value{}, problemAt(n, "a finite number is needed")
	}
	v := value.Number(x)
	v.Raw = text
	return v, nil
}

func mapping(n ast.Node, list []*ast.MappingValueNode, depth int) (value.Value, *study.Problem) {
	v := value.Object()
	if len(list) > 0 {
		v.Pos = position(list[0].Key)
	}
	seen := map[string]bool{}
	for _, m := range list {
		key, ok := keyText(m.Key)
		if !ok {
			return v, problemAt(m.Key, "keys are plain words")
		}
		if seen[key] {
			return v, problemAt(m.Key, "the key "+strconv.Quote(key)+" stands twice")
		}
		seen[key] = true
		converted, problem := convert(m.Value, depth+1)
		if problem != nil {
			return v, problem
		}
		v.Members = append(v.Members, value.Member{Key: key, KeyPos: position(m.Key), Value: converted})
	}
	return v, nil
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

// textKinds are the files of each language: folder/kind.language.md.
var textKinds = []string{"information", "consent", "instructions", "debrief"}

// withTexts replaces texts: {folder, version} by the texts themselves.
func withTexts(fsys fs.FS, dir string, tree value.Value) (value.Value, study.Problems) {
	var problems study.Problems
	at := -1
	for i := range tree.Members {
		if tree.Members[i].Key == "texts" {
			at = i
		}
	}
	if at < 0 || tree.Members[at].Value.Kind != value.Mapping {
		return tree, nil
	}
	texts := tree.Members[at].Value
	folder, version := "texts", ""
	for _, m := range texts.Members {
		switch {
		case m.Key == "folder" && m.Value.Kind == value.Text:
			folder = m.Value.Str
		case m.Key == "version" && m.Value.Kind != value.Mapping:
			version = m.Value.Raw
			if m.Value.Kind == value.Text {
				version = m.Value.Str
			}
		default:
			problems = append(problems, study.Problem{Pos: m.KeyPos, Path: "texts." + m.Key, Offending: m.Key,
				Message: "here only folder and version are given; the texts are Markdown files such as " + folder + "/consent.en.md"})
		}
	}
	sets := value.Object()
	sets.Pos = texts.Pos
	for _, language := range languages(tree) {
		set := value.Object(value.Member{Key: "version", Value: value.String(version)})
		set.Pos = texts.Pos
		for _, kind := range textKinds {
			name := path.Join(dir, folder, kind+"."+language+".md")
			text, err := readLimited(fsys, name, maxTextBytes)
			if err != nil {
				problems = append(problems, study.Problem{Pos: texts.Pos, Path: "texts", Message: err.Error()})
				continue
			}
			set.Members = append(set.Members, value.Member{Key: kind, Value: value.String(string(text))})
		}
		sets.Members = append(sets.Members, value.Member{Key: language, KeyPos: texts.Pos, Value: set})
	}
	members := append([]value.Member(nil), tree.Members...)
	members[at].Value = sets
	tree.Members = members
	return tree, problems
}

func languages(tree value.Value) []string {
	about, _ := tree.Get("about")
	list, ok := about.Get("languages")
	if !ok {
		return []string{"en"}
	}
	if list.Kind == value.Text {
		return []string{list.Str}
	}
	var out []string
	for _, item := range list.Items {
		out = append(out, item.Str)
	}
	return out
}
