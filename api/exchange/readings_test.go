package exchange

import (
	"fmt"
	"strings"
	"testing"

	"github.com/google/go-cmp/cmp"

	"deltamoor/api/registry"
	"deltamoor/store"
)

func TestReadReadingsJSONReadsEveryMember(t *testing.T) {
	table, err := ReadReadingsJSON([]byte(`{"readings":[
		{"name":"MOOR-1","role":"anchor","unit":"B1","analysis":"7","preparation":"a","position":3,"peak":2,"time":"2026-03-02T08:15:00.5+02:00",
		 "amount":0.4,"compound":"glycine","retention":64,"group":"tray 1","warning":"flow","quantity":"d13C","raw":-10.450,"u":5e-2,"size":5.1},
		{"name":" Rübe\u00a03 ","quantity":"d15N","raw":-0.0,"u":null,"time":null}]}`))
	if err != nil {
		t.Fatal(err)
	}
	at := store.Instant(1772432100500000) // date -ud 2026-03-02T06:15:00 +%s, and half a second
	f := func(x float64) *float64 { return &x }
	three, two := 3, 2
	want := []registry.RawReading{
		{Name: "MOOR-1", Role: "anchor", Unit: "B1", Analysis: "7", Preparation: "a", Position: &three, Peak: &two, Time: &at,
			Amount: f(0.4), Compound: "glycine", Retention: f(64), Group: "tray 1", Warning: "flow", Quantity: "d13C", Raw: -10.45, U: f(0.05), Size: f(5.1)},
		{Name: "Rübe 3", Quantity: "d15N"},
	}
	if diff := cmp.Diff(want, table.Readings); diff != "" {
		t.Errorf("(-want +got):\n%s", diff)
	}
	if got := table.Place(1, "raw"); got != "body.readings[1].raw" {
		t.Errorf("place %s", got)
	}
}

func TestReadReadingsJSONStoresPerMilWhateverTheUnit(t *testing.T) {
	for unit, numbers := range map[string]string{"permil": `"raw":-25.1,"u":0.05`, "mUr": `"raw":-25.1,"u":0.05`, "per-meg": `"raw":-25100,"u":50`, "ppm": `"raw":-25100,"u":50`} {
		table, err := ReadReadingsJSON([]byte(`{"delta_unit":"` + unit + `","readings":[{"name":"A","quantity":"d13C",` + numbers + `}]}`))
		if err != nil {
			t.Fatal(err)
		}
		if r := table.Readings[0]; r.Raw != -25.1 || *r.U != 0.05 {
			t.Errorf("%s: raw %v, u %v; expected -25.1 and 0.05", unit, r.Raw, *r.U)
		}
	}
	_, err := ReadReadingsJSON([]byte(`{"delta_unit":"percent","readings":[{"name":"A","quantity":"d13C","raw":1}]}`))
	wantRefusal(t, err, registry.Invalid, `body.delta_unit: found "percent", expected one of permil, mUr, per-meg, ppm`)
}

