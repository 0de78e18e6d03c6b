package main

import (
	"context"
	"errors"
	"fmt"
	"log/slog"
	"net"
	"net/http"
	"net/url"
	"os"
	"strings"
	"time"

	"github.com/google/uuid"
	"github.com/labstack/echo/v4"

	"distal/server/access"
	"distal/server/participation"
	"distal/server/site"
	"distal/server/store"
	"distal/server/workspace"
	"distal/web"
)

type serveCommand struct {
	connection `embed:""`

	Listen string `default:"localhost:8080" env:"DISTAL_LISTEN" help:"Address to listen on."`
	Origin string `env:"DISTAL_ORIGIN" help:"Where browsers reach the server, e.g. https://study.lab.example; without it http://localhost with the port."`
}

// Help gives an example.
func (*serveCommand) Help() string {
	return "Example: distal serve --listen localhost:8080 --origin https://study.lab.example\n\nPut a proxy with TLS in front: browsers measure time finely and keep secrets only on https or localhost."
}

func (c *serveCommand) Run(ctx context.Context) error {
	s, end, err := c.open(ctx)
	if err != nil {
		return err
	}
	listener, err := listen(ctx, c.Listen)
	if err != nil {
		return errors.Join(err, end())
	}
	origin := c.Origin
	if origin == "" {
		origin = localOrigin(listener)
	}
	app, err := c.newApp(s, origin)
	if err != nil {
		return errors.Join(err, end())
	}
	fmt.Printf("Serving %s. Ctrl-C stops.\n", origin)
	return errors.Join(app.serve(ctx, listener), end())
}

// listen opens the port, with a clear message when it is taken.
func listen(ctx context.Context, address string) (net.Listener, error) {
	var config net.ListenConfig
	l, err := config.Listen(ctx, "tcp", address)
	if err != nil {
		return nil, fmt.Errorf("cannot listen on %s: %w (is another program using the port? name another with --listen or --port)", address, err)
	}
	return l, nil
}

func localOrigin(l net.Listener) string {
	_, port, _ := net.SplitHostPort(l.Addr().String())
	return "http://localhost:" + port
}

// app is the server with everything wired.
type app struct {
	store     *store.Store
	people    *participation.Service
	ring      *site.Ring
	tokens    access.Tokens
	workspace *workspace.Service
	echo      *echo.Echo
	origin    string
	log       *slog.Logger
}

func (c *connection) newApp(s *store.Store, origin string) (*app, error) {
	u, err := url.Parse(origin)
	if err != nil || u.Host == "" || u.Scheme != "http" && u.Scheme != "https" {
		return nil, fmt.Errorf("--origin %q: an address such as https://study.lab.example is expected", origin)
	}
	secret, err := c.secret()
	if err != nil {
		return nil, err
	}
	assets, err := web.Assets()
	if err != nil {
		return nil, err
	}
	origin = strings.TrimSuffix(origin, "/")
	a := &app{store: s, origin: origin, log: slog.New(slog.NewTextHandler(os.Stderr, &slog.HandlerOptions{Level: slog.LevelWarn}))}
	a.ring = &site.Ring{Store: s, Secret: secret, Now: time.Now}
	a.tokens = access.Tokens{Keys: a.ring, Issuer: "distal", Now: time.Now}
	secure := u.Scheme == "https"
	a.workspace = &workspace.Service{Store: s, Tokens: a.tokens, Keys: a.ring, Assets: assets, Origin: origin, Secure: secure, Log: a.log, Now: time.Now}
	a.people = &participation.Service{Store: s, Tokens: a.tokens, Assets: assets, Secure: secure, Completed: a.judge}
	a.echo = site.New(a.log, a.workspace.ErrorPage, secure)
	a.people.Routes(a.echo)
	a.workspace.Routes(a.echo)
	a.echo.GET("/healthz", func(c echo.Context) error {
		if err := s.Ping(c.Request().Context()); err != nil {
			return err
		}
		return c.String(http.StatusOK, "ok\n")
	})
	return a, nil
}

// judge applies the study's exclusion rules to a run that has just ended.
func (a *app) judge(lab, study, run uuid.UUID) {
	ctx, cancel := context.WithTimeout(context.Background(), time.Minute)
	defer cancel()
	if err := a.workspace.Judge(ctx, lab, run); err != nil {
		a.log.Error("exclusion rules", "run", run, "error", err)
	}
}

// signInLink makes a link that signs a person in once.
func (a *app) signInLink(ctx context.Context, lab, person uuid.UUID) (string, error) {
	token, _, err := a.tokens.Issue(ctx, access.AudienceSignIn, lab, uuid.Nil, person)
	if err != nil {
		return "", err
	}
	return a.origin + "/sign-in/" + token, nil
}

// serve answers until ctx ends, then lets requests under way finish.
func (a *app) serve(ctx context.Context, listener net.Listener) error {
	ctx, cancel := context.WithCancel(ctx)
	defer cancel()
	go a.workspace.Watch(ctx)
	server := a.echo.Server
	server.Handler = a.echo
	failed := make(chan error, 1)
	go func() { failed <- server.Serve(listener) }()
	select {
	case err := <-failed:
		return err
	case <-ctx.Done():
	}
	cancel()
	last, end := context.WithTimeout(context.Background(), 5*time.Second)
	defer end()
	if err := server.Shutdown(last); err != nil {
		server.Close()
	}
	return nil
}
