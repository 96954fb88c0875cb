package store

import (
	"context"
	"database/sql"
	"database/sql/driver"
	"errors"
	"fmt"
	"io"
	"net"
	"runtime"
	"strings"

	"github.com/jackc/pgx/v5"
	"github.com/jackc/pgx/v5/pgconn"
	"github.com/jackc/pgx/v5/stdlib"
	"github.com/pressly/goose/v3"

	"deltamoor/migrations"
)

func postgresEngine() *engine {
	return &engine{
		name:       migrations.Postgres,
		dialect:    goose.DialectPostgres,
		withWanted: wantedRows + `jsonb_array_elements(cast($1 as jsonb)) j (value)`,
		joinPacked: `string_agg(s.packed, chr(10))`,
		open:       openPostgres,
		hasTable: `SELECT count(*) FROM information_schema.tables
			WHERE table_schema = current_schema() AND table_name = $1`,
		read: sql.TxOptions{Isolation: sql.LevelRepeatableRead, ReadOnly: true},
		// On purpose no stricter level: the row of the ledger's head and the keys
		// serialise writers; a snapshot would only make them fail each other.
		write:        sql.TxOptions{Isolation: sql.LevelReadCommitted},
		brief:        func(ctx context.Context) context.Context { return ctx },
		copyReadings: copyReadings,
		class:        postgresClass,
	}
}

func isPostgres(database string) bool {
	return strings.HasPrefix(database, "postgres://") || strings.HasPrefix(database, "postgresql://")
}

func openPostgres(ctx context.Context, o Options) (write, read *sql.DB, err error) {
	config, err := pgx.ParseConfig(o.Database)
	if err != nil {
		// pgx hides the password in its message.
		return nil, nil, fmt.Errorf("open database: %w", err)
	}
	if _, ok := config.RuntimeParams["application_name"]; !ok {
		config.RuntimeParams["application_name"] = "deltamoor"
	}
	if o.ReadOnly {
		config.RuntimeParams["default_transaction_read_only"] = "on"
	}
	db := stdlib.OpenDB(*config)
	db.SetMaxOpenConns(max(8, 4*runtime.GOMAXPROCS(0)))
	db.SetMaxIdleConns(max(8, 4*runtime.GOMAXPROCS(0)))
	if err := db.PingContext(ctx); err != nil {
		return nil, nil, errors.Join(fmt.Errorf("open database: %w", err), db.Close())
	}
	return db, db, nil
}

func postgresClass(err error) errorClass {
	if e, ok := errors.AsType[*pgconn.PgError](err); ok {
		// https://www.postgresql.org/docs/15/errcodes-appendix.html
		switch e.Code {
		case "40001", "40P01", "55P03": // serialization, deadlock, lock not available
			return classRetry
		case "23505": // unique violation
			return classUnique
		case "53100", "53200", "25006": // disk full, out of memory, read-only (a standby)
			return classFull
		case "57P01", "57P02", "57P03", "53300": // shutdown, crash, starting up, too many connections
			return classGone
		}
		if strings.HasPrefix(e.Code, "08") {
			return classGone
		}
		return classOther
	}
	if _, ok := errors.AsType[*pgconn.ConnectError](err); ok {
		return classGone
	}
	if _, ok := errors.AsType[net.Error](err); ok && !errors.Is(err, context.DeadlineExceeded) {
		return classGone
	}
	if pgconn.SafeToRetry(err) { // such as a connection already closed
		return classGone
	}
	if errors.Is(err, driver.ErrBadConn) || errors.Is(err, io.ErrUnexpectedEOF) || errors.Is(err, io.EOF) || errors.Is(err, net.ErrClosed) {
		return classGone
	}
	return classOther
}

// copyReadings sends the rows by COPY on the connection that holds the
// transaction, so that they commit and roll back with it.
func copyReadings(ctx context.Context, conn *sql.Conn, _ *sql.Tx, rows [][]any) error {
	return conn.Raw(func(driverConn any) error {
		c, ok := driverConn.(*stdlib.Conn)
		if !ok {
			return fmt.Errorf("copy readings: found connection %T, expected pgx", driverConn)
		}
		_, err := c.Conn().CopyFrom(ctx, pgx.Identifier{"readings"}, readingColumns, pgx.CopyFromRows(rows))
		return err
	})
}
