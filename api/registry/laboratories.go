package registry

import (
	"context"
	"errors"
	"time"

	"deltamoor/store"
)

// An InitRequest makes the first laboratory and its administrator.
type InitRequest struct {
	Laboratory string // 2 to 8 of A–Z
	Name       string
	Zone       string
	// SecondPerson asks for another person than the author on values and methods.
	SecondPerson bool
	Person       string
	PersonName   string
	// Verifier is the public half of the ledger's signing key, if there is one.
	Verifier string
}

// RegistryPerson is whom the seeds are recorded by.
const RegistryPerson = "registry"

// Init makes an empty registry usable: the seeds of common, the first
// laboratory, its first person as administrator and manager, and a token whose secret is shown
// once.
func (r *Registry) Init(ctx context.Context, q InitRequest) (secret string, err error) {
	var c complaints
	if !laboratoryPattern.MatchString(q.Laboratory) {
		c.add("laboratory", quote(q.Laboratory), "2 to 8 of A–Z")
	}
	c.text("name", q.Name, 200)
	c.code("person", q.Person)
	c.text("person name", q.PersonName, 200)
	if q.Zone != "" {
		if _, err := time.LoadLocation(q.Zone); err != nil {
			c.add("zone", quote(q.Zone), "an IANA time zone such as Europe/Lisbon")
		}
	}
	if err := Complain("this registry cannot be initialised", c); err != nil {
		return "", err
	}
	if done, err := r.Initialised(ctx); err != nil {
		return "", err
	} else if done {
		return "", Refuse(Conflict, "this registry is initialised already")
	}
	if err := r.seed(ctx); err != nil {
		return "", err
	}
	return r.AddLaboratory(ctx, q)
}

// AddLaboratory makes a laboratory with its first administrator and a token
// whose secret is shown once.
func (r *Registry) AddLaboratory(ctx context.Context, q InitRequest) (secret string, err error) {
	actor := Actor{Person: q.Person, Laboratory: q.Laboratory, Roles: []string{Administrator}}
	_, err = r.store.Write(ctx, q.Laboratory, func(ctx context.Context, tx *store.Tx) error {
		body := store.Laboratory{Name: q.Name, Zone: q.Zone}
		if q.SecondPerson {
			body.SecondPerson = []store.Kind{store.KindValue, store.KindMethod}
		}
		key := store.Key{Laboratory: q.Laboratory, Kind: store.KindLaboratory, Code: q.Laboratory}
		if _, err := appendVersion(ctx, tx, actor, key, Edit{}, nil, body); err != nil {
			return err
		}
		key = store.Key{Laboratory: q.Laboratory, Kind: store.KindPerson, Code: q.Person}
		person := store.Person{Name: q.PersonName, Roles: []string{Administrator, Manager}}
		if _, err := appendVersion(ctx, tx, actor, key, Edit{}, nil, person); err != nil {
			return err
		}
		if q.Verifier != "" {
			key := store.Key{Laboratory: q.Laboratory, Kind: store.KindKey, Code: "ledger"}
			if _, err := appendVersion(ctx, tx, actor, key, Edit{}, nil, store.SigningKey{Verifier: q.Verifier}); err != nil {
				return err
			}
		}
		_, secret, err = r.issue(ctx, tx, actor, store.Token{Person: q.Person, Label: "first token", Roles: person.Roles})
		return err
	})
	return secret, err
}

// Initialised tells whether the registry has its seeds, which is what readiness asks.
func (r *Registry) Initialised(ctx context.Context) (bool, error) {
	done := false
	err := r.store.Read(ctx, func(ctx context.Context, v *store.View) error {
		_, err := v.Newest(ctx, store.Key{Laboratory: store.Common, Kind: store.KindScale, Code: "d13C-VPDB"})
		done = err == nil
		if errors.Is(err, store.ErrNotFound) {
			return nil
		}
		return err
	})
	return done, err
}

// Laboratory reads the actor's own laboratory.
func (r *Registry) Laboratory(ctx context.Context, actor Actor) (Item[store.Laboratory], error) {
	return One[store.Laboratory](ctx, r, actor, store.KindLaboratory, actor.Laboratory, 0, store.Moment{})
}
