package store

import (
	"context"
	"database/sql"

	"github.com/pressly/goose/v3"
)

// An engine is what differs between the databases: opening, bulk rows, and
// what its errors mean. Every statement is written once, in the SQL both share.
type engine struct {
	name    string // also the folder of its migrations
	dialect goose.Dialect

	// unnumbered: parameters used once each, in order, are written "?".
	unnumbered bool
	// withWanted begins a statement about many versions, given as a JSON array of
	// arrays; see wantedRows.
	withWanted string
	// joinPacked joins the lines of shares of one group.
	joinPacked string
	// open returns the pool that writes and the pool that reads; they may be one.
	open func(ctx context.Context, o Options) (write, read *sql.DB, err error)
	// hasTable asks whether the table $1 exists: one row with a count.
	hasTable string
	// read begins a transaction whose statements see one state of the database.
	read sql.TxOptions
	// write begins the transaction of a write.
	write sql.TxOptions

	// brief is the context of a read of one row by its key.
	brief func(context.Context) context.Context

	// copyReadings adds rows to the readings inside the open transaction of conn.
	copyReadings func(ctx context.Context, conn *sql.Conn, tx *sql.Tx, rows [][]any) error

	// class says what an error of the driver means.
	class func(error) errorClass
}

// An errorClass is what an error of the driver means to a transaction.
type errorClass int

const (
	// classOther: nothing the store could act on.
	classOther errorClass = iota
	// classRetry: the transaction did nothing and may run again.
	classRetry
	// classUnique: somebody was first on a unique key.
	classUnique
	// classGone: the connection is lost; whether the last statement took effect is unknown.
	classGone
	// classFull: no room, or not permitted to write now.
	classFull
)
