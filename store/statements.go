package store

import (
	"context"
	"database/sql/driver"
	"strings"

	"modernc.org/sqlite"
)

// maxStatements is how many prepared statements a connection of the embedded
// database keeps.
const maxStatements = 256

// A preparing connector opens connections of the embedded database that keep
// their statements prepared. The driver prepares a text anew at every use, and
// for the short reads by key that most of this program's are, that takes most of
// their time.
type preparing struct{ driver.Connector }

func (p preparing) Connect(ctx context.Context) (driver.Conn, error) {
	c, err := p.Connector.Connect(ctx)
	if err != nil {
		return nil, err
	}
	inner, ok := c.(sqliteConn)
	if !ok { // another driver than the one this was written for: nothing is kept
		return c, nil
	}
	return &keptConn{sqliteConn: inner, kept: make(map[string]*keptStatement)}, nil
}

// sqliteConn is what every connection of the driver can do.
type sqliteConn interface {
	driver.Conn
	driver.ConnBeginTx
	driver.ConnPrepareContext
	driver.ExecerContext
	driver.QueryerContext
	driver.Pinger
	driver.SessionResetter
	driver.Validator
	NewBackup(destination string) (*sqlite.Backup, error)
}

// A keptConn is one connection; database/sql lets one goroutine at a time use it.
type keptConn struct {
	sqliteConn
	kept map[string]*keptStatement
	uses uint64
}

// A keptStatement is free, or out with whoever runs it: the same text asked for
// meanwhile is prepared beside it.
type keptStatement struct {
	driver.Stmt
	text string
	used uint64
	out  bool
}

// Unwrap returns the driver's own connection.
func (c *keptConn) Unwrap() driver.Conn { return c.sqliteConn }

// keeps tells whether a text is kept: reads and writes of rows are, what changes
// tables or settings is not.
func keeps(text string) bool {
	text = strings.TrimLeft(text, " \t\n")
	if len(text) < 6 {
		return false
	}
	switch strings.ToUpper(text[:6]) {
	case "SELECT", "INSERT", "UPDATE", "DELETE":
		return true
	}
	first, _, _ := strings.Cut(text, " ")
	return strings.EqualFold(first, "WITH")
}

// take returns a prepared statement; nil where the text is not kept.
func (c *keptConn) take(ctx context.Context, text string) (*keptStatement, error) {
	c.uses++
	if s, ok := c.kept[text]; ok {
		if s.out {
			return nil, nil
		}
		s.out, s.used = true, c.uses
		return s, nil
	}
	if !keeps(text) {
		return nil, nil
	}
	stmt, err := c.PrepareContext(ctx, text)
	if err != nil {
		return nil, err
	}
	if len(c.kept) >= maxStatements {
		c.forget()
	}
	s := &keptStatement{Stmt: stmt, text: text, used: c.uses, out: true}
	c.kept[text] = s
	return s, nil
}

// forget closes the free statement that was used longest ago.
func (c *keptConn) forget() {
	var oldest *keptStatement
	for _, s := range c.kept {
		if !s.out && (oldest == nil || s.used < oldest.used) {
			oldest = s
		}
	}
	if oldest != nil {
		delete(c.kept, oldest.text)
		_ = oldest.Close()
	}
}

// drop closes a statement that failed: what it was prepared for may be gone.
func (c *keptConn) drop(s *keptStatement) {
	delete(c.kept, s.text)
	_ = s.Close()
}

func (c *keptConn) QueryContext(ctx context.Context, text string, args []driver.NamedValue) (driver.Rows, error) {
	s, err := c.take(ctx, text)
	if err != nil {
		return nil, err
	}
	if s == nil {
		return c.sqliteConn.QueryContext(ctx, text, args)
	}
	rows, err := s.Stmt.(driver.StmtQueryContext).QueryContext(ctx, args)
	if err != nil {
		c.drop(s)
		return nil, err
	}
	return &keptRows{Rows: rows, conn: c, statement: s}, nil
}

func (c *keptConn) ExecContext(ctx context.Context, text string, args []driver.NamedValue) (driver.Result, error) {
	s, err := c.take(ctx, text)
	if err != nil {
		return nil, err
	}
	if s == nil {
		return c.sqliteConn.ExecContext(ctx, text, args)
	}
	result, err := s.Stmt.(driver.StmtExecContext).ExecContext(ctx, args)
	if err != nil {
		c.drop(s)
		return nil, err
	}
	s.out = false
	return result, nil
}

// Close closes what is kept, and the connection.
func (c *keptConn) Close() error {
	for _, s := range c.kept {
		_ = s.Close()
	}
	clear(c.kept)
	return c.sqliteConn.Close()
}

// keptRows give their statement back when they are closed.
type keptRows struct {
	driver.Rows
	conn      *keptConn
	statement *keptStatement
}

func (r *keptRows) Close() error {
	if r.statement == nil {
		return nil
	}
	s := r.statement
	r.statement = nil
	err := r.Rows.Close()
	if err != nil {
		r.conn.drop(s)
		return err
	}
	s.out = false
	return nil
}
