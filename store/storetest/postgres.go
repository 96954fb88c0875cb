package storetest

import (
	"bytes"
	"context"
	"database/sql"
	"errors"
	"fmt"
	"net/url"
	"os"
	"os/exec"
	"os/user"
	"path/filepath"
	"runtime"
	"slices"
	"strconv"
	"strings"
	"sync"
	"syscall"
	"testing"
	"time"

	_ "github.com/jackc/pgx/v5/stdlib" // the driver "pgx"

	"deltamoor/store"
)

// template is the database every other is copied from.
const template = "template_deltamoor"

// prefix of the directories of clusters; socket paths must stay below 108 bytes.
const prefix = "deltamoor-pg-"

// A Cluster is a running Postgres of the test binary's own.
type Cluster struct {
	programs   string // directory of initdb and postgres
	directory  string
	credential *syscall.Credential // who runs it; nil: whoever runs the tests

	mu      sync.Mutex
	command *exec.Cmd
	exited  chan struct{}
	output  bytes.Buffer
}

// shared is the cluster of this test binary. A cluster takes most of a second to
// start, so tests share it; nothing else does.
var shared struct {
	sync.Mutex
	cluster *Cluster
	err     error
	tried   bool
}

// programs finds the directory of the newest installed server.
func programs() (string, error) {
	found, err := filepath.Glob("/usr/lib/postgresql/*/bin/initdb")
	if err != nil {
		return "", err
	}
	slices.SortFunc(found, func(a, b string) int { return version(b) - version(a) })
	if path, err := exec.LookPath("initdb"); err == nil {
		found = append(found, path)
	}
	for _, path := range found {
		directory := filepath.Dir(path)
		if _, err := os.Stat(filepath.Join(directory, "postgres")); err == nil {
			return directory, nil
		}
	}
	return "", errors.New("no Postgres server is installed (looked for initdb in /usr/lib/postgresql/*/bin and PATH)")
}

func version(path string) int {
	n, _ := strconv.Atoi(filepath.Base(filepath.Dir(filepath.Dir(path))))
	return n
}

// cluster starts the cluster on first use.
func cluster(t testing.TB) *Cluster {
	t.Helper()
	shared.Lock()
	defer shared.Unlock()
	if !shared.tried {
		shared.tried = true
		shared.cluster, shared.err = startCluster()
	}
	if shared.err != nil {
		t.Fatalf("start Postgres: %v", shared.err)
	}
	return shared.cluster
}

// Main runs the tests and gives the cluster back.
func Main(m *testing.M) int {
	code := m.Run()
	shared.Lock()
	defer shared.Unlock()
	if shared.cluster != nil {
		if err := shared.cluster.remove(); err != nil {
			fmt.Fprintln(os.Stderr, "stop Postgres:", err)
			code = max(code, 1)
		}
		shared.cluster = nil
	}
	return code
}

func startCluster() (*Cluster, error) {
	c := &Cluster{}
	var err error
	if c.programs, err = programs(); err != nil {
		return nil, err
	}
	if os.Geteuid() == 0 {
		// The server refuses to run as root.
		if c.credential, err = postgresUser(); err != nil {
			return nil, err
		}
	}
	removeStale()
	if c.directory, err = os.MkdirTemp("/tmp", prefix); err != nil {
		return nil, err
	}
	if c.credential != nil {
		if err := os.Chown(c.directory, int(c.credential.Uid), int(c.credential.Gid)); err != nil {
			return nil, errors.Join(err, os.RemoveAll(c.directory))
		}
	}
	if err := c.init(); err != nil {
		return nil, errors.Join(err, c.remove())
	}
	return c, nil
}

func postgresUser() (*syscall.Credential, error) {
	u, err := user.Lookup("postgres")
	if err != nil {
		return nil, fmt.Errorf("tests run as root, and Postgres does not: %w", err)
	}
	uid, err := strconv.ParseUint(u.Uid, 10, 32)
	if err != nil {
		return nil, err
	}
	gid, err := strconv.ParseUint(u.Gid, 10, 32)
	if err != nil {
		return nil, err
	}
	return &syscall.Credential{Uid: uint32(uid), Gid: uint32(gid)}, nil
}

// removeStale removes directories of clusters whose test binary died.
func removeStale() {
	old, _ := filepath.Glob(filepath.Join("/tmp", prefix+"*"))
	for _, directory := range old {
		info, err := os.Stat(directory)
		if err != nil || time.Since(info.ModTime()) < time.Minute {
			continue // perhaps about to start
		}
		text, err := os.ReadFile(filepath.Join(directory, "data", "postmaster.pid"))
		if err == nil {
			line, _, _ := strings.Cut(string(text), "\n")
			pid, err := strconv.Atoi(strings.TrimSpace(line))
			if err != nil || syscall.Kill(pid, 0) != syscall.ESRCH {
				continue // still running
			}
		}
		_ = os.RemoveAll(directory) // another test binary may be removing it too
	}
}

func (c *Cluster) data() string { return filepath.Join(c.directory, "data") }

