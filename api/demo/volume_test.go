package demo

import (
	"testing"

	"deltamoor/api/registry"
	"deltamoor/store"
)

func TestVolumeMakesWhatWasAskedAndVerifiesClean(t *testing.T) {
	t.Parallel()
	p, s := place(t, 7)
	before := len(s.truth)
	steps := 0
	v, err := Volume(t.Context(), p.Registry, p.Clock, s, Size{Sessions: 3, Samples: 10, Reported: 2, Progress: func(int, int) { steps++ }}, 8)
	if err != nil {
		t.Fatal(err)
	}
	// A session has 2 conditioning portions in two quantities, an empty capsule in
	// nitrogen, 4 rounds of 6 materials and the samples, each in two.
	want := Volumes{Sessions: 3, Readings: 3 * (2*2 + 1 + 4*6*2 + 10*2), Calibrations: 6, Finals: 12, Reported: 12}
	if v != want || steps != 3 {
		t.Errorf("made %+v in %d steps, want %+v in 3", v, steps, want)
	}
	if len(s.truth) != before {
		t.Errorf("%d truths are kept, want %d: memory must not grow with sessions", len(s.truth), before)
	}
	report, err := p.Registry.Verify(t.Context(), registry.VerifyRequest{})
	if err != nil {
		t.Fatal(err)
	}
	for _, f := range report.Findings {
		t.Error(f)
	}
	page, err := registry.List[store.Session](t.Context(), p.Registry, s.Auditor, Laboratory, store.KindSession, registry.Query{Limit: registry.MaxPage})
	if err != nil {
		t.Fatal(err)
	}
	if n := len(page.Items); n != len(s.Sessions)+3 {
		t.Errorf("%d sessions on record, want %d", n, len(s.Sessions)+3)
	}
}

func TestVolumeRefusesAnImpossibleSize(t *testing.T) {
	for _, size := range []Size{{Sessions: -1}, {Sessions: 1, Samples: 4, Reported: 5}} {
		if _, err := Volume(t.Context(), nil, nil, &Summary{}, size, 1); err == nil {
			t.Errorf("%+v was not refused", size)
		}
	}
}
