package main

import (
	"bytes"
	"context"
	"errors"
	"math"
	"os"
	"os/exec"
	"path/filepath"
	"strconv"
	"strings"
	"testing"

	"github.com/google/go-cmp/cmp"
	"github.com/rogpeppe/go-internal/testscript"
	"github.com/spf13/cobra"
)

func TestMain(m *testing.M) {
	testscript.Main(withCluster{m}, map[string]func(){"deltamoor": main})
}

// TestScripts runs the whole program as a process, as testdata/script says.
// `status N deltamoor …` is exec with the exit status that is expected.
func TestScripts(t *testing.T) {
	testscript.Run(t, testscript.Params{
		Dir:           filepath.Join("testdata", "script"),
		UpdateScripts: *update,
		Setup: func(env *testscript.Env) error {
			// What the machine's own configuration says is no part of a test.
			env.Vars = withoutVariables(env.Vars, variablePrefix)
			// golden compares what a script prints, and zones are no part of it.
			env.Vars = append(env.Vars, "TZ=UTC")
			return nil
		},
		Cmds: scriptCommands(),
	})
}

func withoutVariables(env []string, prefix string) []string {
	var kept []string
	for _, entry := range env {
		if !strings.HasPrefix(entry, prefix) {
			kept = append(kept, entry)
		}
	}
	return kept
}

func status(ts *testscript.TestScript, neg bool, args []string) {
	if neg || len(args) < 2 {
		ts.Fatalf("usage: status N command [args…]")
	}
	want, err := strconv.Atoi(args[0])
	ts.Check(err)
	err = ts.Exec(args[1], args[2:]...)
	got := 0
	if exit := (*exec.ExitError)(nil); errors.As(err, &exit) {
		got = exit.ExitCode()
	} else if err != nil {
		ts.Fatalf("%v", err)
	}
	if got != want {
		ts.Fatalf("exit status %d, want %d", got, want)
	}
}

// call runs the program without a process.
func call(ctx context.Context, env []string, stdin string, args ...string) (status int, stdout, stderr string) {
	var out, complaints bytes.Buffer
	status = run(ctx, args, env, strings.NewReader(stdin), &out, &complaints)
	return status, out.String(), complaints.String()
}

func TestEverySubcommandExplainsItself(t *testing.T) {
	for _, c := range commands() {
		name, _, _ := strings.Cut(c.use, " ")
		for _, args := range [][]string{{name, "--help"}, {"help", name}} {
			status, stdout, stderr := call(t.Context(), nil, "", args...)
			if status != statusDone || stderr != "" {
				t.Errorf("%v: status %d, stderr %q", args, status, stderr)
			}
			for _, want := range []string{"deltamoor " + c.use, "--json", "--config"} {
				if !strings.Contains(stdout, want) {
					t.Errorf("%v: stdout lacks %q:\n%s", args, want, stdout)
				}
			}
		}
		if status, stdout, _ := call(t.Context(), nil, "", "--help"); status != statusDone || !strings.Contains(stdout, c.short) {
			t.Errorf("the help of deltamoor lacks %q", c.short)
		}
	}
}

// readConfigOf runs readConfig under a command with every setting as a flag.
func readConfigOf(t *testing.T, env []string, args ...string) (config, error) {
	t.Helper()
	p := &program{env: env}
	var got config
	root := &cobra.Command{Use: "trial", SilenceErrors: true, SilenceUsage: true}
	root.RunE = func(cmd *cobra.Command, _ []string) (err error) {
		got, err = p.readConfig(cmd)
		return err
	}
	root.Flags().StringVar(&p.config, "config", "", "")
	for _, s := range settings() {
		settingFlags(root, s.name)
	}
	root.SetArgs(args)
	err := root.Execute()
	return got, err
}

