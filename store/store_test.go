package store_test

import (
	"bytes"
	"context"
	"crypto/sha256"
	"database/sql"
	"errors"
	"fmt"
	"math"
	"os"
	"strings"
	"testing"
	"time"

	"github.com/google/go-cmp/cmp"

	"deltamoor/store"
	"deltamoor/store/ledger"
	"deltamoor/store/storetest"
)

func TestVerifyFindsNothingInAnUntouchedRegistry(t *testing.T) {
	forEachEngine(t, func(t *testing.T, open func(store.Options) *store.Store) {
		s := open(store.Options{})
		var outside [][]byte
		for n := range 3 {
			outside = append(outside, fill(t, s, lab, n+1).checkpoints...)
		}
		fill(t, s, "OTHER", 1)
		f := wantClean(t, s, lab, store.VerifyOptions{Outside: outside})
		if f.Checkpoints != 3 {
			t.Errorf("%d checkpoints lead to the roots, want 3", f.Checkpoints)
		}
		wantClean(t, s, "OTHER", store.VerifyOptions{})
		wantClean(t, s, "EMPTY", store.VerifyOptions{})
	})
}

func wantClean(t testing.TB, s *store.Store, laboratory string, o store.VerifyOptions) store.Findings {
	t.Helper()
	f, err := s.Verify(context.Background(), laboratory, o)
	if err != nil {
		t.Fatalf("verify: %v", err)
	}
	for _, x := range f.List {
		t.Errorf("finding: %v", x.Error())
	}
	return f
}

func TestVerifyVisitsEveryVersionAndTakesItsFindings(t *testing.T) {
	s := storetest.Open(t, storetest.SQLite, store.Options{})
	fill(t, s, lab, 1)
	seen := make(chan store.Ref, 1000)
	f, err := s.Verify(t.Context(), lab, store.VerifyOptions{Workers: 3, Visit: func(_ context.Context, raw store.Raw) error {
		seen <- raw.Ref
		if raw.Kind == store.KindCalibration {
			return &store.Finding{Position: raw.Position, Table: "versions", Key: raw.Ref.String(), Found: "another fit", Expected: "this one"}
		}
		return nil
	}})
	if err != nil {
		t.Fatal(err)
	}
	if int64(len(seen)) != f.Size {
		t.Errorf("visited %d versions of %d", len(seen), f.Size)
	}
	if f.Count != 1 || f.List[0].Found != "another fit" {
		t.Errorf("findings %v, want the one of the visit", f.List)
	}
	stop := errors.New("stop")
	if _, err := s.Verify(t.Context(), lab, store.VerifyOptions{Visit: func(context.Context, store.Raw) error { return stop }}); !errors.Is(err, stop) {
		t.Errorf("error %v, want the visit's", err)
	}
}

func TestAppendedVersionIsReadBackTheSame(t *testing.T) {
	forEachEngine(t, func(t *testing.T, open func(store.Options) *store.Store) {
		s := open(store.Options{})
		var m, v2 store.Ref
		from := day(t, "2018-01-01")
		write(t, s, lab, func(ctx context.Context, tx *store.Tx) (err error) {
			m, err = tx.Append(ctx, material("GLY"))
			return err
		})
		d := value("GLY/d13C-VPDB/total", "-33.100", from, store.Input{Part: "material", Ref: m})
		write(t, s, lab, func(ctx context.Context, tx *store.Tx) error {
			_, err := tx.Append(ctx, d)
			return err
		})
		d.Reason = "a digit: δ ‰ <&> \" \\ \u2028"
		c := write(t, s, lab, func(ctx context.Context, tx *store.Tx) (err error) {
			v2, err = tx.Append(ctx, d)
			return err
		})
		read(t, s, func(ctx context.Context, v *store.View) error {
			raw, err := v.Version(ctx, v2.Key, 2)
			if err != nil {
				return err
			}
			first, err := v.Version(ctx, v2.Key, 1)
			if err != nil {
				return err
			}
			got := decode[store.Value](t, raw)
			want := store.Version[store.Value]{Ref: v2, Form: "value/1", RecordedAt: c.RecordedAt, RecordedBy: "mara", ValidFrom: &from,
				Position: c.First, Reason: d.Reason, Previous: first.Hash, Inputs: d.Inputs, Value: d.Value.(store.Value)}
			if diff := cmp.Diff(want, got); diff != "" {
				t.Errorf("read back with a difference (-want +got):\n%s", diff)
			}
			newest, err := v.Newest(ctx, v2.Key)
			if err != nil || newest.Version != 2 {
				t.Errorf("newest is %v, %v, want .2", newest.Ref, err)
			}
			all, err := v.Versions(ctx, v2.Key, 1, 0)
			if err != nil || len(all) != 1 || all[0].Version != 2 {
				t.Errorf("versions after .1: %v, %v, want .2", all, err)
			}
			_, err = v.Version(ctx, v2.Key, 3)
			wantIs(t, err, store.ErrNotFound)
			_, err = v.Newest(ctx, store.Key{Laboratory: "OTHER", Kind: store.KindValue, Code: v2.Code})
			wantIs(t, err, store.ErrNotFound)
			_, err = store.Decode[store.Material](raw)
			if e, ok := errors.AsType[*store.FormError](err); !ok || e.Found != "value/1" {
				t.Errorf("decoding a value as a material: %v, want a FormError", err)
			}
			return nil
		})
	})
}

