package store

import (
	"context"
	"database/sql"
	"errors"
	"fmt"
	"strconv"
	"strings"
)

// queries runs statements in one transaction and remembers what the driver
// complained of, so that an error is known for what it is even when a closure
// has told it in its own words.
type queries struct {
	engine *engine
	tx     runner
	worst  errorClass
}

// A runner is a transaction, or a pool for a single statement.
type runner interface {
	ExecContext(ctx context.Context, query string, args ...any) (sql.Result, error)
	QueryContext(ctx context.Context, query string, args ...any) (*sql.Rows, error)
	QueryRowContext(ctx context.Context, query string, args ...any) *sql.Row
}

func (q *queries) note(err error) error {
	if err == nil || errors.Is(err, sql.ErrNoRows) {
		return err
	}
	if c := q.engine.class(err); c != classOther {
		q.worst = c
	}
	return err
}

// class says what an error that came out of the transaction means.
func (q *queries) class(err error) errorClass {
	if c := q.engine.class(err); c != classOther {
		return c
	}
	return q.worst
}

func (q *queries) exec(ctx context.Context, statement string, args ...any) (int64, error) {
	result, err := q.tx.ExecContext(ctx, statement, args...)
	if err != nil {
		return 0, q.note(err)
	}
	n, err := result.RowsAffected()
	return n, q.note(err)
}

// one scans the only row; sql.ErrNoRows if there is none.
func (q *queries) one(ctx context.Context, statement string, args []any, into ...any) error {
	return q.note(q.tx.QueryRowContext(ctx, statement, args...).Scan(into...))
}

// each calls row for every row; row must not run another statement, since the
// connection is still busy with this one.
func (q *queries) each(ctx context.Context, statement string, args []any, row func(scan func(...any) error) error) (err error) {
	rows, err := q.tx.QueryContext(ctx, statement, args...)
	if err != nil {
		return q.note(err)
	}
	defer func() { err = errors.Join(err, q.note(rows.Close())) }()
	for rows.Next() {
		if err := row(rows.Scan); err != nil {
			return err
		}
	}
	return q.note(rows.Err())
}

// A table is what an insert of many rows needs to know.
type table struct {
	name    string
	columns []string
}

// statement inserts n rows; suffix follows the values. Its parameters are used
// once each, in order, so SQLite is given plain question marks: the driver looks
// every numbered parameter up by name, which takes longer than the insert.
func (t table) statement(e *engine, n int, suffix string) string {
	var b strings.Builder
	b.WriteString("INSERT INTO " + t.name + " (" + strings.Join(t.columns, ", ") + ") VALUES ")
	arg := 1
	for i := range n {
		if i > 0 {
			b.WriteByte(',')
		}
		b.WriteByte('(')
		for j := range t.columns {
			if j > 0 {
				b.WriteByte(',')
			}
			if e.unnumbered {
				b.WriteByte('?')
			} else {
				b.WriteByte('$')
				b.WriteString(strconv.Itoa(arg))
			}
			arg++
		}
		b.WriteByte(')')
	}
	if suffix != "" {
		b.WriteString(" " + suffix)
	}
	return b.String()
}

// rowsPerStatement bounds a statement; the numbers of rows are powers of two,
// so that there are few different statements to prepare.
const rowsPerStatement = 64

func (q *queries) insert(ctx context.Context, t table, rows [][]any, suffix string) error {
	for n := rowsPerStatement; len(rows) > 0; {
		for n > len(rows) {
			n /= 2
		}
		args := make([]any, 0, n*len(t.columns))
		for _, r := range rows[:n] {
			args = append(args, r...)
		}
		if _, err := q.exec(ctx, t.statement(q.engine, n, suffix), args...); err != nil {
			return fmt.Errorf("insert into %s: %w", t.name, err)
		}
		rows = rows[n:]
	}
	return nil
}

// list writes "$from, $from+1, …" for n parameters.
func list(from, n int) string {
	var b strings.Builder
	for i := range n {
		if i > 0 {
			b.WriteString(", ")
		}
		fmt.Fprintf(&b, "$%d", from+i)
	}
	return b.String()
}

// nullable turns a zero length text into NULL.
func nullable(s string) any {
	if s == "" {
		return nil
	}
	return s
}

func nullInstant(i *Instant) any {
	if i == nil {
		return nil
	}
	return int64(*i)
}

func instantOrNil(n sql.Null[int64]) *Instant {
	if !n.Valid {
		return nil
	}
	i := Instant(n.V)
	return &i
}
