package main

import (
	"context"
	"errors"
	"fmt"
	"os"
	"path/filepath"

	"distal/server/postgres"
	"distal/server/site"
	"distal/server/store"
)

// connection says which database a command works on.
type connection struct {
	Data     string `default:".distal/data" env:"DISTAL_DATA" help:"Data folder: private Postgres and the server's secret."`
	Database string `env:"DISTAL_DATABASE" help:"Address of a Postgres server (role of the server); without it a private Postgres runs in the data folder."`
	Owner    string `env:"DISTAL_DATABASE_OWNER" help:"Address of the same database as its owner, for migrations."`
}

// open connects and migrates; end closes everything again.
func (c *connection) open(ctx context.Context) (s *store.Store, end func() error, err error) {
	serverURL, ownerURL := c.Database, c.Owner
	stop := func() error { return nil }
	if serverURL == "" {
		cluster, err := postgres.Start(ctx, filepath.Join(c.Data, "postgres"))
		if err != nil {
			return nil, nil, err
		}
		serverURL, ownerURL, stop = cluster.ServerURL(), cluster.OwnerURL(), cluster.Stop
	}
	if ownerURL != "" {
		if _, err := postgres.Migrate(ctx, ownerURL); err != nil {
			return nil, nil, errors.Join(err, stop())
		}
	}
	s, err = store.Open(ctx, serverURL)
	if err != nil {
		return nil, nil, errors.Join(err, stop())
	}
	return s, func() error {
		s.Close()
		return stop()
	}, nil
}

// secret opens the server's secret in the data folder.
func (c *connection) secret() (*site.Secret, error) {
	return site.OpenSecret(filepath.Join(c.Data, "secret"))
}

type migrateCommand struct {
	connection `embed:""`
}

func (c *migrateCommand) Run(ctx context.Context) error {
	ownerURL := c.Owner
	if c.Database == "" {
		cluster, err := postgres.Start(ctx, filepath.Join(c.Data, "postgres"))
		if err != nil {
			return err
		}
		defer cluster.Stop()
		ownerURL = cluster.OwnerURL()
	}
	if ownerURL == "" {
		return errors.New("--owner is needed: migrations run as the owner of the database")
	}
	applied, err := postgres.Migrate(ctx, ownerURL)
	if err != nil {
		return err
	}
	if len(applied) == 0 {
		fmt.Println("The schema is up to date.")
	}
	for _, n := range applied {
		fmt.Printf("applied migration %05d\n", n)
	}
	return nil
}

// removeData deletes a data folder after making sure that it is one of ours.
func removeData(dir string) error {
	if _, err := os.Stat(filepath.Join(dir, "secret")); err != nil {
		if _, err := os.Stat(filepath.Join(dir, "postgres")); err != nil {
			return nil
		}
	}
	return os.RemoveAll(dir)
}
