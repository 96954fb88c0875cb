package store_test

import (
	"context"
	"errors"
	"testing"
	"time"

	"pgregory.net/rapid"

	"deltamoor/store"
)

// The table of moments of the specification: three versions of one value.
//
//	             valid_from   recorded     approved
//	.1  −33.10   2018-01-01   2018-01-10   2018-01-12
//	.2  −33.16   2020-06-01   2020-06-03   2020-06-03
//	.3  −33.01   2018-01-01   2021-09-01   2021-09-02   corrects .1
func momentTable(t *testing.T, open func(store.Options) *store.Store) (*store.Store, store.Key) {
	t.Helper()
	c := &clock{}
	s := open(store.Options{Now: c.now})
	key := store.Key{Laboratory: lab, Kind: store.KindValue, Code: "FJO-GLY/d13C-VPDB/total"}
	for i, row := range []struct {
		value                      store.Decimal
		from, recorded, approvedOn string
	}{
		{"-33.10", "2018-01-01", "2018-01-10", "2018-01-12"},
		{"-33.16", "2020-06-01", "2020-06-03", "2020-06-03"},
		{"-33.01", "2018-01-01", "2021-09-01", "2021-09-02"},
	} {
		var ref store.Ref
		c.at = day(t, row.recorded).Time()
		write(t, s, lab, func(ctx context.Context, tx *store.Tx) (err error) {
			from, _ := time.Parse(time.DateOnly, row.from)
			d := value(key.Code, row.value, store.InstantOf(from))
			d.After = &i
			ref, err = tx.Append(ctx, d)
			return err
		})
		c.at = day(t, row.approvedOn).Time().Add(time.Hour)
		write(t, s, lab, func(ctx context.Context, tx *store.Tx) error {
			_, err := tx.Append(ctx, decision(ref, store.ActApproved))
			return err
		})
	}
	c.at = day(t, "2022-06-01").Time()
	return s, key
}

func TestInForceFollowsTheTableOfMoments(t *testing.T) {
	forEachEngine(t, func(t *testing.T, open func(store.Options) *store.Store) {
		s, key := momentTable(t, open)
		for _, c := range []struct {
			valid, as string
			version   int // 0: none
		}{
			{"2019-03-03", "2019-03-03", 1},
			{"2019-03-03", "2022-01-01", 3},
			{"2020-12-01", "2022-01-01", 2},
			{"2019-03-03", "2018-01-11", 0}, // not yet approved
			{"2017-06-01", "2022-01-01", 0},
			{"2017-06-01", "2019-01-01", 0},
			{"2020-12-01", "2020-06-02", 1}, // .2 not yet stated: .1 still believed to hold
			{"", "", 2},
		} {
			m := store.Moment{}
			if c.valid != "" {
				m = store.Moment{ValidAt: ptr(day(t, c.valid)), AsOf: ptr(day(t, c.as))}
			}
			read(t, s, func(ctx context.Context, v *store.View) error {
				raw, state, err := v.InForce(ctx, key, m)
				switch {
				case c.version == 0:
					if !errors.Is(err, store.ErrNotFound) {
						t.Errorf("at V %s, A %s: %s, %v, want none", c.valid, c.as, raw.Ref, err)
					}
				case err != nil:
					t.Errorf("at V %s, A %s: %v, want .%d", c.valid, c.as, err, c.version)
				case raw.Version != c.version || state != store.Approved:
					t.Errorf("at V %s, A %s: .%d %s, want .%d approved", c.valid, c.as, raw.Version, state, c.version)
				}
				// A list of the same moment agrees.
				page, _, err := v.List(ctx, store.ListQuery{Laboratory: lab, Kind: store.KindValue, Moment: m})
				if err != nil {
					return err
				}
				if c.version == 0 && len(page) != 0 || c.version != 0 && (len(page) != 1 || page[0].Version != c.version) {
					t.Errorf("list at V %s, A %s: %v, want .%d", c.valid, c.as, page, c.version)
				}
				return nil
			})
		}
	})
}

