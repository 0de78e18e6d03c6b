// Package web holds what browsers load: the engine (web/engine), the
// participant's and the workspace's scripts and styles, built by
// `go run ./web/build` into web/dist and embedded here.
package web

import (
	"embed"
	"encoding/json"
	"errors"
	"fmt"
	"io/fs"
)

//go:embed all:dist
var dist embed.FS

// Asset is one built file.
type Asset struct {
	Name      string `json:"name"` // e.g. "participant_js"
	File      string `json:"file"` // in web/dist
	MediaType string `json:"media_type"`
	Digest    string `json:"digest"`    // SHA-256 of the plain bytes, hex
	Integrity string `json:"integrity"` // "sha256-…", for the page's integrity attribute
	Bytes     int    `json:"bytes"`
	Brotli    int    `json:"brotli_bytes"`
	Quick     bool   `json:"quick,omitempty"` // compressed less, for development

	Plain      []byte `json:"-"`
	Compressed []byte `json:"-"` // brotli
}

// ErrNotBuilt says that web/dist is empty.
var ErrNotBuilt = errors.New("the browser's files are not built: run `go run ./web/build`, then build again")

// Assets reads the built files, by name.
func Assets() (map[string]Asset, error) { return ReadAssets(dist) }

// ReadAssets reads built files from fsys, whose folder dist holds manifest.json.
func ReadAssets(fsys fs.FS) (map[string]Asset, error) {
	text, err := fs.ReadFile(fsys, "dist/manifest.json")
	if errors.Is(err, fs.ErrNotExist) {
		return nil, ErrNotBuilt
	}
	if err != nil {
		return nil, fmt.Errorf("read asset manifest: %w", err)
	}
	var list []Asset
	if err := json.Unmarshal(text, &list); err != nil {
		return nil, fmt.Errorf("read asset manifest: %w", err)
	}
	assets := make(map[string]Asset, len(list))
	for _, a := range list {
		if a.Plain, err = fs.ReadFile(fsys, "dist/"+a.File); err != nil {
			return nil, fmt.Errorf("read asset %s: %w", a.Name, err)
		}
		if a.Compressed, err = fs.ReadFile(fsys, "dist/"+a.File+".br"); err != nil {
			return nil, fmt.Errorf("read asset %s: %w", a.Name, err)
		}
		assets[a.Name] = a
	}
	return assets, nil
}