func TestConfigTakesFlagsBeforeVariablesBeforeFile(t *testing.T) {
	file := filepath.Join(t.TempDir(), "deltamoor.toml")
	text := "# one file for every command\nlisten = \"127.0.0.1:1\"\ndata = \"/from/file\"\ntoken = 'from-file'\n"
	if err := os.WriteFile(file, []byte(text), 0o600); err != nil {
		t.Fatal(err)
	}
	for _, c := range []struct {
		name string
		env  []string
		args []string
		want config
	}{
		{"nothing said", nil, nil, config{Data: "deltamoor-data", Listen: "127.0.0.1:8080"}},
		{"file", nil, []string{"--config", file}, config{Data: "/from/file", Listen: "127.0.0.1:1", Token: "from-file"}},
		{"file by variable", []string{"DELTAMOOR_CONFIG=" + file}, nil, config{Data: "/from/file", Listen: "127.0.0.1:1", Token: "from-file"}},
		{"variable over file", []string{"DELTAMOOR_LISTEN=127.0.0.1:2", "DELTAMOOR_DATABASE=postgres://lab@db/registry"}, []string{"--config", file},
			config{Data: "/from/file", Database: "postgres://lab@db/registry", Listen: "127.0.0.1:2", Token: "from-file"}},
		{"flag over variable", []string{"DELTAMOOR_LISTEN=127.0.0.1:2"}, []string{"--config", file, "--listen", ":3"},
			config{Data: "/from/file", Listen: ":3", Token: "from-file"}},
		{"flag with the standard value over variable", []string{"DELTAMOOR_LISTEN=127.0.0.1:2"}, []string{"--listen", "127.0.0.1:8080"},
			config{Data: "deltamoor-data", Listen: "127.0.0.1:8080"}},
		{"empty variable says nothing", []string{"DELTAMOOR_LISTEN="}, nil, config{Data: "deltamoor-data", Listen: "127.0.0.1:8080"}},
		{"variables of others", []string{"DELTAMOOR_PORT=tcp://10.0.0.1:80", "LISTEN=x"}, nil, config{Data: "deltamoor-data", Listen: "127.0.0.1:8080"}},
	} {
		t.Run(c.name, func(t *testing.T) {
			got, err := readConfigOf(t, c.env, c.args...)
			if err != nil {
				t.Fatal(err)
			}
			if diff := cmp.Diff(c.want, got); diff != "" {
				t.Errorf("(-want +got)\n%s", diff)
			}
		})
	}
}

func TestConfigRefusesByName(t *testing.T) {
	for _, c := range []struct {
		name, file string
		env, args  []string
		want       string
	}{
		{"unknown keys", "listn = \"x\"\n[server]\nport = 1\n", nil, nil, `found "listn", "server.port", expected only data, database, listen, token`},
		{"another type", "listen = 8080\n", nil, nil, "listen: found 8080, expected a text in quotes"},
		{"empty text", "data = \"\"\n", nil, nil, "data: found an empty text"},
		{"not TOML", "listen = \n", nil, nil, "deltamoor.toml: toml:"},
		{"listen in the file", "listen = \"8080\"\n", nil, nil, `deltamoor.toml: listen: found "8080", expected host:port`},
		{"listen in a variable", "", []string{"DELTAMOOR_LISTEN=localhost:99999"}, nil, `DELTAMOOR_LISTEN: found "localhost:99999", expected host:port`},
		{"listen as a flag", "", nil, []string{"--listen", "localhost"}, `--listen: found "localhost", expected host:port`},
		{"database, which may hold a password", "", nil, []string{"--database", "mysql://u:secret@h/d"}, "--database: found something else, expected an address such as postgres://"},
		{"empty data", "", nil, []string{"--data", ""}, `--data: found "", expected the path of a folder`},
		{"token with a space", "", []string{"DELTAMOOR_TOKEN=a secret"}, nil, "DELTAMOOR_TOKEN: found something else, expected a token without spaces"},
		{"no such file", "", nil, []string{"--config", "/nowhere/deltamoor.toml"}, "--config: open /nowhere/deltamoor.toml"},
	} {
		t.Run(c.name, func(t *testing.T) {
			args := c.args
			if c.file != "" {
				file := filepath.Join(t.TempDir(), "deltamoor.toml")
				if err := os.WriteFile(file, []byte(c.file), 0o600); err != nil {
					t.Fatal(err)
				}
				args = append(args, "--config", file)
			}
			_, err := readConfigOf(t, c.env, args...)
			var usage *usageError
			if !errors.As(err, &usage) || !strings.Contains(err.Error(), c.want) {
				t.Fatalf("found %v, want a usage error with %q", err, c.want)
			}
			if strings.Contains(err.Error(), "secret") {
				t.Errorf("the complaint repeats a secret: %v", err)
			}
		})
	}
}

