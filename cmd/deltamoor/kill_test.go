package main

import (
	"context"
	"encoding/json"
	"fmt"
	"math/rand/v2"
	"net/http"
	"path/filepath"
	"strings"
	"syscall"
	"testing"
	"time"

	"deltamoor/api/registry"
	"deltamoor/calib"
	"deltamoor/store"
	"deltamoor/store/storetest"
)

const (
	kills = 24
	// killPeriod bounds the killing on a busy machine; fewer kills than minKills fail.
	killPeriod = 35 * time.Second
	minKills   = 20
	bigRows    = 3000
)

// A bench is a registry of one laboratory with an instrument and an approved
// method that reads big files, to be served by processes that come and go.
type bench struct {
	t        testing.TB
	database string   // for the store
	args     []string // for the commands
	token    string
}

func newBench(t testing.TB, database string, args ...string) *bench {
	t.Helper()
	b := &bench{t: t, database: database, args: args}
	b.token = initRegistry(t, args...)
	b.inside(func(ctx context.Context, r *registry.Registry) error {
		actor, err := r.Authenticate(ctx, b.token)
		if err != nil {
			return err
		}
		if _, err := r.StateInstrument(ctx, actor, "EA1", store.Instrument{Name: "analyser"}, registry.Edit{}); err != nil {
			return err
		}
		method, err := r.StateMethod(ctx, actor, "big", store.Method{Title: "big files",
			Quantities: []store.MethodQuantity{{Quantity: "d13C", Scale: "d13C-VPDB-LSVEC", Roles: []store.MaterialRole{{Material: "IAEA-CH-7", Role: calib.Anchor}, {Material: "IAEA-CH-6", Role: calib.Anchor}}}},
			Mapping:    &store.Mapping{Columns: store.Columns{Name: "Name", Time: "Time"}, Quantities: []store.QuantityColumns{{Quantity: "d13C", Raw: "d13C raw", Size: "Area"}}}}, registry.Edit{})
		if err != nil {
			return err
		}
		_, err = r.Decide(ctx, actor, store.KindMethod, method.Code, registry.DecisionRequest{Act: "approved", Version: 1})
		return err
	})
	return b
}

func embeddedBench(t testing.TB) *bench {
	t.Helper()
	data := filepath.Join(t.TempDir(), "lab")
	return newBench(t, data+string(filepath.Separator), "--data", data)
}

// inside opens the registry in the test's own process.
func (b *bench) inside(f func(context.Context, *registry.Registry) error) {
	b.t.Helper()
	s, err := store.Open(b.t.Context(), store.Options{Database: b.database})
	if err != nil {
		b.t.Fatal(err)
	}
	defer s.Close()
	if err := f(b.t.Context(), registry.New(s, registry.Options{})); err != nil {
		b.t.Fatal(err)
	}
}

func (b *bench) serve() *server {
	b.t.Helper()
	s, err := startServer(cleanEnvironment(), b.t.TempDir(), b.args...)
	if err != nil {
		b.t.Fatal(err)
	}
	return s
}

// bigFile is a session of its own for each number.
func bigFile(number int) []byte {
	var b strings.Builder
	b.WriteString("Time,Name,d13C raw,Area\n")
	start := time.Date(2024, 1, 1, 0, 0, 0, 0, time.UTC).AddDate(0, 0, 30*number)
	for i := range bigRows {
		fmt.Fprintf(&b, "%s,%s,%.3f,%.2f\n", start.Add(time.Duration(i)*time.Minute).Format(time.RFC3339), []string{"IAEA-CH-7", "IAEA-CH-6"}[i%2], -30+20*float64(i%2)+float64(i%7)/100, 5+float64(i%11)/10)
	}
	return []byte(b.String())
}

func (b *bench) importBig(s *server, number int) (answered, error) {
	return ask("POST", fmt.Sprintf("%s/v1/sessions/import?instrument=EA1&method=big&label=run-%d", s.url, number), b.token, bigFile(number), "Content-Type", mediaCSV)
}

