package registry_test

import (
	"slices"
	"testing"

	"deltamoor/api/registry"
	"deltamoor/store"
)

func TestReportWithoutItsAnchorsIsIncomplete(t *testing.T) {
	b := openBench(t)
	b.method("C-solid", carbonMethod())
	sample := b.sample("Marsh survey", "A1")
	b.approvedResult(b.session(carbonRows(sample)).Session.Code)
	rep := b.report("Marsh survey", b.final(sample))
	f, err := b.ReportFacts(b.ctx, b.auditor, rep.Code)
	b.must(err)
	named := []string{"traceability.anchors", "traceability.span"}
	with := registry.CheckCompleteness(f).MissingItems()
	for _, id := range named {
		if slices.Contains(with, id) {
			t.Errorf("%s is missing with the anchors there", id)
		}
	}
	f.Anchors = nil
	f.Calibrations = slices.Clone(f.Calibrations)
	for i := range f.Calibrations {
		f.Calibrations[i].Value.Anchors = []store.CalibrationAnchor{}
	}
	without := registry.CheckCompleteness(f)
	if without.Complete {
		t.Error("a report without anchors is complete")
	}
	for _, id := range named {
		if !slices.Contains(without.MissingItems(), id) {
			t.Errorf("without anchors %s is not missing: %v", id, without.MissingItems())
		}
	}
}
