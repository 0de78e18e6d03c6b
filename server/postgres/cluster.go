// Package postgres runs a private Postgres cluster from the installed Postgres
// programs: in a data folder of its own, listening on a local socket only.
// Start with Start.
package postgres

import (
	"bytes"
	"context"
	"crypto/sha256"
	"encoding/hex"
	"errors"
	"fmt"
	"net/url"
	"os"
	"os/exec"
	"os/user"
	"path/filepath"
	"sort"
	"strconv"
	"strings"
	"syscall"
	"time"

	"github.com/jackc/pgx/v5"
)

// Roles and database of a private cluster.
const (
	ownerRole  = "distal_owner"  // superuser: migrations, and the questions that come before the lab is known
	serverRole = "distal_server" // what the server connects as: no right to pass by row-level security
	database   = "distal"
)

// ErrNotInstalled says that no Postgres programs were found.
var ErrNotInstalled = errors.New("the Postgres programs are not installed: install the package postgresql (Debian: apt-get install postgresql), or name a server with --database")

// Cluster is a running private cluster.
type Cluster struct {
	dir     string
	socket  string
	bin     string
	command *exec.Cmd
	done    chan error
	log     *bytes.Buffer
}

// Start makes the cluster in dir if there is none, starts it and waits until it
// answers. Started as root it drops to the user postgres (or nobody), since
// Postgres refuses to run as root.
func Start(ctx context.Context, dir string) (*Cluster, error) {
	bin, err := findPrograms()
	if err != nil {
		return nil, err
	}
	dir, err = filepath.Abs(dir)
	if err != nil {
		return nil, err
	}
	c := &Cluster{dir: dir, bin: bin, socket: socketFolder(dir), done: make(chan error, 1), log: &bytes.Buffer{}}
	credential, err := unprivileged()
	if err != nil {
		return nil, err
	}
	if err := ownFolder(dir, credential); err != nil {
		return nil, err
	}
	if err := privateFolder(c.socket, credential); err != nil {
		return nil, err
	}
	if err := c.initialise(ctx, credential); err != nil {
		return nil, err
	}
	if err := c.launch(credential); err != nil {
		return nil, err
	}
	if err := c.await(ctx); err != nil {
		c.Stop()
		return nil, err
	}
	if err := c.prepare(ctx); err != nil {
		c.Stop()
		return nil, err
	}
	return c, nil
}

func findPrograms() (string, error) {
	folders, _ := filepath.Glob("/usr/lib/postgresql/*/bin")
	sort.Slice(folders, func(i, j int) bool { return version(folders[i]) > version(folders[j]) })
	if path, err := exec.LookPath("postgres"); err == nil {
		if resolved, err := filepath.EvalSymlinks(path); err == nil {
			folders = append(folders, filepath.Dir(resolved))
		}
	}
	for _, folder := range folders {
		if _, err := os.Stat(filepath.Join(folder, "initdb")); err == nil {
			return folder, nil
		}
	}
	return "", ErrNotInstalled
}

func version(folder string) int {
	n, _ := strconv.Atoi(filepath.Base(filepath.Dir(folder)))
	return n
}

// socketFolder is a short path: Unix sockets allow about 100 characters.
func socketFolder(dir string) string {
	sum := sha256.Sum256([]byte(dir))
	return filepath.Join(os.TempDir(), "distal-"+hex.EncodeToString(sum[:6]))
}

// unprivileged is the user to run Postgres as, nil to stay who we are.
func unprivileged() (*syscall.Credential, error) {
	if os.Getuid() != 0 {
		return nil, nil
	}
	for _, name := range []string{"postgres", "nobody"} {
		u, err := user.Lookup(name)
		if err != nil {
			continue
		}
		uid, _ := strconv.Atoi(u.Uid)
		gid, _ := strconv.Atoi(u.Gid)
		return &syscall.Credential{Uid: uint32(uid), Gid: uint32(gid)}, nil
	}
	return nil, errors.New("there is neither a user postgres nor nobody, and as root Postgres refuses to run: start distal as another user")
}

func ownFolder(folder string, credential *syscall.Credential) error {
	if err := os.MkdirAll(folder, 0o700); err != nil {
		return fmt.Errorf("make folder %s: %w", folder, err)
	}
	if credential == nil {
		return nil
	}
	if err := os.Chown(folder, int(credential.Uid), int(credential.Gid)); err != nil {
		return fmt.Errorf("hand folder %s to Postgres's user: %w", folder, err)
	}
	// Every folder above must let that user through.
	for above := filepath.Dir(folder); above != "/"; above = filepath.Dir(above) {
		info, err := os.Stat(above)
		if err != nil {
			return err
		}
		if info.Mode().Perm()&0o001 == 0 {
			if err := os.Chmod(above, info.Mode().Perm()|0o011); err != nil {
				return fmt.Errorf("let the user of Postgres reach %s: %w", folder, err)
			}
		}
	}
	return nil
}

