package registry_test

import (
	"fmt"
	"slices"
	"strings"
	"testing"
	"time"

	"deltamoor/api/registry"
	"deltamoor/store"
)

func beforeRow(number int, value, kind, uncertainty, basis string, year int) registry.BackLoadRow {
	from := store.InstantOf(time.Date(year, 1, 1, 0, 0, 0, 0, time.UTC))
	return registry.BackLoadRow{Material: "PEAT-OLD", Scale: carbonScale, Value: store.Decimal(value), Stated: store.Stated{Text: uncertainty, Kind: kind}, Basis: basis, Evidence: "notebook 4",
		ValidFrom: &from, Place: func(field string) string { return fmt.Sprintf("row %d, column %q", number, field) }}
}

func TestValuesOfBeforeLandAllOrNoneAndSayWhatTheyAre(t *testing.T) {
	b := openBench(t)
	b.method("C-solid", carbonMethod())
	b.working("PEAT-OLD", 1)
	bad := []registry.BackLoadRow{beforeRow(2, "-27.100", "standard", "0.05", "assignment", 2018), beforeRow(3, "-27.1x", "expanded", "0.1", "memory", 2020)}
	bad = append(bad, beforeRow(4, "-27", "standard", "0.05", "literature", 2021), beforeRow(5, "-27", "none", "", "literature", 2021))
	bad[2].Material = "NOBODY"
	bad[3].Scale, bad[3].Evidence = "d13C-NONE", ""
	before := b.roots()
	_, err := b.BackLoadValues(b.ctx, b.manager, bad)
	for _, want := range []string{`row 3, column "value"`, `row 3, column "k"`, `row 3, column "basis"`, `row 4, column "material": found "NOBODY"`, `row 5, column "scale": found "d13C-NONE"`, `row 5, column "evidence"`} {
		if registry.MeaningOf(err) != registry.Invalid || !strings.Contains(err.Error(), want) {
			t.Errorf("got %v, want a complaint at %s", err, want)
		}
	}
	if b.roots() != before {
		t.Error("a refused list changed the ledger")
	}
	good := []registry.BackLoadRow{beforeRow(2, "-27.100", "standard", "0.05", "assignment", 2018), beforeRow(3, "-27.12", "standard", "0.04", "assignment", 2020)}
	items, err := b.BackLoadValues(b.ctx, b.manager, good)
	b.must(err)
	if len(items) != 2 || items[1].Ref.Version != 2 || items[0].Value.Value != "-27.100" || !items[0].Value.BackLoaded || items[0].Reason != registry.BackLoadReason {
		t.Fatalf("loaded %+v", items)
	}
	for _, it := range items {
		_, err := b.Decide(b.ctx, b.signatory, store.KindValue, it.Code, registry.DecisionRequest{Act: "approved", Version: it.Ref.Version})
		b.must(err)
	}
	v, err := registry.One[store.Value](b.ctx, b.Registry, b.auditor, store.KindValue, items[0].Code, 0, store.Moment{ValidAt: good[0].ValidFrom})
	b.must(err)
	if v.Ref.Version != 1 {
		t.Errorf("in 2018 version %d held, want 1", v.Ref.Version)
	}
	// A delta that rests on it says so through its trace.
	sample := b.sample("Marsh survey", "A1")
	places := candidateDay(4, sample, -18.2, []string{""})
	for i := range places {
		if places[i].name == "USGS40" {
			places[i] = place{"PEAT-OLD", "anchor", "", -27.12}
		}
	}
	b.measured(4, places...)
	rep := b.report("Marsh survey", b.final(sample))
	trace, err := b.Trace(b.ctx, b.auditor, "", rep.Lines[0].Code, 0)
	b.must(err)
	if !slices.ContainsFunc(trace.Nodes, func(n registry.TraceNode) bool {
		return n.Kind == store.KindValue && strings.HasPrefix(n.Detail, "assigned before deltamoor; assignment") && n.Leaf != ""
	}) {
		t.Error("no node of the trace says that the value was assigned before deltamoor")
	}
	b.verified()
	if _, err := b.BackLoadValues(b.ctx, b.analyst, good); registry.MeaningOf(err) != registry.Refused {
		t.Errorf("an analyst loads values: %v", err)
	}
}
