package demo

import (
	"encoding/json"
	"fmt"
	"os"
	"path/filepath"
	"runtime"
	"syscall"
	"testing"
	"time"

	"deltamoor/api/registry"
	"deltamoor/store"
)

// benchFolder names the folder in which large registries are built once and
// kept for the next run: without it benchmarks make small ones that go away.
const benchFolder = "DELTAMOOR_BENCH_FOLDER"

// benchLarge asks for the median laboratory too, which takes an hour to build.
const benchLarge = "DELTAMOOR_BENCH_LARGE"

// bulkFolder is where a registry of copied chains is; without a folder to keep
// it in, one for this run.
func bulkFolder(b *testing.B, calibrations, deltas int) string {
	b.Helper()
	folder := os.Getenv(benchFolder)
	if folder == "" {
		folder = filepath.Join(keptFolder, "bench")
	}
	return filepath.Join(folder, fmt.Sprintf("bulk-%d-%d", calibrations, deltas))
}

// A bulkPlace is a registry of copied chains.
func bulkPlace(b *testing.B, calibrations, deltas int) (*Place, *Summary) {
	b.Helper()
	folder := bulkFolder(b, calibrations, deltas)
	kept := filepath.Join(folder, "summary.json")
	text, err := os.ReadFile(kept)
	built := err == nil
	if !built { // also what a run that was ended left half-way
		if err := os.RemoveAll(folder); err != nil {
			b.Fatal(err)
		}
		if err := os.MkdirAll(folder, 0o700); err != nil {
			b.Fatal(err)
		}
	}
	p, err := Open(b.Context(), store.Options{Database: folder}, 21)
	if err != nil {
		b.Fatal(err)
	}
	b.Cleanup(func() { p.Close() })
	if built {
		s := &Summary{}
		if err := json.Unmarshal(text, s); err != nil {
			b.Fatal(err)
		}
		return p, s
	}
	s, err := Build(b.Context(), p.Registry, p.Clock, 21)
	if err != nil {
		b.Fatal(err)
	}
	begun := time.Now()
	err = Bulk(b.Context(), p, s, BulkSize{Calibrations: calibrations, Deltas: deltas, Progress: func(done, total int) {
		if done%1000 == 0 {
			fmt.Fprintf(os.Stderr, "%d of %d calibrations in %s\n", done, total, time.Since(begun).Round(time.Second))
		}
	}}, 22)
	if err != nil {
		b.Fatal(err)
	}
	if text, err = json.Marshal(s); err == nil {
		err = os.WriteFile(kept, text, 0o600)
	}
	if err != nil {
		b.Fatal(err)
	}
	return p, s
}

// bulkSizes are calibrations and deltas of each: those of quality.md's small and
// median laboratory where there is a folder to keep them in.
func bulkSizes() [][2]int {
	if os.Getenv(benchFolder) == "" {
		return [][2]int{{100, 50}}
	}
	if os.Getenv(benchLarge) == "" {
		return [][2]int{{1200, 40}}
	}
	return [][2]int{{1200, 40}, {14_400, 50}}
}

// BenchmarkDryRun asks what moves when the primary material USGS41 is re-valued,
// on which everything copied rests. quality.md: 1 s at the median volume, memory flat.
func BenchmarkDryRun(b *testing.B) {
	for _, size := range bulkSizes() {
		p, s := bulkPlace(b, size[0], size[1])
		b.Run(fmt.Sprintf("calibrations=%d", size[0]), func(b *testing.B) {
			var heap uint64
			var last registry.RevisionSummary
			begun := processorTime()
			for b.Loop() {
				n := 0
				summary, err := p.Registry.PreviewRevision(b.Context(), s.Auditor, registry.Proposal{Values: []registry.ProposedValue{
					{Material: "USGS41", Scale: scaleC, Value: "37.70", Stated: store.Stated{Text: "0.04", Kind: "standard"}}}}, func(registry.Affected) error {
					if n++; n%50_000 == 0 {
						var m runtime.MemStats
						runtime.ReadMemStats(&m)
						heap = max(heap, m.HeapInuse)
					}
					return nil
				})
				if err != nil {
					b.Fatal(err)
				}
				last = summary
			}
			b.ReportMetric(float64(last.Calibrations.Moved), "calibrations")
			b.ReportMetric(float64(last.Reported.Moved), "deltas")
			b.ReportMetric(float64(heap)/(1<<20), "MB-heap")
			b.ReportMetric(b.Elapsed().Seconds()/float64(b.N), "s")
			b.ReportMetric((processorTime()-begun).Seconds()/float64(b.N), "cpu-s")
		})
	}
}

// processorTime is what the process has used of the processors: a measure that
// other programs on the machine disturb less than they do the clock.
func processorTime() time.Duration {
	var u syscall.Rusage
	if err := syscall.Getrusage(syscall.RUSAGE_SELF, &u); err != nil {
		return 0
	}
	return time.Duration(u.Utime.Nano() + u.Stime.Nano())
}
