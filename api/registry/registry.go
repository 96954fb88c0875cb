// Package registry is what deltamoor does, without HTTP: it keeps reference
// materials, their assigned values, methods, sessions, calibrations, final
// values and reports as versions that are never overwritten, fits and
// recomputes, decides who may do what, and answers where a number comes from.
//
// Every operation takes an Actor, refuses with an *Error whose meaning and
// words are the same for every face of the program, and either lands whole in
// one act of the store or changes nothing.
package registry

import (
	"context"
	"crypto/rand"
	"errors"
	"fmt"
	"io"
	"slices"
	"strings"
	"sync/atomic"
	"time"

	"deltamoor/store"
	"deltamoor/store/ledger"
)

// A Registry answers operations over one store.
type Registry struct {
	store *store.Store
	now   func() time.Time
	rand  io.Reader
	name  string
	key   atomic.Pointer[ledger.Key]

	holders known[[2]store.Hash, saidOfHolder]
	claims  known[store.Hash, Claim]
	lines   known[string, knownLine]
	told    known[store.Hash, *description]
}

// Options of a registry; the zero value uses the clock and crypto/rand.
type Options struct {
	// Now gives the time. It should be the store's own clock.
	Now func() time.Time
	// Rand gives the randomness of codes and secrets.
	Rand io.Reader
	// Name of the registry: with a laboratory's code it is the origin of that
	// laboratory's ledger. "" means DefaultName.
	Name string
	// Key signs checkpoints on request; nil leaves ledgers unsigned.
	Key *ledger.Key
}

// DefaultName is what a registry is called that nobody named.
const DefaultName = "deltamoor.local"

// New makes a registry over an open store, which stays the caller's to close.
func New(s *store.Store, o Options) *Registry {
	r := &Registry{store: s, now: o.Now, rand: o.Rand, name: o.Name}
	r.UseKey(o.Key)
	r.holders.most, r.claims.most, r.lines.most, r.told.most = maxHolders, maxHolders, maxKnownLines, maxTold
	if r.name == "" {
		r.name = DefaultName
	}
	if r.now == nil {
		r.now = time.Now
	}
	if r.rand == nil {
		r.rand = rand.Reader
	}
	return r
}

// UseKey signs checkpoints on request from now on with a key: a server may run
// before its registry is initialised. Nil leaves things as they are.
func (r *Registry) UseKey(key *ledger.Key) {
	if key != nil {
		r.key.Store(key)
	}
}

// Now is the registry's clock.
func (r *Registry) Now() store.Instant { return store.InstantOf(r.now()) }

// An Actor is who asks: a person acting in one laboratory with the roles and
// scopes of a token or sign-in.
type Actor struct {
	Person     string
	Laboratory string
	Roles      []string
	// Scopes narrow what the roles allow; none means no narrowing.
	Scopes []string
	// Token is the code of the token that was shown, if any.
	Token string
}

// The roles. A signatory is also an analyst, a manager also a signatory.
const (
	Analyst       = "analyst"
	Signatory     = "signatory"
	Manager       = "manager"
	Auditor       = "auditor"
	Administrator = "administrator"
)

// Roles lists the role words, least first.
var Roles = []string{Analyst, Signatory, Manager, Auditor, Administrator}

// A Permission is a scope word: what one operation asks of its actor.
type Permission string

// The permissions, which are also the scopes a token may be narrowed to.
const (
	MayRead       Permission = "read"
	MayImport     Permission = "import"     // samples, sessions, readings
	MayFit        Permission = "fit"        // exclusions, outcomes, calibrations, final values, submitting
	MayApprove    Permission = "approve"    // decisions, reports
	MayManage     Permission = "manage"     // materials, units, values, instruments, methods, scales
	MayAdminister Permission = "administer" // people, tokens, laboratories
)

// Permissions lists the scope words.
var Permissions = []Permission{MayRead, MayImport, MayFit, MayApprove, MayManage, MayAdminister}

var allowed = map[string][]Permission{
	Analyst:       {MayRead, MayImport, MayFit},
	Signatory:     {MayRead, MayImport, MayFit, MayApprove},
	Manager:       {MayRead, MayImport, MayFit, MayApprove, MayManage},
	Auditor:       {MayRead},
	Administrator: {MayRead, MayAdminister},
}

// May tells whether the actor's roles and scopes allow something.
func (a Actor) May(p Permission) bool {
	if len(a.Scopes) > 0 && !slices.Contains(a.Scopes, string(p)) {
		return false
	}
	for _, role := range a.Roles {
		if slices.Contains(allowed[role], p) {
			return true
		}
	}
	return false
}

