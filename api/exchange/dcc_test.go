package exchange

import (
	"bytes"
	"encoding/xml"
	"math"
	"os"
	"os/exec"
	"path/filepath"
	"slices"
	"strconv"
	"strings"
	"testing"
	"time"

	"deltamoor/api/registry"
	"deltamoor/store"
)

func instantOn(day int) *store.Instant {
	at := store.InstantOf(time.Date(2026, 3, day, 0, 0, 0, 0, time.UTC))
	return &at
}

// certificate is one with every kind of value: from a campaign, from before, exact.
func certificate() registry.Certificate {
	nu := 7.25
	return registry.Certificate{Identifier: "FJO/PEAT-LO/d13C-VPDB.2", Laboratory: "FJO", LaboratoryName: "Fjord laboratory", Material: "PEAT-LO", MaterialLaboratory: "FJO",
		Name: "Peat <low> & dry", Substance: "peat", Producer: "Fjord laboratory", Lot: "2026-1", Storage: "dry and\n dark", Language: "en", IssuedAt: *instantOn(25),
		Hazards: []registry.HazardStatement{{Code: "H319", Text: "Causes serious eye irritation."}}, Caution: "The safety data sheet decides.", MinimumPortion: &store.Amount{Value: "0.5", Unit: "mg"},
		Values: []registry.CertificateValue{
			{Code: "PEAT-LO/d13C-VPDB/total", Version: 2, Hash: store.Hash{1}, Scale: "d13C-VPDB", Measurand: "total", Quantity: "d13C", Value: "-28.012340", Number: -28.01234,
				U: 0.0194, K: 2.35, Expanded: 0.04559, P: 0.95, NuEff: &nu, ValueText: "-28.012", ExpandedText: "0.046", Basis: "assignment", Campaign: "A1234567Y8", Sessions: 4,
				Estimator: "paule_mandel", Homogeneity: "4 units, 32 measurements", Stability: "4 sessions over 3 days, for a shelf life of 30 days", First: instantOn(4), Last: instantOn(7),
				ValidFrom: instantOn(20), ExpiresAt: instantOn(30), Budget: []store.CampaignBudget{{Line: "homogeneity", StandardUncertainty: 0.006, Share: 0.1}},
				Anchors: []registry.CertificateAnchor{{Material: "USGS40", Version: "USGS40/d13C-VPDB/total.1", Value: "-26.39", U: 0.04, Basis: "certificate"}}},
			{Code: "PEAT-LO/d15N-AIR/total", Version: 1, Scale: "d15N-AIR", Measurand: "total", Quantity: "d15N", Value: "+0.4", Number: 0.4, U: 0.1, K: 1.96, Expanded: 0.196, P: 0.95,
				ValueText: "0.40", ExpandedText: "0.20", Basis: "provisional", Evidence: "notebook 4, page 12", BackLoaded: true, ValidFrom: instantOn(1)},
			{Code: "PEAT-LO/d2H-X/total", Version: 1, Scale: "d2H-X", Measurand: "total", Quantity: "d2H", Value: "-428", Number: -428, K: 1.96, P: 0.95, ValueText: "-428", ExpandedText: "exact", Exact: true, Basis: "definition"},
			{Code: "PEAT-LO/d34S-X/total", Version: 1, Scale: "d34S-X", Measurand: "total", Quantity: "d34S", Value: "21.0", Number: 21, K: 1.96, P: 0.95, ValueText: "21.0", ExpandedText: "none stated", Basis: "literature"},
		},
		Signatures: []registry.CertificateSignature{{Person: "mara", Name: "Mara Ø", Meaning: "made", Of: "PEAT-LO/d13C-VPDB/total.2", At: *instantOn(20)}, {Person: "sig", Name: "Sig", Meaning: "approved", At: *instantOn(21)}}}
}

func dccBytes(t *testing.T, c registry.Certificate) []byte {
	t.Helper()
	var b bytes.Buffer
	if err := WriteDCC(&b, c, DCCOptions{}); err != nil {
		t.Fatal(err)
	}
	return b.Bytes()
}

func TestDCCIsValidAgainstThePublishedSchema(t *testing.T) {
	xmllint, err := exec.LookPath("xmllint")
	if err != nil {
		if slices.Contains(strings.Split(os.Getenv("DELTAMOOR_TEST_REQUIRE"), ","), "xmllint") {
			t.Fatal("xmllint is required and not there")
		}
		t.Skip("xmllint is not there: certificates are NOT validated against their schema")
	}
	schema := filepath.Join("..", "..", "testdata", "schemas", "dcc", "dcc_3_2_0.xsd")
	plain := registry.Certificate{Laboratory: "FJO", Material: "X", IssuedAt: *instantOn(1), Values: certificate().Values[2:], Signatures: certificate().Signatures[:1]}
	for name, c := range map[string]registry.Certificate{"full": certificate(), "bare": plain} {
		path := filepath.Join(t.TempDir(), "certificate.xml")
		if err := os.WriteFile(path, dccBytes(t, c), 0o600); err != nil {
			t.Fatal(err)
		}
		if out, err := exec.Command(xmllint, "--nonet", "--noout", "--schema", schema, path).CombinedOutput(); err != nil {
			t.Errorf("%s: %v\n%s", name, err, out)
		}
	}
	// The schema is really looked at: without a signer it is refused, as persons are mandatory.
	path := filepath.Join(t.TempDir(), "broken.xml")
	broken := bytes.Replace(dccBytes(t, certificate()), []byte("dcc:respPersons"), []byte("dcc:nobody"), 2)
	if err := os.WriteFile(path, broken, 0o600); err != nil {
		t.Fatal(err)
	}
	if err := exec.Command(xmllint, "--nonet", "--noout", "--schema", schema, path).Run(); err == nil {
		t.Error("a broken certificate is valid")
	}
}

