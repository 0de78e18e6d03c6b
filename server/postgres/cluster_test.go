package postgres_test

import (
	"context"
	"os"
	"path/filepath"
	"strings"
	"syscall"
	"testing"

	"github.com/jackc/pgx/v5"

	"distal/server/postgres"
)

// A cluster starts, keeps what was written over a clean stop, refuses to run
// twice on one folder and survives being killed. Migrations apply once.
func TestCluster(t *testing.T) {
	t.Parallel()
	ctx := context.Background()
	dir := t.TempDir()
	for above := dir; above != os.TempDir() && above != "/"; above = filepath.Dir(above) {
		if err := os.Chmod(above, 0o711); err != nil {
			t.Fatal(err)
		}
	}
	dir = filepath.Join(dir, "data")
	c, err := postgres.Start(ctx, dir)
	if err != nil {
		t.Fatal(err)
	}
	applied, err := postgres.Migrate(ctx, c.OwnerURL())
	if err != nil || len(applied) == 0 {
		t.Fatalf("migrations %v: %v", applied, err)
	}
	if applied, err = postgres.Migrate(ctx, c.OwnerURL()); err != nil || len(applied) != 0 {
		t.Fatalf("second time: migrations %v: %v", applied, err)
	}
	if _, err := postgres.Start(ctx, dir); err == nil {
		t.Fatal("a second cluster started on the same folder")
	}
	exec(t, c.OwnerURL(), `CREATE TABLE kept (x integer)`)
	exec(t, c.OwnerURL(), `INSERT INTO kept VALUES (7)`)
	c.Kill()
	if c, err = postgres.Start(ctx, dir); err != nil {
		t.Fatalf("after a crash: %v", err)
	}
	conn, err := pgx.Connect(ctx, c.OwnerURL())
	if err != nil {
		t.Fatal(err)
	}
	var x int
	if err := conn.QueryRow(ctx, `SELECT x FROM kept`).Scan(&x); err != nil || x != 7 {
		t.Errorf("after a crash: %d, %v", x, err)
	}
	conn.Close(ctx)
	if err := c.Stop(); err != nil {
		t.Error(err)
	}
}

func exec(t *testing.T, url, query string) {
	t.Helper()
	ctx := context.Background()
	conn, err := pgx.Connect(ctx, url)
	if err != nil {
		t.Fatal(err)
	}
	defer conn.Close(ctx)
	if _, err := conn.Exec(ctx, query); err != nil {
		t.Fatal(err)
	}
}

// Every table belongs to labs and has forced row-level security.
func TestEveryTableBelongsToALab(t *testing.T) {
	t.Parallel()
	ctx := context.Background()
	owner, _ := postgres.TestDatabase(t)
	conn, err := pgx.Connect(ctx, owner)
	if err != nil {
		t.Fatal(err)
	}
	defer conn.Close(ctx)
	rows, err := conn.Query(ctx, `
		SELECT c.relname, c.relrowsecurity AND c.relforcerowsecurity AND EXISTS (
		           SELECT FROM pg_policy p WHERE p.polrelid = c.oid),
		       EXISTS (SELECT FROM pg_attribute a WHERE a.attrelid = c.oid AND a.attname = 'lab_id' AND a.attnotnull)
		FROM pg_class c WHERE c.relnamespace = 'public'::regnamespace AND c.relkind = 'r' AND c.relname <> 'goose_db_version'`)
	if err != nil {
		t.Fatal(err)
	}
	n := 0
	for rows.Next() {
		var name string
		var secured, hasLab bool
		if err := rows.Scan(&name, &secured, &hasLab); err != nil {
			t.Fatal(err)
		}
		n++
		if !secured || !hasLab {
			t.Errorf("table %s: row-level security %v, lab_id %v", name, secured, hasLab)
		}
	}
	if n < 15 {
		t.Errorf("only %d tables", n)
	}
}

// What others put where the socket's folder should be is not used.
func TestSocketFolderOfOthers(t *testing.T) {
	t.Parallel()
	ctx := context.Background()
	dir := filepath.Join(t.TempDir(), "data")
	socket := postgres.SocketFolder(dir)
	elsewhere := t.TempDir()
	if err := os.Symlink(elsewhere, socket); err != nil {
		t.Fatal(err)
	}
	t.Cleanup(func() { os.Remove(socket) })
	before, err := os.Stat(elsewhere)
	if err != nil {
		t.Fatal(err)
	}
	if _, err := postgres.Start(ctx, dir); err == nil || !strings.Contains(err.Error(), "belongs to somebody else") {
		t.Errorf("a link in place of the folder: %v", err)
	}
	after, err := os.Stat(elsewhere)
	if err != nil || before.Mode() != after.Mode() || before.Sys().(*syscall.Stat_t).Uid != after.Sys().(*syscall.Stat_t).Uid {
		t.Errorf("the folder behind the link was changed: %v, %v", after, err)
	}
}
