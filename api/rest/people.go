package rest

import (
	"context"
	"net/url"
	"time"

	"deltamoor/api/registry"
	"deltamoor/store"
)

// A PersonBody is what is kept of a person.
type PersonBody struct {
	Name   string   `json:"name" maxLength:"200"`
	Roles  []string `json:"roles" minItems:"1" doc:"analyst, signatory, manager, auditor, administrator"`
	Closed bool     `json:"closed,omitempty" doc:"The account signs in no more; the name stays in history."`
}

// A Person is a version of a person.
type Person struct {
	Recorded
	PersonBody
}

func showPerson(it registry.Item[store.Person]) Person {
	return Person{recorded(it), PersonBody{it.Value.Name, append([]string{}, it.Value.Roles...), it.Value.Closed}}
}

var personKind = kindOfRecord[store.Person, Person]{kind: store.KindPerson, show: showPerson,
	csv: table[Person]{columns("name", "roles", "closed"), func(p Person) []string {
		closed := ""
		if p.Closed {
			closed = "closed"
		}
		return p.row(p.Name, spaced(p.Roles), closed)
	}}}

func (f *face) people(ctx context.Context, actor registry.Actor, in *ListParams) (*answer, error) {
	read := func(ctx context.Context, q registry.Query) (registry.Page[registry.Item[store.Person]], error) {
		return f.registry.People(ctx, actor, q)
	}
	return answerList(ctx, f, in, read, showPerson, personKind.csv)
}

// A NewPerson registers a person.
type NewPerson struct {
	Code string `json:"code" maxLength:"40" example:"mara"`
	PersonBody
}

func (f *face) addPerson(ctx context.Context, actor registry.Actor, in *struct{ Body NewPerson }) (*one[Person], error) {
	it, err := f.registry.AddPerson(ctx, actor, in.Body.Code, store.Person(in.Body.PersonBody))
	if err != nil {
		return nil, err
	}
	return &one[Person]{ETag: quoteTag(it.Tag()), Location: "/v1/people/" + url.PathEscape(it.Code), Body: showPerson(it)}, nil
}

// A PersonChange states a further version of a person, whole.
type PersonChange struct {
	Reason string `json:"reason" minLength:"1" maxLength:"4000"`
	PersonBody
}

func (f *face) changePerson(ctx context.Context, actor registry.Actor, in *struct {
	CodeParam
	MatchParam
	Body PersonChange
}) (*one[Person], error) {
	before, err := seen[store.Person](ctx, f, actor, store.KindPerson, in.Code, in.MatchParam)
	if err != nil {
		return nil, err
	}
	it, err := f.registry.ChangePerson(ctx, actor, before.Code, store.Person(in.Body.PersonBody), registry.Edit{After: before.Ref.Version, Reason: in.Body.Reason})
	if err != nil {
		return nil, err
	}
	return &one[Person]{ETag: quoteTag(it.Tag()), Body: showPerson(it)}, nil
}

// A Token is a version of an access token, without its secret.
type Token struct {
	Recorded
	Person    string     `json:"person"`
	Label     string     `json:"label"`
	Roles     []string   `json:"roles"`
	Scopes    []string   `json:"scopes" doc:"Narrow what the roles allow; none means no narrowing."`
	ExpiresAt *time.Time `json:"expires_at"`
	Revoked   bool       `json:"revoked"`
	Secret    string     `json:"secret,omitempty" doc:"Shown once, in the answer that makes the token."`
}

func showToken(it registry.Item[store.Token]) Token {
	t := it.Value
	return Token{Recorded: recorded(it), Person: t.Person, Label: t.Label, Roles: append([]string{}, t.Roles...), Scopes: append([]string{}, t.Scopes...),
		ExpiresAt: timePointer(t.ExpiresAt), Revoked: t.Revoked}
}

var tokenKind = kindOfRecord[store.Token, Token]{kind: store.KindToken, show: showToken, made: true,
	csv: table[Token]{columns("person", "label", "roles", "scopes", "expires_at", "revoked"), func(t Token) []string {
		revoked := ""
		if t.Revoked {
			revoked = "revoked"
		}
		return t.row(t.Person, t.Label, spaced(t.Roles), spaced(t.Scopes), clock(t.ExpiresAt), revoked)
	}}}

