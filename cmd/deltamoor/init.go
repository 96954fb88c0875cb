package main

import (
	"context"
	"crypto/rand"
	"errors"
	"fmt"
	"io/fs"
	"os"
	"path/filepath"
	"strings"

	"github.com/spf13/cobra"

	"deltamoor/api/registry"
	"deltamoor/store/ledger"
)

// An initAnswer is what init prints for programs. The token is in it and nowhere else.
type initAnswer struct {
	Laboratory string `json:"laboratory"`
	Person     string `json:"person"`
	Token      string `json:"token"`
	// Key is the file of the signing key; null where a variable holds the key.
	Key *string `json:"key"`
}

func (p *program) buildInit(cmd *cobra.Command) {
	cmd.Long = `Make an empty registry usable: the tables, the signing key of the ledger, the
published scales and reference materials, the first laboratory, its first
person as administrator and manager, and that person's token, which is printed
once and stored nowhere.`
	cmd.Example = `  deltamoor init --laboratory FJO --name "Fjordane isotope bench" \
    --person mara --person-name "Mara Lind" --zone Europe/Oslo`
	var q registry.InitRequest
	flags := cmd.Flags()
	flags.StringVar(&q.Laboratory, "laboratory", "", "`code` of the laboratory, 2 to 8 of A–Z, never changed")
	flags.StringVar(&q.Name, "name", "", "the laboratory's `name`")
	flags.StringVar(&q.Zone, "zone", "", "its IANA time `zone`, such as Europe/Lisbon")
	flags.StringVar(&q.Person, "person", "", "`code` of the first person")
	flags.StringVar(&q.PersonName, "person-name", "", "that person's `name`")
	flags.BoolVar(&q.SecondPerson, "second-person", false, "values and methods are approved by another person than their author")
	settingFlags(cmd, "data", "database")
	for _, name := range []string{"laboratory", "name", "person", "person-name"} {
		if err := cmd.MarkFlagRequired(name); err != nil {
			panic(err) // the flag is defined above
		}
	}
	cmd.Args = arguments()
	cmd.RunE = p.action(func(ctx context.Context, cmd *cobra.Command, _ []string) error {
		o, err := p.openRegistry(ctx, cmd, toMake)
		if err != nil {
			return err
		}
		defer o.close()
		if done, err := o.Initialised(ctx); err != nil {
			return err
		} else if done { // before a key is made that would belong to nothing
			return registry.Refuse(registry.Conflict, "this registry is initialised already")
		}
		key, file, err := p.makeKey(o.config.Data)
		if err != nil {
			return err
		}
		// The laboratory's code is checked by Init; a verifier of a wrong one goes nowhere.
		if q.Verifier, err = key.Verifier(ledger.Origin(registry.DefaultName, q.Laboratory)); err != nil {
			q.Verifier = ""
		}
		secret, err := o.Init(ctx, q)
		if err != nil {
			return err
		}
		if p.json {
			answer := initAnswer{Laboratory: q.Laboratory, Person: q.Person, Token: secret}
			if file != "" {
				answer.Key = &file
			}
			return p.printJSON(answer)
		}
		return p.printInit(cmd, q, file, secret)
	})
}

func (p *program) printInit(cmd *cobra.Command, q registry.InitRequest, file, secret string) error {
	pairs := []string{"laboratory", q.Laboratory + ", " + q.Name, "person", q.Person + ", " + q.PersonName + " (administrator, manager)"}
	if file != "" {
		pairs = append(pairs, "signing key", file)
	}
	if err := printPairs(p.stdout, append(pairs, "token", secret)...); err != nil {
		return err
	}
	serve := "deltamoor serve"
	if flag := cmd.Flags().Lookup("data"); flag.Changed {
		serve += " --data " + flag.Value.String()
	}
	if cmd.Flags().Changed("database") {
		serve += " --database …"
	}
	var b strings.Builder
	b.WriteString("\nThe token is not shown again: keep it where you keep passwords.\n")
	if file != "" {
		b.WriteString("Keep a copy of the signing key with your backups, apart from the database.\n")
	}
	fmt.Fprintf(&b, "\nNext:\n  export DELTAMOOR_TOKEN=%s\n  %s\n", secret, serve)
	_, err := p.stdout.Write([]byte(b.String()))
	return err
}

// makeKey makes the signing key unless there is one; file is where it is, ""
// where a variable holds it.
func (p *program) makeKey(folder string) (key *ledger.Key, file string, err error) {
	if lookup(p.env, keyVariable) == "" {
		file = filepath.Join(folder, keyFile)
	}
	if key, err = p.readKey(folder); key != nil || err != nil {
		return key, file, err
	}
	drawn, err := ledger.NewKey(rand.Reader)
	if err != nil {
		return nil, "", err
	}
	f, err := os.OpenFile(file, os.O_WRONLY|os.O_CREATE|os.O_EXCL, 0o600)
	if errors.Is(err, fs.ErrExist) { // another process was first
		key, err = p.readKey(folder)
		return key, file, err
	}
	if err != nil {
		return nil, "", err
	}
	_, err = f.WriteString(drawn.Secret() + "\n")
	if err = errors.Join(err, f.Sync(), f.Close()); err != nil {
		return nil, "", errors.Join(fmt.Errorf("write signing key: %w", err), os.Remove(file)) // half a key would stand in the way
	}
	return &drawn, file, nil
}
