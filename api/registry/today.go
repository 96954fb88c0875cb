package registry

import (
	"context"
	"errors"
	"fmt"
	"math"

	"deltamoor/store"
)

// A Today says how a reported delta would look with the assigned values in
// force at a moment, by default now. Nothing of it is stored.
type Today struct {
	Reported ReportedDelta
	// Value, StandardUncertainty and Expanded (‰) as they would be; U comes with K.
	Value, StandardUncertainty, K, Expanded float64
	EffectiveDF                             *float64
	// Shift (‰) is Value less the reported one: a correction of it, not a second
	// measurement. Ratio is |Shift| over the reported u, +Inf where that is 0;
	// Material where it is beyond half of u.
	Shift, Ratio float64
	Material     bool
	// Replaced are the values that sessions would take now in place of those they
	// took; none, where everything still stands.
	Replaced []ReplacedValue
	// Why says why it cannot be told; "" where it can, and then the numbers count.
	Why string
}

// A ReplacedValue is an assigned value of which another version holds for a session.
type ReplacedValue struct {
	Session  string
	Part     string // anchor or control
	Old, New store.Ref
	// OldValue and NewValue (‰), with their standard uncertainties.
	OldValue, OldU, NewValue, NewU float64
}

// MaxTodayMembers bounds the sessions that one answer fits again.
const MaxTodayMembers = 100

// Today draws up a reported delta again with the values in force at a moment:
// for each of its sessions those that hold at its start, as far as had been said
// by AsOf (nil: by now). A value is taken as it stands in force, with its own
// decomposition: what it rests on is what its approval was for.
func (r *Registry) Today(ctx context.Context, actor Actor, code string, asOf *store.Instant) (Today, error) {
	var out Today
	err := r.read(ctx, actor, func(ctx context.Context, v *store.View) error {
		out = Today{}
		var err error
		if out.Reported, err = reportedAt(ctx, v, actor.Laboratory, code, store.Moment{AsOf: asOf}); err != nil {
			return err
		}
		return today(ctx, v, actor.Laboratory, asOf, &out)
	})
	return out, err
}

func today(ctx context.Context, v *store.View, laboratory string, asOf *store.Instant, out *Today) error {
	final, err := decodeVersion[store.Final](ctx, v, out.Reported.Final)
	if err != nil {
		return err
	}
	if len(final.Value.Members) > MaxTodayMembers {
		return Refuse(TooLarge, "%s rests on %d sessions: at most %d are fitted again in one answer", versionName(final.Ref), len(final.Value.Members), MaxTodayMembers)
	}
	src := &overlay{source: v, drafts: map[store.Ref]store.Raw{}}
	c := &changes{laboratory: laboratory}
	inputs := make([]store.Input, 0, len(final.Inputs))
	for _, in := range final.Inputs {
		if in.Part == "member" && in.Kind == store.KindCalibration {
			now, why, err := c.today(ctx, v, src, in.Ref, asOf, out)
			if err != nil {
				return err
			}
			if why != "" {
				out.Why = why
				return nil
			}
			in.Ref = now
		}
		inputs = append(inputs, in)
	}
	body := final.Value
	if len(out.Replaced) > 0 {
		members, err := membersOf(ctx, src, inputs, func(_ int, c store.Version[store.Calibration]) int { return resultOf(c.Value, final.Value.Sample) })
		if err != nil {
			return err
		}
		if err := combineMembers(ctx, src, members, &body); err != nil {
			return err
		}
	}
	out.Value, out.StandardUncertainty, out.K, out.Expanded, out.EffectiveDF = body.Value, body.StandardUncertainty, body.K, body.Expanded, body.EffectiveDF
	out.Shift = body.Value - final.Value.Value
	if out.Shift != 0 {
		out.Ratio = math.Abs(out.Shift) / final.Value.StandardUncertainty
	}
	out.Material = out.Ratio > Material
	return nil
}

// today fits one calibration again with the values that hold for its session,
// and keeps it in memory; where they are those it took, it stands as it is.
func (c *changes) today(ctx context.Context, v *store.View, src *overlay, ref store.Ref, asOf *store.Instant, out *Today) (store.Ref, string, error) {
	of, err := decodeVersion[store.Calibration](ctx, v, ref)
	if err != nil {
		return ref, "", err
	}
	var replaced []ReplacedValue
	next, touched, untold, err := c.again(ctx, src, of, func(ctx context.Context, value store.Ref, started *store.Instant) (replacement, error) {
		raw, state, err := v.InForce(ctx, value.Key, store.Moment{ValidAt: started, AsOf: asOf})
		if errors.Is(err, store.ErrNotFound) {
			return replacement{untold: "no version of it holds for that session"}, nil
		}
		if err != nil {
			return replacement{}, err
		}
		if state != store.Approved {
			return replacement{untold: fmt.Sprintf("it is %s", state)}, nil
		}
		if raw.Ref == value {
			return replacement{same: true}, nil
		}
		x := ReplacedValue{Session: of.Value.Session, Old: value, New: raw.Ref}
		for _, side := range []struct {
			ref      store.Ref
			value, u *float64
		}{{value, &x.OldValue, &x.OldU}, {raw.Ref, &x.NewValue, &x.NewU}} {
			body, err := decodeVersion[store.Value](ctx, v, side.ref)
			if err != nil {
				return replacement{}, err
			}
			number, _, err := numberOf(body)
			if err != nil {
				return replacement{}, err
			}
			*side.value, *side.u = number.Value, body.Value.StandardUncertainty
		}
		replaced = append(replaced, x)
		return replacement{ref: raw.Ref}, nil
	})
	if err != nil || untold != "" || !touched {
		return ref, untold, err
	}
	for _, x := range replaced {
		for _, in := range of.Inputs {
			if in.Ref == x.Old && (in.Part == "anchor" || in.Part == "control") {
				x.Part = in.Part
			}
		}
		out.Replaced = append(out.Replaced, x)
	}
	newest, err := v.Newest(ctx, ref.Key)
	if err != nil {
		return ref, "", err
	}
	next.Ref = store.Ref{Key: ref.Key, Version: newest.Ref.Version + 1}
	body, untold, err := refit(ctx, src, next)
	if err != nil || untold != "" {
		return ref, untold, err
	}
	draft := store.Draft{Kind: store.KindCalibration, Code: ref.Code, By: of.RecordedBy, Reason: "with the values in force", Inputs: next.Inputs, Value: body}
	now, err := src.put(c.laboratory, draft, next.Ref.Version, newest.Hash)
	return now, "", err
}
