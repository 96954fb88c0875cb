package store_test

import (
	"context"
	"crypto/sha256"
	"errors"
	"fmt"
	"sync"
	"sync/atomic"
	"testing"
	"time"

	"deltamoor/store"
)

// together runs f in n goroutines that start at once.
func together(n int, f func(i int)) {
	start := make(chan struct{})
	var wg sync.WaitGroup
	for i := range n {
		wg.Go(func() {
			<-start
			f(i)
		})
	}
	close(start)
	wg.Wait()
}

func TestWritersOfDifferentRecordsAllSucceed(t *testing.T) {
	forEachEngine(t, func(t *testing.T, open func(store.Options) *store.Store) {
		s := open(store.Options{})
		const writers, acts = 8, 15
		together(writers, func(i int) {
			for n := range acts {
				_, err := s.Write(context.Background(), lab, func(ctx context.Context, tx *store.Tx) error {
					_, err := tx.Append(ctx, material(fmt.Sprintf("M%d", i), fmt.Sprintf("name %d", n)))
					return err
				})
				if err != nil {
					t.Errorf("writer %d act %d: %v", i, n, err)
				}
			}
		})
		read(t, s, func(ctx context.Context, v *store.View) error {
			h, err := v.Head(ctx, lab)
			if h.Size != writers*acts {
				t.Errorf("%d entries, want %d", h.Size, writers*acts)
			}
			return err
		})
		// Verify checks that times grow along the ledger and every record's chain is whole.
		wantClean(t, s, lab, store.VerifyOptions{})
	})
}

func TestOfSimultaneousDecisionsExactlyOneWins(t *testing.T) {
	forEachEngine(t, func(t *testing.T, open func(store.Options) *store.Store) {
		s := open(store.Options{})
		for round := range 8 {
			var ref store.Ref
			write(t, s, lab, func(ctx context.Context, tx *store.Tx) (err error) {
				ref, err = tx.Append(ctx, value(fmt.Sprintf("V%d", round), "1", day(t, "2018-01-01")))
				return err
			})
			var won atomic.Int32
			var message atomic.Value
			together(6, func(i int) {
				d := decision(ref, []string{store.ActApproved, store.ActDeclined}[i%2])
				d.By = fmt.Sprintf("person-%d", i)
				if round%2 == 0 {
					d.After = ptr(0)
				}
				// All have seen the version without decisions before any writes.
				var seen sync.Once
				_, err := s.Write(context.Background(), lab, func(ctx context.Context, tx *store.Tx) error {
					code := store.Key{Laboratory: lab, Kind: store.KindDecision, Code: store.DecisionCode(ref)}
					if _, err := tx.Newest(ctx, code); err == nil {
						return fmt.Errorf("%w: decided already", store.ErrConflict)
					}
					seen.Do(func() { time.Sleep(2 * time.Millisecond) })
					_, err := tx.Append(ctx, d)
					return err
				})
				switch {
				case err == nil:
					won.Add(1)
				case errors.Is(err, store.ErrConflict) || errors.Is(err, store.ErrStale):
					message.Store(err.Error())
				default:
					t.Errorf("round %d: %v, want success or ErrConflict", round, err)
				}
			})
			if won.Load() != 1 {
				t.Errorf("round %d: %d decisions won, want 1", round, won.Load())
			}
			read(t, s, func(ctx context.Context, v *store.View) error {
				_, decisions, err := v.State(ctx, ref, store.Moment{})
				if len(decisions) != 1 {
					t.Errorf("round %d: %d decisions recorded, want 1", round, len(decisions))
				}
				return err
			})
			t.Logf("a loser is told: %v", message.Load())
		}
		wantClean(t, s, lab, store.VerifyOptions{})
	})
}

