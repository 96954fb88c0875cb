package calib

import (
	"crypto/sha256"
	"encoding/binary"
	"encoding/hex"
	"fmt"
	"math"
	"slices"
	"strings"
	"testing"

	"deltamoor/calib/uncertain"
)

// bitsSession is made of exact binary fractions by integer arithmetic, so that
// it is the same wherever the test runs.
func bitsSession() Session {
	state := uint64(88172645463325252)
	next := func() float64 {
		state ^= state << 13
		state ^= state >> 7
		state ^= state << 17
		return float64(int64(state>>44)-1<<19) / (1 << 19) // in ±1
	}
	var s Session
	values := []float64{-38, -12.5, 4.25, 35}
	for i, v := range values {
		a := assigned(fmt.Sprint("A", i), v, 0.03125)
		a.Value.Terms = append(a.Value.Terms, uncertain.Term{Source: uncertain.Source{ID: "scale", Kind: uncertain.KindAnchor, U: 0.015625}, Sensitivity: 1})
		s.Anchors = append(s.Anchors, a)
	}
	for k := range 40 {
		size := 4 + 3*next()
		subject, role, value := fmt.Sprint("A", k%5), Anchor, 0.0
		switch {
		case k%5 == 4 && k%2 == 0:
			subject, role, value = "M", Monitor, 7
		case k%5 == 4:
			subject, role, value = fmt.Sprint("P", k%3), Sample, -20+float64(k)
		default:
			value = values[k%5]
		}
		raw := 0.375 + 0.96875*value + float64(k)/256 + size/32 + next()/16
		s.read(subject, role, raw, 0.0625).at(float64(k) / 4).sized(size).of(fmt.Sprint(subject, "-", k/10))
	}
	return s
}

// The bits of values, uncertainties, covariances and sources are those below on
// every architecture and at every level of instructions (metrology 9): run
// this with GOAMD64=v3, GOARCH=386 or on arm64. A change of the numbers on
// purpose is a new EngineNumber. Quantiles and p-values are the library's and
// left out.
func TestBitsAreTheSameEverywhere(t *testing.T) {
	want := map[string]string{
		"drift=,size=,memory=,weights=":                         "fc14515d7953c961",
		"drift=linear,size=,memory=,weights=":                   "8afe9ca6aa5ff47f",
		"drift=quadratic,size=inverse,memory=,weights=":         "0af2085b4144e91d",
		"drift=linear,size=linear,memory=,weights=equal":        "5f281614115d37b8",
		"drift=,size=log,memory=,weights=replicate":             "0d4ffbca8ce711cf",
		"drift=linear,size=,memory=carryover,weights=replicate": "aa6157471d3ffabc",
		"drift=,size=,memory=carryover,weights=":                "0d9c386856567f21",
		"drift=bracketed,size=,memory=,weights=":                "d4acaf69f29ed129",
		"drift=bracketed,size=,memory=,weights=equal":           "2a00dc5aef9774ad",
		"drift=,size=blank,memory=,weights=":                    "d47b0f550553f022",
		"drift=linear,size=blank,memory=,weights=equal":         "321c8a17b6176025",
		"drift=linear,size=,memory=,weights=size":               "c86c8e549ceadc97",
	}
	s := bitsSession()
	for _, m := range models {
		r, err := Fit(s, m, Policy{})
		if err != nil {
			t.Fatalf("%s: %v", m.label(), err)
		}
		numbers := numbersOf(r)
		var names []string
		for name := range numbers {
			switch head, _, _ := strings.Cut(name, " "); head {
			case "k", "p", "nu":
			default:
				names = append(names, name)
			}
		}
		slices.Sort(names)
		h := sha256.New()
		for _, name := range names {
			h.Write([]byte(name))
			binary.Write(h, binary.BigEndian, math.Float64bits(numbers[name])) //nolint:errcheck // a hash never fails
		}
		if got := hex.EncodeToString(h.Sum(nil)[:8]); got != want[m.label()] {
			t.Errorf("%q: %q,", m.label(), got)
		}
	}
}
