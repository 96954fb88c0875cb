package store

import (
	"context"
	"database/sql"
	"errors"
	"fmt"
	"net/url"
	"os"
	"path/filepath"
	"runtime"
	"strings"
	"time"

	"github.com/pressly/goose/v3"
	"modernc.org/sqlite"

	"deltamoor/migrations"
)

// databaseFile is the name of the database in a directory.
const databaseFile = "deltamoor.db"

func sqliteEngine() *engine {
	return &engine{
		name:       migrations.SQLite,
		dialect:    goose.DialectSQLite3,
		unnumbered: true,
		withWanted: wantedRows + `json_each($1) j`,
		joinPacked: `group_concat(s.packed, char(10))`,
		open:       openSQLite,
		hasTable:   `SELECT count(*) FROM sqlite_master WHERE type = 'table' AND name = $1`,
		// It takes some microseconds, and waits no longer than the busy timeout; to watch
		// whether the asker has gone meanwhile takes a third of that again.
		brief:        context.WithoutCancel,
		copyReadings: insertReadings,
		class:        sqliteClass,
	}
}

// SQLitePath returns the file a database name stands for: a directory (or "",
// the current one) stands for the file deltamoor.db in it.
func SQLitePath(database string) string {
	if database == "" {
		return databaseFile
	}
	if info, err := os.Stat(database); err == nil && info.IsDir() || strings.HasSuffix(database, string(filepath.Separator)) {
		return filepath.Join(database, databaseFile)
	}
	return database
}

func openSQLite(ctx context.Context, o Options) (write, read *sql.DB, err error) {
	path := SQLitePath(o.Database)
	if !o.ReadOnly {
		// The file is made here, and not by the driver, to give it its mode; the
		// write-ahead log takes over the mode of the file.
		f, err := os.OpenFile(path, os.O_RDWR|os.O_CREATE, 0o600)
		if err != nil {
			return nil, nil, fmt.Errorf("open database: %w", err)
		}
		if err := f.Close(); err != nil {
			return nil, nil, fmt.Errorf("open database: %w", err)
		}
	} else if _, err := os.Stat(path); err != nil {
		return nil, nil, fmt.Errorf("open database: %w", err)
	}
	// Pragmas belong to a connection, so they stand in the name every connection
	// is opened by. NORMAL would lose acknowledged commits when the power fails.
	common := "_pragma=busy_timeout(5000)&_pragma=foreign_keys(1)&_pragma=synchronous(FULL)"
	name := "file:" + (&url.URL{Path: path}).EscapedPath() + "?"
	if o.ReadOnly {
		read, err = openKept(name + common + "&mode=ro&_pragma=query_only(1)")
		return read, read, err
	}
	write, err = openKept(name + common + "&_pragma=journal_mode(WAL)&_txlock=immediate")
	if err != nil {
		return nil, nil, err
	}
	// Two connections that write would only wait for each other's lock; one pool of
	// one queues in the program (measured: ten times the commits).
	write.SetMaxOpenConns(1)
	// Of processes that turn a new database to its write-ahead log at once all but
	// one are told that it is busy, without the driver's waiting for it.
	for deadline := time.Now().Add(writePeriod); ; {
		err := write.PingContext(ctx)
		if err == nil {
			break
		}
		if sqliteClass(err) != classRetry || time.Now().After(deadline) || ctx.Err() != nil {
			return nil, nil, errors.Join(fmt.Errorf("open database %s: %w", path, err), write.Close())
		}
		time.Sleep(10 * time.Millisecond)
	}
	read, err = openKept(name + common + "&_pragma=query_only(1)")
	if err != nil {
		return nil, nil, errors.Join(err, write.Close())
	}
	read.SetMaxOpenConns(max(4, 2*runtime.GOMAXPROCS(0)))
	read.SetMaxIdleConns(max(4, 2*runtime.GOMAXPROCS(0)))
	return write, read, nil
}

// openKept opens a pool whose connections keep their statements prepared.
func openKept(name string) (*sql.DB, error) {
	connector, err := sqlite.NewConnector(name)
	if err != nil {
		return nil, err
	}
	return sql.OpenDB(preparing{connector}), nil
}

// SQLite's result codes, https://www.sqlite.org/rescode.html; the low byte is
// the primary code.
const (
	sqliteBusy             = 5
	sqliteLocked           = 6
	sqliteReadOnly         = 8
	sqliteIOError          = 10
	sqliteFull             = 13
	sqliteCannotOpen       = 14
	sqliteConstraintPK     = 1555
	sqliteConstraintUnique = 2067
	sqliteConstraintRowID  = 2579
)

func sqliteClass(err error) errorClass {
	e, ok := errors.AsType[*sqlite.Error](err)
	if !ok {
		return classOther
	}
	switch e.Code() {
	case sqliteConstraintPK, sqliteConstraintUnique, sqliteConstraintRowID:
		return classUnique
	}
	switch e.Code() & 0xff {
	case sqliteBusy, sqliteLocked:
		return classRetry
	case sqliteFull, sqliteReadOnly, sqliteIOError, sqliteCannotOpen:
		return classFull
	}
	return classOther
}

// readingsPerStatement bounds the parameters of one statement.
const readingsPerStatement = 40

func insertReadings(ctx context.Context, _ *sql.Conn, tx *sql.Tx, rows [][]any) error {
	width := len(readingColumns)
	many, err := tx.PrepareContext(ctx, readingsTable.statement(sqliteEngine(), readingsPerStatement, ""))
	if err != nil {
		return err
	}
	defer many.Close()
	args := make([]any, 0, readingsPerStatement*width)
	for len(rows) >= readingsPerStatement {
		args = args[:0]
		for _, r := range rows[:readingsPerStatement] {
			args = append(args, r...)
		}
		if _, err := many.ExecContext(ctx, args...); err != nil {
			return err
		}
		rows = rows[readingsPerStatement:]
	}
	if len(rows) == 0 {
		return nil
	}
	args = args[:0]
	for _, r := range rows {
		args = append(args, r...)
	}
	_, err = tx.ExecContext(ctx, readingsTable.statement(sqliteEngine(), len(rows), ""), args...)
	return err
}