func TestEqualWritesHaveEqualHashesOnBothEngines(t *testing.T) {
	var hashes []string
	forEachEngine(t, func(t *testing.T, open func(store.Options) *store.Store) {
		c := &clock{at: day(t, "2026-01-01").Time()}
		s := open(store.Options{Now: c.now})
		fill(t, s, lab, 1)
		read(t, s, func(ctx context.Context, v *store.View) error {
			root, size, err := v.Root(ctx, lab, -1)
			hashes = append(hashes, fmt.Sprint(size, root))
			return err
		})
	})
	for _, h := range hashes[1:] {
		if h != hashes[0] {
			t.Errorf("roots differ between engines: %v", hashes)
		}
	}
}

func TestTxSeesWhatItHasQueued(t *testing.T) {
	forEachEngine(t, func(t *testing.T, open func(store.Options) *store.Store) {
		s := open(store.Options{})
		write(t, s, lab, func(ctx context.Context, tx *store.Tx) error {
			ref, err := tx.Append(ctx, value("GLY/d13C-VPDB/total", "-33.1", day(t, "2018-01-01")))
			if err != nil {
				return err
			}
			if _, _, err := tx.InForce(ctx, ref.Key, store.Moment{}); !errors.Is(err, store.ErrNotFound) {
				t.Errorf("a draft is in force: %v", err)
			}
			if _, err := tx.Append(ctx, decision(ref, store.ActSubmitted)); err != nil {
				return err
			}
			if state, _, err := tx.State(ctx, ref, store.Moment{}); state != store.Submitted || err != nil {
				t.Errorf("state %s, %v, want submitted", state, err)
			}
			if _, err := tx.Append(ctx, decision(ref, store.ActApproved)); err != nil {
				return err
			}
			raw, state, err := tx.InForce(ctx, ref.Key, store.Moment{})
			if err != nil || raw.Ref != ref || state != store.Approved {
				t.Errorf("in force %v %s, %v, want %v approved", raw.Ref, state, err, ref)
			}
			state, decisions, err := tx.State(ctx, ref, store.Moment{})
			if err != nil || state != store.Approved || len(decisions) != 2 || decisions[1].Value.Act != store.ActApproved {
				t.Errorf("state %s with %d decisions, %v, want approved with 2", state, len(decisions), err)
			}
			second, err := tx.Append(ctx, value("GLY/d13C-VPDB/total", "-33.2", day(t, "2018-01-01")))
			if err != nil || second.Version != 2 {
				t.Errorf("second version is %v, %v", second, err)
			}
			newest, err := tx.Newest(ctx, ref.Key)
			if err != nil || newest.Ref != second || newest.Previous != ref.Hash {
				t.Errorf("newest is %v after %v, %v", newest.Ref, newest.Previous, err)
			}
			all, err := tx.Versions(ctx, ref.Key, 0, 0)
			if err != nil || len(all) != 2 {
				t.Errorf("%d versions, %v, want 2", len(all), err)
			}
			return nil
		})
		wantClean(t, s, lab, store.VerifyOptions{})
	})
}

