package registry

import (
	"context"
	"crypto/sha256"
	"encoding/base64"
	"errors"
	"fmt"
	"io"
	"slices"
	"strings"

	"deltamoor/store"
)

// TokenPrefix begins every secret, so that one left in a file can be recognised.
// The laboratory's code follows: a token is of one laboratory, and its hash is
// looked up nowhere else.
const TokenPrefix = "dm_"

// AddPerson registers a person of the laboratory.
func (r *Registry) AddPerson(ctx context.Context, actor Actor, code string, p store.Person) (Item[store.Person], error) {
	return r.statePerson(ctx, actor, code, p, Edit{})
}

// ChangePerson states a further version of a person: other roles, or an account closed.
func (r *Registry) ChangePerson(ctx context.Context, actor Actor, code string, p store.Person, e Edit) (Item[store.Person], error) {
	return r.statePerson(ctx, actor, code, p, e)
}

func (r *Registry) statePerson(ctx context.Context, actor Actor, code string, p store.Person, e Edit) (Item[store.Person], error) {
	var out Item[store.Person]
	var c complaints
	c.code("body.code", code)
	c.text("body.name", p.Name, 200)
	checkRoles(&c, "body.roles", p.Roles)
	if err := Complain("this person cannot be registered", c); err != nil {
		return out, err
	}
	err := r.write(ctx, actor, MayAdminister, func(ctx context.Context, tx *store.Tx) error {
		key := store.Key{Laboratory: actor.Laboratory, Kind: store.KindPerson, Code: code}
		if _, err := appendVersion(ctx, tx, actor, key, e, nil, p); err != nil {
			return err
		}
		return nil
	})
	if err != nil {
		return out, err
	}
	return reread[store.Person](ctx, r, actor, store.KindPerson, code)
}

func checkRoles(c *complaints, place string, roles []string) {
	if len(roles) == 0 {
		c.add(place, "nothing", "at least one of %s", strings.Join(Roles, ", "))
	}
	for i, role := range roles {
		c.oneOf(fmt.Sprintf("%s[%d]", place, i), role, Roles...)
	}
}

// reread shows an actor what an act of theirs has just recorded: position and
// time are given at commit.
func reread[T store.Body](ctx context.Context, r *Registry, actor Actor, kind store.Kind, code string) (Item[T], error) {
	var out Item[T]
	err := r.store.Read(ctx, func(ctx context.Context, v *store.View) error {
		var err error
		out, err = newest[T](ctx, v, store.Key{Laboratory: actor.Laboratory, Kind: kind, Code: code})
		return err
	})
	return out, err
}

// People lists the people of the laboratory.
func (r *Registry) People(ctx context.Context, actor Actor, q Query) (Page[Item[store.Person]], error) {
	var page Page[Item[store.Person]]
	err := r.read(ctx, actor, func(ctx context.Context, v *store.View) error {
		var err error
		page, err = list[store.Person](ctx, v, actor.Laboratory, store.KindPerson, q)
		return err
	})
	return page, err
}

// A TokenRequest asks for a token of a person.
type TokenRequest struct {
	Person    string
	Label     string
	Roles     []string // none: all of the person's
	Scopes    []string // none: no narrowing
	ExpiresAt *store.Instant
}

