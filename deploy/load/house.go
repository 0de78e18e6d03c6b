package main

import (
	"bytes"
	"context"
	"fmt"
	"net"
	"net/http"
	"os"
	"os/exec"
	"path/filepath"
	"runtime"
	"strings"
	"syscall"
	"time"

	"github.com/google/uuid"

	"distal/experiments/study"
	"distal/server/bundle"
	"distal/server/postgres"
	"distal/server/site"
	"distal/server/store"
	"distal/web"
)

// house is a server with its database, each of which can be killed.
type house struct {
	dir     string
	cluster *postgres.Cluster
	address string // host:port of the server
	program string
	server  *exec.Cmd
	log     bytes.Buffer
	link    string // of the study
	bundle  string // its digest
}

// openHouse builds the program, starts Postgres, launches st and starts the server.
func openHouse(ctx context.Context, st *study.Study) (h *house, err error) {
	h = &house{}
	defer func() {
		if err != nil {
			h.close()
		}
	}()
	if h.dir, err = os.MkdirTemp("", "distal-load-"); err != nil {
		return h, err
	}
	if err = os.Chmod(h.dir, 0o711); err != nil {
		return h, err
	}
	h.program = filepath.Join(h.dir, "distal")
	if text, err := exec.CommandContext(ctx, "go", "build", "-o", h.program, "distal/server").CombinedOutput(); err != nil {
		return h, fmt.Errorf("build the server: %w: %s", err, text)
	}
	if h.cluster, err = postgres.Start(ctx, h.data()); err != nil {
		return h, err
	}
	if _, err = postgres.Migrate(ctx, h.cluster.OwnerURL()); err != nil {
		return h, err
	}
	if err = h.launch(ctx, st); err != nil {
		return h, err
	}
	if h.address, err = freeAddress(); err != nil {
		return h, err
	}
	return h, h.startServer(ctx)
}

func (h *house) data() string { return filepath.Join(h.dir, "postgres") }

// launch makes a lab and opens the study, with the key that the server will find.
func (h *house) launch(ctx context.Context, st *study.Study) error {
	s, err := store.Open(ctx, h.cluster.ServerURL())
	if err != nil {
		return err
	}
	defer s.Close()
	secret, err := site.OpenSecret(filepath.Join(h.dir, "secret"))
	if err != nil {
		return err
	}
	lab, err := s.CreateLab(ctx, "Load drill", secret.Seal)
	if err != nil {
		return err
	}
	person, err := s.CreatePerson(ctx, lab, uuid.Nil, store.Person{Name: "Load Drill", Email: "drill@lab.example", Role: store.RoleResearcher})
	if err != nil {
		return err
	}
	built, err := web.Assets()
	if err != nil {
		return err
	}
	digests := map[string]string{}
	var assets []web.Asset
	for _, name := range []string{bundle.AssetEngine, bundle.AssetScript, bundle.AssetStyle} {
		digests[name] = built[name].Digest
		assets = append(assets, built[name])
	}
	b, err := bundle.Assemble(st, digests)
	if err != nil {
		return err
	}
	ring := &site.Ring{Store: s, Secret: secret, Now: time.Now}
	key, err := ring.SigningKey(ctx, lab)
	if err != nil {
		return err
	}
	signed, err := b.Sign(key, time.Now())
	if err != nil {
		return err
	}
	h.link, h.bundle = "load-drill", b.Digest
	_, err = s.LaunchStudy(ctx, lab, person, h.link, b, signed, assets)
	return err
}

func freeAddress() (string, error) {
	l, err := net.Listen("tcp", "127.0.0.1:0")
	if err != nil {
		return "", err
	}
	defer l.Close()
	return l.Addr().String(), nil
}

// startServer starts the server and waits until it answers.
func (h *house) startServer(ctx context.Context) error {
	h.server = exec.Command(h.program, "serve", "--database", h.cluster.ServerURL(), "--data", h.dir, "--listen", h.address)
	h.server.Stdout, h.server.Stderr = &h.log, &h.log
	h.server.SysProcAttr = &syscall.SysProcAttr{Pdeathsig: syscall.SIGKILL}
	started := make(chan error)
	go func() {
		runtime.LockOSThread() // the server dies with the thread that started it
		err := h.server.Start()
		started <- err
		if err == nil {
			select {} // for as long as we live
		}
	}()
	if err := <-started; err != nil {
		return fmt.Errorf("start the server: %w", err)
	}
	for deadline := time.Now().Add(time.Minute); time.Now().Before(deadline) && ctx.Err() == nil; time.Sleep(20 * time.Millisecond) {
		answer, err := http.Get("http://" + h.address + "/healthz")
		if err != nil {
			continue
		}
		answer.Body.Close()
		if answer.StatusCode == http.StatusOK {
			return nil
		}
	}
	h.killServer()
	return fmt.Errorf("the server does not answer: %s", strings.TrimSpace(h.log.String()))
}

// killServer ends the server as a crash would.
func (h *house) killServer() {
	h.server.Process.Kill()
	h.server.Wait()
	h.server = nil
}

// crashServer kills the server and starts it again.
func (h *house) crashServer(ctx context.Context) error {
	h.killServer()
	return h.startServer(ctx)
}

// crashPostgres kills Postgres and starts it again.
func (h *house) crashPostgres(ctx context.Context) (err error) {
	h.cluster.Kill()
	h.cluster, err = postgres.Start(ctx, h.data())
	return err
}

func (h *house) close() {
	if h.server != nil {
		h.killServer()
	}
	if h.cluster != nil {
		h.cluster.Stop()
	}
	if h.dir != "" {
		os.RemoveAll(h.dir)
	}
}