func TestWriteRefusesWhatCannotBeRecordedAndChangesNothing(t *testing.T) {
	forEachEngine(t, func(t *testing.T, open func(store.Options) *store.Store) {
		s := open(store.Options{})
		r := fill(t, s, lab, 1)
		root := func() string {
			var text string
			read(t, s, func(ctx context.Context, v *store.View) error {
				root, size, err := v.Root(ctx, lab, -1)
				text = fmt.Sprint(size, root)
				return err
			})
			return text
		}
		before := root()
		nan := material("NAN")
		nan.Value = store.Value{Material: "GLY", StandardUncertainty: math.NaN()}
		nan.Kind = store.KindValue
		badText := material("BAD")
		badText.Reason = "\xff"
		zero := material("ZERO\x00")
		missing := value("GLY/x", "1", 0, store.Input{Part: "material", Ref: store.Ref{Key: store.Key{Laboratory: lab, Kind: store.KindMaterial, Code: "NONE"}, Version: 1}})
		wrong := r.material
		wrong.Hash[0] ^= 1
		wrongHash := value("GLY/y", "1", 0, store.Input{Part: "material", Ref: wrong})
		nobody := material("NOBODY")
		nobody.By = ""
		onMaterial := decision(r.material, store.ActApproved)
		otherSubject := decision(r.value, store.ActApproved)
		otherSubject.Code = "value/other.1"
		unknownAct := decision(r.value, "blessed")
		stale := material("GLY1")
		stale.After = ptr(5)
		taken := material("gly1")
		again := material("GLY1")
		again.After = ptr(0)
		wrongLine := reportDraft(t, "R9", []string{"D9"}, store.Version[store.Final]{Ref: r.final})
		for _, c := range []struct {
			name  string
			draft store.Draft
			want  error
			says  string
		}{
			{"not a number", nan, store.ErrInvalid, "u: found NaN"},
			{"not UTF-8", badText, store.ErrInvalid, "reason"},
			{"zero byte", zero, store.ErrInvalid, "zero byte"},
			{"missing input", missing, store.ErrInvalid, "no such version"},
			{"input with another hash", wrongHash, store.ErrInvalid, wrong.Hash.String()},
			{"nobody", nobody, store.ErrInvalid, "nobody"},
			{"decision on what is not decided", onMaterial, store.ErrInvalid, "material"},
			{"decision with another subject", otherSubject, store.ErrInvalid, "subject"},
			{"unknown act", unknownAct, store.ErrInvalid, "blessed"},
			{"stale", stale, store.ErrStale, "expected version 5"},
			{"code differs in case alone", taken, store.ErrConflict, "GLY1"},
			{"record exists", again, store.ErrConflict, "new record"},
			{"report line of another value", wrongLine, store.ErrInvalid, "hash"},
		} {
			_, err := s.Write(t.Context(), lab, func(ctx context.Context, tx *store.Tx) error {
				_, err := tx.Append(ctx, c.draft)
				return err
			})
			if !errors.Is(err, c.want) || !strings.Contains(err.Error(), c.says) {
				t.Errorf("%s: error %v, want %v that says %q", c.name, err, c.want, c.says)
			}
		}
		for _, c := range []struct {
			name string
			act  func(ctx context.Context, tx *store.Tx) error
		}{
			{"upload alone", func(ctx context.Context, tx *store.Tx) error {
				_, _, err := tx.PutUpload(ctx, "a.csv", "text/csv", []byte("x"))
				return err
			}},
			{"readings alone", func(ctx context.Context, tx *store.Tx) error {
				return tx.AppendReadings(ctx, readings("S7", 3))
			}},
			{"readings with a gap", func(ctx context.Context, tx *store.Tx) error {
				return tx.AppendReadings(ctx, readings("S7", 3)[1:])
			}},
			{"session that counts other readings", func(ctx context.Context, tx *store.Tx) error {
				rs := readings("S7", 3)
				if err := tx.AppendReadings(ctx, rs[:2]); err != nil {
					return err
				}
				_, err := tx.Append(ctx, sessionDraft("S7", rs, nil))
				return err
			}},
			{"session that hashes other readings", func(ctx context.Context, tx *store.Tx) error {
				rs := readings("S7", 3)
				if err := tx.AppendReadings(ctx, rs); err != nil {
					return err
				}
				rs[1].Raw = 0
				_, err := tx.Append(ctx, sessionDraft("S7", rs, nil))
				return err
			}},
			{"reading that is not a number", func(ctx context.Context, tx *store.Tx) error {
				rs := readings("S7", 3)
				rs[2].Raw = math.Inf(1)
				return tx.AppendReadings(ctx, rs)
			}},
			{"upload too large", func(ctx context.Context, tx *store.Tx) error {
				_, _, err := tx.PutUpload(ctx, "a.csv", "text/csv", make([]byte, store.MaxUpload+1))
				return err
			}},
			{"laboratory without a proper code", nil},
		} {
			laboratory := lab
			if c.act == nil {
				laboratory = "fjo"
			}
			if _, err := s.Write(t.Context(), laboratory, c.act); !errors.Is(err, store.ErrInvalid) {
				t.Errorf("%s: error %v, want ErrInvalid", c.name, err)
			}
		}
		refused := errors.New("refused")
		if _, err := s.Write(t.Context(), lab, func(ctx context.Context, tx *store.Tx) error {
			if _, err := tx.Append(ctx, material("NEW")); err != nil {
				return err
			}
			return refused
		}); !errors.Is(err, refused) {
			t.Errorf("error %v, want the closure's own", err)
		}
		if after := root(); after != before {
			t.Errorf("refused writes changed the ledger from %s to %s", before, after)
		}
		wantClean(t, s, lab, store.VerifyOptions{})
	})
}

