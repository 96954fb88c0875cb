package store_test

import (
	"context"
	"slices"
	"testing"

	"deltamoor/store"
)

func TestLaboratoriesAreThoseWithALedgerEachOnce(t *testing.T) {
	forEachEngine(t, func(t *testing.T, open func(store.Options) *store.Store) {
		s := open(store.Options{})
		var got []string
		list := func() []string {
			err := s.Read(t.Context(), func(ctx context.Context, v *store.View) error {
				var err error
				got, err = v.Laboratories(ctx)
				return err
			})
			if err != nil {
				t.Fatal(err)
			}
			return got
		}
		if list(); len(got) != 0 {
			t.Errorf("an empty registry has the laboratories %v", got)
		}
		for _, laboratory := range []string{"QRS", "ABC", "common"} {
			for _, code := range []string{"one", "two"} {
				_, err := s.Write(t.Context(), laboratory, func(ctx context.Context, tx *store.Tx) error {
					_, err := tx.Append(ctx, store.Draft{Kind: store.KindInstrument, Code: code, By: "mara", Value: store.Instrument{Name: code}})
					return err
				})
				if err != nil {
					t.Fatal(err)
				}
			}
		}
		slices.Sort(list()) // engines may order upper and lower case differently
		if want := []string{"ABC", "QRS", "common"}; !slices.Equal(got, want) {
			t.Errorf("laboratories %v, want %v", got, want)
		}
	})
}
