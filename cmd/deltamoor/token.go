package main

import (
	"context"
	"fmt"
	"strings"
	"time"

	"github.com/spf13/cobra"

	"deltamoor/api/registry"
	"deltamoor/store"
)

// A tokenAnswer is a token, for programs. The secret is in the answer that
// issues it and nowhere else.
type tokenAnswer struct {
	Code      string     `json:"code"`
	Person    string     `json:"person"`
	Label     string     `json:"label"`
	Roles     []string   `json:"roles"`
	Scopes    []string   `json:"scopes"`
	ExpiresAt *time.Time `json:"expires_at"`
	Revoked   bool       `json:"revoked"`
	Token     string     `json:"token,omitempty"`
}

func tokenOf(it registry.Item[store.Token]) tokenAnswer {
	t := it.Value
	out := tokenAnswer{Code: store.FormatCode(it.Code), Person: t.Person, Label: t.Label, Roles: append([]string{}, t.Roles...), Scopes: append([]string{}, t.Scopes...), Revoked: t.Revoked}
	if t.ExpiresAt != nil {
		at := t.ExpiresAt.Time()
		out.ExpiresAt = &at
	}
	return out
}

func (a tokenAnswer) state(now time.Time) string {
	switch {
	case a.Revoked:
		return "revoked"
	case a.ExpiresAt != nil && now.After(*a.ExpiresAt):
		return "expired"
	case a.ExpiresAt != nil:
		return "valid until " + a.ExpiresAt.Format(time.RFC3339)
	}
	return "valid"
}

func (p *program) buildToken(cmd *cobra.Command) {
	gathers(cmd)
	cmd.Long = `Keep access tokens. A token has at most the roles of its person, narrowed by
scopes; its secret is printed once. Everybody may issue and revoke tokens of
their own; an administrator's token does so for others, and lists them.`
	cmd.Example = `  deltamoor token issue ana --label "import on bench 3" --scope import
  deltamoor token revoke T0A1B-2C3DE --reason "bench 3 is gone"`
	p.below(cmd, "list", "list the tokens of the laboratory", arguments(), p.listTokens)

	var q registry.TokenRequest
	var expires string
	c := p.below(cmd, "issue PERSON", "make a token of a person", arguments("PERSON"), func(ctx context.Context, o *opened, actor registry.Actor, args []string) error {
		q.Person = args[0]
		if expires != "" {
			at, err := time.Parse(time.RFC3339, expires)
			if err != nil {
				return usagef("--expires: found %q, expected a time such as 2027-01-31T18:00:00Z", expires)
			}
			instant := store.InstantOf(at)
			q.ExpiresAt = &instant
		}
		it, secret, err := o.IssueToken(ctx, actor, q)
		if err != nil {
			return err
		}
		a := tokenOf(it)
		a.Token = secret
		if p.json {
			return p.printJSON(a)
		}
		scopes := "all of the roles"
		if len(a.Scopes) > 0 {
			scopes = strings.Join(a.Scopes, ", ")
		}
		return printPairs(p.stdout, "code", a.Code, "person", a.Person, "roles", strings.Join(a.Roles, ", "), "scopes", scopes, "state", a.state(time.Now()), "token", a.Token)
	})
	c.Flags().StringVar(&q.Label, "label", "", "what it is `for`")
	c.Flags().StringSliceVar(&q.Roles, "role", nil, "`role`; left out: all of the person's; may be repeated")
	c.Flags().StringSliceVar(&q.Scopes, "scope", nil, "`scope` to narrow it to: "+strings.Join(scopes(), ", ")+"; may be repeated")
	c.Flags().StringVar(&expires, "expires", "", "`time` from which on it is worth nothing")
	words(c, "role", registry.Roles)
	words(c, "scope", scopes())

	var reason string
	c = p.below(cmd, "revoke CODE", "end a token", arguments("CODE"), func(ctx context.Context, o *opened, actor registry.Actor, args []string) error {
		code, err := store.ParseCode(args[0])
		if err != nil {
			return err
		}
		it, err := o.RevokeToken(ctx, actor, code, reason)
		if err != nil {
			return err
		}
		if p.json {
			return p.printJSON(tokenOf(it))
		}
		_, err = fmt.Fprintf(p.stdout, "token %s is revoked\n", store.FormatCode(it.Code))
		return err
	})
	c.Flags().StringVar(&reason, "reason", "", "`why`")
}

func scopes() []string {
	var out []string
	for _, s := range registry.Permissions {
		out = append(out, string(s))
	}
	return out
}

func (p *program) listTokens(ctx context.Context, o *opened, actor registry.Actor, _ []string) error {
	list := []tokenAnswer{}
	for q := (registry.Query{}); ; {
		page, err := o.Tokens(ctx, actor, q)
		if err != nil {
			return err
		}
		for _, it := range page.Items {
			list = append(list, tokenOf(it))
		}
		if q.After = page.After; q.After == "" {
			break
		}
	}
	if p.json {
		return p.printJSON(list)
	}
	t := newTable("code", "person", "label", "roles", "scopes", "state")
	for _, a := range list {
		t.add(a.Code, a.Person, a.Label, strings.Join(a.Roles, ", "), orDash(strings.Join(a.Scopes, ", ")), a.state(time.Now()))
	}
	return t.print(p.stdout)
}