func TestGuardSeesTheStateBeforeTheActAndCanEndIt(t *testing.T) {
	forEachEngine(t, func(t *testing.T, open func(store.Options) *store.Store) {
		s := open(store.Options{})
		r := fill(t, s, lab, 1)
		ran := false
		write(t, s, lab, func(ctx context.Context, tx *store.Tx) error {
			tx.Guard(func(ctx context.Context, v *store.View) error {
				ran = true
				raw, err := v.Newest(ctx, r.material.Key)
				if err != nil || raw.Version != 1 {
					t.Errorf("the guard sees %v, %v, want version 1", raw.Ref, err)
				}
				_, state, err := v.InForce(ctx, r.value.Key, store.Moment{})
				if err != nil || state != store.Approved {
					t.Errorf("the guard sees the value %s, %v, want approved", state, err)
				}
				return nil
			})
			_, err := tx.Append(ctx, material("GLY1"))
			return err
		})
		if !ran {
			t.Error("the guard did not run")
		}
		refused := errors.New("unit is empty")
		_, err := s.Write(t.Context(), lab, func(ctx context.Context, tx *store.Tx) error {
			tx.Guard(func(context.Context, *store.View) error { return refused })
			_, err := tx.Append(ctx, material("GLY1"))
			return err
		})
		wantIs(t, err, refused)
		read(t, s, func(ctx context.Context, v *store.View) error {
			raw, err := v.Newest(ctx, r.material.Key)
			if raw.Version != 2 {
				t.Errorf("newest is .%d after a refused guard, want .2", raw.Version)
			}
			return err
		})
	})
}

func TestRecordedAtGrowsFromActToActWhateverTheClock(t *testing.T) {
	forEachEngine(t, func(t *testing.T, open func(store.Options) *store.Store) {
		start := day(t, "2026-01-01").Time()
		c := &clock{at: start}
		s := open(store.Options{Now: c.now})
		append1 := func(n int) (store.Commit, error) {
			return s.Write(t.Context(), lab, func(ctx context.Context, tx *store.Tx) error {
				for i := range 3 {
					if _, err := tx.Append(ctx, material(fmt.Sprintf("M%d-%d", n, i))); err != nil {
						return err
					}
				}
				return nil
			})
		}
		last := store.Instant(0)
		for i, step := range []time.Duration{0, 0, -4 * time.Minute, time.Second, time.Hour} {
			c.at = start.Add(step)
			commit, err := append1(i)
			if err != nil {
				t.Fatal(err)
			}
			if commit.RecordedAt <= last || commit.Count != 3 || commit.First != int64(3*i) {
				t.Errorf("act %d: %+v after %s", i, commit, last)
			}
			last = commit.RecordedAt
		}
		c.at = start // an hour behind the head
		if _, err := append1(9); !errors.Is(err, store.ErrUnavailable) || !strings.Contains(err.Error(), "clock") {
			t.Errorf("with the clock an hour behind: %v, want ErrUnavailable that names the clock", err)
		}
		c.at = start.Add(2 * time.Hour)
		if _, err := append1(10); err != nil {
			t.Errorf("with the clock right again: %v", err)
		}
		wantClean(t, s, lab, store.VerifyOptions{})
	})
}

