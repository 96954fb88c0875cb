package store_test

import (
	"context"
	"database/sql"
	"fmt"
	"strings"
	"testing"

	"github.com/jackc/pgx/v5"
	"github.com/jackc/pgx/v5/stdlib"

	"deltamoor/store"
	"deltamoor/store/storetest"
)

func eachEngine(b *testing.B, f func(b *testing.B, e storetest.Engine)) {
	b.Helper()
	for _, e := range storetest.Engines(b) {
		b.Run(string(e), func(b *testing.B) { f(b, e) })
	}
}

func BenchmarkCommit(b *testing.B) {
	eachEngine(b, func(b *testing.B, e storetest.Engine) {
		s := storetest.Open(b, e, store.Options{})
		note := strings.Repeat("x", 1500)
		n := 0
		for b.Loop() {
			n++
			_, err := s.Write(context.Background(), lab, func(ctx context.Context, tx *store.Tx) error {
				_, err := tx.Append(ctx, store.Draft{Kind: store.KindMaterial, Code: fmt.Sprintf("M%d", n), By: "mara", Value: store.Material{Name: "Glycine", Kind: "control", Note: note}})
				return err
			})
			if err != nil {
				b.Fatal(err)
			}
		}
		b.ReportMetric(float64(b.N)/b.Elapsed().Seconds(), "commits/s")
	})
}

func BenchmarkCommitFromEightWriters(b *testing.B) {
	eachEngine(b, func(b *testing.B, e storetest.Engine) {
		s := storetest.Open(b, e, store.Options{})
		b.ResetTimer()
		together(8, func(i int) {
			for n := range b.N/8 + 1 {
				_, err := s.Write(context.Background(), lab, func(ctx context.Context, tx *store.Tx) error {
					_, err := tx.Append(ctx, material(fmt.Sprintf("M%d-%d", i, n)))
					return err
				})
				if err != nil {
					b.Error(err)
				}
			}
		})
		b.ReportMetric(float64(b.N)/b.Elapsed().Seconds(), "commits/s")
	})
}

// benchReadings is how many readings one import of the benchmarks has.
const benchReadings = 5000

func BenchmarkImportReadings(b *testing.B) {
	eachEngine(b, func(b *testing.B, e storetest.Engine) {
		s := storetest.Open(b, e, store.Options{})
		n := 0
		for b.Loop() {
			n++
			code := fmt.Sprintf("S%d", n)
			rs := readings(code, benchReadings)
			_, err := s.Write(context.Background(), lab, func(ctx context.Context, tx *store.Tx) error {
				if err := tx.AppendReadings(ctx, rs); err != nil {
					return err
				}
				_, err := tx.Append(ctx, sessionDraft(code, rs, nil))
				return err
			})
			if err != nil {
				b.Fatal(err)
			}
		}
		b.ReportMetric(float64(b.N)*benchReadings/b.Elapsed().Seconds(), "readings/s")
	})
}

// BenchmarkBareInsertOfReadings is what BenchmarkImportReadings is measured by:
// the same rows by COPY on Postgres, by one prepared statement in one transaction
// on SQLite.
func BenchmarkBareInsertOfReadings(b *testing.B) {
	columns := []string{"laboratory", "session", "number", "analysis", "preparation", "position", "peak", "quantity", "role", "material",
		"unit", "sample", "compound", "grouping", "measured_at", "raw", "u", "size", "extra"}
	eachEngine(b, func(b *testing.B, e storetest.Engine) {
		database := storetest.Database(b, e)
		storetest.Open(b, e, store.Options{Database: database})
		driver, name := "pgx", database
		if e == storetest.SQLite {
			driver, name = "sqlite", "file:"+database+"?_pragma=synchronous(FULL)&_txlock=immediate"
		}
		db, err := sql.Open(driver, name)
		if err != nil {
			b.Fatal(err)
		}
		defer db.Close()
		n := 0
		for b.Loop() {
			n++
			code := fmt.Sprintf("S%d", n)
			rows := make([][]any, 0, benchReadings)
			for _, r := range readings(code, benchReadings) {
				var extra any
				if r.Extra != "" {
					extra = r.Extra
				}
				rows = append(rows, []any{lab, r.Session, r.Number, r.Analysis, r.Preparation, r.Position, r.Peak, r.Quantity, string(r.Role),
					r.Material, r.Unit, r.Sample, r.Compound, r.Group, int64(*r.At), r.Raw, r.U, r.Size, extra})
			}
			if err := bareInsert(db, e, columns, rows); err != nil {
				b.Fatal(err)
			}
		}
		b.ReportMetric(float64(b.N)*benchReadings/b.Elapsed().Seconds(), "readings/s")
	})
}

func bareInsert(db *sql.DB, e storetest.Engine, columns []string, rows [][]any) error {
	ctx := context.Background()
	if e == storetest.Postgres {
		conn, err := db.Conn(ctx)
		if err != nil {
			return err
		}
		defer conn.Close()
		return conn.Raw(func(c any) error {
			_, err := c.(*stdlib.Conn).Conn().CopyFrom(ctx, pgx.Identifier{"readings"}, columns, pgx.CopyFromRows(rows))
			return err
		})
	}
	tx, err := db.Begin()
	if err != nil {
		return err
	}
	defer tx.Rollback()
	marks := make([]string, len(columns))
	for i := range marks {
		marks[i] = fmt.Sprintf("$%d", i+1)
	}
	statement, err := tx.Prepare("INSERT INTO readings (" + strings.Join(columns, ", ") + ") VALUES (" + strings.Join(marks, ", ") + ")")
	if err != nil {
		return err
	}
	defer statement.Close()
	for _, r := range rows {
		if _, err := statement.Exec(r...); err != nil {
			return err
		}
	}
	return tx.Commit()
}

func BenchmarkPointRead(b *testing.B) {
	eachEngine(b, func(b *testing.B, e storetest.Engine) {
		s := storetest.Open(b, e, store.Options{})
		r := fill(b, s, lab, 1)
		for b.Loop() {
			err := s.Read(context.Background(), func(ctx context.Context, v *store.View) error {
				_, err := v.Reported(ctx, r.reported[0])
				return err
			})
			if err != nil {
				b.Fatal(err)
			}
		}
		b.ReportMetric(float64(b.N)/b.Elapsed().Seconds(), "reads/s")
	})
}

func BenchmarkReadingBlocks(b *testing.B) {
	rs := readings("S1", benchReadings)
	for b.Loop() {
		store.ReadingBlocks(rs)
	}
	b.ReportMetric(float64(b.N)*benchReadings/b.Elapsed().Seconds(), "readings/s")
}

func BenchmarkVerify(b *testing.B) {
	eachEngine(b, func(b *testing.B, e storetest.Engine) {
		s := storetest.Open(b, e, store.Options{})
		for n := range 40 {
			write(b, s, lab, func(ctx context.Context, tx *store.Tx) error {
				for i := range 100 {
					ref, err := tx.Append(ctx, value(fmt.Sprintf("V%d-%d", n, i), "1", 0))
					if err != nil {
						return err
					}
					if _, err := tx.Append(ctx, decision(ref, store.ActApproved)); err != nil {
						return err
					}
				}
				return nil
			})
		}
		var size int64
		for b.Loop() {
			f, err := s.Verify(context.Background(), lab, store.VerifyOptions{})
			if err != nil || !f.Clean() {
				b.Fatal(f.List, err)
			}
			size = f.Size
		}
		b.ReportMetric(float64(b.N)*float64(size)/b.Elapsed().Seconds(), "entries/s")
	})
}
