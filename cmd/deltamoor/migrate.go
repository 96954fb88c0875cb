package main

import (
	"context"
	"errors"
	"fmt"
	"os"

	"github.com/spf13/cobra"

	"deltamoor/migrations"
	"deltamoor/store"
)

// A migrateAnswer says which migrations were applied, in order.
type migrateAnswer struct {
	Engine  string   `json:"engine"`
	Applied []string `json:"applied"`
}

func (p *program) buildMigrate(cmd *cobra.Command) {
	cmd.Long = `Bring the tables of a registry to those of this program, and say which
migrations were applied. Of several programs that start at once, one does it and
the others wait. A database that is newer than the program is refused, and
nothing is ever taken back: the way back is a backup.`
	settingFlags(cmd, "data", "database")
	cmd.Args = arguments()
	cmd.RunE = p.action(func(ctx context.Context, cmd *cobra.Command, _ []string) error {
		c, err := p.readConfig(cmd)
		if err != nil {
			return err
		}
		if c.Database == "" {
			if err := os.MkdirAll(c.Data, 0o700); err != nil {
				return err
			}
		}
		answer, err := migrate(ctx, store.Options{Database: databaseOf(c)})
		if err != nil {
			return explainSchema(err)
		}
		if p.json {
			return p.printJSON(answer)
		}
		if len(answer.Applied) == 0 {
			_, err := fmt.Fprintln(p.stdout, "nothing to apply: the tables are those of this program")
			return err
		}
		for _, name := range answer.Applied {
			if _, err := fmt.Fprintln(p.stdout, "applied "+name); err != nil {
				return err
			}
		}
		return nil
	})
}

// migrate applies what is missing. What that was is read off the number that
// the database had before.
func migrate(ctx context.Context, o store.Options) (migrateAnswer, error) {
	s, err := store.Open(ctx, o)
	if err == nil { // up to date
		return migrateAnswer{Engine: s.Engine(), Applied: []string{}}, s.Close()
	}
	var schema *store.SchemaError
	if !errors.As(err, &schema) || !errors.Is(err, store.ErrOutdated) {
		return migrateAnswer{}, err
	}
	o.Migrate = true
	if s, err = store.Open(ctx, o); err != nil {
		return migrateAnswer{}, err
	}
	answer := migrateAnswer{Engine: s.Engine(), Applied: []string{}}
	list, err := migrations.List(s.Engine())
	for _, m := range list {
		if m.Number > schema.Found {
			answer.Applied = append(answer.Applied, m.Name)
		}
	}
	return answer, errors.Join(err, s.Close())
}