func TestLostAnswerOfACommitIsLookedUp(t *testing.T) {
	forEachEngine(t, func(t *testing.T, open func(store.Options) *store.Store) {
		s := open(store.Options{})
		for _, c := range []struct {
			name  string
			takes bool
		}{{"that took effect", true}, {"that did not", false}} {
			tries := 0
			store.SetCommit(s, func(tx *sql.Tx) error {
				tries++
				if tries > 1 {
					return tx.Commit()
				}
				if c.takes {
					if err := tx.Commit(); err != nil {
						return err
					}
				} else if err := tx.Rollback(); err != nil {
					return err
				}
				return store.LostConnection()
			})
			runs := 0
			code := fmt.Sprintf("GLY-%v", c.takes)
			commit := write(t, s, lab, func(ctx context.Context, tx *store.Tx) error {
				runs++
				_, err := tx.Append(ctx, material(code))
				return err
			})
			if want := map[bool]int{true: 1, false: 2}[c.takes]; runs != want {
				t.Errorf("commit %s: closure ran %d times, want %d", c.name, runs, want)
			}
			store.SetCommit(s, (*sql.Tx).Commit)
			read(t, s, func(ctx context.Context, v *store.View) error {
				all, err := v.Versions(ctx, store.Key{Laboratory: lab, Kind: store.KindMaterial, Code: code}, 0, 0)
				if len(all) != 1 || all[0].Position != commit.First {
					t.Errorf("commit %s: %d versions, want one at %d", c.name, len(all), commit.First)
				}
				return err
			})
		}
		wantClean(t, s, lab, store.VerifyOptions{})
	})
}

func TestReadingsComeBackTheSameInOrder(t *testing.T) {
	forEachEngine(t, func(t *testing.T, open func(store.Options) *store.Store) {
		s := open(store.Options{})
		rs := readings("S1", 1500)
		rs[0].Raw = math.Copysign(0, -1)
		rs[1].Raw = math.SmallestNonzeroFloat64
		rs[2].Raw = -math.MaxFloat64
		rs[3].U = ptr(0.1 + 0.2)
		write(t, s, lab, func(ctx context.Context, tx *store.Tx) error {
			if err := tx.AppendReadings(ctx, rs); err != nil {
				return err
			}
			_, err := tx.Append(ctx, sessionDraft("S1", rs, nil))
			return err
		})
		rs[0].Raw = 0
		read(t, s, func(ctx context.Context, v *store.View) error {
			var got []store.Reading
			if err := v.Readings(ctx, lab, "S1", func(r store.Reading) error { got = append(got, r); return nil }); err != nil {
				return err
			}
			if diff := cmp.Diff(rs, got); diff != "" {
				t.Errorf("readings read back with a difference (-want +got):\n%s", diff)
			}
			if math.Signbit(got[0].Raw) {
				t.Error("negative zero came back")
			}
			page, err := v.ReadingsPage(ctx, lab, "S1", 64, 10)
			if diff := cmp.Diff(rs[64:74], page); diff != "" {
				t.Errorf("page of readings differs (-want +got):\n%s", diff)
			}
			if err != nil {
				return err
			}
			uses, err := v.Uses(ctx, lab, "BTL-1", "", 0)
			if diff := cmp.Diff([]store.Use{{Session: "S1", Readings: 125}}, uses); diff != "" { // 375 anchors, in turn from 3 bottles
				t.Errorf("uses differ (-want +got):\n%s", diff)
			}
			return err
		})
		// A second version of the session may bind more readings.
		more := readings("S1", 1600)
		copy(more, rs)
		write(t, s, lab, func(ctx context.Context, tx *store.Tx) error {
			if err := tx.AppendReadings(ctx, more[1500:]); err != nil {
				return err
			}
			_, err := tx.Append(ctx, sessionDraft("S1", more, nil))
			return err
		})
		wantClean(t, s, lab, store.VerifyOptions{})
	})
}