func TestDecimalsAreTwoDigitsOfTheMedianUncertainty(t *testing.T) {
	for _, c := range []struct {
		us   []float64
		want int
	}{
		{[]float64{0.05}, 3},
		{[]float64{0.0996}, 2}, // two digits of it are 0.10
		{[]float64{0.0994}, 3}, // 0.099
		{[]float64{1.5}, 1},
		{[]float64{15}, 0},
		{[]float64{1500}, 0},
		{[]float64{0.01, 0.02, 5}, 3},
		{[]float64{0.02, 0.04}, 3},
		{[]float64{0, math.NaN(), math.Inf(1), 0.3}, 2},
		{[]float64{0}, shortest},
		{nil, shortest},
	} {
		if got := decimals(c.us...); got != c.want {
			t.Errorf("decimals(%v) = %d, want %d", c.us, got, c.want)
		}
	}
}

func TestNumberIsWrittenForPeople(t *testing.T) {
	for _, c := range []struct {
		x        float64
		decimals int
		want     string
	}{
		{-10.4567, 2, "−10.46"},
		{-0.0001, 2, "0.00"},
		{1.25, shortest, "1.25"},
		{1e-9, shortest, "1e−09"},
		{math.NaN(), 2, "–"},
		{math.Inf(1), 2, "∞"},
		{math.Inf(-1), 2, "−∞"},
	} {
		if got := number(c.x, c.decimals); got != c.want {
			t.Errorf("number(%v, %d) = %q, want %q", c.x, c.decimals, got, c.want)
		}
	}
}

func TestTableAlignsByCharacters(t *testing.T) {
	table := newTable("sample", ">δ (‰)", "flags")
	table.add("S1", "−10.46", "")
	table.add("S-långt", "3.1", "extrapolation")
	var got strings.Builder
	if err := table.print(&got); err != nil {
		t.Fatal(err)
	}
	want := "" +
		"sample    δ (‰)  flags\n" +
		"S1       −10.46\n" +
		"S-långt     3.1  extrapolation\n"
	if got.String() != want {
		t.Errorf("got\n%s\nwant\n%s", got.String(), want)
	}
	got.Reset()
	if err := newTable("a").print(&got); err != nil || got.Len() > 0 {
		t.Errorf("a table without rows printed %q, %v", got.String(), err)
	}
}

func TestProgressIsDrawnOnTerminalsOnly(t *testing.T) {
	for _, terminal := range []bool{false, true} {
		var stderr bytes.Buffer
		p := &program{stderr: &stderr, terminal: terminal}
		bar := p.startProgress("verify", 0)
		bar.reached(3, 7)
		bar.reached(7, 7)
		bar.end(true)
		if drawn := strings.Contains(stderr.String(), "verify") && strings.Contains(stderr.String(), "7 of 7"); drawn != terminal {
			t.Errorf("terminal %v: wrote %q", terminal, stderr.String())
		}
	}
	if isTerminal(&bytes.Buffer{}) {
		t.Error("a buffer passes for a terminal")
	}
}
