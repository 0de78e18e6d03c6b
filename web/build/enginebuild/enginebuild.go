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
	"strings"
)

const (
	enginePackage  = "distal/web/engine"
	displayPackage = "distal/experiments/display"
)

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

// withoutDocs writes copies of the displays' files in which the explanations of
// kinds and parameters are empty, and the overlay that puts them in place.
// Browsers never show these texts, and they cost 8 KB of download.
func withoutDocs(ctx context.Context, work string) (string, error) {
	list, err := goTool(ctx, "list", "-f", "{{.Dir}}{{range .GoFiles}}\n{{.}}{{end}}", displayPackage)
	if err != nil {
		return "", err
	}
	dir, names, _ := strings.Cut(strings.TrimSpace(list), "\n")
	replace := map[string]string{}
	for _, name := range strings.Fields(names) {
		source, err := os.ReadFile(filepath.Join(dir, name))
		if err != nil {
			return "", err
		}
		stripped, err := emptyDocs(name, source)
		if err != nil {
			return "", err
		}
		copied := filepath.Join(work, name)
		if err := os.WriteFile(copied, stripped, 0o600); err != nil {
			return "", err
		}
		replace[filepath.Join(dir, name)] = copied
	}
	text, err := json.Marshal(map[string]any{"Replace": replace})
	if err != nil {
		return "", err
	}
	path := filepath.Join(work, "overlay.json")
	return path, os.WriteFile(path, text, 0o600)
}

// emptyDocs gives source with every field Doc of a composite literal set to "".
func emptyDocs(name string, source []byte) ([]byte, error) {
	files := token.NewFileSet()
	tree, err := parser.ParseFile(files, name, source, parser.SkipObjectResolution)
	if err != nil {
		return nil, err
	}
	var out bytes.Buffer
	done := 0
	ast.Inspect(tree, func(n ast.Node) bool {
		pair, ok := n.(*ast.KeyValueExpr)
		if !ok {
			return true
		}
		if key, ok := pair.Key.(*ast.Ident); ok && key.Name == "Doc" {
			out.Write(source[done:files.Position(pair.Value.Pos()).Offset])
			out.WriteString(`""`)
			done = files.Position(pair.Value.End()).Offset
		}
		return true
	})
	out.Write(source[done:])
	return out.Bytes(), nil
}
