package api_test

import (
	"database/sql"
	"fmt"
	"io"
	"log/slog"
	"net/http"
	"net/http/httptest"
	"path/filepath"
	"strings"
	"testing"
	"time"

	"github.com/labstack/echo/v4"
	_ "modernc.org/sqlite" // the driver "sqlite"

	"deltamoor/api"
	"deltamoor/api/registry"
)

// BenchmarkReadReported reads a reported delta through the whole server, and
// beside it a bare Echo handler that does one query of one row: quality.md asks
// for 60 % of its rate. Both go over loopback with one client that keeps its
// connection. They take turns, a block of requests each, and the fastest blocks
// are compared, so that what else the machine does strikes both alike.
func BenchmarkReadReported(b *testing.B) {
	bench := openBench(b)
	j := bench.travel()
	quiet, err := api.New(registry.New(bench.store, registry.Options{}), api.Options{Log: slog.New(slog.DiscardHandler)})
	if err != nil {
		b.Fatal(err)
	}
	ours := reader(b, quiet, "/v1/reported/"+j.reported, bench.tokens["TST"][registry.Auditor])
	bare := reader(b, bareEcho(b), "/reported/1", "")
	const block = 100
	best := [2]time.Duration{time.Hour, time.Hour}
	for b.Loop() {
		for i, read := range []func(){ours, bare} {
			begun := time.Now()
			for range block {
				read()
			}
			best[i] = min(best[i], time.Since(begun)/block)
		}
	}
	b.ReportMetric(float64(best[0].Nanoseconds())/1000, "µs-deltamoor")
	b.ReportMetric(float64(best[1].Nanoseconds())/1000, "µs-bare")
	b.ReportMetric(100*float64(best[1])/float64(best[0]), "%-of-bare-rate")
}

// bareEcho answers with the row of a table by its key, and nothing else.
func bareEcho(b *testing.B) http.Handler {
	b.Helper()
	db, err := sql.Open("sqlite", "file:"+filepath.Join(b.TempDir(), "bare.db")+"?_pragma=journal_mode(WAL)")
	if err != nil {
		b.Fatal(err)
	}
	b.Cleanup(func() { db.Close() })
	for _, statement := range []string{"CREATE TABLE reported (code TEXT PRIMARY KEY, value REAL, u REAL, hash BLOB) STRICT", "INSERT INTO reported VALUES ('1', -18.2, 0.04, x'00')"} {
		if _, err := db.Exec(statement); err != nil {
			b.Fatal(err)
		}
	}
	e := echo.New()
	e.GET("/reported/:code", func(c echo.Context) error {
		var row struct {
			Code     string
			Value, U float64
			Hash     []byte
		}
		err := db.QueryRowContext(c.Request().Context(), "SELECT code, value, u, hash FROM reported WHERE code = $1", c.Param("code")).Scan(&row.Code, &row.Value, &row.U, &row.Hash)
		if err != nil {
			return err
		}
		return c.JSON(http.StatusOK, row)
	})
	return e
}

// reader serves a handler and returns what sends it one request.
func reader(b *testing.B, handler http.Handler, path, token string) func() {
	b.Helper()
	server := httptest.NewServer(handler)
	b.Cleanup(server.Close)
	q, err := http.NewRequest("GET", server.URL+path, nil)
	if err != nil {
		b.Fatal(err)
	}
	if token != "" {
		q.Header.Set("Authorization", "Bearer "+token)
	}
	return func() {
		r, err := server.Client().Do(q)
		if err != nil {
			b.Fatal(err)
		}
		if _, err := io.Copy(io.Discard, r.Body); err != nil {
			b.Fatal(err)
		}
		r.Body.Close()
		if r.StatusCode != 200 {
			b.Fatalf("status %d", r.StatusCode)
		}
	}
}

// BenchmarkImport brings sessions of 5,000 readings through HTTP, and beside it
// the bare insert of the same rows with one prepared statement in one
// transaction: quality.md asks for half its rate. They take turns, and the
// fastest are compared.
func BenchmarkImport(b *testing.B) {
	const rows = 5000
	bench := openBench(b)
	bench.travel()
	day := 0
	file := func() string {
		day++
		var text strings.Builder
		text.WriteString("Pos,Identifier,Use,Time,d13C raw,u raw,Area,Remark\r\n")
		start := time.Date(2026, 4, 1, 0, 0, 0, 0, time.UTC).AddDate(0, 0, day)
		for i := range rows {
			fmt.Fprintf(&text, "%d,%s,,%s,%.4f,0.05,5.0,\r\n", i+1, []string{"FJO-GLY", "USGS41", "IAEA-CH-6"}[i%3], start.Add(time.Duration(i)*time.Second).Format(time.RFC3339), float64(i%80)-40)
		}
		return text.String()
	}
	db, err := sql.Open("sqlite", "file:"+filepath.Join(b.TempDir(), "bare.db")+"?_pragma=journal_mode(WAL)&_pragma=synchronous(FULL)&_txlock=immediate")
	if err != nil {
		b.Fatal(err)
	}
	b.Cleanup(func() { db.Close() })
	if _, err := db.Exec(`CREATE TABLE readings (laboratory TEXT NOT NULL, session TEXT NOT NULL, number INTEGER NOT NULL, analysis TEXT NOT NULL, preparation TEXT NOT NULL,
		position INTEGER, peak INTEGER, quantity TEXT NOT NULL, role TEXT NOT NULL, material TEXT NOT NULL, unit TEXT NOT NULL, sample TEXT NOT NULL, compound TEXT NOT NULL,
		grouping TEXT NOT NULL, measured_at INTEGER, raw REAL NOT NULL, u REAL, size REAL, extra TEXT, PRIMARY KEY (laboratory, session, number)) STRICT, WITHOUT ROWID`); err != nil {
		b.Fatal(err)
	}
	bare := func() {
		tx, err := db.Begin()
		if err != nil {
			b.Fatal(err)
		}
		statement, err := tx.Prepare("INSERT INTO readings VALUES (?, ?, ?, ?, ?, ?, ?, ?, ?, ?, ?, ?, ?, ?, ?, ?, ?, ?, ?)")
		if err != nil {
			b.Fatal(err)
		}
		for i := range rows {
			number := fmt.Sprint(i + 1)
			if _, err := statement.Exec("TST", fmt.Sprintf("S%09d", day), i+1, number, number, int64(i+1), nil, "d13C", "anchor", "FJO-GLY", "", "", "", "", int64(i), float64(i%80)-40, 0.05, 5.0, nil); err != nil {
				b.Fatal(err)
			}
		}
		if err := tx.Commit(); err != nil {
			b.Fatal(err)
		}
	}
	best := [2]time.Duration{time.Hour, time.Hour}
	for b.Loop() {
		text := file()
		for i, run := range []func(){func() {
			bench.post(registry.Analyst, "/v1/sessions/import?instrument=EA1&method=C-solid&name=big.csv", text, "Content-Type", csvType)
		}, bare} {
			begun := time.Now()
			run()
			best[i] = min(best[i], time.Since(begun))
		}
	}
	b.ReportMetric(rows/best[0].Seconds(), "readings/s")
	b.ReportMetric(rows/best[1].Seconds(), "bare-readings/s")
	b.ReportMetric(100*float64(best[1])/float64(best[0]), "%-of-bare-rate")
}
