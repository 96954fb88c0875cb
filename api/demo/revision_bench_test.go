package demo

import (
	"fmt"
	"runtime"
	"testing"

	"deltamoor/api/registry"
	"deltamoor/store"
)

// BenchmarkRevisionPreview asks what moves when the primary material USGS41 is
// re-valued, on which every carbon value of the laboratory rests: a dry run over
// growing volumes. What counts is how time and the heap grow with the sessions.
func BenchmarkRevisionPreview(b *testing.B) {
	p, s := place(b, 11)
	made := 0
	for i, sessions := range []int{10, 40, 160} {
		v, err := Volume(b.Context(), p.Registry, p.Clock, s, Size{Sessions: sessions - made, Samples: 12, Reported: 4}, uint64(100+i))
		if err != nil {
			b.Fatal(err)
		}
		made += v.Sessions
		b.Run(fmt.Sprintf("sessions=%d", sessions), func(b *testing.B) {
			b.ReportAllocs()
			var heap uint64
			var last registry.RevisionSummary
			for b.Loop() {
				n := 0
				summary, err := p.Registry.PreviewRevision(b.Context(), s.Auditor, registry.Proposal{Values: []registry.ProposedValue{
					{Material: "USGS41", Scale: scaleC, Value: "37.70", Stated: store.Stated{Text: "0.04", Kind: "standard"}}}}, func(registry.Affected) error {
					if n++; n%500 == 0 {
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
			each := float64(b.Elapsed().Microseconds()) / float64(b.N)
			b.ReportMetric(float64(last.Calibrations.Moved), "calibrations")
			b.ReportMetric(float64(last.Reported.Moved), "deltas")
			b.ReportMetric(each/float64(last.Calibrations.Moved), "µs/calibration")
			b.ReportMetric(float64(heap)/(1<<20), "MB-heap")
		})
	}
}