// privateFolder makes the socket's folder, which nobody else may enter. Its name
// can be guessed and it stands where everybody may write: what is there already
// must be ours.
func privateFolder(path string, credential *syscall.Credential) error {
	if err := os.Mkdir(path, 0o700); err != nil && !errors.Is(err, os.ErrExist) {
		return fmt.Errorf("make folder %s for Postgres's socket: %w", path, err)
	}
	owner := os.Getuid()
	if credential != nil {
		owner = int(credential.Uid)
	}
	info, err := os.Lstat(path)
	if err != nil {
		return err
	}
	stat, ok := info.Sys().(*syscall.Stat_t)
	if !ok || !info.IsDir() || int(stat.Uid) != os.Getuid() && int(stat.Uid) != owner {
		return fmt.Errorf("%s is needed for Postgres's socket and belongs to somebody else: have it removed, or name another folder for temporary files in TMPDIR", path)
	}
	if err := os.Chmod(path, 0o700); err != nil {
		return fmt.Errorf("close folder %s to others: %w", path, err)
	}
	if credential != nil {
		if err := os.Lchown(path, owner, int(credential.Gid)); err != nil {
			return fmt.Errorf("hand folder %s to Postgres's user: %w", path, err)
		}
	}
	return nil
}

func (c *Cluster) run(credential *syscall.Credential, program string, args ...string) *exec.Cmd {
	command := exec.Command(filepath.Join(c.bin, program), args...)
	command.Dir = "/"
	command.Env = []string{"PATH=" + os.Getenv("PATH"), "LC_ALL=C.UTF-8", "TZ=UTC"}
	command.SysProcAttr = &syscall.SysProcAttr{Credential: credential, Setpgid: true}
	return command
}

func (c *Cluster) data() string { return filepath.Join(c.dir, "cluster") }

// initialise runs initdb unless there is a finished cluster.
func (c *Cluster) initialise(ctx context.Context, credential *syscall.Credential) error {
	if _, err := os.Stat(filepath.Join(c.data(), "PG_VERSION")); err == nil {
		return nil
	}
	// initdb works in a folder of its own, so that a half-made cluster is never used.
	fresh := c.data() + ".new"
	if err := os.RemoveAll(fresh); err != nil {
		return err
	}
	// Only processes of the folder's owner can reach the socket: its folder is 0700.
	command := c.run(credential, "initdb", "-D", fresh, "-U", ownerRole, "--auth-local=trust", "--auth-host=reject",
		"--encoding=UTF8", "--locale=C.UTF-8", "--data-checksums", "--no-instructions")
	if text, err := command.CombinedOutput(); err != nil {
		return fmt.Errorf("initdb: %w: %s", err, strings.TrimSpace(string(text)))
	}
	if err := ctx.Err(); err != nil {
		return err
	}
	return os.Rename(fresh, c.data())
}

func (c *Cluster) launch(credential *syscall.Credential) error {
	if err := c.clearStale(); err != nil {
		return err
	}
	command := c.run(credential, "postgres", "-D", c.data(), "-k", c.socket,
		"-c", "listen_addresses=", "-c", "unix_socket_permissions=0700", "-c", "synchronous_commit=on", "-c", "fsync=on",
		"-c", "shared_buffers=128MB", "-c", "max_connections=60", "-c", "wal_compression=on", "-c", "log_min_messages=warning")
	// The cluster must not outlive us: SIGINT is a fast, clean shutdown.
	command.SysProcAttr.Pdeathsig = syscall.SIGINT
	command.Stdout, command.Stderr = c.log, c.log
	started := make(chan error)
	go func() {
		// Pdeathsig follows the thread that started the process: keep it.
		lockThread()
		err := command.Start()
		started <- err
		if err == nil {
			c.done <- command.Wait()
		}
	}()
	if err := <-started; err != nil {
		return fmt.Errorf("start postgres: %w", err)
	}
	c.command = command
	return nil
}

// clearStale removes the pid file of a cluster that is no longer there and
// refuses to start beside one that is.
func (c *Cluster) clearStale() error {
	if pid := runningIn(c.data()); pid > 0 {
		return fmt.Errorf("the private Postgres of %s is already running (process %d): is another distal using this data folder?", c.dir, pid)
	}
	if err := os.Remove(filepath.Join(c.data(), "postmaster.pid")); err != nil && !errors.Is(err, os.ErrNotExist) {
		return err
	}
	return nil
}

