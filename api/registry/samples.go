package registry

import (
	"context"
	"fmt"

	"deltamoor/store"
)

// MaxSamples bounds how many samples one act registers.
const MaxSamples = 10_000

// AddSamples puts samples on the list; all are registered or none. Labels may
// repeat, between clients and within one: the code is what tells samples apart.
func (r *Registry) AddSamples(ctx context.Context, actor Actor, samples []store.Sample) ([]Item[store.Sample], error) {
	var c complaints
	if len(samples) == 0 {
		c.add("body.samples", "nothing", "at least one sample")
	}
	if len(samples) > MaxSamples {
		return nil, Refuse(TooLarge, "%d samples in one act: at most %d", len(samples), MaxSamples)
	}
	for i, s := range samples {
		place := fmt.Sprintf("body.samples[%d]", i)
		c.text(place+".client", s.Client, 100)
		c.text(place+".label", s.Label, 100)
		if len(s.Wanted) == 0 {
			c.add(place+".wanted", "nothing", "at least one scale that a value is wanted on")
		}
	}
	if err := Complain("these samples cannot be registered", c); err != nil {
		return nil, err
	}
	var codes []string
	err := r.write(ctx, actor, MayImport, func(ctx context.Context, tx *store.Tx) error {
		codes = codes[:0]
		known := map[string]bool{}
		var c complaints
		for i, s := range samples {
			for j, w := range s.Wanted {
				ok, seen := known[w.Scale]
				if !seen {
					_, err := lookup(ctx, &tx.View, actor.Laboratory, store.KindScale, w.Scale, 0, store.Moment{})
					if ignoreNotFound(err) != nil {
						return err
					}
					ok = err == nil
					known[w.Scale] = ok
				}
				if !ok {
					c.add(fmt.Sprintf("body.samples[%d].wanted[%d].scale", i, j), quote(w.Scale), "the name of a scale, such as d13C-VPDB-LSVEC")
				}
			}
		}
		if err := Complain("these samples cannot be registered", c); err != nil {
			return err
		}
		for _, s := range samples {
			code, err := r.draw(ctx, &tx.View, actor.Laboratory, 'P')
			if err != nil {
				return err
			}
			if _, err := tx.Append(ctx, store.Draft{Kind: store.KindSample, Code: code, By: actor.Person, Value: s, After: first}); err != nil {
				return err
			}
			codes = append(codes, code)
		}
		return nil
	})
	if err != nil {
		return nil, err
	}
	out := make([]Item[store.Sample], 0, len(codes))
	err = r.store.Read(ctx, func(ctx context.Context, v *store.View) error {
		out = out[:0]
		for _, code := range codes {
			it, err := newest[store.Sample](ctx, v, store.Key{Laboratory: actor.Laboratory, Kind: store.KindSample, Code: code})
			if err != nil {
				return err
			}
			out = append(out, it)
		}
		return nil
	})
	return out, err
}

// A Standing says where one wanted quantity of a sample is.
type Standing struct {
	store.Wanted
	// State: waiting, measured, final, reported.
	State string
	// Final is the final value's code, Reported the codes under which it was reported.
	Final    string
	Reported []string
}

// SampleStanding tells, for everything wanted of a sample, how far it has come.
func (r *Registry) SampleStanding(ctx context.Context, actor Actor, code string) (Item[store.Sample], []Standing, error) {
	var sample Item[store.Sample]
	var out []Standing
	err := r.read(ctx, actor, func(ctx context.Context, v *store.View) error {
		out = nil
		key := store.Key{Laboratory: actor.Laboratory, Kind: store.KindSample, Code: code}
		var err error
		if sample, err = newest[store.Sample](ctx, v, key); err != nil {
			return err
		}
		for _, w := range sample.Value.Wanted {
			if w.Measurand == "" {
				w.Measurand = Total
			}
			s := Standing{Wanted: w, State: "waiting"}
			rows, _, err := v.Results(ctx, store.ResultQuery{Laboratory: actor.Laboratory, Subject: code, Scale: w.Scale, Limit: 1})
			if err != nil {
				return err
			}
			if len(rows) > 0 {
				s.State = "measured"
			}
			finals, err := v.Resolve(ctx, actor.Laboratory, store.KindFinal, store.FinalName(code, w.Scale, w.Measurand))
			if err != nil {
				return err
			}
			if len(finals) == 1 {
				s.State, s.Final = "final", finals[0].Code
				edges, _, err := v.EdgesTo(ctx, store.EdgeQuery{To: finals[0], FromKind: store.KindReport, Limit: MaxPage})
				if err != nil {
					return err
				}
				for _, e := range edges {
					report, err := decodeVersion[store.Report](ctx, v, e.From)
					if err != nil {
						return err
					}
					for i, in := range report.Inputs {
						if in.Key == finals[0] && i < len(report.Value.Lines) {
							s.State = "reported"
							s.Reported = append(s.Reported, report.Value.Lines[i].Code)
						}
					}
				}
			}
			out = append(out, s)
		}
		return nil
	})
	return sample, out, err
}

// decodeVersion reads exactly one version and checks that it is the one named.
func decodeVersion[T store.Body](ctx context.Context, v source, ref store.Ref) (store.Version[T], error) {
	raw, err := v.Version(ctx, ref.Key, ref.Version)
	if err != nil {
		return store.Version[T]{}, missing(err, ref.Key)
	}
	if ref.Hash != (store.Hash{}) && raw.Hash != ref.Hash {
		return store.Version[T]{}, fmt.Errorf("%s: named with hash %s, stored with %s", ref, ref.Hash, raw.Hash)
	}
	return store.Decode[T](raw)
}
