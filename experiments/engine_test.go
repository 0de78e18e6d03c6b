// Package experiments_test holds the rules that all packages of the engine obey.
package experiments_test

import (
	"go/ast"
	"go/build"
	"go/importer"
	"go/parser"
	"go/token"
	"go/types"
	"path/filepath"
	"slices"
	"strconv"
	"strings"
	"testing"
)

// enginePackages run in the browser and on the server and must give the same bits.
var enginePackages = []string{"exact", "random", "value", "visual", "display", "procedure", "study", "run"}

// engineImports are the standard packages that the engine may use: small in
// WebAssembly, without reflection, clock or platform-dependent arithmetic.
var engineImports = []string{"errors", "math", "math/bits", "slices", "sort", "strconv", "strings", "unicode", "unicode/utf8", "unicode/utf16", "crypto/sha256", "encoding/hex"}

// exactMath are the names of package math that are rounded correctly on every
// platform: the rest has assembly or fused instructions on some.
var exactMath = []string{
	"Sqrt", "Floor", "Ceil", "Trunc", "Abs", "Inf", "NaN", "IsNaN", "IsInf", "Signbit", "Copysign", "Max", "Min",
	"Float64bits", "Float64frombits", "Float32bits", "Float32frombits",
}

// breach is one line that breaks a rule.
type breach struct {
	pos  token.Position
	rule string
}

// loader type-checks packages of this module from source, as compiled for WebAssembly.
type loader struct {
	fset     *token.FileSet
	standard types.Importer
	packages map[string]*checkedPackage
}

type checkedPackage struct {
	files []*ast.File
	types *types.Package
	info  *types.Info
}

func newLoader() *loader {
	fset := token.NewFileSet()
	return &loader{fset: fset, standard: importer.ForCompiler(fset, "source", nil), packages: map[string]*checkedPackage{}}
}

// Import implements types.Importer.
func (l *loader) Import(path string) (*types.Package, error) {
	name, ours := strings.CutPrefix(path, "distal/experiments/")
	if !ours {
		return l.standard.Import(path)
	}
	p, err := l.load(name)
	if err != nil {
		return nil, err
	}
	return p.types, nil
}

func (l *loader) load(name string) (*checkedPackage, error) {
	if p, ok := l.packages[name]; ok {
		return p, nil
	}
	wasm := build.Default
	wasm.GOOS, wasm.GOARCH, wasm.CgoEnabled = "wasip1", "wasm", false
	found, err := wasm.ImportDir(filepath.FromSlash(name), 0)
	if err != nil {
		return nil, err
	}
	var files []*ast.File
	for _, file := range found.GoFiles {
		f, err := parser.ParseFile(l.fset, filepath.Join(filepath.FromSlash(name), file), nil, 0)
		if err != nil {
			return nil, err
		}
		files = append(files, f)
	}
	p, err := l.check("distal/experiments/"+name, files)
	l.packages[name] = p
	return p, err
}

func (l *loader) check(path string, files []*ast.File) (*checkedPackage, error) {
	p := &checkedPackage{files: files, info: &types.Info{Types: map[ast.Expr]types.TypeAndValue{}, Uses: map[*ast.Ident]types.Object{}}}
	config := types.Config{Importer: l}
	var err error
	p.types, err = config.Check(path, l.fset, files, p.info)
	return p, err
}

// breaches lists what in p breaks the rules of the engine.
func (l *loader) breaches(p *checkedPackage) []breach {
	var list []breach
	for _, file := range p.files {
		for _, spec := range file.Imports {
			path, _ := strconv.Unquote(spec.Path.Value)
			if !strings.HasPrefix(path, "distal/experiments/") && !slices.Contains(engineImports, path) {
				list = append(list, breach{l.fset.Position(spec.Pos()), "the engine does not import " + path})
			}
		}
		var stack []ast.Node
		ast.Inspect(file, func(n ast.Node) bool {
			if n == nil {
				stack = stack[:len(stack)-1]
				return true
			}
			if rule := p.broken(n, stack); rule != "" {
				list = append(list, breach{l.fset.Position(n.Pos()), rule})
			}
			stack = append(stack, n)
			return true
		})
	}
	return list
}

// broken names the rule that node n, below the nodes of stack, breaks.
func (p *checkedPackage) broken(n ast.Node, stack []ast.Node) string {
	switch n := n.(type) {
	case *ast.RangeStmt:
		if _, ok := p.info.TypeOf(n.X).Underlying().(*types.Map); ok {
			return "the order of a map differs from run to run"
		}
	case *ast.GoStmt:
		return "the engine has no goroutines"
	case *ast.SelectorExpr:
		object := p.info.Uses[n.Sel]
		if f, ok := object.(*types.Func); ok && f.Pkg() != nil && f.Pkg().Path() == "math" && !slices.Contains(exactMath, f.Name()) {
			return "math." + f.Name() + " may differ between platforms: use package exact"
		}
	case *ast.AssignStmt:
		if n.Tok == token.MUL_ASSIGN && isFloat(p.info.TypeOf(n.Lhs[0])) {
			return "a product that is stored may be fused with a later sum: write x = float64(x * y)"
		}
	case *ast.BinaryExpr:
		if n.Op == token.MUL && isFloat(p.info.TypeOf(n)) && p.info.Types[n].Value == nil && !p.rounded(stack) {
			return "the product may be fused with a sum: write float64(x * y)"
		}
	}
	return ""
}