// IssueToken makes an access token. Its secret is returned once and stored only as a hash.
func (r *Registry) IssueToken(ctx context.Context, actor Actor, q TokenRequest) (Item[store.Token], string, error) {
	var out Item[store.Token]
	var code, secret string
	var c complaints
	c.text("body.label", q.Label, 200)
	for i, s := range q.Scopes {
		if !slices.Contains(Permissions, Permission(s)) {
			c.add(fmt.Sprintf("body.scopes[%d]", i), quote(s), "one of %s", joinPermissions())
		}
	}
	for i, role := range q.Roles {
		c.oneOf(fmt.Sprintf("body.roles[%d]", i), role, Roles...)
	}
	if err := Complain("this token cannot be issued", c); err != nil {
		return out, "", err
	}
	p := MayAdminister
	if q.Person == actor.Person {
		p = MayRead // everybody may make tokens of their own
	}
	err := r.write(ctx, actor, p, func(ctx context.Context, tx *store.Tx) error {
		person, err := newest[store.Person](ctx, &tx.View, store.Key{Laboratory: actor.Laboratory, Kind: store.KindPerson, Code: q.Person})
		if err != nil {
			return err
		}
		if person.Value.Closed {
			return Refuse(Conflict, "the account of %s is closed", q.Person)
		}
		roles := q.Roles
		if len(roles) == 0 {
			roles = person.Value.Roles
			if p == MayRead { // what this token can hand on
				roles = slices.DeleteFunc(slices.Clone(roles), func(role string) bool { return !slices.Contains(actor.Roles, role) })
			}
		}
		for _, role := range roles {
			if !slices.Contains(person.Value.Roles, role) {
				return Refuse(Refused, "%s does not have the role %q, so no token of theirs can", q.Person, role)
			}
		}
		if p == MayRead { // and no token may hand on more than it was given itself
			for _, role := range roles {
				if !slices.Contains(actor.Roles, role) {
					return Refuse(Refused, "this token does not have the role %q, so it cannot hand it on", role)
				}
			}
			if len(actor.Scopes) > 0 && len(q.Scopes) == 0 {
				q.Scopes = actor.Scopes
			}
			for _, s := range q.Scopes {
				if len(actor.Scopes) > 0 && !slices.Contains(actor.Scopes, s) {
					return Refuse(Refused, "this token does not have the scope %q, so it cannot hand it on", s)
				}
			}
		}
		code, secret, err = r.issue(ctx, tx, actor, store.Token{Person: q.Person, Label: q.Label, Roles: roles, Scopes: q.Scopes, ExpiresAt: q.ExpiresAt})
		return err
	})
	if err != nil {
		return out, "", err
	}
	out, err = reread[store.Token](ctx, r, actor, store.KindToken, code)
	return out, secret, err
}

func joinPermissions() string {
	words := make([]string, len(Permissions))
	for i, p := range Permissions {
		words[i] = string(p)
	}
	return strings.Join(words, ", ")
}

func (r *Registry) issue(ctx context.Context, tx *store.Tx, actor Actor, body store.Token) (code, secret string, err error) {
	code, err = r.draw(ctx, &tx.View, actor.Laboratory, 'T')
	if err != nil {
		return "", "", err
	}
	random := make([]byte, 32)
	if _, err := io.ReadFull(r.rand, random); err != nil {
		return "", "", fmt.Errorf("draw a secret: %w", err)
	}
	secret = TokenPrefix + actor.Laboratory + "_" + base64.RawURLEncoding.EncodeToString(random)
	if _, err := tx.Append(ctx, store.Draft{Kind: store.KindToken, Code: code, By: actor.Person, Reason: "issued", Value: body, After: first}); err != nil {
		return "", "", err
	}
	return code, secret, tx.AddTokenSecret(ctx, store.TokenSecret{Hash: sha256.Sum256([]byte(secret)), Code: code, Person: body.Person})
}

// RevokeToken ends a token; its own person and administrators may.
func (r *Registry) RevokeToken(ctx context.Context, actor Actor, code, reason string) (Item[store.Token], error) {
	var out Item[store.Token]
	err := r.write(ctx, actor, MayRead, func(ctx context.Context, tx *store.Tx) error {
		key := store.Key{Laboratory: actor.Laboratory, Kind: store.KindToken, Code: code}
		token, err := newest[store.Token](ctx, &tx.View, key)
		if err != nil {
			return err
		}
		if token.Value.Person != actor.Person {
			if err := actor.need(MayAdminister); err != nil {
				return err
			}
		}
		if token.Value.Revoked {
			return Refuse(Conflict, "token %s is revoked already", store.FormatCode(code))
		}
		body := token.Value
		body.Revoked = true
		if strings.TrimSpace(reason) == "" {
			reason = "revoked"
		}
		if _, err = appendVersion(ctx, tx, actor, key, Edit{After: token.Ref.Version, Reason: reason}, nil, body); err != nil {
			return err
		}
		return tx.DropTokenSecret(ctx, code)
	})
	if err != nil {
		return out, err
	}
	return reread[store.Token](ctx, r, actor, store.KindToken, code)
}

