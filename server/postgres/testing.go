package postgres

import (
	"context"
	"database/sql"
	"fmt"
	"os"
	"path/filepath"
	"sync"
	"sync/atomic"
	"testing"
	"time"

	"github.com/jackc/pgx/v5"
	_ "github.com/jackc/pgx/v5/stdlib" // the database/sql driver for migrations

	"distal/migrations"
)

// Migrate applies the migrations as the owner.
func Migrate(ctx context.Context, ownerURL string) ([]int64, error) {
	db, err := sql.Open("pgx", ownerURL)
	if err != nil {
		return nil, err
	}
	defer db.Close()
	return migrations.Apply(ctx, db)
}

var (
	testCluster = sync.OnceValues(startTestCluster)
	testNumber  atomic.Int64
)

// sweep removes what earlier test binaries left: folders in which no cluster runs any more.
func sweep() {
	left, _ := filepath.Glob(filepath.Join(os.TempDir(), testFolder+"*"))
	for _, dir := range left {
		cluster := filepath.Join(dir, "postgres")
		info, err := os.Stat(dir)
		// A young folder may belong to a test that is just starting.
		if err != nil || time.Since(info.ModTime()) < 10*time.Minute || runningIn(filepath.Join(cluster, "cluster")) > 0 {
			continue
		}
		os.RemoveAll(dir)
		os.RemoveAll(socketFolder(cluster))
	}
}

// testFolder begins the names of the folders of test clusters.
const testFolder = "distal-test-"

// startTestCluster starts one cluster for the test binary, with a migrated
// template. It ends with the process (Pdeathsig); its folder is a temporary one.
func startTestCluster() (*Cluster, error) {
	ctx := context.Background()
	sweep()
	dir, err := os.MkdirTemp("", testFolder)
	if err != nil {
		return nil, err
	}
	if err := os.Chmod(dir, 0o711); err != nil {
		return nil, err
	}
	c, err := Start(ctx, filepath.Join(dir, "postgres"))
	if err != nil {
		return nil, err
	}
	_, err = Migrate(ctx, c.OwnerURL())
	return c, err
}

// TestDatabase is a fresh, migrated database in a cluster that the test binary
// shares. It gives the addresses of the owner and of the server.
func TestDatabase(t testing.TB) (ownerURL, serverURL string) {
	t.Helper()
	c, err := testCluster()
	if err != nil {
		t.Fatalf("private Postgres for tests: %v", err)
	}
	ctx, cancel := context.WithTimeout(context.Background(), time.Minute)
	defer cancel()
	name := fmt.Sprintf("test_%d", testNumber.Add(1))
	conn, err := pgx.Connect(ctx, c.url(ownerRole, "postgres"))
	if err != nil {
		t.Fatal(err)
	}
	defer conn.Close(ctx)
	templateLock.Lock()
	defer templateLock.Unlock()
	if err := c.createDatabase(ctx, conn, name, database); err != nil {
		t.Fatal(err)
	}
	return c.url(ownerRole, name), c.url(serverRole, name)
}

var templateLock sync.Mutex // a template cannot be copied twice at once
