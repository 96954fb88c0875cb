package store_test

import (
	"bufio"
	"context"
	"errors"
	"fmt"
	"math/rand/v2"
	"os"
	"os/exec"
	"strings"
	"sync/atomic"
	"syscall"
	"testing"
	"time"

	"deltamoor/store"
	"deltamoor/store/storetest"
)

// writerVariable names a database to the test binary run as a writer.
const writerVariable = "DELTAMOOR_TEST_WRITER"

// kills is how often a writer is killed on each engine.
const kills = 20

// writeUntilKilled records acts of every kind and says so on standard output
// once each is acknowledged.
func writeUntilKilled(database string) {
	ctx := context.Background()
	s, err := store.Open(ctx, store.Options{Database: database, Migrate: true})
	if err != nil {
		fmt.Println("error", err)
		os.Exit(1)
	}
	fmt.Println("ready")
	for n := 0; ; n++ {
		code := fmt.Sprintf("S%d-%d", os.Getpid(), n)
		var refs []store.Ref
		_, err := s.Write(ctx, lab, func(ctx context.Context, tx *store.Tx) error {
			refs = nil
			rs := readings(code, 70)
			upload, _, err := tx.PutUpload(ctx, "run.csv", "text/csv", []byte(code))
			if err != nil {
				return err
			}
			if err := tx.AppendReadings(ctx, rs); err != nil {
				return err
			}
			session, err := tx.Append(ctx, sessionDraft(code, rs, &upload))
			if err != nil {
				return err
			}
			v, err := tx.Append(ctx, value(code+"/d13C-VPDB/total", "1", 0))
			if err != nil {
				return err
			}
			d, err := tx.Append(ctx, decision(v, store.ActApproved))
			refs = []store.Ref{session, v, d}
			return err
		})
		if err != nil {
			fmt.Println("error", err)
			os.Exit(1)
		}
		for _, r := range refs {
			fmt.Println("acknowledged", r.Kind, r.Code, r.Version, r.Hash)
		}
	}
}

// runWriter starts the test binary as a writer and kills it after a while; it
// returns what was acknowledged.
func runWriter(t *testing.T, database string, r *rand.Rand) []string {
	t.Helper()
	command := exec.Command(os.Args[0], "-test.run=^$")
	command.Env = append(os.Environ(), writerVariable+"="+database)
	command.SysProcAttr = &syscall.SysProcAttr{Pdeathsig: syscall.SIGKILL}
	out, err := command.StdoutPipe()
	if err != nil {
		t.Fatal(err)
	}
	if err := command.Start(); err != nil {
		t.Fatal(err)
	}
	var acknowledged []string
	// It is killed after so many lines and a little while: in the middle of something.
	after, pause := 1+3*r.IntN(8), time.Duration(r.IntN(12_000))*time.Microsecond
	scanner := bufio.NewScanner(out)
	for lines := 1; scanner.Scan(); lines++ {
		line := scanner.Text()
		if rest, ok := strings.CutPrefix(line, "acknowledged "); ok {
			acknowledged = append(acknowledged, rest)
		} else if line != "ready" {
			t.Errorf("writer: %s", line)
		}
		if lines == after {
			go func() {
				time.Sleep(pause)
				_ = command.Process.Kill() // it may have ended by itself, which was told
			}()
		}
	}
	_ = command.Wait() // killed
	return acknowledged
}

func wantAcknowledged(t *testing.T, s *store.Store, acknowledged []string) {
	t.Helper()
	read(t, s, func(ctx context.Context, v *store.View) error {
		for _, line := range acknowledged {
			var kind, code, hash string
			var version int
			if _, err := fmt.Sscan(line, &kind, &code, &version, &hash); err != nil {
				t.Fatalf("%q: %v", line, err)
			}
			raw, err := v.Version(ctx, store.Key{Laboratory: lab, Kind: store.Kind(kind), Code: code}, version)
			if err != nil {
				t.Errorf("acknowledged, but: %v", err)
			} else if raw.Hash.String() != hash {
				t.Errorf("%s has hash %s, acknowledged was %s", raw.Ref, raw.Hash, hash)
			}
		}
		return nil
	})
}

func TestKilledWriterLosesNothingAndLeavesNothingHalf(t *testing.T) {
	for _, e := range storetest.Engines(t) {
		t.Run(string(e), func(t *testing.T) {
			seed := rand.Uint64()
			t.Logf("seed %d", seed)
			r := rand.New(rand.NewPCG(seed, 0))
			database := storetest.Database(t, e)
			total := 0
			for range kills {
				acknowledged := runWriter(t, database, r)
				total += len(acknowledged)
				s := storetest.Open(t, e, store.Options{Database: database})
				wantAcknowledged(t, s, acknowledged)
			}
			s := storetest.Open(t, e, store.Options{Database: database})
			f := wantClean(t, s, lab, store.VerifyOptions{})
			if total == 0 || f.Size < int64(total) {
				t.Errorf("%d versions acknowledged, %d entries", total, f.Size)
			}
			t.Logf("%d kills, %d versions acknowledged, %d entries", kills, total, f.Size)
		})
	}
}

func TestKilledPostgresLosesNothingAndServiceResumes(t *testing.T) {
	cluster, database := storetest.PrivateCluster(t)
	s, err := store.Open(t.Context(), store.Options{Database: database})
	if err != nil {
		t.Fatal(err)
	}
	defer s.Close()
	var stop atomic.Bool
	acknowledged := make(chan string, 100_000)
	refused := make(chan error, 100_000)
	done := make(chan struct{})
	go func() {
		defer close(done)
		together(3, func(i int) {
			for n := 0; !stop.Load(); n++ {
				var ref store.Ref
				_, err := s.Write(context.Background(), lab, func(ctx context.Context, tx *store.Tx) (err error) {
					ref, err = tx.Append(ctx, material(fmt.Sprintf("M%d-%d", i, n)))
					return err
				})
				if err == nil {
					acknowledged <- fmt.Sprintln(ref.Kind, ref.Code, ref.Version, ref.Hash)
				} else {
					refused <- err
				}
			}
		})
	}()
	for range 3 {
		time.Sleep(300 * time.Millisecond)
		if err := cluster.Kill(); err != nil {
			t.Fatal(err)
		}
		if err := cluster.Start(); err != nil {
			t.Fatal(err)
		}
	}
	before := len(acknowledged)
	for deadline := time.Now().Add(20 * time.Second); len(acknowledged) == before && time.Now().Before(deadline); {
		time.Sleep(20 * time.Millisecond)
	}
	if len(acknowledged) == before {
		t.Error("service did not resume")
	}
	stop.Store(true)
	<-done
	close(acknowledged)
	close(refused)
	for err := range refused {
		if !errors.Is(err, store.ErrUnavailable) {
			t.Errorf("refused with %v, want ErrUnavailable", err)
		}
	}
	var lines []string
	for line := range acknowledged {
		lines = append(lines, line)
	}
	wantAcknowledged(t, s, lines)
	f := wantClean(t, s, lab, store.VerifyOptions{})
	// What is recorded is what was acknowledged, save the few whose answer was lost and could not be looked up.
	t.Logf("%d acknowledged, %d entries", len(lines), f.Size)
	if f.Size < int64(len(lines)) {
		t.Errorf("%d entries for %d acknowledged versions", f.Size, len(lines))
	}
}