// Tokens lists the laboratory's tokens to administrators.
func (r *Registry) Tokens(ctx context.Context, actor Actor, q Query) (Page[Item[store.Token]], error) {
	var page Page[Item[store.Token]]
	if err := actor.need(MayAdminister); err != nil {
		return page, err
	}
	err := r.read(ctx, actor, func(ctx context.Context, v *store.View) error {
		var err error
		page, err = list[store.Token](ctx, v, actor.Laboratory, store.KindToken, q)
		return err
	})
	return page, err
}

// Authenticate turns a token's secret into who it stands for. Every refusal
// reads the same, so that nothing can be learned by trying.
func (r *Registry) Authenticate(ctx context.Context, secret string) (Actor, error) {
	unknown := Refuse(Unauthenticated, "unknown, expired or revoked token")
	rest, ok := strings.CutPrefix(secret, TokenPrefix)
	laboratory, _, cut := strings.Cut(rest, "_")
	if !ok || !cut || len(secret) > 100 || !laboratoryPattern.MatchString(laboratory) {
		return Actor{}, unknown
	}
	holder, err := r.store.Holder(ctx, laboratory, sha256.Sum256([]byte(secret)))
	if errors.Is(err, store.ErrNotFound) {
		return Actor{}, unknown
	}
	if err != nil {
		return Actor{}, err
	}
	who := [2]store.Hash{holder.Token, holder.Holder}
	said, ok := r.holders.find(who)
	if !ok {
		if said.token, said.person, err = r.store.HolderBodies(ctx, holder); errors.Is(err, store.ErrNotFound) {
			return Actor{}, unknown
		} else if err != nil {
			return Actor{}, err
		}
		for _, role := range said.token.Roles { // at most the person's roles of today
			if slices.Contains(said.person.Roles, role) {
				said.roles = append(said.roles, role)
			}
		}
		r.holders.keep(who, said)
	}
	expired := said.token.ExpiresAt != nil && r.now().After(said.token.ExpiresAt.Time())
	if said.token.Revoked || said.person.Closed || expired {
		return Actor{}, unknown
	}
	actor := Actor{Person: said.token.Person, Laboratory: laboratory, Roles: slices.Clip(said.roles), Scopes: slices.Clip(said.token.Scopes), Token: holder.Code}
	r.claims.keep(holder.Secret, Claim{actor: actor, holder: holder, expires: said.token.ExpiresAt})
	return actor, nil
}

// A Claim is who a token stood for at one size of the laboratory's ledger. It
// permits nothing until a read has confirmed, in the same statement, that the
// ledger still has that size and the secret still has its row: whatever ends a
// token, an account or a role is an entry in that ledger.
type Claim struct {
	actor   Actor
	holder  store.Holder
	expires *store.Instant
}

// Name tells tokens apart.
func (c Claim) Name() string { return c.actor.Laboratory + "/" + c.actor.Token }

// Claim tells who a secret stood for when it was last looked up; false where
// that is not known, or has expired.
func (r *Registry) Claim(secret string) (Claim, bool) {
	c, ok := r.claims.find(sha256.Sum256([]byte(secret)))
	if !ok || c.expires != nil && r.now().After(c.expires.Time()) {
		return Claim{}, false
	}
	return c, true
}

// A saidOfHolder is what a token's and a person's versions say. It is shared and
// not to be changed.
type saidOfHolder struct {
	token  store.Token
	person store.Person
	roles  []string
}

// maxHolders bounds the memory of who tokens stand for.
const maxHolders = 1000

// TouchToken notes that a token was used: a courtesy to people who tidy up.
func (r *Registry) TouchToken(ctx context.Context, actor Actor) error {
	if actor.Token == "" {
		return nil
	}
	_, err := r.store.Write(ctx, actor.Laboratory, func(ctx context.Context, tx *store.Tx) error { return tx.TouchToken(ctx, actor.Token) })
	return err
}