func TestWritersOfOneRecordLoseNothing(t *testing.T) {
	forEachEngine(t, func(t *testing.T, open func(store.Options) *store.Store) {
		s := open(store.Options{})
		const writers = 6
		var acknowledged sync.Map
		together(writers, func(i int) {
			for range 12 {
				var ref store.Ref
				_, err := s.Write(context.Background(), lab, func(ctx context.Context, tx *store.Tx) (err error) {
					ref, err = tx.Append(ctx, material("GLY", fmt.Sprintf("writer %d", i)))
					return err
				})
				if err == nil {
					if _, twice := acknowledged.LoadOrStore(ref.Version, ref.Hash); twice {
						t.Errorf("version %d was acknowledged twice", ref.Version)
					}
				} else if !errors.Is(err, store.ErrConflict) {
					t.Errorf("writer %d: %v, want success or ErrConflict", i, err)
				}
			}
		})
		read(t, s, func(ctx context.Context, v *store.View) error {
			n := 0
			for after := 0; ; {
				page, err := v.Versions(ctx, store.Key{Laboratory: lab, Kind: store.KindMaterial, Code: "GLY"}, after, 20)
				if err != nil {
					return err
				}
				if len(page) == 0 {
					break
				}
				for _, raw := range page {
					n++
					if hash, ok := acknowledged.Load(raw.Version); !ok || hash != raw.Hash || raw.Version != n {
						t.Errorf("version %d is recorded, acknowledged: %v", raw.Version, ok)
					}
				}
				after = page[len(page)-1].Version
			}
			count := 0
			acknowledged.Range(func(any, any) bool { count++; return true })
			if n != count || n == 0 {
				t.Errorf("%d versions recorded, %d acknowledged", n, count)
			}
			return nil
		})
		wantClean(t, s, lab, store.VerifyOptions{})
	})
}

func TestGuardHoldsAgainstSimultaneousWriters(t *testing.T) {
	forEachEngine(t, func(t *testing.T, open func(store.Options) *store.Store) {
		s := open(store.Options{})
		empty := errors.New("unit is empty")
		var done atomic.Int32
		// A unit holds 3 portions; each writer takes one, in a record of its own, so that
		// only the guard can see the others.
		together(8, func(i int) {
			_, err := s.Write(context.Background(), lab, func(ctx context.Context, tx *store.Tx) error {
				tx.Guard(func(ctx context.Context, v *store.View) error {
					page, _, err := v.List(ctx, store.ListQuery{Laboratory: lab, Kind: store.KindSample})
					if err == nil && len(page) >= 3 {
						return empty
					}
					return err
				})
				_, err := tx.Append(ctx, store.Draft{Kind: store.KindSample, Code: fmt.Sprintf("P%d", i), By: "mara", Value: store.Sample{Label: "x"}})
				return err
			})
			switch {
			case err == nil:
				done.Add(1)
			case !errors.Is(err, empty):
				t.Error(err)
			}
		})
		if done.Load() != 3 {
			t.Errorf("%d portions taken, want 3", done.Load())
		}
	})
}

func TestOneIdempotencyKeyHasOneEffect(t *testing.T) {
	forEachEngine(t, func(t *testing.T, open func(store.Options) *store.Store) {
		c := &clock{at: day(t, "2026-01-01").Time()}
		s := open(store.Options{Now: c.now})
		request := store.Hash(sha256.Sum256([]byte("request")))
		var effects atomic.Int32
		act := func(i int, request store.Hash) ([]byte, error) {
			for range 10 {
				var answer []byte
				fresh := false
				_, err := s.Write(context.Background(), lab, func(ctx context.Context, tx *store.Tx) error {
					fresh = false
					old, err := tx.Recall(ctx, lab, "mara", "key-1", request)
					if err == nil {
						answer = old
						return nil
					}
					if !errors.Is(err, store.ErrNotFound) {
						return err
					}
					fresh = true
					if _, err := tx.Append(ctx, material(fmt.Sprintf("M%d", i))); err != nil {
						return err
					}
					answer = fmt.Appendf(nil, "answer %d", i)
					return tx.Remember(ctx, "mara", "key-1", request, answer)
				})
				if errors.Is(err, store.ErrConflict) {
					continue // somebody was first: recall
				}
				if err == nil && fresh {
					effects.Add(1)
				}
				return answer, err
			}
			return nil, errors.New("no answer after ten tries")
		}
		answers := make([]string, 8)
		together(len(answers), func(i int) {
			answer, err := act(i, request)
			if err != nil {
				t.Error(err)
			}
			answers[i] = string(answer)
		})
		if effects.Load() != 1 {
			t.Errorf("%d effects, want 1", effects.Load())
		}
		for _, a := range answers {
			if a != answers[0] || a == "" {
				t.Errorf("answers differ: %q", answers)
				break
			}
		}
		if _, err := act(99, store.Hash{1}); !errors.Is(err, store.ErrKeyReused) {
			t.Errorf("the key with another request: %v, want ErrKeyReused", err)
		}
		c.at = c.at.Add(store.IdempotencyPeriod + time.Minute)
		if _, err := act(100, store.Hash{1}); err != nil || effects.Load() != 2 {
			t.Errorf("the key after its period: %v, %d effects, want a second effect", err, effects.Load())
		}
		wantClean(t, s, lab, store.VerifyOptions{})
	})
}