// need refuses an actor that may not do something, saying which role would.
func (a Actor) need(p Permission) error {
	if a.Person == "" || a.Laboratory == "" {
		return Refuse(Unauthenticated, "sign in or send a token first")
	}
	if a.May(p) {
		return nil
	}
	var roles []string
	for _, role := range Roles {
		if slices.Contains(allowed[role], p) {
			roles = append(roles, role)
		}
	}
	if len(a.Scopes) > 0 && !slices.Contains(a.Scopes, string(p)) {
		return Refuse(Refused, "this token's scopes (%s) do not include %q", strings.Join(a.Scopes, ", "), p)
	}
	return Refuse(Refused, "%s has the roles %s in laboratory %s; this needs %s",
		a.Person, strings.Join(a.Roles, ", "), a.Laboratory, strings.Join(roles, " or "))
}

// An Item is a version together with what has been decided about it.
type Item[T store.Body] struct {
	store.Version[T]
	State     store.State
	Decisions []store.Version[store.Decision]
}

// Tag is the entity tag of a version: it changes with every version and decision.
func (i Item[T]) Tag() string { return Tag(i.Version.Ref.Version, len(i.Decisions)) }

// Tag writes an entity tag from a version number and its number of decisions.
func Tag(version, decisions int) string { return fmt.Sprintf("%d-%d", version, decisions) }

// A Page is one page of a list; After is the cursor of the next, "" at the end.
type Page[T any] struct {
	Items []T
	After string
	// AsOf is the moment that all pages of this list belong to.
	AsOf store.Instant
}

// A Query chooses what a list shows.
type Query struct {
	Limit  int
	After  string
	Moment store.Moment
	// InForce lists the versions in force only; else the newest of every record, drafts included.
	InForce bool
}

// MaxPage bounds a page.
const MaxPage = 500

func (q Query) limit() int {
	switch {
	case q.Limit <= 0:
		return 100
	case q.Limit > MaxPage:
		return MaxPage
	}
	return q.Limit
}

// read runs fn over one consistent view.
func (r *Registry) read(ctx context.Context, actor Actor, fn func(ctx context.Context, v *store.View) error) error {
	if err := actor.need(MayRead); err != nil {
		return err
	}
	return r.store.Read(ctx, func(ctx context.Context, v *store.View) error { return fn(ctx, v) })
}

// write runs fn as one act of the actor's laboratory.
func (r *Registry) write(ctx context.Context, actor Actor, p Permission, fn func(ctx context.Context, tx *store.Tx) error) error {
	if err := actor.need(p); err != nil {
		return err
	}
	_, err := r.store.Write(ctx, actor.Laboratory, func(ctx context.Context, tx *store.Tx) error {
		if err := fn(ctx, tx); err != nil {
			return err
		}
		return keep(ctx, tx, actor)
	})
	return err
}

// item decodes a raw version and reads its state.
func item[T store.Body](ctx context.Context, v *store.View, raw store.Raw, m store.Moment) (Item[T], error) {
	version, err := store.Decode[T](raw)
	if err != nil {
		return Item[T]{}, err
	}
	it := Item[T]{Version: version, State: store.Recorded}
	if raw.Kind.Decided() {
		it.State, it.Decisions, err = v.State(ctx, raw.Ref, m)
	}
	return it, err
}

// draw makes a code that no record of its kind has yet.
func (r *Registry) draw(ctx context.Context, v *store.View, laboratory string, letter byte) (string, error) {
	for range 20 {
		code, err := store.NewCode(letter, r.rand)
		if err != nil {
			return "", err
		}
		if letter == 'D' {
			_, err = v.Reported(ctx, code)
		} else {
			_, err = v.Newest(ctx, store.Key{Laboratory: laboratory, Kind: store.CodeKind(letter), Code: code})
		}
		if errors.Is(err, store.ErrNotFound) {
			return code, nil
		}
		if err != nil {
			return "", err
		}
	}
	return "", Refuse(Unavailable, "no free code was drawn in 20 tries")
}

// newest reads the newest version of a record of the actor's own laboratory.
func newest[T store.Body](ctx context.Context, v *store.View, key store.Key) (Item[T], error) {
	raw, err := v.Newest(ctx, key)
	if err != nil {
		return Item[T]{}, missing(err, key)
	}
	return item[T](ctx, v, raw, store.Moment{})
}

// missing gives a not-found error the record's own name.
func missing(err error, key store.Key) error {
	if errors.Is(err, store.ErrNotFound) {
		return &Error{Meaning: NotFound, Message: fmt.Sprintf("no %s %q in laboratory %s", key.Kind, key.Code, key.Laboratory), Err: err}
	}
	return err
}

// taken gives a conflict on a new record its own name.
func taken(err error, key store.Key) error {
	if errors.Is(err, store.ErrConflict) || errors.Is(err, store.ErrStale) {
		return &Error{Meaning: Conflict, Message: fmt.Sprintf("%s %q exists already in laboratory %s; a change is a further version of it", key.Kind, key.Code, key.Laboratory), Err: err}
	}
	return err
}

var first = new(int) // Draft.After of a record that must not exist yet

// An Edit says which version a change follows and why it is made.
type Edit struct {
	// After is the version number the author saw; 0 makes a new record.
	After  int
	Reason string
	// ValidFrom is when the change begins to hold; only for records with a period.
	ValidFrom *store.Instant
}