// imported tells which runs have their session, and fails on a session that is
// not whole.
func (b *bench) imported() map[string]string {
	b.t.Helper()
	found := map[string]string{}
	b.inside(func(ctx context.Context, r *registry.Registry) error {
		actor, err := r.Authenticate(ctx, b.token)
		if err != nil {
			return err
		}
		page, err := sessions(ctx, r, actor)
		if err != nil {
			return err
		}
		for _, it := range page {
			rows := 0
			if err := r.Readings(ctx, actor, it.Code, func(store.Reading) error { rows++; return nil }); err != nil {
				return err
			}
			if it.Value.Readings != bigRows || rows != bigRows {
				b.t.Errorf("session %s of %s says %d readings and has %d rows, want %d", it.Code, it.Value.Label, it.Value.Readings, rows, bigRows)
			}
			if found[it.Value.Label] != "" {
				b.t.Errorf("%s is two sessions", it.Value.Label)
			}
			found[it.Value.Label] = store.FormatCode(it.Code)
		}
		return nil
	})
	return found
}

func sessions(ctx context.Context, r *registry.Registry, actor registry.Actor) ([]registry.Item[store.Session], error) {
	var all []registry.Item[store.Session]
	for q := (registry.Query{}); ; {
		page, err := registry.List[store.Session](ctx, r, actor, actor.Laboratory, store.KindSession, q)
		if err != nil {
			return nil, err
		}
		all = append(all, page.Items...)
		if q.After = page.After; q.After == "" {
			return all, nil
		}
	}
}

func (b *bench) wantClean() {
	b.t.Helper()
	status, stdout, stderr := call(b.t.Context(), nil, "", append([]string{"verify"}, b.args...)...)
	if status != statusDone {
		b.t.Errorf("verify: status %d\n%s%s", status, stdout, stderr)
	}
}

// sessionOf reads the session's code from the answer to an import.
func sessionOf(t testing.TB, a answered) string {
	t.Helper()
	var body struct {
		Session struct {
			Code string `json:"code"`
		} `json:"session"`
	}
	if err := json.Unmarshal(a.body, &body); err != nil || body.Session.Code == "" {
		t.Fatalf("answer %d %s: %v", a.status, a.body, err)
	}
	return body.Session.Code
}

// TestKilledServerLosesNoAcknowledgedImport kills the process at points spread
// over an import, and a little before and after it.
func TestKilledServerLosesNoAcknowledgedImport(t *testing.T) {
	b := embeddedBench(t)
	seed := rand.Uint64()
	t.Logf("seed %d", seed)
	r := rand.New(rand.NewPCG(seed, 0))

	s := b.serve()
	begun := time.Now()
	a, err := b.importBig(s, 0)
	whole := time.Since(begun)
	if err != nil || a.status != http.StatusCreated {
		t.Fatalf("import: %v, %d %s", err, a.status, a.body)
	}
	acknowledged := map[string]string{"run-0": sessionOf(t, a)}
	_ = s.end(syscall.SIGKILL)

	// How far into an import the kills reach follows what is found, since a
	// fresh process on a busy machine is slower than the one that was timed.
	reach := 1.2 * float64(whole)
	done, present := 0, 0
	for deadline := time.Now().Add(killPeriod); done < kills && time.Now().Before(deadline); done++ {
		number := done + 1
		label := fmt.Sprintf("run-%d", number)
		pause := time.Duration(r.Float64() * reach)
		s := b.serve()
		answer := make(chan answered, 1)
		go func() {
			a, err := b.importBig(s, number)
			if err != nil {
				a.status = 0
			}
			answer <- a
		}()
		time.Sleep(pause)
		_ = s.end(syscall.SIGKILL) // "signal: killed"
		a := <-answer
		if a.status == http.StatusCreated {
			acknowledged[label] = sessionOf(t, a)
		} else if a.status != 0 {
			t.Errorf("kill %d: answered %d %s", number, a.status, a.body)
		}
		found := b.imported()
		for label, code := range acknowledged {
			if found[label] != code {
				t.Errorf("kill %d after %v: %s was acknowledged as %s; found %q", number, pause, label, code, found[label])
			}
		}
		if found[label] != "" {
			present++
			reach *= 0.8
		} else {
			reach *= 1.3
		}
		if number%6 == 0 {
			b.wantClean()
		}
	}
	b.wantClean()
	t.Logf("%d kills within and about an import of %v: %d acknowledged, %d recorded", done, whole, len(acknowledged)-1, present)
	if done < minKills {
		t.Errorf("%d kills in %v, want at least %d", done, killPeriod, minKills)
	}
	if present == done || present == 0 {
		t.Errorf("%d of %d imports are there: the kills did not fall about the moment of recording", present, done)
	}
}

