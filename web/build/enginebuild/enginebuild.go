// Package enginebuild compiles the WebAssembly engine: the one place that knows
// how, for the build and for tests.
package enginebuild

import (
	"bytes"
	"context"
	"encoding/json"
	"fmt"
	"go/ast"
	"go/parser"
	"go/token"
	"os"
	"os/exec"
	"path/filepath"
	"slices"
	"strings"
)

const enginePackage = "distal/web/engine"

// documented are the packages whose explanations the engine does without.
var documented = []string{"distal/experiments/display", "distal/experiments/study"}

// flags make a reactor module without symbol table, inlining only where random
// numbers and functions are made, since inlined copies cost 90 KB.
var flags = []string{
	"-trimpath", "-buildvcs=false", "-buildmode=c-shared", "-ldflags=-s -w -buildid=",
	"-gcflags=all=-l", "-gcflags=distal/experiments/random=", "-gcflags=distal/experiments/exact=",
}

// environment selects the target and the smaller of the two garbage
// collectors; the engine hardly makes garbage.
var environment = []string{"GOOS=wasip1", "GOARCH=wasm", "CGO_ENABLED=0", "GOEXPERIMENT=nogreenteagc"}

// Build compiles the engine into folder out and gives the path of engine.wasm.
// It must run inside the module. The same source gives the same bytes.
func Build(ctx context.Context, out string) (string, error) {
	work, err := os.MkdirTemp("", "distal-engine-")
	if err != nil {
		return "", fmt.Errorf("compile the engine: %w", err)
	}
	defer os.RemoveAll(work)
	overlay, err := withoutDocs(ctx, work)
	if err != nil {
		return "", fmt.Errorf("compile the engine: %w", err)
	}
	path := filepath.Join(out, "engine.wasm")
	args := append([]string{"build", "-overlay", overlay, "-o", path}, flags...)
	if _, err := goTool(ctx, append(args, enginePackage)...); err != nil {
		return "", fmt.Errorf("compile the engine: %w", err)
	}
	if err := stripFile(path); err != nil {
		return "", fmt.Errorf("make the engine smaller: %w", err)
	}
	return path, nil
}

func stripFile(path string) error {
	module, err := os.ReadFile(path)
	if err != nil {
		return err
	}
	if module, err = stripTracebacks(module); err != nil {
		return err
	}
	return os.WriteFile(path, module, 0o644)
}

func goTool(ctx context.Context, args ...string) (string, error) {
	command := exec.CommandContext(ctx, "go", args...)
	command.Env = append(os.Environ(), environment...)
	var complaint bytes.Buffer
	command.Stderr = &complaint
	out, err := command.Output()
	if err != nil {
		return "", fmt.Errorf("%w\n%s", err, complaint.Bytes())
	}
	return string(out), nil
}

// withoutDocs writes copies of files in which the explanations of displays, their
// parameters and the keys of a study are empty, and the overlay that puts them in
// place. Browsers never show these texts, and they cost 12 KB of download.
func withoutDocs(ctx context.Context, work string) (string, error) {
	replace := map[string]string{}
	for _, name := range documented {
		if err := emptyPackage(ctx, name, work, replace); err != nil {
			return "", err
		}
	}
	text, err := json.Marshal(map[string]any{"Replace": replace})
	if err != nil {
		return "", err
	}
	path := filepath.Join(work, "overlay.json")
	return path, os.WriteFile(path, text, 0o600)
}

func emptyPackage(ctx context.Context, packageName, work string, replace map[string]string) error {
	list, err := goTool(ctx, "list", "-f", "{{.Dir}}{{range .GoFiles}}\n{{.}}{{end}}", packageName)
	if err != nil {
		return err
	}
	dir, names, _ := strings.Cut(strings.TrimSpace(list), "\n")
	for _, name := range strings.Fields(names) {
		source, err := os.ReadFile(filepath.Join(dir, name))
		if err != nil {
			return err
		}
		stripped, err := emptyDocs(name, source)
		if err != nil {
			return err
		}
		copied := filepath.Join(work, filepath.Base(packageName)+"_"+name)
		if err := os.WriteFile(copied, stripped, 0o600); err != nil {
			return err
		}
		replace[filepath.Join(dir, name)] = copied
	}
	return nil
}

// explaining are the calls of a study's walk that take an explanation: their last
// text that is no key.
var explaining = []string{
	"number", "whole", "text", "flag", "words", "numbers", "sentence", "settings", "reference", "group", "named", "namedBy", "listed", "oneOf",
}

// explanation is the expression that explains what n declares, nil if none does.
func explanation(n ast.Node) ast.Expr {
	switch n := n.(type) {
	case *ast.KeyValueExpr:
		if key, ok := n.Key.(*ast.Ident); ok && key.Name == "Doc" {
			return n.Value
		}
	case *ast.CallExpr:
		name := ""
		switch f := n.Fun.(type) {
		case *ast.Ident:
			name = f.Name
		case *ast.SelectorExpr:
			if on, ok := f.X.(*ast.Ident); ok && on.Name == "c" {
				name = f.Sel.Name
			}
		}
		for i := len(n.Args) - 1; i > 1 && slices.Contains(explaining, name); i-- {
			if text, ok := n.Args[i].(*ast.BasicLit); ok && text.Kind == token.STRING {
				return text
			}
		}
	}
	return nil
}

// emptyDocs gives source with every explanation set to "".
func emptyDocs(name string, source []byte) ([]byte, error) {
	files := token.NewFileSet()
	tree, err := parser.ParseFile(files, name, source, parser.SkipObjectResolution)
	if err != nil {
		return nil, err
	}
	var out bytes.Buffer
	done := 0
	var places [][2]int
	ast.Inspect(tree, func(n ast.Node) bool {
		doc := explanation(n)
		if doc == nil {
			return true
		}
		places = append(places, [2]int{files.Position(doc.Pos()).Offset, files.Position(doc.End()).Offset})
		return true
	})
	slices.SortFunc(places, func(a, b [2]int) int { return a[0] - b[0] }) // a call stands before what its other arguments hold
	for _, place := range places {
		out.Write(source[done:place[0]])
		out.WriteString(`""`)
		done = place[1]
	}
	out.Write(source[done:])
	return out.Bytes(), nil
}
