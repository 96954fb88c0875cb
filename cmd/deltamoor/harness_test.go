package main

import (
	"bufio"
	"bytes"
	"encoding/json"
	"errors"
	"flag"
	"fmt"
	"io"
	"net/http"
	"os"
	"os/exec"
	"path/filepath"
	"regexp"
	"strings"
	"syscall"
	"testing"
	"time"

	"github.com/google/go-cmp/cmp"
	"github.com/rogpeppe/go-internal/testscript"

	"deltamoor/store/storetest"
)

var update = flag.Bool("update", false, "rewrite the files that scripts compare with")

// withCluster gives a Postgres that tests started back at the end.
type withCluster struct{ m *testing.M }

func (w withCluster) Run() int { return storetest.Main(w.m) }

// A server is `deltamoor serve` in a process of its own.
type server struct {
	url     string
	process *exec.Cmd
	log     *bytes.Buffer
	read    chan struct{} // closed when its output has ended
}

// startServer starts a server on a free port and waits for its address.
func startServer(env []string, dir string, args ...string) (*server, error) {
	s := &server{process: exec.Command("deltamoor", append([]string{"serve", "--listen", "127.0.0.1:0"}, args...)...), log: &bytes.Buffer{}, read: make(chan struct{})}
	s.process.Env, s.process.Dir, s.process.Stderr = env, dir, s.log
	// It dies with the test binary, however that ends.
	s.process.SysProcAttr = &syscall.SysProcAttr{Pdeathsig: syscall.SIGKILL}
	out, err := s.process.StdoutPipe()
	if err != nil {
		return nil, err
	}
	if err := s.process.Start(); err != nil {
		return nil, err
	}
	reader := bufio.NewReader(out)
	line, err := reader.ReadString('\n')
	address, ok := strings.CutPrefix(strings.TrimSpace(line), "serving on ")
	go func() {
		defer close(s.read)
		_, _ = io.Copy(io.Discard, reader)
	}()
	if err != nil || !ok {
		_ = s.process.Process.Kill()
		<-s.read
		return nil, errors.Join(fmt.Errorf("serve printed %q and logged %s", line, s.log), err, s.process.Wait())
	}
	s.url = address
	return s, nil
}

// end sends a signal and waits for the process.
func (s *server) end(signal os.Signal) error {
	_ = s.process.Process.Signal(signal)
	<-s.read
	return s.process.Wait()
}

// serving starts a server for a test; at the end it has to end in good order.
func serving(t testing.TB, args ...string) *server {
	t.Helper()
	s, err := startServer(cleanEnvironment(), t.TempDir(), args...)
	if err != nil {
		t.Fatal(err)
	}
	t.Cleanup(func() {
		if s.process.ProcessState != nil {
			return // the test has ended it
		}
		if err := s.end(syscall.SIGTERM); err != nil {
			t.Errorf("serve: %v\n%s", err, s.log)
		}
	})
	return s
}

// cleanEnvironment is the environment without what configures the program.
func cleanEnvironment() []string { return withoutVariables(os.Environ(), variablePrefix) }

// answered is one answer over HTTP.
type answered struct {
	status int
	body   []byte
}

// ask sends one request. Header names and values alternate.
func ask(method, url, token string, body []byte, headers ...string) (answered, error) {
	r, err := http.NewRequest(method, url, bytes.NewReader(body))
	if err != nil {
		return answered{}, err
	}
	if token != "" {
		r.Header.Set("Authorization", "Bearer "+token)
	}
	r.Header.Set("Content-Type", "application/json")
	for i := 0; i+1 < len(headers); i += 2 {
		r.Header.Set(headers[i], headers[i+1])
	}
	client := http.Client{Timeout: 30 * time.Second}
	a, err := client.Do(r)
	if err != nil {
		return answered{}, err
	}
	defer a.Body.Close()
	text, err := io.ReadAll(a.Body)
	return answered{a.StatusCode, text}, err
}

// initRegistry makes a registry by the command line and returns the token.
func initRegistry(t testing.TB, args ...string) string {
	t.Helper()
	status, stdout, stderr := call(t.Context(), nil, "", append([]string{"init", "--json", "--laboratory", "FJO", "--name", "Fjordane isotope bench", "--person", "mara", "--person-name", "Mara Lind"}, args...)...)
	var answer initAnswer
	if err := json.Unmarshal([]byte(stdout), &answer); status != statusDone || err != nil {
		t.Fatalf("init: status %d, %v: %s", status, err, stderr)
	}
	return answer.Token
}

// Commands of the scripts beside those of testscript.
func scriptCommands() map[string]func(*testscript.TestScript, bool, []string) {
	return map[string]func(*testscript.TestScript, bool, []string){
		"status": status, "capture": capture, "mask": mask, "serve": scriptServe, "http": scriptHTTP, "mode": mode, "samejson": sameJSON,
	}
}