func (c *Cluster) init() error {
	initdb := exec.Command(filepath.Join(c.programs, "initdb"), "-D", c.data(), "-U", "registry", "-A", "trust",
		"--no-sync", "--no-locale", "-E", "UTF8", "--no-instructions")
	initdb.SysProcAttr = &syscall.SysProcAttr{Credential: c.credential}
	initdb.Dir = c.directory
	if out, err := initdb.CombinedOutput(); err != nil {
		return fmt.Errorf("initdb: %w\n%s", err, out)
	}
	if err := c.Start(); err != nil {
		return err
	}
	if err := c.exec(`CREATE DATABASE ` + template + ` TEMPLATE template0`); err != nil {
		return err
	}
	s, err := store.Open(context.Background(), store.Options{Database: c.url(template), Migrate: true})
	if err != nil {
		return err
	}
	return s.Close()
}

// Start starts the server, again after a Kill.
func (c *Cluster) Start() error {
	fsync := "off"
	if os.Getenv("DELTAMOOR_TEST_FSYNC") == "on" {
		fsync = "on"
	}
	command := exec.Command(filepath.Join(c.programs, "postgres"), "-D", c.data(), "-k", c.directory, "-c", "listen_addresses=",
		"-c", "fsync="+fsync, "-c", "max_connections=200", "-c", "shared_buffers=64MB", "-c", "log_min_messages=fatal")
	command.Dir = c.directory
	// SIGQUIT is the immediate shutdown, after which nothing is left running.
	command.SysProcAttr = &syscall.SysProcAttr{Credential: c.credential, Pdeathsig: syscall.SIGQUIT}
	command.Stdout, command.Stderr = &c.output, &c.output

	started := make(chan error)
	exited := make(chan struct{})
	go func() {
		// The signal comes when the thread that started the server ends, so that
		// thread must last as long as the server.
		runtime.LockOSThread()
		defer runtime.UnlockOSThread()
		err := command.Start()
		started <- err
		if err == nil {
			_ = command.Wait() // how it ended is no news after a kill
		}
		close(exited)
	}()
	if err := <-started; err != nil {
		return fmt.Errorf("start postgres: %w", err)
	}
	c.mu.Lock()
	c.command, c.exited = command, exited
	c.mu.Unlock()

	db, err := sql.Open("pgx", c.url("postgres"))
	if err != nil {
		return err
	}
	defer db.Close()
	for range 600 {
		if err = db.Ping(); err == nil {
			return nil
		}
		select {
		case <-exited:
			return fmt.Errorf("postgres ended at once:\n%s", c.output.String())
		case <-time.After(20 * time.Millisecond):
		}
	}
	return fmt.Errorf("postgres does not answer: %w", err)
}

// Kill ends the server at once, as a crash would: nothing is written any more.
// A SIGKILL of the first process alone would leave others holding the directory
// for a moment, so it sends SIGQUIT, which ends all of them without a word to the disk.
func (c *Cluster) Kill() error {
	c.mu.Lock()
	command, exited := c.command, c.exited
	c.command = nil
	c.mu.Unlock()
	if command == nil {
		return nil
	}
	if err := command.Process.Signal(syscall.SIGQUIT); err != nil && !errors.Is(err, os.ErrProcessDone) {
		return err
	}
	<-exited
	return nil
}

func (c *Cluster) remove() error {
	return errors.Join(c.Kill(), os.RemoveAll(c.directory))
}

// url names a database of the cluster, reached by its socket.
func (c *Cluster) url(database string) string {
	q := url.Values{"host": {c.directory}, "user": {"registry"}, "sslmode": {"disable"}}
	return "postgres:///" + database + "?" + q.Encode()
}

func (c *Cluster) exec(statement string) error {
	db, err := sql.Open("pgx", c.url("postgres"))
	if err != nil {
		return err
	}
	defer db.Close()
	if _, err := db.Exec(statement); err != nil {
		return fmt.Errorf("%s: %w", statement, err)
	}
	return nil
}

// create makes a database and drops it at the end of the test.
func (c *Cluster) create(t testing.TB, name, from string) string {
	t.Helper()
	if err := c.exec(`CREATE DATABASE ` + name + ` TEMPLATE ` + from); err != nil {
		t.Fatal(err)
	}
	t.Cleanup(func() {
		if err := c.exec(`DROP DATABASE IF EXISTS ` + name + ` WITH (FORCE)`); err != nil {
			t.Log(err) // a test may have killed the server
		}
	})
	return c.url(name)
}

// PrivateCluster starts a cluster of the test's own, to be killed; skipped like
// Engines where no server is installed.
func PrivateCluster(t testing.TB) (*Cluster, string) {
	t.Helper()
	if !slices.Contains(Engines(t), Postgres) {
		t.Skip("no Postgres server is installed")
	}
	c, err := startCluster()
	if err != nil {
		t.Fatalf("start Postgres: %v", err)
	}
	t.Cleanup(func() {
		if err := c.remove(); err != nil {
			t.Error(err)
		}
	})
	return c, c.url(template)
}
