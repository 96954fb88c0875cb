package demo

import (
	"crypto/sha256"
	"encoding/binary"
	"encoding/hex"
	"encoding/json"
	"flag"
	"fmt"
	"hash"
	"maps"
	"math"
	"os"
	"slices"
	"testing"

	"deltamoor/api/registry"
	"deltamoor/store"
)

var update = flag.Bool("update", false, "write golden files anew")

const goldenCalibrations = "testdata/golden/calibrations.json"

// A goldenCalibration is a stored calibration of the invented laboratory: a hash
// over what it was made of, and one over the bits that the engine made of it.
type goldenCalibration struct {
	Session  string `json:"session"`
	Quantity string `json:"quantity"`
	Engine   string `json:"engine"`
	Input    string `json:"input"`
	Output   string `json:"output"`
}

// bitHash hashes names and floating-point numbers.
type bitHash struct{ hash.Hash }

func (h bitHash) put(name string, values ...float64) {
	h.Write([]byte(name))
	for _, v := range values {
		_ = binary.Write(h, binary.BigEndian, math.Float64bits(v)) // a hash never fails
	}
}

func (h bitHash) optional(name string, v *float64) {
	if v != nil {
		h.put(name, *v)
	}
}

func (h bitHash) text() string { return hex.EncodeToString(h.Sum(nil)[:12]) }

// TestStoredCalibrationsHaveTheBitsTheyAlwaysHad holds the laboratory's stored
// calibrations against those that engine 1 has made: parameters, u, covariances,
// sensitivities, variances, residuals, values and gradients. Where the
// laboratory's own story has changed, the test says that, and -update is in
// order; other bits from the same input are another engine.
func TestStoredCalibrationsHaveTheBitsTheyAlwaysHad(t *testing.T) {
	t.Parallel()
	p, s := built(t)
	var got []goldenCalibration
	for _, session := range s.Sessions {
		for _, quantity := range slices.Sorted(maps.Keys(session.Calibrations)) {
			c, err := registry.One[store.Calibration](t.Context(), p.Registry, s.Auditor, store.KindCalibration, session.Calibrations[quantity], 0, store.Moment{})
			if err != nil {
				t.Fatal(err)
			}
			input := bitHash{sha256.New()}
			err = p.Registry.Readings(t.Context(), s.Auditor, session.Code, func(rd store.Reading) error {
				if rd.Quantity == quantity {
					at := store.Instant(0)
					if rd.At != nil {
						at = *rd.At
					}
					input.put(fmt.Sprint(rd.Number, rd.Role, rd.Material, rd.Preparation, at), rd.Raw)
					input.optional("size", rd.Size)
					input.optional("u", rd.U)
				}
				return nil
			})
			if err != nil {
				t.Fatal(err)
			}
			v := c.Value
			for _, a := range v.Anchors {
				input.put(a.Material, a.Value, a.StandardUncertainty)
			}
			model := v.Model
			model.DeclaredDF = nil // a pointer; the demo declares none
			input.put(fmt.Sprint(model, v.Excluded))
			if b := v.BetweenSession; b != nil {
				input.put("between", b.StandardUncertainty)
				input.optional("ν", b.DegreesOfFreedom)
			}
			got = append(got, goldenCalibration{session.Label, quantity, v.Engine, input.text(), outputOf(v)})
		}
	}
	if *update {
		text, err := json.MarshalIndent(got, "", " ")
		if err == nil {
			err = os.MkdirAll("testdata/golden", 0o755)
		}
		if err == nil {
			err = os.WriteFile(goldenCalibrations, append(text, '\n'), 0o644)
		}
		if err != nil {
			t.Fatal(err)
		}
	}
	text, err := os.ReadFile(goldenCalibrations)
	if err != nil {
		t.Fatal(err)
	}
	var want []goldenCalibration
	if err := json.Unmarshal(text, &want); err != nil {
		t.Fatal(err)
	}
	if len(got) != len(want) || len(got) < 20 {
		t.Fatalf("%d calibrations, the golden file has %d", len(got), len(want))
	}
	for i, g := range got {
		switch w := want[i]; {
		case g == w:
		case g.Session != w.Session || g.Quantity != w.Quantity || g.Input != w.Input:
			t.Errorf("%s, %s: the laboratory measured something else than before; if that is meant, run the test with -update and say why", g.Session, g.Quantity)
		default:
			t.Errorf("%s, %s: engine %s makes other bits of the same input than engine %s made", g.Session, g.Quantity, g.Engine, w.Engine)
		}
	}
}

func outputOf(v store.Calibration) string {
	h := bitHash{sha256.New()}
	rows := func(name string, m [][]float64) {
		for _, row := range m {
			h.put(name, row...)
		}
	}
	for _, x := range v.Parameters {
		h.put(x.Name, x.Value, x.StandardUncertainty)
	}
	rows("covariance", v.Covariance)
	rows("noise", v.NoiseCovariance)
	rows("sensitivity", v.AnchorSensitivities)
	rows("derivative", v.AnchorDerivatives)
	rows("variance covariance", v.VarianceCovariance)
	for _, x := range v.Variances {
		h.put(x.Name, x.Value)
	}
	for _, x := range v.Readings {
		h.put(fmt.Sprint(x.Number))
		h.optional("residual", x.Residual)
		h.optional("leverage", x.Leverage)
	}
	for _, x := range v.Results {
		h.put(string(x.Role), x.Value, x.StandardUncertainty, x.BetweenSession)
		h.put("gradient", x.Gradient...)
		h.put("coefficients", x.Coefficients...)
		for _, c := range x.Sources {
			h.put(c.Kind, c.Sensitivity, c.U, c.VarianceShare)
		}
	}
	return h.text()
}
