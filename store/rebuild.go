package store

import (
	"context"
	"fmt"
)

const (
	selectRebuilds = `SELECT laboratory, name, position FROM rebuilds ORDER BY laboratory, name`
	moveRebuild    = `UPDATE rebuilds SET position = $3 WHERE laboratory = $1 AND name = $2`
	dropRebuild    = `DELETE FROM rebuilds WHERE laboratory = $1 AND name = $2`
	selectToFill   = `SELECT ` + versionColumns + ` FROM versions v
		WHERE v.laboratory = $1 AND v.position >= $2 AND v.position < $3 AND v.kind IN ('calibration', 'final', 'report') ORDER BY v.position`
)

// rebuildStep is how many positions of a ledger one transaction fills.
const rebuildStep = 2000

// rebuild fills derived tables that a migration has added, from history, a step
// at a time: stopped, it goes on where it was when the registry is opened next.
// Before says what went wrong earlier, and then nothing is done.
func (s *Store) rebuild(ctx context.Context, before error) error {
	if before != nil {
		return nil
	}
	for {
		var laboratory, name string
		var position int64
		found := false
		err := s.Read(ctx, func(ctx context.Context, v *View) error {
			return v.q.each(ctx, selectRebuilds, nil, func(scan func(...any) error) error {
				if found {
					return nil
				}
				found = true
				return scan(&laboratory, &name, &position)
			})
		})
		if err != nil {
			return fmt.Errorf("fill derived tables: %w", err)
		}
		if !found {
			return nil
		}
		if err := s.rebuildLaboratory(ctx, laboratory, name, position); err != nil {
			return fmt.Errorf("fill %s of %s: %w", name, laboratory, err)
		}
	}
}

func (s *Store) rebuildLaboratory(ctx context.Context, laboratory, name string, position int64) error {
	filled, ok := map[string]struct {
		table
		key string
	}{
		sharesTable.name: {sharesTable, "(laboratory, calibration, version, kind, code, number)"},
		linesTable.name:  {linesTable, "(laboratory, calibration, version)"},
	}[name]
	if !ok {
		return fmt.Errorf("found the table %q, expected %s or %s", name, sharesTable.name, linesTable.name)
	}
	for done := false; !done; {
		from, next := position, position
		_, err := s.Write(ctx, laboratory, func(ctx context.Context, tx *Tx) error {
			head, err := tx.Head(ctx, laboratory)
			if err != nil {
				return err
			}
			to := min(from+rebuildStep, head.Size)
			raws, err := tx.raws(ctx, selectToFill, laboratory, from, to)
			if err != nil {
				return err
			}
			var rows [][]any
			for _, raw := range raws {
				of, err := derive(raw, func(in Input) (Version[Final], error) { return tx.finalValue(ctx, in) })
				if err != nil {
					return err
				}
				rows = append(rows, of[name]...)
			}
			if err := tx.q.insert(ctx, filled.table, rows, "ON CONFLICT "+filled.key+" DO NOTHING"); err != nil {
				return err
			}
			if done = to >= head.Size; done {
				_, err = tx.q.exec(ctx, dropRebuild, laboratory, name)
			} else {
				_, err = tx.q.exec(ctx, moveRebuild, laboratory, name, to)
			}
			next = to
			return err
		})
		if err != nil {
			return err
		}
		position = next
	}
	return nil
}

// finalValue looks up a final value that a report names.
func (tx *Tx) finalValue(ctx context.Context, in Input) (Version[Final], error) {
	raw, err := tx.Version(ctx, in.Key, in.Version)
	if err != nil {
		return Version[Final]{}, err
	}
	return Decode[Final](raw)
}
