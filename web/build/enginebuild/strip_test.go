package enginebuild

import (
	"bytes"
	"context"
	"os"
	"os/exec"
	"path/filepath"
	"strings"
	"testing"

	"pgregory.net/rapid"
)

// The segments say the same memory, whatever it holds.
func TestSegmentsHoldTheMemory(t *testing.T) {
	t.Parallel()
	rapid.Check(t, func(t *rapid.T) {
		m := &image{bytes: rapid.SliceOfN(rapid.SampledFrom([]byte{0, 0, 0, 1, 255}), 0, 300).Draw(t, "memory")}
		again, err := readSegments(m.segments())
		if err != nil {
			t.Fatal(err)
		}
		want := bytes.TrimRight(m.bytes, "\x00")
		if !bytes.Equal(again.bytes, want) {
			t.Fatalf("%v became %v", want, again.bytes)
		}
	})
}

func TestSignedNumbers(t *testing.T) {
	t.Parallel()
	rapid.Check(t, func(t *rapid.T) {
		value := rapid.IntRange(-1<<31, 1<<31-1).Draw(t, "value")
		text := appendSigned(nil, value)
		if got, n := signed(text); got != value || n != len(text) {
			t.Fatalf("%d became %d in %d of %d bytes", value, got, n, len(text))
		}
	})
}

// A program that allocates, grows its stack, collects garbage and recovers
// from a panic does the same after stripping, and knows no names any more.
func TestStrippedProgramDoesTheSame(t *testing.T) {
	t.Parallel()
	dir := t.TempDir()
	const source = `package main

import "runtime"

type node struct { next *node; room [40]int }

func deep(n int) (sum int) {
	keep := &node{room: [40]int{n}}
	if n%50 == 0 { runtime.GC() }
	if n > 0 { sum = deep(n - 1) }
	return sum + keep.room[0]
}

func guarded() (text string) {
	defer func() { text = recover().(error).Error() }()
	return string(make([]byte, 3)[deep(4):])
}

func distinctiveName() string { pc, _, _, _ := runtime.Caller(0); return runtime.FuncForPC(pc).Name() }

func main() { println(deep(300), guarded()); if len(distinctiveName()) > 99 { panic("no") } }
`
	if err := os.WriteFile(filepath.Join(dir, "main.go"), []byte(source), 0o600); err != nil {
		t.Fatal(err)
	}
	path := filepath.Join(dir, "main.wasm")
	if _, err := goTool(context.Background(), "build", "-trimpath", "-ldflags=-s -w", "-gcflags=all=-l", "-o", path, filepath.Join(dir, "main.go")); err != nil {
		t.Fatal(err)
	}
	module, err := os.ReadFile(path)
	if err != nil {
		t.Fatal(err)
	}
	small, err := stripTracebacks(module)
	if err != nil {
		t.Fatal(err)
	}
	if len(small) > len(module)*95/100 {
		t.Errorf("%d bytes became %d", len(module), len(small))
	}
	if !bytes.Contains(module, []byte("distinctiveName")) || bytes.Contains(small, []byte("distinctiveName")) {
		t.Error("the names should be in the module and not in the stripped one")
	}
	before := runWASI(t, dir, "before.wasm", module)
	if after := runWASI(t, dir, "after.wasm", small); after != before || !strings.Contains(before, "45150 runtime error: slice bounds out of range [10:3]") {
		t.Errorf("said %q, now %q", before, after)
	}
}

// runWASI runs a module in Node and gives what it prints.
func runWASI(t *testing.T, dir, name string, module []byte) string {
	t.Helper()
	path := filepath.Join(dir, name)
	if err := os.WriteFile(path, module, 0o600); err != nil {
		t.Fatal(err)
	}
	const script = `const { WASI } = require("node:wasi");
const wasi = new WASI({ version: "preview1" });
WebAssembly.instantiate(require("node:fs").readFileSync(process.argv[1]), wasi.getImportObject()).then(({ instance }) => wasi.start(instance));`
	out, err := exec.Command("node", "--no-warnings", "-e", script, path).CombinedOutput()
	if err != nil {
		t.Fatalf("%v\n%s", err, out)
	}
	return string(out)
}

func FuzzStrip(f *testing.F) {
	f.Add([]byte("\x00asm\x01\x00\x00\x00\x0b\x06\x01\x00\x41\x08\x0b\x00"))
	f.Add([]byte("\x00asm\x01\x00\x00\x00"))
	f.Fuzz(func(t *testing.T, module []byte) {
		if small, err := stripTracebacks(module); err == nil && len(small) < 8 {
			t.Errorf("%d bytes became %d", len(module), len(small))
		}
	})
}