func (f *face) tokens(ctx context.Context, actor registry.Actor, in *ListParams) (*answer, error) {
	read := func(ctx context.Context, q registry.Query) (registry.Page[registry.Item[store.Token]], error) {
		return f.registry.Tokens(ctx, actor, q)
	}
	return answerList(ctx, f, in, read, showToken, tokenKind.csv)
}

// A NewToken asks for a token.
type NewToken struct {
	Person    string     `json:"person,omitempty" maxLength:"40" doc:"Left out: who asks."`
	Label     string     `json:"label" maxLength:"200" doc:"What it is for." example:"nightly import"`
	Roles     []string   `json:"roles,omitempty" doc:"Left out: all of the person's."`
	Scopes    []string   `json:"scopes,omitempty" doc:"read, import, fit, approve, manage, administer; left out: no narrowing."`
	ExpiresAt *time.Time `json:"expires_at,omitempty"`
}

func (f *face) addToken(ctx context.Context, actor registry.Actor, in *struct{ Body NewToken }) (*one[Token], error) {
	b := in.Body
	it, secret, err := f.registry.IssueToken(ctx, actor, registry.TokenRequest{Person: nameOr(b.Person, actor.Person), Label: b.Label, Roles: b.Roles, Scopes: b.Scopes,
		ExpiresAt: instantPointer(b.ExpiresAt)})
	if err != nil {
		return nil, err
	}
	t := showToken(it)
	t.Secret = secret
	return &one[Token]{ETag: quoteTag(it.Tag()), Location: "/v1/tokens/" + t.Code, Body: t}, nil
}

// token shows a token to its own person and to administrators.
func (f *face) token(ctx context.Context, actor registry.Actor, code string, number int) (registry.Item[store.Token], error) {
	it, err := registry.One[store.Token](ctx, f.registry, actor, store.KindToken, code, number, store.Moment{})
	if err == nil && it.Value.Person != actor.Person && !actor.May(registry.MayAdminister) {
		return registry.Item[store.Token]{}, registry.Refuse(registry.Refused, "token %s is another person's; this needs %s", store.FormatCode(code), registry.Administrator)
	}
	return it, err
}

func (f *face) oneToken(ctx context.Context, actor registry.Actor, in *struct{ CodeParam }) (*one[Token], error) {
	return f.answerToken(ctx, actor, in.Code, 0)
}

func (f *face) tokenVersion(ctx context.Context, actor registry.Actor, in *CodeVersion) (*one[Token], error) {
	return f.answerToken(ctx, actor, in.Code, in.Number)
}

func (f *face) answerToken(ctx context.Context, actor registry.Actor, text string, number int) (*one[Token], error) {
	code, err := tokenKind.code(text)
	if err != nil {
		return nil, err
	}
	it, err := f.token(ctx, actor, code, number)
	if err != nil {
		return nil, err
	}
	return &one[Token]{ETag: quoteTag(it.Tag()), Body: showToken(it)}, nil
}

func (f *face) tokenVersions(ctx context.Context, actor registry.Actor, in *CodeVersions) (*answer, error) {
	code, err := tokenKind.code(in.Code)
	if err != nil {
		return nil, err
	}
	if _, err := f.token(ctx, actor, code, 0); err != nil {
		return nil, err
	}
	return answerList(ctx, f, &in.ListParams, versionPages[store.Token](f, actor, store.KindToken, code), showToken, tokenKind.csv)
}

// A TokenChange ends a token.
type TokenChange struct {
	Revoked bool   `json:"revoked" enum:"true" doc:"The one change there is: true."`
	Reason  string `json:"reason,omitempty" maxLength:"4000"`
}

func (f *face) revokeToken(ctx context.Context, actor registry.Actor, in *struct {
	CodeParam
	MatchParam
	Body TokenChange
}) (*one[Token], error) {
	code, err := tokenKind.code(in.Code)
	if err != nil {
		return nil, err
	}
	if _, err := f.token(ctx, actor, code, 0); err != nil {
		return nil, err
	}
	if _, err := seen[store.Token](ctx, f, actor, store.KindToken, code, in.MatchParam); err != nil {
		return nil, err
	}
	it, err := f.registry.RevokeToken(ctx, actor, code, in.Body.Reason)
	if err != nil {
		return nil, err
	}
	return &one[Token]{ETag: quoteTag(it.Tag()), Body: showToken(it)}, nil
}
