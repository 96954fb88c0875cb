package main

import (
	"fmt"
	"os"
	"os/exec"
	"path/filepath"
	"slices"
	"strings"
	"testing"
	"time"

	"deltamoor/store/storetest"
)

// readmeBlocks are the fenced sh blocks of README.md that follow a mark such as
// <!-- walk -->.
func readmeBlocks(t *testing.T, name string) []string {
	t.Helper()
	text, err := os.ReadFile(filepath.Join(moduleRoot(t), "README.md"))
	if err != nil {
		t.Fatal(err)
	}
	var blocks []string
	for _, after := range strings.Split(string(text), "<!-- "+name+" -->\n")[1:] {
		body, ok := strings.CutPrefix(after, "```sh\n")
		block, _, closed := strings.Cut(body, "\n```\n")
		if !ok || !closed {
			t.Fatalf("README.md: found no fenced sh block after <!-- %s -->", name)
		}
		blocks = append(blocks, block+"\n")
	}
	if len(blocks) == 0 {
		t.Fatalf("README.md: found no block marked <!-- %s -->", name)
	}
	return blocks
}

// TestReadmeWalkEndsInATrace runs what README.md tells people to type, on an
// empty registry and a running server.
func TestReadmeWalkEndsInATrace(t *testing.T) {
	for _, program := range []string{"bash", "curl"} {
		if _, err := exec.LookPath(program); err != nil {
			if slices.Contains(strings.Split(os.Getenv(storetest.RequireVariable), ","), program) {
				t.Fatalf("%s asks for %s: %v", storetest.RequireVariable, program, err)
			}
			t.Skipf("THE WALK OF README.md IS SKIPPED: %v", err)
		}
	}
	walk := readmeBlocks(t, "walk")
	if len(walk) != 1 {
		t.Fatalf("README.md: found %d blocks marked <!-- walk -->, expected 1", len(walk))
	}
	program := filepath.Join(t.TempDir(), "deltamoor")
	if out, err := exec.Command("go", "build", "-o", program, ".").CombinedOutput(); err != nil {
		t.Fatalf("go build: %v\n%s", err, out)
	}
	data := filepath.Join(t.TempDir(), "lab")
	token := initRegistry(t, "--data", data)
	s := serving(t, "--data", data)

	begun := time.Now()
	command := exec.Command("bash", "-euo", "pipefail", "-c", walk[0])
	command.Dir = t.TempDir()
	command.Env = append(cleanEnvironment(), "DELTAMOOR="+program, "URL="+s.url, "TOKEN="+token)
	var stderr strings.Builder
	command.Stderr = &stderr
	out, err := command.Output()
	t.Logf("%d lines in %v", strings.Count(walk[0], "\n"), time.Since(begun).Round(time.Millisecond))
	if err != nil {
		t.Fatalf("%v\n%s\n%s\n%s", err, stderr.String(), out, s.log)
	}
	// A trace goes from the reported delta through its session and the anchors' values to a scale.
	for _, want := range []string{"‰", "calibration of ", " in session S", "value of USGS40 on d13C-VPDB-LSVEC", "scale d13C-VPDB-LSVEC"} {
		if !strings.Contains(string(out), want) {
			t.Errorf("the output has no %q:\n%s", want, out)
		}
	}
	if status, stdout, _ := call(t.Context(), nil, "", "verify", "--data", data); status != statusDone {
		t.Errorf("verify after the walk: status %d\n%s", status, stdout)
	}
}

// TestReadmeCommandsExist parses every call of the program in blocks marked
// <!-- commands -->: the subcommand, its flags and its arguments.
func TestReadmeCommandsExist(t *testing.T) {
	checked := 0
	for _, block := range readmeBlocks(t, "commands") {
		for _, line := range strings.Split(strings.ReplaceAll(block, "\\\n", " "), "\n") {
			args, err := splitWords(line)
			if err != nil {
				t.Errorf("%s: %v", line, err)
			}
			for len(args) > 0 && strings.Contains(args[0], "=") { // NAME=value before the command
				args = args[1:]
			}
			switch {
			case len(args) > 0 && filepath.Base(args[0]) == "deltamoor":
				args = args[1:]
			case len(args) > 2 && args[0] == "go" && args[1] == "run" && args[2] == "./cmd/deltamoor":
				args = args[3:]
			default:
				continue
			}
			if err := parses(args); err != nil {
				t.Errorf("%s: %v", line, err)
			}
			checked++
		}
	}
	if checked == 0 {
		t.Error("found no call of the program")
	}
	for _, wrong := range [][]string{{"frobnicate"}, {"serve", "--port", "1"}, {"trace"}, {"verify", "a", "b"}, {"user", "remove"}} {
		if parses(wrong) == nil {
			t.Errorf("%v passes for a call of the program", wrong)
		}
	}
}

// parses tells whether a command line is understood, without doing anything.
func parses(args []string) error {
	p := &program{}
	cmd, rest, err := p.root().Find(args)
	if err != nil {
		return err
	}
	if err := cmd.ParseFlags(rest); err != nil {
		return err
	}
	if err := cmd.ValidateArgs(cmd.Flags().Args()); err != nil {
		return err
	}
	return cmd.ValidateRequiredFlags()
}

// splitWords splits a line as a shell does, as far as the README needs it:
// quotes, and a comment or redirection ends the command.
func splitWords(line string) ([]string, error) {
	var words []string
	var word strings.Builder
	inside, quote := false, rune(0)
	end := func() {
		if inside {
			words = append(words, word.String())
			word.Reset()
			inside = false
		}
	}
	for _, r := range line {
		switch {
		case quote != 0 && r == quote:
			quote = 0
		case quote != 0:
			word.WriteRune(r)
		case r == '"' || r == '\'':
			quote, inside = r, true
		case r == ' ' || r == '\t':
			end()
		case !inside && strings.ContainsRune("#><|&;", r):
			return words, nil
		default:
			inside = true
			word.WriteRune(r)
		}
	}
	end()
	if quote != 0 {
		return words, fmt.Errorf("quote %c is not closed", quote)
	}
	return words, nil
}
