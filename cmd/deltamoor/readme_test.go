package main

import (
	"bytes"
	"context"
	"encoding/json"
	"fmt"
	"io"
	"os"
	"os/exec"
	"path/filepath"
	"regexp"
	"slices"
	"strings"
	"testing"
	"time"
)

// readmeBlocks are the fenced blocks of README.md that follow <!-- mark -->.
func readmeBlocks(t *testing.T, mark string) []string {
	t.Helper()
	text, err := os.ReadFile(filepath.Join("..", "..", "README.md"))
	if err != nil {
		t.Fatal(err)
	}
	blocks := regexp.MustCompile("(?s)<!-- "+regexp.QuoteMeta(mark)+" -->\n```sh\n(.*?)```").FindAllStringSubmatch(string(text), -1)
	if len(blocks) == 0 {
		t.Fatalf("README.md has no block marked %q", mark)
	}
	out := make([]string, len(blocks))
	for i, b := range blocks {
		out[i] = b[1]
	}
	return out
}

// needs skips, or fails where DELTAMOOR_TEST_REQUIRE asks for it, when a program is not installed.
func needs(t *testing.T, program string) {
	t.Helper()
	if _, err := exec.LookPath(program); err == nil {
		return
	}
	if slices.Contains(strings.Split(os.Getenv("DELTAMOOR_TEST_REQUIRE"), ","), program) {
		t.Fatalf("%s is required and not installed", program)
	}
	t.Skipf("%s is not installed: the walk of README.md is not walked", program)
}

// A running is a server in this process, on a free port of the loopback.
type running struct {
	url  string
	stop func() int
}

// startServe runs `serve` on a data folder until stop is called.
func startServe(t *testing.T, folder string) running {
	t.Helper()
	ctx, cancel := context.WithCancel(context.Background())
	reader, writer := io.Pipe()
	status := make(chan int, 1)
	go func() {
		status <- run(ctx, []string{"serve", "--data", folder, "--listen", "127.0.0.1:0"}, nil, strings.NewReader(""), writer, io.Discard)
		writer.Close()
	}()
	line := make([]byte, 200)
	n, err := reader.Read(line)
	if err != nil {
		t.Fatalf("serve ended before it answered: %v", err)
	}
	go io.Copy(io.Discard, reader)
	url := regexp.MustCompile(`http://[0-9.:]+`).FindString(string(line[:n]))
	if url == "" {
		t.Fatalf("serve said %q, not where it answers", line[:n])
	}
	stop := func() int {
		cancel()
		select {
		case s := <-status:
			return s
		case <-time.After(20 * time.Second):
			t.Error("serve did not end within 20 s of being told")
			return -1
		}
	}
	return running{url, stop}
}

// initFolder makes a registry and answers with its first token.
func initFolder(t *testing.T, folder string) string {
	t.Helper()
	var out, errs bytes.Buffer
	if s := run(context.Background(), []string{"init", "--data", folder, "--laboratory", "FJO", "--name", "Fjordane isotope bench", "--person", "mara", "--person-name", "Mara Lind", "--json"},
		nil, strings.NewReader(""), &out, &errs); s != statusDone {
		t.Fatalf("init: status %d, %s", s, errs.String())
	}
	var answer struct{ Token string }
	if err := json.Unmarshal(out.Bytes(), &answer); err != nil || answer.Token == "" {
		t.Fatalf("init answered %s: %v", out.String(), err)
	}
	return answer.Token
}

func TestReadmeWalkEndsInATrace(t *testing.T) {
	needs(t, "curl")
	needs(t, "bash")
	folder := filepath.Join(t.TempDir(), "lab")
	token := initFolder(t, folder)
	server := startServe(t, folder)
	walk := exec.Command("bash", "-euo", "pipefail", "-c", readmeBlocks(t, "walk")[0])
	walk.Dir = t.TempDir()
	walk.Env = append(os.Environ(), "URL="+server.url, "TOKEN="+token)
	out, err := walk.CombinedOutput()
	if err != nil {
		t.Fatalf("the walk of README.md: %v\n%s", err, out)
	}
	for _, want := range []string{"d13C-VPDB-LSVEC", "USGS40", "NBS 19", "ivo", "run.csv"} {
		if !bytes.Contains(out, []byte(want)) {
			t.Errorf("the trace does not speak of %s:\n%s", want, out)
		}
	}
	if s := server.stop(); s != statusDone {
		t.Errorf("serve ended with status %d", s)
	}
	var report, errs bytes.Buffer
	if s := run(context.Background(), []string{"verify", "--data", folder}, nil, strings.NewReader(""), &report, &errs); s != statusDone {
		t.Errorf("verify after the walk: status %d\n%s%s", s, report.String(), errs.String())
	}
}

func TestReadmeCommandsExist(t *testing.T) {
	p := &program{stdin: strings.NewReader(""), stdout: io.Discard, stderr: io.Discard}
	for _, block := range readmeBlocks(t, "commands") {
		for line := range strings.Lines(block) {
			words := strings.Fields(line)
			if len(words) == 0 || words[0] != "./deltamoor" {
				continue
			}
			cmd, rest, err := p.root().Find(words[1:])
			if err != nil {
				t.Errorf("%s: %v", strings.TrimSpace(line), err)
				continue
			}
			var flags []string
			for _, w := range rest {
				if strings.HasPrefix(w, "--") {
					flags = append(flags, w)
				}
			}
			for _, f := range flags {
				if name := strings.TrimPrefix(f, "--"); cmd.Flags().Lookup(name) == nil && cmd.InheritedFlags().Lookup(name) == nil {
					t.Errorf("%s: %s has no flag %s", strings.TrimSpace(line), cmd.Name(), fmt.Sprint(f))
				}
			}
		}
	}
}