func TestUploadIsStoredOnceAndComesBack(t *testing.T) {
	forEachEngine(t, func(t *testing.T, open func(store.Options) *store.Store) {
		s := open(store.Options{})
		for _, data := range [][]byte{{}, []byte("short"), bytes.Repeat([]byte{7}, 256<<10), bytes.Repeat([]byte("0123456789"), 60_000)} {
			var hash store.Hash
			put := func(name string) (existed bool) {
				write(t, s, lab, func(ctx context.Context, tx *store.Tx) (err error) {
					if hash, existed, err = tx.PutUpload(ctx, name, "text/csv", data); err != nil {
						return err
					}
					_, err = tx.Append(ctx, material("GLY"))
					return err
				})
				return existed
			}
			if put("a.csv") {
				t.Errorf("%d bytes existed before", len(data))
			}
			if !put("b.csv") {
				t.Errorf("%d bytes did not exist the second time", len(data))
			}
			if hash != sha256.Sum256(data) {
				t.Errorf("hash %s of %d bytes", hash, len(data))
			}
			read(t, s, func(ctx context.Context, v *store.View) error {
				var b bytes.Buffer
				info, err := v.Upload(ctx, lab, hash, &b)
				want := store.UploadInfo{Hash: hash, Name: "a.csv", MediaType: "text/csv", Size: int64(len(data))}
				if info != want || !bytes.Equal(b.Bytes(), data) {
					t.Errorf("upload came back as %+v with %d bytes, want %+v", info, b.Len(), want)
				}
				if _, err := v.Upload(ctx, "OTHER", hash, &b); !errors.Is(err, store.ErrNotFound) {
					t.Errorf("another laboratory's upload: %v, want ErrNotFound", err)
				}
				return err
			})
		}
		wantClean(t, s, lab, store.VerifyOptions{})
	})
}

func TestLargeBodyComesBackFromItsParts(t *testing.T) {
	forEachEngine(t, func(t *testing.T, open func(store.Options) *store.Store) {
		s := open(store.Options{})
		d := material("GLY")
		d.Value = store.Material{Name: "Glycine", Kind: "control", Note: strings.Repeat("δ13C ", 200_000)}
		write(t, s, lab, func(ctx context.Context, tx *store.Tx) error {
			_, err := tx.Append(ctx, d)
			return err
		})
		read(t, s, func(ctx context.Context, v *store.View) error {
			raw, err := v.Newest(ctx, store.Key{Laboratory: lab, Kind: store.KindMaterial, Code: "GLY"})
			if err != nil {
				return err
			}
			if diff := cmp.Diff(d.Value, decode[store.Material](t, raw).Value); diff != "" {
				t.Errorf("body differs (-want +got):\n%s", diff)
			}
			return nil
		})
		wantClean(t, s, lab, store.VerifyOptions{})
	})
}

func TestOpenKeepsItsPromises(t *testing.T) {
	for _, e := range storetest.Engines(t) {
		t.Run(string(e), func(t *testing.T) {
			database := storetest.EmptyDatabase(t, e)
			ctx := t.Context()
			_, err := store.Open(ctx, store.Options{Database: database})
			wantIs(t, err, store.ErrOutdated)
			s, err := store.Open(ctx, store.Options{Database: database, Migrate: true})
			if err != nil {
				t.Fatal(err)
			}
			if err := s.Ping(ctx); err != nil {
				t.Error(err)
			}
			fill(t, s, lab, 1)
			ro, err := store.Open(ctx, store.Options{Database: database, ReadOnly: true})
			if err != nil {
				t.Fatal(err)
			}
			wantClean(t, ro, lab, store.VerifyOptions{})
			_, err = ro.Write(ctx, lab, func(context.Context, *store.Tx) error { return nil })
			wantIs(t, err, store.ErrReadOnly)
			if err := errors.Join(ro.Close(), s.Close()); err != nil {
				t.Error(err)
			}
			if e == storetest.SQLite {
				info, err := os.Stat(database)
				if err != nil || info.Mode().Perm() != 0o600 {
					t.Errorf("mode %v, %v, want 0600", info.Mode(), err)
				}
			}
			again, err := store.Open(ctx, store.Options{Database: database})
			if err != nil {
				t.Fatal(err)
			}
			wantClean(t, again, lab, store.VerifyOptions{})
			if err := again.Close(); err != nil {
				t.Error(err)
			}
		})
	}
}