// append states one version of a record of the actor's laboratory: a first
// one, which may go without a reason, or a further one, which may not.
func appendVersion(ctx context.Context, tx *store.Tx, actor Actor, key store.Key, e Edit, inputs []store.Input, body store.Body) (store.Ref, error) {
	if e.After > 0 && strings.TrimSpace(e.Reason) == "" {
		return store.Ref{}, Complain("a further version needs a reason", []Complaint{{Place: "body.reason", Expected: "why this version replaces the one before"}})
	}
	ref, err := tx.Append(ctx, store.Draft{Kind: key.Kind, Code: key.Code, By: actor.Person, Reason: strings.TrimSpace(e.Reason),
		ValidFrom: e.ValidFrom, Inputs: inputs, Value: body, After: &e.After})
	switch {
	case err == nil:
		return ref, nil
	case e.After == 0:
		return ref, taken(err, key)
	case errors.Is(err, store.ErrStale):
		return ref, &Error{Meaning: Stale, Message: fmt.Sprintf("%s %q has a newer version than %d: read it again before changing it", key.Kind, key.Code, e.After), Err: err}
	case errors.Is(err, store.ErrNotFound):
		return ref, missing(err, key)
	}
	return ref, err
}

// list pages through the records of a kind of one laboratory, by code.
func list[T store.Body](ctx context.Context, v *store.View, laboratory string, kind store.Kind, q Query) (Page[Item[T]], error) {
	var page Page[Item[T]]
	moment, _, err := v.Moment(ctx, laboratory, q.Moment)
	if err != nil {
		return page, err
	}
	page.AsOf = *moment.AsOf
	raws, after, err := v.List(ctx, store.ListQuery{Laboratory: laboratory, Kind: kind, After: q.After, Limit: q.limit(), Moment: q.Moment, Newest: !q.InForce})
	if err != nil {
		return page, err
	}
	page.After = after
	page.Items = make([]Item[T], 0, len(raws))
	for _, held := range raws {
		it, err := item[T](ctx, v, held.Raw, q.Moment)
		if err != nil {
			return page, err
		}
		page.Items = append(page.Items, it)
	}
	return page, nil
}

// Versions lists the versions of a record, oldest first, from the number after on.
func Versions[T store.Body](ctx context.Context, r *Registry, actor Actor, kind store.Kind, code string, after, limit int) ([]Item[T], error) {
	var out []Item[T]
	err := r.read(ctx, actor, func(ctx context.Context, v *store.View) error {
		out = nil
		key := store.Key{Laboratory: actor.Laboratory, Kind: kind, Code: code}
		raws, err := v.Versions(ctx, key, after, Query{Limit: limit}.limit())
		if err == nil && len(raws) == 0 && kind != store.KindCalibration {
			key.Laboratory = store.Common
			raws, err = v.Versions(ctx, key, after, Query{Limit: limit}.limit())
		}
		if err != nil {
			return err
		}
		if len(raws) == 0 && after == 0 {
			return missing(store.ErrNotFound, store.Key{Laboratory: actor.Laboratory, Kind: kind, Code: code})
		}
		for _, raw := range raws {
			it, err := item[T](ctx, v, raw, store.Moment{})
			if err != nil {
				return err
			}
			out = append(out, it)
		}
		return nil
	})
	return out, err
}

// One reads a record of the actor's laboratory, or of common where that has
// none: the version with a number, or for 0 the one in force at the moment (for
// records that are decided: the newest approved; else the newest).
func One[T store.Body](ctx context.Context, r *Registry, actor Actor, kind store.Kind, code string, number int, m store.Moment) (Item[T], error) {
	var out Item[T]
	err := r.read(ctx, actor, func(ctx context.Context, v *store.View) error {
		raw, err := lookup(ctx, v, actor.Laboratory, kind, code, number, m)
		if err != nil {
			return err
		}
		out, err = item[T](ctx, v, raw, m)
		return err
	})
	return out, err
}

func lookup(ctx context.Context, v *store.View, laboratory string, kind store.Kind, code string, number int, m store.Moment) (store.Raw, error) {
	own := store.Key{Laboratory: laboratory, Kind: kind, Code: code}
	for _, key := range []store.Key{own, {Laboratory: store.Common, Kind: kind, Code: code}} {
		raw, err := lookupIn(ctx, v, key, number, m)
		if !errors.Is(err, store.ErrNotFound) {
			return raw, err
		}
	}
	return store.Raw{}, missing(store.ErrNotFound, own)
}

func lookupIn(ctx context.Context, v *store.View, key store.Key, number int, m store.Moment) (store.Raw, error) {
	if number > 0 {
		return v.Version(ctx, key, number)
	}
	raw, _, err := v.InForce(ctx, key, m)
	if errors.Is(err, store.ErrNotFound) && key.Kind.Decided() && key.Kind != store.KindValue && m.AsOf == nil {
		return v.Newest(ctx, key) // a draft that nothing has replaced yet
	}
	return raw, err
}
