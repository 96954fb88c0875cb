package demo

import (
	"bytes"
	"math"
	"strings"
	"testing"
	"time"

	"deltamoor/api/exchange"
	"deltamoor/api/registry"
	"deltamoor/store"
)

func TestCampaignRecoversTheTruthAndSeesNoStep(t *testing.T) {
	p, s := built(t)
	c := s.Campaign
	for scale, v := range c.Values {
		r := v.Value.Campaign
		true_, ok := s.True(c.Material, scale)
		// Four u, as for the other values: in this seed IAEA-CH-7 is 3 u from its published value, and both follow it.
		if d := number(t, v.Value.Value) - true_; !ok || math.Abs(d) > 4*v.Value.StandardUncertainty {
			t.Errorf("%s: value %s, truth %.4f, u %.4f ‰", scale, v.Value.Value, true_, v.Value.StandardUncertainty)
		}
		// The jars of the invented lot are alike and the predecessor has not moved.
		if r.Homogeneity == nil || r.Homogeneity.Units != 4 || r.Step == nil || r.Step.Detected || len(r.Sessions) != 3 || len(r.Circular) != 0 {
			t.Errorf("%s: homogeneity %+v, step %+v, %d sessions, circular %v", scale, r.Homogeneity, r.Step, len(r.Sessions), r.Circular)
		}
		for _, k := range r.Checks {
			if !k.Passed {
				t.Errorf("%s: check %+v", scale, k)
			}
		}
	}
	if len(c.Values) != 2 {
		t.Fatalf("%d values, want carbon and nitrogen", len(c.Values))
	}
	at := store.InstantOf(time.Date(2025, time.May, 25, 0, 0, 0, 0, time.UTC))
	certificate, err := p.Registry.Certificate(t.Context(), s.Auditor, registry.CertificateRequest{Material: c.Material, Moment: store.Moment{ValidAt: &at}})
	if err != nil {
		t.Fatal(err)
	}
	var page bytes.Buffer
	if err := exchange.WriteCertificatePage(&page, certificate); err != nil {
		t.Fatal(err)
	}
	for _, v := range certificate.Values {
		if !strings.Contains(page.String(), "<td>"+v.ValueText+"</td><td>"+v.ExpandedText+"</td>") {
			t.Errorf("the certificate's page lacks %s ± %s", v.ValueText, v.ExpandedText)
		}
	}
}
