package store

import (
	"context"
	"fmt"
)

// A current row says of one record which version is the newest, in which state
// it is, and which version is in force; all as of the last thing recorded about
// the record. From until on the row is wrong by the mere passing of time: a
// period begins, or a withdrawal takes effect.
type currentRow struct {
	newest  int
	state   State
	inForce int // 0: none
	held    State
	until   *Instant
}

// currentOf computes the row from a record's history, at the time of the last
// thing recorded about it.
func currentOf(key Key, versions []held) currentRow {
	decided := key.Kind.Decided()
	at := Instant(0)
	for _, h := range versions {
		at = max(at, h.recordedAt)
		for _, d := range h.decisions {
			at = max(at, d.recordedAt)
		}
	}
	last := len(versions) - 1
	row := currentRow{newest: versions[last].version, state: stateOf(versions, last, decided, at, at), until: changesAfter(versions, at)}
	if i, state := inForce(versions, decided, at, at); i >= 0 {
		row.inForce, row.held = versions[i].version, state
	}
	return row
}

var currentsTable = table{"currents", []string{"laboratory", "kind", "code", "newest", "state", "in_force", "held", "until"}}

// replaceCurrent overwrites the row of a record.
const replaceCurrent = `ON CONFLICT (laboratory, kind, code) DO UPDATE SET newest = excluded.newest, state = excluded.state,
	in_force = excluded.in_force, held = excluded.held, until = excluded.until`

// writeCurrents brings up to date the rows of every record the act touches.
func (tx *Tx) writeCurrents(ctx context.Context) error {
	// By now the versions are rows, so the history is read as it will be committed.
	v := &View{store: tx.store, q: tx.q, now: tx.now}
	var rows [][]any
	done := make(map[Key]bool, len(tx.queue))
	add := func(key Key) error {
		if done[key] {
			return nil
		}
		done[key] = true
		row, err := tx.currentRow(ctx, v, key)
		if err != nil {
			return err
		}
		rows = append(rows, []any{key.Laboratory, string(key.Kind), key.Code, int64(row.newest), string(row.state),
			int64(row.inForce), string(row.held), nullInstant(row.until)})
		return nil
	}
	for _, q := range tx.queue {
		if err := add(q.raw.Key); err != nil {
			return err
		}
		if q.raw.Kind == KindDecision {
			subject, _, err := DecisionSubject(tx.laboratory, q.raw.Code)
			if err != nil {
				return err
			}
			if err := add(subject); err != nil {
				return err
			}
		}
	}
	return tx.q.insert(ctx, currentsTable, rows, replaceCurrent)
}

// currentRow computes a row; the history of a first draft, and of what is not
// decided and has no period, is known without asking.
func (tx *Tx) currentRow(ctx context.Context, v *View, key Key) (currentRow, error) {
	if q := tx.newestQueued(key); q != nil && q.raw.ValidFrom == nil && !key.Kind.Decided() && !hasPeriods(key.Kind) {
		n := q.raw.Version
		return currentRow{newest: n, state: Recorded, inForce: n, held: Recorded}, nil
	}
	versions, err := v.history(ctx, key, always)
	if err != nil {
		return currentRow{}, err
	}
	if len(versions) == 0 {
		return currentRow{}, fmt.Errorf("current row of %s: %w", key, ErrNotFound)
	}
	return currentOf(key, versions), nil
}

// hasPeriods reports whether earlier versions of an undecided kind may have a
// valid_from that outranks a later version without one.
func hasPeriods(k Kind) bool {
	switch k {
	case KindDecision, KindSession, KindExclusion, KindOutcome, KindSample, KindDocument, KindPerson, KindToken, KindKey:
		return false
	}
	return true
}
