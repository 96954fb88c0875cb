package rest

import (
	"encoding/json"
	"math"
	"strconv"
	"strings"
	"testing"

	"pgregory.net/rapid"

	"deltamoor/api/registry"
	"deltamoor/store"
)

func TestDecimalKeepsItsDigits(t *testing.T) {
	for in, want := range map[string]string{"-10.450": "-10.450", "0": "0", "-0.00": "-0.00", "1e3": "1e3", "+1.95": "1.95", "007.50": "7.50", "-00.5": "-0.5"} {
		got, err := json.Marshal(Decimal(in))
		if err != nil || string(got) != want {
			t.Errorf("%q is written %s (%v), want %s", in, got, err, want)
		}
	}
	for _, bad := range []Decimal{"", ".5", "1.", "NaN", "1,5", "0x1"} {
		if got, err := json.Marshal(bad); err == nil {
			t.Errorf("%q is written %s", bad, got)
		}
	}
	var d Decimal
	if err := json.Unmarshal([]byte(`"1.5"`), &d); err == nil {
		t.Error("a text is taken for a number")
	}
	rapid.Check(t, func(t *rapid.T) {
		text := rapid.StringMatching(`-?(0|[1-9][0-9]{0,8})(\.[0-9]{1,9})?`).Draw(t, "number")
		var d Decimal
		if err := json.Unmarshal([]byte(text), &d); err != nil {
			t.Fatal(err)
		}
		if again, err := json.Marshal(d); err != nil || string(again) != text {
			t.Fatalf("%s comes back as %s (%v)", text, again, err)
		}
	})
}

func TestStrictJSONRefusesWhatCouldMeanTwoThings(t *testing.T) {
	for _, bad := range []string{`{"x":1,"x":2}`, `{"a":[{"x":1,"x":2}]}`, `{"x":1} {"x":2}`, `{"x":1`, `[1,2`, "", `{"x":NaN}`, "{\"x\":\"\xff\"}", strings.Repeat("[", 100) + strings.Repeat("]", 100)} {
		var v any
		if err := strictJSON.Unmarshal([]byte(bad), &v); err == nil {
			t.Errorf("%.60q is read as %v", bad, v)
		}
	}
	for _, good := range []string{`{"x":1,"y":{"x":2}}`, `[{"x":1},{"x":2}]`, `null`, ` 1 `, `{"x":"<&>"}`} {
		var v any
		if err := strictJSON.Unmarshal([]byte(good), &v); err != nil {
			t.Errorf("%s: %v", good, err)
		}
	}
	if err := strictJSON.Marshal(new(strings.Builder), map[string]float64{"x": math.NaN()}); err == nil {
		t.Error("NaN is written")
	}
}

func FuzzCheckJSON(f *testing.F) {
	for _, seed := range []string{`{"x":[1,2,{"y":null}]}`, `{"x":1,"x":2}`, `[`, `"`, `{"a":`, "\xff"} {
		f.Add([]byte(seed))
	}
	f.Fuzz(func(t *testing.T, data []byte) {
		// What passes is JSON to everybody; what is refused by everybody is refused here.
		if err := checkJSON(data); (err == nil) && !json.Valid(data) {
			t.Errorf("%q passes and is no JSON", data)
		}
	})
}

func TestCodesAreShownForPeople(t *testing.T) {
	for _, c := range []struct {
		kind       store.Kind
		code, want string
	}{
		{store.KindSession, "S12345678T", "S1234-5678T"},
		{store.KindExclusion, "S12345678T", "S1234-5678T"},
		{store.KindOutcome, "S12345678T/d13C", "S1234-5678T/d13C"},
		{store.KindMaterial, "TENLETTERS", "TENLETTERS"}, // ten symbols that a person chose
		{store.KindValue, "FJO-GLY/d13C-VPDB/total", "FJO-GLY/d13C-VPDB/total"},
		{store.KindDecision, "calibration/C4T8ZRN1HQ.2", "calibration/C4T8Z-RN1HQ.2"},
		{store.KindDecision, "value/FJO-GLY/d13C-VPDB/total.2", "value/FJO-GLY/d13C-VPDB/total.2"},
	} {
		if got := showCode(c.kind, c.code); got != c.want {
			t.Errorf("%s %s is shown as %s, want %s", c.kind, c.code, got, c.want)
		}
	}
}

func TestMistypedIsNotNotFound(t *testing.T) {
	for text, wants := range map[string]string{
		"S1234-5678T": "", "s12345678t": "", "S1234 5678T": "",
		"S1234-5678V": "mistyped", "S1234-567": "ten symbols", "S1234-5678U": "no letter U", "": "ten symbols", "C4T8Z-RN1HQ": "the code of a calibration",
	} {
		code, err := GeneratedParam{text}.parse(store.KindSession)
		switch {
		case wants == "" && (err != nil || code != "S12345678T"):
			t.Errorf("%q: %q, %v", text, code, err)
		case wants != "" && (registry.MeaningOf(err) != registry.Invalid || !strings.Contains(err.Error(), wants)):
			t.Errorf("%q: %v, want %q", text, err, wants)
		}
	}
}

func TestCursorComesBackAsItWas(t *testing.T) {
	rapid.Check(t, func(t *rapid.T) {
		at := store.Instant(rapid.Int64Range(0, 1<<52).Draw(t, "at"))
		c := cursor{After: rapid.StringN(1, 40, 200).Draw(t, "after"), AsOf: &at}
		p := ListParams{After: c.String()}
		q, err := p.query()
		if err != nil {
			t.Fatal(err)
		}
		if q.After != c.After || *q.Moment.AsOf != at || q.Moment.ValidAt != nil {
			t.Fatalf("%+v comes back as %+v", c, q)
		}
	})
}

func TestIfMatchComparesStrongly(t *testing.T) {
	for header, want := range map[string]bool{`"1-0"`: true, `"9-9", "1-0"`: true, `*`: true, `W/"1-0"`: false, `1-0`: false, `"1-1"`: false, ``: false} {
		if got := (MatchParam{header}).matches("1-0"); got != want {
			t.Errorf("If-Match %s: %v, want %v", header, got, want)
		}
	}
}

func TestDividingByAThousandKeepsEveryDigit(t *testing.T) {
	for in, want := range map[string]string{"-10450": "-10.450", "0": "0.000", "12": "0.012", "-33.10": "-0.03310", "1000000.5": "1000.0005", "1.5e3": "1.5e0", "-7E-2": "-7e-5"} {
		if got := byThousand(in); got != want {
			t.Errorf("%s / 1000 is written %s, want %s", in, got, want)
		}
	}
	rapid.Check(t, func(t *rapid.T) {
		text := rapid.StringMatching(`-?(0|[1-9][0-9]{0,8})(\.[0-9]{1,6})?`).Draw(t, "number")
		digits := func(s string) string { return strings.TrimLeft(strings.NewReplacer("-", "", ".", "").Replace(s), "0") }
		got := byThousand(text)
		if digits(got) != digits(text) || !jsonNumber.MatchString(got) {
			t.Fatalf("%s became %s", text, got)
		}
		x, _ := strconv.ParseFloat(text, 64)
		y, _ := strconv.ParseFloat(got, 64)
		if d := x/1000 - y; math.Abs(d) > 1e-15*math.Abs(x) { // one rounding of a division
			t.Fatalf("%s became %s", text, got)
		}
	})
}
