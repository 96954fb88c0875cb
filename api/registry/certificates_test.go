package registry_test

import (
	"math"
	"slices"
	"strings"
	"testing"

	"deltamoor/api/registry"
	"deltamoor/store"
)

func TestCertificateSaysWhatTheValueSays(t *testing.T) {
	b := openBench(t)
	b.method("C-solid", carbonMethod())
	v := b.campaign("PEAT-LO", -28, b.working("PEAT-LO", 2), 4, 5, 6)
	if _, err := b.Certificate(b.ctx, b.auditor, registry.CertificateRequest{Material: "PEAT-LO", Moment: store.Moment{ValidAt: on(10)}}); registry.MeaningOf(err) != registry.Conflict {
		t.Errorf("a certificate before the value holds: %v", err)
	}
	c, err := b.Certificate(b.ctx, b.auditor, registry.CertificateRequest{Material: "PEAT-LO", Language: "de", Moment: store.Moment{ValidAt: on(25)}})
	b.must(err)
	if len(c.Values) != 1 {
		t.Fatalf("%d values", len(c.Values))
	}
	got, r := c.Values[0], v.Value.Campaign
	if got.Value != v.Value.Value || got.U != v.Value.StandardUncertainty || got.Expanded != r.Expanded || got.K != r.K || got.Hash != v.Hash || got.Sessions != 3 {
		t.Errorf("certificate %+v differs from the value %+v", got, v.Value)
	}
	if math.Abs(got.K*got.U-got.Expanded) > 1e-12 {
		t.Errorf("U = %v, k·u = %v", got.Expanded, got.K*got.U)
	}
	var anchors []string
	for _, a := range got.Anchors {
		anchors = append(anchors, a.Version)
	}
	if want := []string{"USGS40/" + carbonScale + "/total.1", "USGS41/" + carbonScale + "/total.1"}; !slices.Equal(anchors, want) {
		t.Errorf("traceable through %v, want %v", anchors, want)
	}
	// The German sentence of H319 in the list of GHS statements (hazards/README.md).
	if len(c.Hazards) != 1 || c.Hazards[0].Text != "Verursacht schwere Augenreizung." || c.Caution == "" || c.Storage != "dry and dark" {
		t.Errorf("hazards %+v, caution %q, storage %q", c.Hazards, c.Caution, c.Storage)
	}
	var who []string
	for _, s := range c.Signatures {
		who = append(who, s.Person+" "+s.Meaning)
	}
	if !slices.Equal(who, []string{"man made", "sig approved"}) {
		t.Errorf("signatures %v", who)
	}
	if _, err := b.Certificate(b.ctx, b.auditor, registry.CertificateRequest{Material: "PEAT-LO", Language: "xx"}); registry.MeaningOf(err) != registry.Invalid || !strings.Contains(err.Error(), "one of en, de, fr, es") {
		t.Errorf("unknown language: %v", err)
	}
}

func TestValueAndUncertaintyAreRoundedTogether(t *testing.T) {
	// Two digits of U (JCGM 100:2008, 7.2.6), and as many decimals of the value.
	for _, c := range []struct {
		value, expanded float64
		want            [2]string
	}{
		{-28.01234, 0.0456, [2]string{"-28.012", "0.046"}},
		{-28.01234, 0.0996, [2]string{"-28.01", "0.10"}},
		{-28.01234, 0.996, [2]string{"-28.0", "1.0"}},
		{-98.76, 12.3, [2]string{"-99", "12"}},
		{-0.0001, 0.05, [2]string{"0.000", "0.050"}},
		{2.49, 0, [2]string{"2.49", "0"}},
	} {
		if v, u := registry.RoundTogether(c.value, c.expanded); v != c.want[0] || u != c.want[1] {
			t.Errorf("%v ± %v: %s ± %s, want %s ± %s", c.value, c.expanded, v, u, c.want[0], c.want[1])
		}
	}
}