// runningIn is the process that serves the cluster in folder data, 0 if none does.
func runningIn(data string) int {
	text, err := os.ReadFile(filepath.Join(data, "postmaster.pid"))
	if err != nil {
		return 0
	}
	pid, _ := strconv.Atoi(strings.TrimSpace(strings.SplitN(string(text), "\n", 2)[0]))
	if pid > 0 && isPostgres(pid) {
		return pid
	}
	return 0
}

func isPostgres(pid int) bool {
	text, err := os.ReadFile(fmt.Sprintf("/proc/%d/cmdline", pid))
	return err == nil && bytes.Contains(text, []byte("postgres"))
}

func (c *Cluster) await(ctx context.Context) error {
	ctx, cancel := context.WithTimeout(ctx, time.Minute)
	defer cancel()
	for {
		conn, err := pgx.Connect(ctx, c.url(ownerRole, "postgres"))
		if err == nil {
			return conn.Close(ctx)
		}
		select {
		case exit := <-c.done:
			c.done <- exit
			return fmt.Errorf("postgres ended while starting: %s", strings.TrimSpace(c.log.String()))
		case <-ctx.Done():
			return fmt.Errorf("postgres does not answer: %w", err)
		case <-time.After(30 * time.Millisecond):
		}
	}
}

// prepare makes database and roles.
func (c *Cluster) prepare(ctx context.Context) error {
	conn, err := pgx.Connect(ctx, c.url(ownerRole, "postgres"))
	if err != nil {
		return err
	}
	defer conn.Close(ctx)
	var found bool
	if err := conn.QueryRow(ctx, `SELECT EXISTS (SELECT FROM pg_roles WHERE rolname = $1)`, serverRole).Scan(&found); err != nil {
		return err
	}
	if !found {
		if _, err := conn.Exec(ctx, `CREATE ROLE `+serverRole+` LOGIN NOSUPERUSER NOBYPASSRLS`); err != nil {
			return err
		}
	}
	return c.createDatabase(ctx, conn, database, "template0")
}

func (c *Cluster) createDatabase(ctx context.Context, conn *pgx.Conn, name, template string) error {
	var found bool
	if err := conn.QueryRow(ctx, `SELECT EXISTS (SELECT FROM pg_database WHERE datname = $1)`, name).Scan(&found); err != nil {
		return err
	}
	if found {
		return nil
	}
	_, err := conn.Exec(ctx, `CREATE DATABASE `+pgx.Identifier{name}.Sanitize()+` TEMPLATE `+pgx.Identifier{template}.Sanitize())
	return err
}

func (c *Cluster) url(role, name string) string {
	return fmt.Sprintf("postgres://%s@/%s?host=%s", role, name, url.QueryEscape(c.socket))
}

// OwnerURL connects as the schema's owner, for migrations.
func (c *Cluster) OwnerURL() string { return c.url(ownerRole, database) }

// ServerURL connects as the server does.
func (c *Cluster) ServerURL() string { return c.url(serverRole, database) }

// Kill ends all of the cluster's processes at once, as a crash would. Tests use it.
func (c *Cluster) Kill() {
	pid := c.command.Process.Pid
	// Stopped, it makes no new processes; those that it has lead groups of their own.
	syscall.Kill(pid, syscall.SIGSTOP)
	children, _ := os.ReadFile(fmt.Sprintf("/proc/%d/task/%d/children", pid, pid))
	for _, child := range strings.Fields(string(children)) {
		if n, err := strconv.Atoi(child); err == nil {
			syscall.Kill(n, syscall.SIGKILL)
		}
	}
	syscall.Kill(pid, syscall.SIGKILL)
	c.done <- <-c.done
}

// Stop shuts the cluster down cleanly and waits for it.
func (c *Cluster) Stop() error {
	if c.command == nil {
		return nil
	}
	syscall.Kill(c.command.Process.Pid, syscall.SIGINT)
	select {
	case err := <-c.done:
		c.done <- err
		os.Remove(c.socket) // empty now
		var exit *exec.ExitError
		if errors.As(err, &exit) && exit.ExitCode() != 0 && exit.ExitCode() != -1 {
			return fmt.Errorf("postgres ended badly: %w", err)
		}
		return nil
	case <-time.After(20 * time.Second):
		syscall.Kill(-c.command.Process.Pid, syscall.SIGQUIT)
		return errors.New("postgres did not stop within 20 s and was ended")
	}
}