// parsed is what a reader without our types finds in the XML.
type parsed struct {
	Results []struct {
		Name    string `xml:"name>content"`
		Results []struct {
			Name       string `xml:"name>content"`
			Quantities []struct {
				Name  string `xml:"name>content"`
				Reals []struct {
					Value    string `xml:"value"`
					Unit     string `xml:"unit"`
					Expanded *struct {
						U string `xml:"uncertainty"`
						K string `xml:"coverageFactor"`
						P string `xml:"coverageProbability"`
					} `xml:"expandedUnc"`
				} `xml:"hybrid>real"`
			} `xml:"data>quantity"`
		} `xml:"results>result"`
	} `xml:"measurementResults>measurementResult"`
}

func TestDCCNumbersAreThoseOfTheCertificateInBothUnits(t *testing.T) {
	c := certificate()
	var got parsed
	if err := xml.Unmarshal(dccBytes(t, c), &got); err != nil {
		t.Fatal(err)
	}
	if len(got.Results) != len(c.Values) {
		t.Fatalf("%d measurement results, want %d", len(got.Results), len(c.Values))
	}
	float := func(text string) float64 {
		x, err := strconv.ParseFloat(text, 64)
		if err != nil {
			t.Fatal(err)
		}
		return x
	}
	for i, v := range c.Values {
		reals := got.Results[i].Results[0].Quantities[0].Reals
		if len(reals) != 2 || reals[0].Unit != `\one` || reals[1].Unit != `\permille` {
			t.Fatalf("%s: reals %+v, want one in \\one and its twin in per mil", v.Scale, reals)
		}
		if reals[1].Value != strings.TrimPrefix(string(v.Value), "+") {
			t.Errorf("%s: %s ‰, want the digits %s", v.Scale, reals[1].Value, v.Value)
		}
		// XSD does not check units: every quantity in one is a thousandth of its twin in per mil.
		for _, r := range got.Results[i].Results {
			for _, q := range r.Quantities {
				if len(q.Reals) == 2 && math.Abs(1000*float(q.Reals[0].Value)-float(q.Reals[1].Value)) > 1e-12*math.Abs(float(q.Reals[1].Value)) {
					t.Errorf("%s, %s: %s and %s ‰", v.Scale, q.Name, q.Reals[0].Value, q.Reals[1].Value)
				}
			}
		}
		if v.U == 0 {
			if reals[0].Expanded != nil {
				t.Errorf("%s: an exact value states an uncertainty", v.Scale)
			}
			continue
		}
		one, mil := reals[0].Expanded, reals[1].Expanded
		if float(mil.U) != v.Expanded || float(one.U) != v.Expanded/1000 && math.Abs(1000*float(one.U)-v.Expanded) > 1e-15 || float(mil.K) != v.K || float(one.K) != v.K || float(mil.P) != v.P {
			t.Errorf("%s: %+v and %+v, want U %v, k %v, p %v", v.Scale, one, mil, v.Expanded, v.K, v.P)
		}
	}
}

func TestMovingThePointKeepsTheDigits(t *testing.T) {
	for _, c := range []struct {
		in     string
		places int
		want   string
	}{{"-28.012340", -3, "-0.028012340"}, {"0.4", -3, "0.0004"}, {"-428", -3, "-0.428"}, {"1234.5", -3, "1.2345"}, {"+0.4", -3, "0.0004"}, {"0", -3, "0.000"}, {"1.5e-7", -3, "0.00000000015"}, {"2", 3, "2000"}} {
		if got, err := movePoint(c.in, c.places); err != nil || got != c.want {
			t.Errorf("%s by %d: %s, %v, want %s", c.in, c.places, got, err, c.want)
		}
	}
	for _, bad := range []string{"", "-", "abc", "1e", "0x1p3", "NaN"} {
		if got, err := movePoint(bad, -3); err == nil {
			t.Errorf("%q gives %s", bad, got)
		}
	}
}

func TestCertificateNobodySignedIsNoDCC(t *testing.T) {
	c := certificate()
	c.Signatures = nil
	if err := WriteDCC(&bytes.Buffer{}, c, DCCOptions{}); err == nil || !strings.Contains(err.Error(), "nobody signed") {
		t.Errorf("got %v", err)
	}
}

func TestCertificatePageSaysWhatTheXMLSays(t *testing.T) {
	c := certificate()
	var page bytes.Buffer
	if err := WriteCertificatePage(&page, c); err != nil {
		t.Fatal(err)
	}
	text := page.String()
	for _, want := range []string{"Peat &lt;low&gt; &amp; dry", `<td class="number">-28.012</td><td class="number">0.046</td>`, "-28.012340 ‰", "U = 0.04559 ‰ (k = 2.35, p = 0.95, effective degrees of freedom 7.25)",
		"H319 Causes serious eye irritation.", "The safety data sheet decides.", "assigned before deltamoor", "USGS40/d13C-VPDB/total.1", "A1234-567Y8", "2026-03-30", "Mara Ø", "0.5 mg", "u is known", "-428 ‰ (exact by definition)", "21.0 ‰ (no uncertainty is stated)", `<td class="number">none stated</td>`} {
		if !strings.Contains(text, want) {
			t.Errorf("the page lacks %q", want)
		}
	}
	if err := xml.Unmarshal([]byte(text), new(struct{})); err != nil {
		t.Errorf("the page is not well-formed: %v", err)
	}
	var again bytes.Buffer
	if err := WriteCertificatePage(&again, c); err != nil || again.String() != text {
		t.Errorf("a second writing differs (%v)", err)
	}
}
