package store

import (
	"context"
	"database/sql"
	"database/sql/driver"
	"errors"
	"fmt"
	"net/url"
	"os"
	"path/filepath"
	"runtime"
	"slices"
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

// insertReadings writes what is the same in all rows into the statement, as far
// as it is nothing or a code: most of the time goes into binding parameters.
func insertReadings(ctx context.Context, conn *sql.Conn, _ *sql.Tx, rows [][]any) error {
	if len(rows) == 0 {
		return nil
	}
	fixed := make([]string, len(readingColumns))
	var bound []int
	for i := range readingColumns {
		if fixed[i] = literalOf(rows[0][i]); fixed[i] != "" && slices.ContainsFunc(rows, func(r []any) bool { return r[i] != rows[0][i] }) {
			fixed[i] = ""
		}
		if fixed[i] == "" {
			bound = append(bound, i)
		}
	}
	return conn.Raw(func(driverConn any) error {
		c, ok := driverConn.(interface {
			PrepareContext(context.Context, string) (driver.Stmt, error)
		})
		if !ok {
			return fmt.Errorf("store readings: found connection %T, expected one that prepares", driverConn)
		}
		var stmt driver.Stmt
		defer func() {
			if stmt != nil {
				_ = stmt.Close()
			}
		}()
		args := make([]driver.NamedValue, readingsPerStatement*len(bound))
		for i := range args {
			args[i].Ordinal = i + 1
		}
		for size := 0; len(rows) > 0; {
			n := min(readingsPerStatement, len(rows))
			if n != size {
				if stmt != nil {
					_ = stmt.Close()
					stmt = nil
				}
				var err error
				if stmt, err = c.PrepareContext(ctx, insertOf(fixed, n)); err != nil {
					return err
				}
				size = n
			}
			k := 0
			for _, r := range rows[:n] {
				for _, i := range bound {
					args[k].Value = r[i]
					k++
				}
			}
			if _, err := stmt.(driver.StmtExecContext).ExecContext(ctx, args[:k]); err != nil {
				return err
			}
			rows = rows[n:]
		}
		return nil
	})
}

// literalOf is a value as it may stand in a statement; "" where it is bound.
func literalOf(value any) string {
	switch x := value.(type) {
	case nil:
		return "NULL"
	case string:
		for _, c := range []byte(x) {
			if (c < '0' || c > '9') && (c < 'A' || c > 'Z') && (c < 'a' || c > 'z') {
				return ""
			}
		}
		if len(x) <= maxCode {
			return "'" + x + "'"
		}
	}
	return ""
}

// insertOf is the statement of n rows of which some columns are fixed.
func insertOf(fixed []string, n int) string {
	values := make([]string, len(fixed))
	for i, text := range fixed {
		if values[i] = text; text == "" {
			values[i] = "?"
		}
	}
	row := "(" + strings.Join(values, ",") + ")"
	return "INSERT INTO readings (" + strings.Join(readingColumns, ", ") + ") VALUES " + strings.TrimSuffix(strings.Repeat(row+",", n), ",")
}
