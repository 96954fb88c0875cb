package registry

import (
	"context"
	"errors"
	"fmt"

	"deltamoor/calib"
	"deltamoor/store"
)

// A Companion is a robust fit beside a calibration. Numbers are the readings'
// in the session, by the index that the companion gives.
type Companion struct {
	Calibration store.Ref
	Official    store.Calibration
	*calib.Companion
	Numbers func(index int) int
}

// CompanionOf fits a stored calibration robustly, from the inputs that its
// version pins. Nothing is stored, and nothing rests on it.
func (r *Registry) CompanionOf(ctx context.Context, actor Actor, code string, version int, m store.Moment) (Companion, error) {
	var out Companion
	it, err := One[store.Calibration](ctx, r, actor, store.KindCalibration, code, version, m)
	if err != nil {
		return out, err
	}
	err = r.read(ctx, actor, func(ctx context.Context, v *store.View) error {
		a, err := assembleStored(ctx, v, it.Version)
		if err != nil {
			return err
		}
		result, _, err := a.result()
		if err != nil {
			return err
		}
		out = Companion{Calibration: it.Ref, Official: it.Value, Numbers: func(i int) int { return a.readings[i].Number }}
		out.Companion, err = result.Companion()
		var many *calib.TooManyError
		if errors.As(err, &many) {
			return &Error{Meaning: TooLarge, Message: fmt.Sprintf("no companion of %s: %s", versionName(it.Ref), many.Error()), Err: err}
		}
		if err != nil {
			return &Error{Meaning: Invalid, Message: fmt.Sprintf("no companion of %s: %s", versionName(it.Ref), err), Err: err}
		}
		return nil
	})
	return out, err
}
