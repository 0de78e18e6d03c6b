// Package migrations holds the schema as numbered SQL files and applies them.
package migrations

import (
	"context"
	"database/sql"
	"embed"
	"fmt"

	"github.com/pressly/goose/v3"
)

//go:embed *.sql
var files embed.FS

// Apply brings the database up to date and returns the numbers of the
// migrations that it applied. db must be connected as the schema's owner.
func Apply(ctx context.Context, db *sql.DB) ([]int64, error) {
	provider, err := goose.NewProvider(goose.DialectPostgres, db, files)
	if err != nil {
		return nil, fmt.Errorf("prepare migrations: %w", err)
	}
	results, err := provider.Up(ctx)
	if err != nil {
		return nil, fmt.Errorf("migrate: %w", err)
	}
	var applied []int64
	for _, r := range results {
		applied = append(applied, r.Source.Version)
	}
	return applied, nil
}