func TestHistoryRefusesUpdateAndDelete(t *testing.T) {
	for _, e := range storetest.Engines(t) {
		t.Run(string(e), func(t *testing.T) {
			database := storetest.Database(t, e)
			s := storetest.Open(t, e, store.Options{Database: database})
			fill(t, s, lab, 1)
			v := newVandal(t, e, database)
			for _, table := range []string{"versions", "readings", "uploads", "content", "entries", "tree_hashes", "checkpoints"} {
				for _, statement := range []string{"UPDATE " + table + " SET laboratory = 'X'", "DELETE FROM " + table} {
					if _, err := v.db.Exec(statement); err == nil || !strings.Contains(err.Error(), "history") {
						t.Errorf("%s: error %v, want a refusal", statement, err)
					}
				}
			}
		})
	}
}

func TestCheckpointMustFitTheLedger(t *testing.T) {
	forEachEngine(t, func(t *testing.T, open func(store.Options) *store.Store) {
		s := open(store.Options{})
		r := fill(t, s, lab, 1)
		sign := func(size int64, root ledger.Hash) []byte {
			text, err := ledger.Sign(ledger.Checkpoint{Origin: r.origin, Size: size, Root: root}, r.key)
			if err != nil {
				t.Fatal(err)
			}
			return text
		}
		add := func(text []byte) error {
			_, err := s.Write(t.Context(), lab, func(ctx context.Context, tx *store.Tx) error { return tx.AppendCheckpoint(ctx, text, r.verifier) })
			return err
		}
		wantIs(t, add(sign(3, ledger.Hash{1})), store.ErrInvalid)
		wantIs(t, add(sign(1000, ledger.Hash{1})), store.ErrNotFound)
		if err := add([]byte("nothing")); err == nil {
			t.Error("a text that is no note was kept")
		}
		if err := add(r.checkpoints[0]); err != nil {
			t.Errorf("the same checkpoint again: %v", err)
		}
		read(t, s, func(ctx context.Context, v *store.View) error {
			all, err := v.Checkpoints(ctx, lab, 0, 0)
			if err != nil {
				return err
			}
			last, err := v.LastCheckpoint(ctx, lab)
			if len(all) != 1 || !bytes.Equal(last.Note, r.checkpoints[0]) {
				t.Errorf("%d checkpoints, last %q", len(all), last.Note)
			}
			_, err2 := v.LastCheckpoint(ctx, "OTHER")
			wantIs(t, err2, store.ErrNotFound)
			return err
		})
		// Only a checkpoint kept outside can show that the end has been cut off; here
		// one of a size the ledger never had stands for it.
		f, err := s.Verify(t.Context(), lab, store.VerifyOptions{Outside: [][]byte{sign(1000, ledger.Hash{1}), sign(2, ledger.Hash{2})}})
		if err != nil || f.Count < 2 {
			t.Errorf("findings %v, %v, want the missing end and the other root", f.List, err)
		}
	})
}

func TestEntriesAndProofsLeadToTheRoot(t *testing.T) {
	forEachEngine(t, func(t *testing.T, open func(store.Options) *store.Store) {
		s := open(store.Options{})
		fill(t, s, lab, 1)
		fill(t, s, lab, 2)
		read(t, s, func(ctx context.Context, v *store.View) error {
			root, size, err := v.Root(ctx, lab, -1)
			if err != nil {
				return err
			}
			older, _, err := v.Root(ctx, lab, 5)
			if err != nil {
				return err
			}
			reader := v.TreeHashReader(ctx, lab)
			proof, err := ledger.ProveConsistency(size, 5, reader)
			if err != nil {
				return err
			}
			if err := ledger.CheckConsistency(proof, size, root, 5, older); err != nil {
				t.Error(err)
			}
			entries, err := v.Entries(ctx, lab, 0, 0)
			if err != nil || int64(len(entries)) != size {
				t.Errorf("%d entries, %v, want %d", len(entries), err, size)
			}
			for _, e := range entries {
				proof, err := ledger.ProveInclusion(size, e.Position, reader)
				if err != nil {
					return err
				}
				if err := ledger.CheckInclusion(proof, size, root, e.Position, ledger.LeafHash(e.Bytes)); err != nil {
					t.Error(err)
				}
			}
			_, _, err = v.Root(ctx, lab, size+1)
			wantIs(t, err, store.ErrNotFound)
			return nil
		})
	})
}
