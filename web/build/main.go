// Command build makes what browsers load into web/dist: the WebAssembly
// engine, the script and style bundles, each with a brotli copy, and
// manifest.json with their digests. Run it as `go run ./web/build` from the
// top of the tree, after `npm ci` in web.
package main

import (
	"bytes"
	"context"
	"crypto/sha256"
	"encoding/base64"
	"encoding/hex"
	"encoding/json"
	"errors"
	"flag"
	"fmt"
	"os"
	"path/filepath"
	"strings"
	"time"

	"github.com/andybalholm/brotli"
	"github.com/evanw/esbuild/pkg/api"

	"distal/web"
	"distal/web/build/enginebuild"
)

func main() {
	quick := flag.Bool("quick", false, "compress less: for development")
	out := flag.String("o", "web/dist", "folder to write to")
	flag.Parse()
	if err := build(context.Background(), *out, *quick); err != nil {
		fmt.Fprintln(os.Stderr, "build:", err)
		os.Exit(1)
	}
}

// bundle is one script or style with its entry point.
type bundle struct {
	name, entry, file, mediaType string
}

var bundles = []bundle{
	{"participant_js", "web/participant/main.ts", "participant.js", "text/javascript"},
	{"participant_css", "web/style/participant.css", "participant.css", "text/css"},
	{"workspace_js", "web/workspace/main.ts", "workspace.js", "text/javascript"},
	{"workspace_css", "web/style/workspace.css", "workspace.css", "text/css"},
}

func build(ctx context.Context, out string, quick bool) error {
	if _, err := os.Stat("web/build/main.go"); err != nil {
		return errors.New("run it from the top of the tree")
	}
	if err := os.MkdirAll(out, 0o755); err != nil {
		return err
	}
	level := brotli.BestCompression
	if quick {
		level = brotli.DefaultCompression
	}

	before := readManifest(out)
	var assets []web.Asset
	engine, err := buildEngine(ctx, out)
	if err != nil {
		return err
	}
	asset, err := write(out, "engine", "engine.wasm", "application/wasm", engine, level, before)
	if err != nil {
		return err
	}
	assets = append(assets, asset)

	for _, b := range bundles {
		text, err := b.build()
		if err != nil {
			return err
		}
		asset, err := write(out, b.name, b.file, b.mediaType, text, level, before)
		if err != nil {
			return err
		}
		assets = append(assets, asset)
	}
	manifest, err := json.MarshalIndent(assets, "", "  ")
	if err != nil {
		return err
	}
	return os.WriteFile(filepath.Join(out, "manifest.json"), manifest, 0o644)
}

// buildEngine compiles the engine and says how long it took.
func buildEngine(ctx context.Context, out string) ([]byte, error) {
	started := time.Now()
	path, err := enginebuild.Build(ctx, out)
	if err != nil {
		return nil, err
	}
	fmt.Printf("engine compiled in %.1f s\n", time.Since(started).Seconds())
	return os.ReadFile(path)
}

// build bundles one entry with esbuild.
func (b bundle) build() ([]byte, error) {
	result := api.Build(api.BuildOptions{
		EntryPoints:       []string{b.entry},
		Bundle:            true,
		Format:            api.FormatESModule,
		Target:            api.ES2022,
		MinifyWhitespace:  true,
		MinifyIdentifiers: true,
		MinifySyntax:      true,
		LegalComments:     api.LegalCommentsNone,
		Loader:            map[string]api.Loader{".svg": api.LoaderText, ".json": api.LoaderJSON},
		NodePaths:         []string{"web/node_modules"},
		Write:             false,
		LogLevel:          api.LogLevelWarning,
	})
	if len(result.Errors) > 0 {
		text := api.FormatMessages(result.Errors, api.FormatMessagesOptions{Kind: api.ErrorMessage})
		return nil, fmt.Errorf("bundle %s:\n%s", b.entry, strings.Join(text, ""))
	}
	return result.OutputFiles[0].Contents, nil
}

// write stores an asset plain and compressed and describes it.
func write(out, name, file, mediaType string, content []byte, level int, before map[string]web.Asset) (web.Asset, error) {
	sum := sha256.Sum256(content)
	asset := web.Asset{
		Name: name, File: file, MediaType: mediaType,
		Digest:    hex.EncodeToString(sum[:]),
		Integrity: "sha256-" + base64.StdEncoding.EncodeToString(sum[:]),
		Bytes:     len(content),
	}
	if err := os.WriteFile(filepath.Join(out, file), content, 0o644); err != nil {
		return web.Asset{}, err
	}
	path := filepath.Join(out, file+".br")
	// Compressing the engine takes seconds: keep it while the content is the same.
	asset.Quick = level != brotli.BestCompression
	if old := before[name]; old.Digest == asset.Digest && (asset.Quick || !old.Quick) {
		if info, err := os.Stat(path); err == nil && info.Size() == int64(old.Brotli) {
			asset.Brotli, asset.Quick = old.Brotli, old.Quick
			return asset, nil
		}
	}
	compressed, err := compress(content, level)
	if err != nil {
		return web.Asset{}, err
	}
	if err := os.WriteFile(path, compressed, 0o644); err != nil {
		return web.Asset{}, err
	}
	asset.Brotli = len(compressed)
	fmt.Printf("%-16s %8d bytes, %7d with brotli\n", file, asset.Bytes, asset.Brotli)
	return asset, nil
}

func compress(content []byte, level int) ([]byte, error) {
	var compressed bytes.Buffer
	w := brotli.NewWriterLevel(&compressed, level)
	if _, err := w.Write(content); err != nil {
		return nil, err
	}
	if err := w.Close(); err != nil {
		return nil, err
	}
	return compressed.Bytes(), nil
}

// readManifest gives the assets of the last build, none if there was none.
func readManifest(out string) map[string]web.Asset {
	before := map[string]web.Asset{}
	text, err := os.ReadFile(filepath.Join(out, "manifest.json"))
	if err != nil {
		return before
	}
	var list []web.Asset
	if json.Unmarshal(text, &list) == nil {
		for _, a := range list {
			before[a.Name] = a
		}
	}
	return before
}