func TestStateFollowsDecisionsAndMoments(t *testing.T) {
	forEachEngine(t, func(t *testing.T, open func(store.Options) *store.Store) {
		s, key := momentTable(t, open)
		state := func(version int, valid, as string) store.State {
			t.Helper()
			var got store.State
			m := store.Moment{}
			if valid != "" {
				m.ValidAt = ptr(day(t, valid))
			}
			if as != "" {
				m.AsOf = ptr(day(t, as))
			}
			read(t, s, func(ctx context.Context, v *store.View) (err error) {
				got, _, err = v.State(ctx, store.Ref{Key: key, Version: version}, m)
				return err
			})
			return got
		}
		for _, c := range []struct {
			version   int
			valid, as string
			want      store.State
		}{
			{1, "2019-03-03", "2018-01-11", store.Drafted},
			{1, "2019-03-03", "2019-03-03", store.Approved},
			{1, "2019-03-03", "2022-01-01", store.Superseded}, // by .3
			{1, "2020-12-01", "2021-01-01", store.Superseded}, // by .2
			{2, "2020-12-01", "2022-01-01", store.Approved},   // .3 fills the past alone
			{3, "2019-03-03", "2022-01-01", store.Approved},
			{3, "2019-03-03", "2021-09-02", store.Drafted},    // recorded, approved later that day
			{2, "2020-01-01", "2022-01-01", store.Approved},   // its period has not begun
			{3, "2020-12-01", "2022-01-01", store.Superseded}, // its period has ended
			{2, "", "", store.Approved},
		} {
			if got := state(c.version, c.valid, c.as); got != c.want {
				t.Errorf(".%d at V %s, A %s is %s, want %s", c.version, c.valid, c.as, got, c.want)
			}
		}
	})
}

func TestWithdrawnVersionIsReturnedAsWithdrawnFromItsEffectOn(t *testing.T) {
	forEachEngine(t, func(t *testing.T, open func(store.Options) *store.Store) {
		c := &clock{at: day(t, "2020-01-01").Time()}
		s := open(store.Options{Now: c.now})
		var ref store.Ref
		write(t, s, lab, func(ctx context.Context, tx *store.Tx) (err error) {
			if ref, err = tx.Append(ctx, value("GLY/d13C-VPDB/total", "-33.1", day(t, "2019-01-01"))); err != nil {
				return err
			}
			_, err = tx.Append(ctx, decision(ref, store.ActApproved))
			return err
		})
		c.at = day(t, "2020-06-01").Time()
		write(t, s, lab, func(ctx context.Context, tx *store.Tx) error {
			d := decision(ref, store.ActWithdrawn)
			d.Value = store.Decision{Act: store.ActWithdrawn, EffectAt: ptr(day(t, "2020-08-01"))}
			_, err := tx.Append(ctx, d)
			return err
		})
		at := func(m store.Moment) store.State {
			var state store.State
			read(t, s, func(ctx context.Context, v *store.View) (err error) {
				_, state, err = v.InForce(ctx, ref.Key, m)
				return err
			})
			return state
		}
		listed := func() store.State {
			var state store.State
			read(t, s, func(ctx context.Context, v *store.View) error {
				page, _, err := v.List(ctx, store.ListQuery{Laboratory: lab, Kind: store.KindValue})
				if len(page) == 1 {
					state = page[0].State
				}
				return err
			})
			return state
		}
		if got := at(store.Moment{}); got != store.Approved {
			t.Errorf("before the effect it is %s, want approved", got)
		}
		if got := listed(); got != store.Approved {
			t.Errorf("before the effect it is listed as %s, want approved", got)
		}
		// Nothing is written any more: the effect comes by the mere passing of time.
		c.at = day(t, "2020-08-02").Time()
		if got := at(store.Moment{}); got != store.Withdrawn {
			t.Errorf("after the effect it is %s, want withdrawn", got)
		}
		if got := listed(); got != store.Withdrawn {
			t.Errorf("after the effect it is listed as %s, want withdrawn", got)
		}
		if got := at(store.Moment{ValidAt: ptr(day(t, "2020-07-01"))}); got != store.Approved {
			t.Errorf("at a moment before the effect it is %s, want approved", got)
		}
		if got := at(store.Moment{AsOf: ptr(day(t, "2020-05-01"))}); got != store.Approved {
			t.Errorf("as of a moment before the withdrawal was recorded it is %s, want approved", got)
		}
		wantClean(t, s, lab, store.VerifyOptions{})
	})
}

