package demo

import (
	"context"
	"database/sql"
	"fmt"
	"path/filepath"
	"slices"
	"testing"
	"time"

	_ "modernc.org/sqlite" // the driver "sqlite"

	"deltamoor/api/registry"
	"deltamoor/store"
)

// BenchmarkTrace traces reported deltas drawn at random from copied chains, and
// fetches beside it the same versions' rows by key in bare SQL: quality.md asks
// for 3 times that at most (through HTTP), and that the 95th percentile grows
// less than 1.5 times from the median laboratory to the large one.
func BenchmarkTrace(b *testing.B) {
	for _, size := range bulkSizes() {
		p, s := bulkPlace(b, size[0], size[1])
		codes := someDeltas(b, p, s)
		b.Run(fmt.Sprintf("calibrations=%d", size[0]), func(b *testing.B) {
			bare, err := sql.Open("sqlite", "file:"+filepath.Join(bulkFolder(b, size[0], size[1]), "deltamoor.db")+"?mode=ro")
			if err != nil {
				b.Fatal(err)
			}
			defer bare.Close()
			var traces, fetches []time.Duration
			nodes, i := 0, 0
			for b.Loop() {
				begun := time.Now()
				trace, err := p.Registry.TraceAt(b.Context(), s.Auditor, registry.TraceQuery{Code: codes[i%len(codes)]})
				if err != nil {
					b.Fatal(err)
				}
				traces = append(traces, time.Since(begun))
				begun = time.Now()
				for _, n := range trace.Nodes {
					var body sql.Null[string]
					if err := bare.QueryRow("SELECT body FROM versions WHERE laboratory = ? AND kind = ? AND code = ? AND version = ?", n.Laboratory, string(n.Kind), n.Code, n.Ref.Version).Scan(&body); err != nil {
						b.Fatal(err)
					}
				}
				fetches = append(fetches, time.Since(begun))
				nodes = len(trace.Nodes)
				i++
			}
			slices.Sort(traces)
			slices.Sort(fetches)
			at := func(d []time.Duration, part float64) float64 {
				return float64(d[int(part*float64(len(d)-1))].Microseconds())
			}
			b.ReportMetric(float64(nodes), "nodes")
			b.ReportMetric(at(traces, 0.5), "µs-median")
			b.ReportMetric(at(traces, 0.95), "µs-p95")
			b.ReportMetric(at(fetches, 0.5), "µs-bare-median")
			b.ReportMetric(at(traces, 0.1)/at(fetches, 0.1), "times-bare")
		})
	}
}

// someDeltas returns codes of reported deltas of the newest thousand versions.
func someDeltas(b *testing.B, p *Place, s *Summary) []string {
	b.Helper()
	var codes []string
	err := p.Store.Read(b.Context(), func(ctx context.Context, v *store.View) error {
		for before := int64(0); len(codes) < 2000; {
			page, next, err := v.Recent(ctx, store.RecentQuery{Laboratory: s.Laboratory, Before: before, Limit: store.MaxLimit})
			if err != nil {
				return err
			}
			for _, raw := range page {
				if raw.Kind != store.KindReport {
					continue
				}
				report, err := store.Decode[store.Report](raw)
				if err != nil {
					return err
				}
				for _, line := range report.Value.Lines {
					codes = append(codes, line.Code)
				}
			}
			if before = next; next == 0 {
				return nil
			}
		}
		return nil
	})
	if err != nil {
		b.Fatal(err)
	}
	draw := newBuilder(p.Registry, p.Clock, 1).draw("traces")
	draw.Shuffle(len(codes), func(i, j int) { codes[i], codes[j] = codes[j], codes[i] })
	return codes
}
