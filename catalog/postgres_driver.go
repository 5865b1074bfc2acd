package catalog

import (
	"context"
	"database/sql"
	"database/sql/driver"
	"errors"
	"fmt"
	"io"
	"strconv"
	"strings"
	"time"

	"github.com/jackc/pgx/v5"
)

// The driver of database/sql over connections of pgx. Statements are prepared
// by pgx when they are first used on a connection, and kept there.

// connector opens connections.
type connector struct{ cfg *pgx.ConnConfig }

// Connect opens one connection.
func (c connector) Connect(ctx context.Context) (driver.Conn, error) {
	conn, err := pgx.ConnectConfig(ctx, c.cfg)
	if err != nil {
		return nil, err
	}
	return &serverConn{conn}, nil
}

// Driver returns a value that opens nothing: connections come from Connect.
func (c connector) Driver() driver.Driver { return c }

// Open is there for driver.Driver.
func (c connector) Open(string) (driver.Conn, error) { return c.Connect(context.Background()) }

type serverConn struct{ *pgx.Conn }

// IsValid reports whether the pool may give the connection out again.
func (c *serverConn) IsValid() bool { return !c.IsClosed() }

// Close ends the connection.
func (c *serverConn) Close() error {
	ctx, cancel := context.WithTimeout(context.Background(), 5*time.Second)
	defer cancel()
	return c.Conn.Close(ctx)
}

// Prepare notes a statement.
func (c *serverConn) Prepare(query string) (driver.Stmt, error) {
	return &serverStmt{c, numbered(query)}, nil
}

// Begin begins a transaction.
func (c *serverConn) Begin() (driver.Tx, error) {
	return c.BeginTx(context.Background(), driver.TxOptions{})
}

// BeginTx begins a transaction.
func (c *serverConn) BeginTx(ctx context.Context, o driver.TxOptions) (driver.Tx, error) {
	if c.IsClosed() {
		return nil, driver.ErrBadConn
	}
	var options pgx.TxOptions
	switch sql.IsolationLevel(o.Isolation) {
	case sql.LevelDefault:
		options.IsoLevel = pgx.ReadCommitted
	case sql.LevelRepeatableRead:
		options.IsoLevel = pgx.RepeatableRead
	default:
		return nil, fmt.Errorf("isolation %s is not used here", sql.IsolationLevel(o.Isolation))
	}
	if o.ReadOnly {
		options.AccessMode = pgx.ReadOnly
	}
	tx, err := c.Conn.BeginTx(ctx, options)
	if err != nil {
		return nil, err
	}
	return serverTx{ctx, tx}, nil
}

type serverTx struct {
	ctx context.Context
	tx  pgx.Tx
}

// Commit ends the transaction; an error also where the server rolled it back.
func (t serverTx) Commit() error { return t.tx.Commit(t.ctx) }

// Rollback undoes the transaction, also after the context ended.
func (t serverTx) Rollback() error {
	ctx, cancel := context.WithTimeout(context.WithoutCancel(t.ctx), 10*time.Second)
	defer cancel()
	err := t.tx.Rollback(ctx)
	if errors.Is(err, pgx.ErrTxClosed) {
		return nil
	}
	return err
}

// ExecContext runs a statement without rows. Without values it may be several.
func (c *serverConn) ExecContext(ctx context.Context, query string, values []driver.NamedValue) (driver.Result, error) {
	return c.exec(ctx, numbered(query), values)
}

func (c *serverConn) exec(ctx context.Context, query string, values []driver.NamedValue) (driver.Result, error) {
	if c.IsClosed() {
		return nil, driver.ErrBadConn
	}
	tag, err := c.Exec(ctx, query, plain(values)...)
	if err != nil {
		return nil, err
	}
	return driver.RowsAffected(tag.RowsAffected()), nil
}

// QueryContext runs a statement with rows.
func (c *serverConn) QueryContext(ctx context.Context, query string, values []driver.NamedValue) (driver.Rows, error) {
	return c.query(ctx, numbered(query), values)
}

func (c *serverConn) query(ctx context.Context, query string, values []driver.NamedValue) (driver.Rows, error) {
	if c.IsClosed() {
		return nil, driver.ErrBadConn
	}
	rows, err := c.Query(ctx, query, plain(values)...)
	if err != nil {
		return nil, err
	}
	// The first row tells whether the statement succeeded.
	r := &serverRows{Rows: rows, more: rows.Next()}
	if !r.more && rows.Err() != nil {
		return nil, rows.Err()
	}
	return r, nil
}

func plain(values []driver.NamedValue) []any {
	list := make([]any, len(values))
	for i := range values {
		list[i] = values[i].Value
	}
	return list
}

type serverRows struct {
	pgx.Rows
	more bool // the row that stands ready
}

// Columns names the columns.
func (r *serverRows) Columns() []string {
	fields := r.FieldDescriptions()
	names := make([]string, len(fields))
	for i := range fields {
		names[i] = fields[i].Name
	}
	return names
}

// Close ends the query.
func (r *serverRows) Close() error {
	r.Rows.Close()
	return nil
}

// Next reads a row.
func (r *serverRows) Next(to []driver.Value) error {
	if !r.more {
		if err := r.Err(); err != nil {
			return err
		}
		return io.EOF
	}
	values, err := r.Values()
	if err != nil {
		return err
	}
	for i, v := range values {
		switch x := v.(type) {
		case nil, int64, float64, string, []byte, bool, time.Time:
			to[i] = x
		case int32:
			to[i] = int64(x)
		case int16:
			to[i] = int64(x)
		case float32:
			to[i] = float64(x)
		default:
			return fmt.Errorf("column %s holds a %T, which is not used here", r.FieldDescriptions()[i].Name, v)
		}
	}
	r.more = r.Rows.Next()
	return nil
}

// serverStmt is a statement with its values numbered.
type serverStmt struct {
	conn  *serverConn
	query string
}

// Close does nothing: pgx keeps what it prepared.
func (s *serverStmt) Close() error { return nil }

// NumInput leaves counting to the server.
func (s *serverStmt) NumInput() int { return -1 }

// ExecContext runs the statement.
func (s *serverStmt) ExecContext(ctx context.Context, values []driver.NamedValue) (driver.Result, error) {
	return s.conn.exec(ctx, s.query, values)
}

// QueryContext runs the statement.
func (s *serverStmt) QueryContext(ctx context.Context, values []driver.NamedValue) (driver.Rows, error) {
	return s.conn.query(ctx, s.query, values)
}

var errNoContext = errors.New("statements are run with a context")

// Exec is there for driver.Stmt.
func (s *serverStmt) Exec([]driver.Value) (driver.Result, error) { return nil, errNoContext }

// Query is there for driver.Stmt.
func (s *serverStmt) Query([]driver.Value) (driver.Rows, error) { return nil, errNoContext }

// numbered turns each ? outside quotes into $1, $2…
func numbered(query string) string {
	if !strings.Contains(query, "?") {
		return query
	}
	var b strings.Builder
	n, quote := 0, byte(0)
	for i := 0; i < len(query); i++ {
		c := query[i]
		switch {
		case quote != 0:
			if c == quote {
				quote = 0
			}
		case c == '\'' || c == '"':
			quote = c
		case c == '?':
			n++
			b.WriteByte('$')
			b.WriteString(strconv.Itoa(n))
			continue
		}
		b.WriteByte(c)
	}
	return b.String()
}