// rounded tells whether a product below the nodes of stack is rounded before
// it can meet a sum. The language rounds at explicit conversions only, not at
// assignments, calls or returns (The Go Programming Language Specification,
// Floating-point operators). Further products, quotients, comparisons,
// functions of package math and the built-in min and max cannot be fused with
// it. Quotients need no rounding: compilers turn only those by powers of two
// into products, which are exact.
func (p *checkedPackage) rounded(stack []ast.Node) bool {
	for i := len(stack) - 1; i >= 0; i-- {
		switch parent := stack[i].(type) {
		case *ast.ParenExpr, *ast.UnaryExpr:
			continue
		case *ast.BinaryExpr:
			return parent.Op != token.ADD && parent.Op != token.SUB
		case *ast.CallExpr:
			fun := p.info.Types[parent.Fun]
			if fun.IsType() || fun.IsBuiltin() {
				return true
			}
			selector, ok := parent.Fun.(*ast.SelectorExpr)
			if !ok {
				return false
			}
			object := p.info.Uses[selector.Sel]
			return object != nil && object.Pkg() != nil && object.Pkg().Path() == "math"
		}
		return false
	}
	return false
}

func isFloat(t types.Type) bool {
	basic, ok := t.Underlying().(*types.Basic)
	return ok && basic.Info()&types.IsFloat != 0
}

func TestEnginePackagesObeyTheRules(t *testing.T) {
	t.Parallel()
	l := newLoader()
	for _, name := range enginePackages {
		p, err := l.load(name)
		if err != nil {
			t.Fatal(err)
		}
		for _, b := range l.breaches(p) {
			t.Errorf("%s: %s", b.pos, b.rule)
		}
	}
}

// What the engine entry imports of this module is covered by the rules.
func TestEnginePackagesAreAll(t *testing.T) {
	t.Parallel()
	entry, err := build.Default.ImportDir(filepath.FromSlash("../web/engine"), build.IgnoreVendor)
	if _, constrained := err.(*build.NoGoError); err != nil && !constrained {
		t.Fatal(err)
	}
	todo, seen := append(entry.Imports, "distal/experiments/run"), map[string]bool{}
	for len(todo) > 0 {
		path := todo[0]
		todo = todo[1:]
		name, ours := strings.CutPrefix(path, "distal/experiments/")
		if !ours || seen[name] {
			continue
		}
		seen[name] = true
		if !slices.Contains(enginePackages, name) {
			t.Errorf("package %s is part of the engine, but its source is not checked", name)
		}
		wasm := build.Default
		wasm.GOOS, wasm.GOARCH, wasm.CgoEnabled = "wasip1", "wasm", false
		found, err := wasm.ImportDir(filepath.FromSlash(name), 0)
		if err != nil {
			t.Fatal(err)
		}
		todo = append(todo, found.Imports...)
	}
}

// The rules find each breach in a text that holds all of them, and nothing in
// the allowed forms beside them.
func TestRulesFindBreaches(t *testing.T) {
	t.Parallel()
	const source = `package bad

import (
	"fmt"
	"math"
)

func f(a, b, c float64, m map[string]int) float64 {
	for range m { // line 9
	}
	x := math.Sin(a)   // line 11
	x += a * b         // line 12
	x = c - (a * b)    // line 13
	y := a * b         // line 14
	y *= c             // line 15
	fmt.Println(x + y) // line 4: the import
	return -a * b      // line 17
}

func g(a, b, c float64, n int) float64 {
	const k = 2.0 * 3.0
	x := float64(a*b) + c + k
	x = float64(a * b / c)
	x += math.Floor(a*b) + float64(float32(a)*float32(b))
	if a*b < c {
		x += a / b
	}
	return x + float64(n*n) + min(a*b, c)
}
`
	l := newLoader()
	file, err := parser.ParseFile(l.fset, "bad.go", source, 0)
	if err != nil {
		t.Fatal(err)
	}
	p, err := l.check("bad", []*ast.File{file})
	if err != nil {
		t.Fatal(err)
	}
	var lines []int
	for _, b := range l.breaches(p) {
		lines = append(lines, b.pos.Line)
	}
	if want := []int{4, 9, 11, 12, 13, 14, 15, 17}; !slices.Equal(lines, want) {
		t.Errorf("breaches in lines %v, want %v", lines, want)
	}
}