// TestTerminatedServerFinishesOrRefusesAnImport asks the server to end at
// points spread over an import: who sent it has its answer, or is refused.
func TestTerminatedServerFinishesOrRefusesAnImport(t *testing.T) {
	b := embeddedBench(t)
	for number := range 6 {
		s := b.serve()
		answer := make(chan answered, 1)
		failed := make(chan error, 1)
		go func() {
			a, err := b.importBig(s, number)
			failed <- err
			answer <- a
		}()
		time.Sleep(time.Duration(number) * 15 * time.Millisecond)
		if err := s.end(syscall.SIGTERM); err != nil {
			t.Errorf("serve ended with %v\n%s", err, s.log)
		}
		err, a := <-failed, <-answer
		label := fmt.Sprintf("run-%d", number)
		code := b.imported()[label]
		switch {
		case err == nil && a.status == http.StatusCreated:
			if want := sessionOf(t, a); code != want {
				t.Errorf("%s was acknowledged as %s; found %q", label, want, code)
			}
		case err != nil: // the connection came after the end
			if code != "" {
				t.Errorf("%s was refused (%v) and is there as %s", label, err, code)
			}
		default:
			t.Errorf("%s: answered %d %s", label, a.status, a.body)
		}
	}
	b.wantClean()
}

// TestServeImportVerifyOnEveryEngine goes the short way by commands and HTTP,
// from an empty database.
func TestServeImportVerifyOnEveryEngine(t *testing.T) {
	for _, e := range storetest.Engines(t) {
		t.Run(string(e), func(t *testing.T) {
			data := filepath.Join(t.TempDir(), "lab")
			database, args := data+string(filepath.Separator), []string{"--data", data}
			if e == storetest.Postgres {
				database = storetest.EmptyDatabase(t, e)
				args = append(args, "--database", database)
				// A shared database is not changed by whoever happens to start a server.
				status, _, stderr := call(t.Context(), nil, "", append([]string{"serve", "--listen", "127.0.0.1:0"}, args...)...)
				if status != statusRefused || !strings.Contains(stderr, `run "deltamoor migrate" first`) {
					t.Errorf("serve before migrate: status %d, %s", status, stderr)
				}
			}
			status, stdout, stderr := call(t.Context(), nil, "", append([]string{"migrate"}, args...)...)
			if status != statusDone || !strings.Contains(stdout, "applied 0001_history.sql") {
				t.Fatalf("migrate: status %d, %s%s", status, stdout, stderr)
			}
			b := newBench(t, database, args...)
			s := serving(t, args...)
			a, err := b.importBig(s, 1)
			if err != nil || a.status != http.StatusCreated {
				t.Fatalf("import: %v, %d %s", err, a.status, a.body)
			}
			again, err := b.importBig(s, 1)
			if err != nil || again.status != http.StatusOK || sessionOf(t, again) != sessionOf(t, a) {
				t.Errorf("the same again: %v, %d %s", err, again.status, again.body)
			}
			status, stdout, stderr = call(t.Context(), []string{"DELTAMOOR_TOKEN=" + b.token}, string(bigFile(2)),
				append([]string{"import", "-", "--json", "--instrument", "EA1", "--method", "big", "--label", "run-2"}, args...)...)
			var imported importAnswer
			if err := json.Unmarshal([]byte(stdout), &imported); status != statusDone || err != nil || imported.Readings != bigRows {
				t.Errorf("import: status %d, %v, %s%s", status, err, stdout, stderr)
			}
			if found := b.imported(); found["run-1"] != sessionOf(t, a) || found["run-2"] != imported.Session {
				t.Errorf("found %v, want %s and %s", found, sessionOf(t, a), imported.Session)
			}
			b.wantClean()
			status, stdout, stderr = call(t.Context(), nil, "", append([]string{"verify", imported.Session}, args...)...)
			if status != statusDone || !strings.Contains(stdout, "nothing differs") {
				t.Errorf("verify %s: status %d, %s%s", imported.Session, status, stdout, stderr)
			}
		})
	}
}