// capture NAME REGEXP sets a variable to what the first group of the
// expression matches in stdout.
func capture(ts *testscript.TestScript, neg bool, args []string) {
	if neg || len(args) != 2 {
		ts.Fatalf("usage: capture NAME REGEXP")
	}
	found := regexp.MustCompile(args[1]).FindStringSubmatch(ts.ReadFile("stdout"))
	if len(found) != 2 {
		ts.Fatalf("stdout does not match %s with one group", args[1])
	}
	ts.Setenv(args[0], found[1])
}

// What differs from run to run, and what stands for it: as wide, so that
// columns and line breaks stay.
var masks = []struct {
	pattern *regexp.Regexp
	mask    string
}{
	{regexp.MustCompile(`dm_FJO_[A-Za-z0-9_-]{43}`), "dm_FJO_" + strings.Repeat("s", 43)},
	{regexp.MustCompile(`\b([DVCSRBPT])[0-9A-HJKMNP-TV-Z]{4}-[0-9A-HJKMNP-TV-Z]{5}\b`), "${1}cccc-ccccc"},
	{regexp.MustCompile(`\b([DVCSRBPT])[0-9A-HJKMNP-TV-Z]{9}/`), "${1}ccccccccc/"},
	{regexp.MustCompile(`\b[0-9a-f]{64}\b`), strings.Repeat("h", 64)},
	{regexp.MustCompile(`\b20[0-9]{2}-[0-9]{2}-[0-9]{2} [0-9]{2}:[0-9]{2}\b`), "YYYY-MM-DD hh:mm"},
	{regexp.MustCompile(`\b20(2[6-9]|[3-9][0-9])-[0-9]{2}-[0-9]{2}\b`), "YYYY-MM-DD"}, // values hold since earlier
	{regexp.MustCompile(`127\.0\.0\.1:[0-9]+`), "127.0.0.1:PORT"},
}

// mask rewrites stdout for a comparison with a file of the script.
func mask(ts *testscript.TestScript, neg bool, args []string) {
	if neg || len(args) != 0 {
		ts.Fatalf("usage: mask")
	}
	text := ts.ReadFile("stdout")
	for _, m := range masks {
		text = m.pattern.ReplaceAllString(text, m.mask)
	}
	if _, err := io.WriteString(ts.Stdout(), text); err != nil {
		ts.Fatalf("%v", err)
	}
}

// serve ARGS… starts a server, sets URL, and ends it with the script, when it
// has to end in good order.
func scriptServe(ts *testscript.TestScript, neg bool, args []string) {
	if neg {
		ts.Fatalf("usage: serve [args…]")
	}
	env := cleanEnvironment()
	s, err := startServer(env, ts.Getenv("WORK"), args...)
	ts.Check(err)
	ts.Setenv("URL", s.url)
	ts.Defer(func() {
		if err := s.end(syscall.SIGTERM); err != nil {
			panic(fmt.Sprintf("serve: %v\n%s", err, s.log))
		}
	})
}

// http STATUS METHOD PATH [BODY [HEADER VALUE]…] asks as $TOKEN and prints the
// answer. BODY is a text, or @ and the name of a file.
func scriptHTTP(ts *testscript.TestScript, neg bool, args []string) {
	if neg || len(args) < 3 {
		ts.Fatalf("usage: http STATUS METHOD PATH [BODY [HEADER VALUE]…]")
	}
	var body []byte
	var headers []string
	if len(args) > 3 {
		body, headers = []byte(args[3]), args[4:]
		if name, ok := strings.CutPrefix(args[3], "@"); ok {
			body = []byte(ts.ReadFile(name))
		}
	}
	a, err := ask(args[1], ts.Getenv("URL")+args[2], ts.Getenv("TOKEN"), body, headers...)
	ts.Check(err)
	if _, err := ts.Stdout().Write(a.body); err != nil {
		ts.Fatalf("%v", err)
	}
	if fmt.Sprint(a.status) != args[0] {
		ts.Fatalf("status %d, want %s: %s", a.status, args[0], a.body)
	}
}

// samejson FILE FILE compares what two JSON texts say, whatever their white space.
func sameJSON(ts *testscript.TestScript, neg bool, args []string) {
	if neg || len(args) != 2 {
		ts.Fatalf("usage: samejson FILE FILE")
	}
	var values [2]any
	for i, name := range args {
		ts.Check(json.Unmarshal([]byte(ts.ReadFile(name)), &values[i]))
	}
	if diff := cmp.Diff(values[0], values[1]); diff != "" {
		ts.Fatalf("%s and %s differ (-first +second)\n%s", args[0], args[1], diff)
	}
}

// mode OCTAL FILE checks permissions.
func mode(ts *testscript.TestScript, neg bool, args []string) {
	if neg || len(args) != 2 {
		ts.Fatalf("usage: mode OCTAL FILE")
	}
	info, err := os.Stat(ts.MkAbs(args[1]))
	ts.Check(err)
	if got := fmt.Sprintf("%04o", info.Mode().Perm()); got != args[0] {
		ts.Fatalf("%s has mode %s, want %s", filepath.Base(args[1]), got, args[0])
	}
}