func TestPeriodThatBeginsLaterTakesOverByItself(t *testing.T) {
	forEachEngine(t, func(t *testing.T, open func(store.Options) *store.Store) {
		c := &clock{at: day(t, "2020-01-01").Time()}
		s := open(store.Options{Now: c.now})
		key := store.Key{Laboratory: lab, Kind: store.KindValue, Code: "GLY/d13C-VPDB/total"}
		write(t, s, lab, func(ctx context.Context, tx *store.Tx) error {
			for _, from := range []string{"2020-02-01", "2020-03-01"} {
				ref, err := tx.Append(ctx, value(key.Code, "-33.1", day(t, from)))
				if err != nil {
					return err
				}
				if _, err := tx.Append(ctx, decision(ref, store.ActApproved)); err != nil {
					return err
				}
			}
			return nil
		})
		for _, step := range []struct {
			now     string
			version int
		}{{"2020-01-15", 0}, {"2020-02-15", 1}, {"2020-03-15", 2}} {
			c.at = day(t, step.now).Time()
			read(t, s, func(ctx context.Context, v *store.View) error {
				page, _, err := v.List(ctx, store.ListQuery{Laboratory: lab, Kind: store.KindValue})
				if err != nil {
					return err
				}
				got := 0
				if len(page) == 1 {
					got = page[0].Version
				}
				raw, _, err := v.InForce(ctx, key, store.Moment{})
				if got != step.version || err == nil && raw.Version != step.version || err != nil && step.version != 0 {
					t.Errorf("on %s: listed .%d, in force .%d (%v), want .%d", step.now, got, raw.Version, err, step.version)
				}
				return nil
			})
		}
		wantClean(t, s, lab, store.VerifyOptions{})
	})
}

// TestListsFromCurrentRowsAgreeWithHistory compares the two ways a list is made
// on random histories: by the current rows, and by history at the same moment.
func TestListsFromCurrentRowsAgreeWithHistory(t *testing.T) {
	forEachEngine(t, func(t *testing.T, open func(store.Options) *store.Store) {
		s := open(store.Options{})
		round := 0
		rapid.Check(t, func(rt *rapid.T) {
			round++
			laboratory := "L" + string(symbols[round/32%32]) + string(symbols[round%32])
			n := rapid.IntRange(1, 8).Draw(rt, "acts")
			for range n {
				code := rapid.SampledFrom([]string{"a", "a.1", "a-1", "b"}).Draw(rt, "code")
				act := rapid.SampledFrom([]string{"append", store.ActSubmitted, store.ActApproved, store.ActDeclined, store.ActWithdrawn}).Draw(rt, "act")
				from := store.InstantOf(time.Now().AddDate(0, 0, rapid.IntRange(-3, 3).Draw(rt, "days")))
				_, err := s.Write(context.Background(), laboratory, func(ctx context.Context, tx *store.Tx) error {
					key := store.Key{Laboratory: laboratory, Kind: store.KindValue, Code: code}
					newest, err := tx.Newest(ctx, key)
					if act == "append" || errors.Is(err, store.ErrNotFound) {
						_, err := tx.Append(ctx, value(code, "1", from))
						return err
					}
					if err != nil {
						return err
					}
					_, err = tx.Append(ctx, decision(newest.Ref, act))
					return err
				})
				if err != nil {
					rt.Fatal(err)
				}
			}
			for _, newest := range []bool{false, true} {
				err := s.Read(context.Background(), func(ctx context.Context, v *store.View) error {
					q := store.ListQuery{Laboratory: laboratory, Kind: store.KindValue, Newest: newest}
					current, _, err := v.List(ctx, q)
					if err != nil {
						return err
					}
					if q.Moment, _, err = v.Moment(ctx, laboratory, store.Moment{}); err != nil {
						return err
					}
					history, _, err := v.List(ctx, q)
					if err != nil {
						return err
					}
					if a, b := listText(current), listText(history); a != b {
						rt.Errorf("newest %v: current rows say %s, history says %s", newest, a, b)
					}
					return nil
				})
				if err != nil {
					rt.Fatal(err)
				}
			}
			f, err := s.Verify(context.Background(), laboratory, store.VerifyOptions{})
			if err != nil || !f.Clean() {
				rt.Fatalf("verify: %v %v", f.List, err)
			}
		})
	})
}

func listText(page []store.Held) string {
	text := ""
	for _, h := range page {
		text += h.Ref.String() + " " + string(h.State) + "; "
	}
	return text
}
