package main

import (
	"context"
	"slices"
	"strings"

	"github.com/spf13/cobra"

	"deltamoor/api/registry"
	"deltamoor/store"
)

// below adds an action below a command that only gathers. All of them act as
// the person of a token.
func (p *program) below(parent *cobra.Command, use, short string, args cobra.PositionalArgs, do func(ctx context.Context, o *opened, actor registry.Actor, args []string) error) *cobra.Command {
	cmd := &cobra.Command{Use: use, Short: short, Args: args, DisableFlagsInUseLine: true, ValidArgsFunction: cobra.NoFileCompletions}
	settingFlags(cmd, "data", "database", "token")
	cmd.RunE = p.action(func(ctx context.Context, cmd *cobra.Command, args []string) error {
		o, err := p.openRegistry(ctx, cmd, toWrite)
		if err != nil {
			return err
		}
		defer o.close()
		actor, err := o.writer(ctx)
		if err != nil {
			return err
		}
		return do(ctx, o, actor, args)
	})
	parent.AddCommand(cmd)
	return cmd
}

// words completes a flag that takes some of a list of words.
func words(cmd *cobra.Command, flag string, list []string) {
	err := cmd.RegisterFlagCompletionFunc(flag, cobra.FixedCompletions(list, cobra.ShellCompDirectiveNoFileComp))
	if err != nil {
		panic(err) // the flag is not defined
	}
}

// A personAnswer is a person, for programs.
type personAnswer struct {
	Code   string   `json:"code"`
	Name   string   `json:"name"`
	Roles  []string `json:"roles"`
	Closed bool     `json:"closed"`
}

func personOf(it registry.Item[store.Person]) personAnswer {
	return personAnswer{it.Code, it.Value.Name, append([]string{}, it.Value.Roles...), it.Value.Closed}
}

func (a personAnswer) account() string {
	if a.Closed {
		return "closed"
	}
	return "open"
}

func (p *program) printPerson(a personAnswer) error {
	if p.json {
		return p.printJSON(a)
	}
	return printPairs(p.stdout, "person", a.Code, "name", a.Name, "roles", strings.Join(a.Roles, ", "), "account", a.account())
}

func (p *program) buildUser(cmd *cobra.Command) {
	gathers(cmd)
	cmd.Long = `Keep the people of a laboratory. It takes the token of an administrator. A
person's name stays in history for ever; closing an account ends its tokens.`
	cmd.Example = `  deltamoor user add ana --name "Ana Reis" --role analyst
  deltamoor user close ana --reason "left in May"`
	p.below(cmd, "list", "list the people of the laboratory", arguments(), p.listPeople)

	var add store.Person
	c := p.below(cmd, "add CODE", "register a person", arguments("CODE"), func(ctx context.Context, o *opened, actor registry.Actor, args []string) error {
		it, err := o.AddPerson(ctx, actor, args[0], add)
		if err != nil {
			return err
		}
		return p.printPerson(personOf(it))
	})
	c.Flags().StringVar(&add.Name, "name", "", "the person's `name`")
	c.Flags().StringSliceVar(&add.Roles, "role", nil, "`role`: "+strings.Join(registry.Roles, ", ")+"; may be repeated")
	words(c, "role", registry.Roles)

	var change store.Person
	var why string
	c = p.below(cmd, "change CODE", "give a person another name or other roles", arguments("CODE"), func(ctx context.Context, o *opened, actor registry.Actor, args []string) error {
		if change.Name == "" && len(change.Roles) == 0 {
			return usagef("found neither --name nor --role, expected one of them")
		}
		return p.restate(ctx, o, actor, args[0], why, func(body *store.Person) {
			if change.Name != "" {
				body.Name = change.Name
			}
			if len(change.Roles) > 0 {
				body.Roles = change.Roles
			}
		})
	})
	c.Flags().StringVar(&change.Name, "name", "", "the person's `name`")
	c.Flags().StringSliceVar(&change.Roles, "role", nil, "`role`, instead of those before; may be repeated")
	c.Flags().StringVar(&why, "reason", "", "`why`")
	words(c, "role", registry.Roles)

	var reason string
	c = p.below(cmd, "close CODE", "close a person's account", arguments("CODE"), func(ctx context.Context, o *opened, actor registry.Actor, args []string) error {
		return p.restate(ctx, o, actor, args[0], reason, func(body *store.Person) { body.Closed = true })
	})
	c.Flags().StringVar(&reason, "reason", "", "`why`")
}

func (p *program) listPeople(ctx context.Context, o *opened, actor registry.Actor, _ []string) error {
	list := []personAnswer{}
	for q := (registry.Query{}); ; {
		page, err := o.People(ctx, actor, q)
		if err != nil {
			return err
		}
		for _, it := range page.Items {
			list = append(list, personOf(it))
		}
		if q.After = page.After; q.After == "" {
			break
		}
	}
	if p.json {
		return p.printJSON(list)
	}
	t := newTable("code", "name", "roles", "account")
	for _, a := range list {
		t.add(a.Code, a.Name, strings.Join(a.Roles, ", "), a.account())
	}
	return t.print(p.stdout)
}

// restate states a further version of a person.
func (p *program) restate(ctx context.Context, o *opened, actor registry.Actor, code, reason string, change func(*store.Person)) error {
	it, err := registry.One[store.Person](ctx, o.Registry, actor, store.KindPerson, code, 0, store.Moment{})
	if err != nil {
		return err
	}
	body := it.Value
	body.Roles = slices.Clone(body.Roles)
	change(&body)
	if it, err = o.ChangePerson(ctx, actor, it.Code, body, registry.Edit{After: it.Ref.Version, Reason: reason}); err != nil {
		return err
	}
	return p.printPerson(personOf(it))
}