func TestReadReadingsJSONRefusesByPlace(t *testing.T) {
	reading := `{"name":"A","quantity":"d13C","raw":1}`
	for _, c := range []struct{ body, want string }{
		{``, "body: found nothing, expected a JSON object"},
		{`[]`, "body: found a list, expected an object"},
		{`{"readings":[]}`, "body.readings: found an empty list"},
		{`{}`, "body.readings: found nothing, expected the member readings"},
		{`{"readings":null}`, "body.readings: found null"},
		{`{"Readings":[` + reading + `]}`, "body.Readings: found an unknown member, expected a known member; the nearest is readings"},
		{`{"readings":[` + reading + `],"readings":[]}`, "body.readings: found the member a second time"},
		{`{"readings":[` + reading + `,{"name":"A","quantity":"d13C","raw":"1"}]}`, `body.readings[1].raw: found the text "1", expected a number`},
		{`{"readings":[{"name":"A","quantity":"d13C","raw":1,"raw":2}]}`, "body.readings[0].raw: found the member a second time"},
		{`{"readings":[{"name":"A","quantity":"d13C"}]}`, "body.readings[0].raw: found nothing"},
		{`{"readings":[{"name":"A","quantity":"d13C","raw":null}]}`, "body.readings[0].raw: found null"},
		{`{"readings":[{"name":"A","quantity":"d13C","raw":1e400}]}`, "body.readings[0].raw: found 1e400"},
		{`{"readings":[{"name":"A","quantity":"d13C","raw":{"a":[1]}}]}`, "body.readings[0].raw: found an object"},
		{`{"readings":[{"name":7,"quantity":"d13C","raw":1}]}`, "body.readings[0].name: found the number 7"},
		{`{"readings":[{"name":" ","quantity":"d13C","raw":1}]}`, "body.readings[0].name: found an empty text"},
		{`{"readings":[{"name":"A","quantity":"","raw":1}]}`, "body.readings[0].quantity: found an empty text"},
		{`{"readings":[{"name":"A","quantity":"d13C","raw":1,"role":"corner"}]}`, `body.readings[0].role: found "corner", expected one of anchor, control`},
		{`{"readings":[{"name":"A","quantity":"d13C","raw":1,"position":1.5}]}`, "body.readings[0].position: found 1.5, expected a whole number"},
		{`{"readings":[{"name":"A","quantity":"d13C","raw":1,"position":-1}]}`, "body.readings[0].position: found -1"},
		{`{"readings":[{"name":"A","quantity":"d13C","raw":1,"peak":true}]}`, "body.readings[0].peak: found true"},
		{`{"readings":[{"name":"A","quantity":"d13C","raw":1,"u":-1}]}`, "body.readings[0].u: found -1"},
		{`{"readings":[{"name":"A","quantity":"d13C","raw":1,"time":"2026-03-02"}]}`, `body.readings[0].time: found "2026-03-02", expected a time after RFC 3339`},
		{`{"readings":[{"name":"A","quantity":"d13C","raw":1,"time":3}]}`, "body.readings[0].time: found the number 3"},
		{`{"readings":[{"name":"\ud800","quantity":"d13C","raw":1}]}`, "body.readings[0].name: found"},
		{`{"readings":[{"name":"A","quantity":"d13C","raw":1},]}`, "body: found broken JSON in line 1"},
		{`{"readings":[` + reading + `]} {}`, "body: found broken JSON"},
		{"{\"readings\":[{\"name\":\"\xff\"}]}", "body: found the byte 0xFF at offset 22"},
		{`{"readings":[{"name":"` + strings.Repeat("x", 1001) + `","quantity":"d13C","raw":1}]}`, "body.readings[0].name: found a text of 1001 bytes"},
		{strings.Repeat("[", 20000), "body: found broken JSON"},
	} {
		_, err := ReadReadingsJSON([]byte(c.body))
		wantRefusal(t, err, registry.Invalid, c.want)
	}
	_, err := ReadReadingsJSON([]byte(`{"readings":[` + strings.Repeat(reading+",", registry.MaxReadings) + reading + `]}`))
	wantRefusal(t, err, registry.TooLarge, "100001 readings", "100000")
	_, err = ReadReadingsJSON(make([]byte, registry.MaxUpload+1))
	wantRefusal(t, err, registry.TooLarge, "64 MiB")
}

func TestReadReadingsJSONNamesAllFaultsAtOnce(t *testing.T) {
	var parts []string
	for i := range 60 {
		parts = append(parts, fmt.Sprintf(`{"name":%d,"quantity":"d13C","raw":"x"}`, i))
	}
	_, err := ReadReadingsJSON([]byte(`{"readings":[` + strings.Join(parts, ",") + `]}`))
	refusal := wantRefusal(t, err, registry.Invalid, "body.readings[24].raw")
	if got := len(refusal.Complaints) + refusal.More; got != 120 {
		t.Errorf("%d faults, expected 120", got)
	}
}
