package rest

import (
	"net/url"
	"strings"

	"github.com/danielgtaylor/huma/v2"

	"deltamoor/api/registry"
	"deltamoor/store"
)

// tracedRecords are the records that a chain may be asked of at: their trace,
// its verification. A kind that numbers rest on is one row here. The code stands
// in the last parameter of the address. Values and uploads, which are not found
// by one code, have rows of their own in routes.
var tracedRecords = []struct {
	address   string
	operation string // the operations' names end with it
	phrase    string
	kind      store.Kind
	made      bool // the registry makes its codes
}{
	{"/calibrations/{code}", "Calibration", "a calibration", store.KindCalibration, true},
	{"/finals/{code}", "Final", "a final value", store.KindFinal, true},
	{"/reports/{code}", "Report", "a report", store.KindReport, true},
	{"/sessions/{code}", "Session", "a session", store.KindSession, true},
	{"/samples/{code}", "Sample", "a sample", store.KindSample, true},
	{"/units/{code}", "Unit", "a unit", store.KindUnit, true},
	{"/materials/{code}", "Material", "a material", store.KindMaterial, false},
	{"/methods/{code}", "Method", "a method", store.KindMethod, false},
	{"/instruments/{code}", "Instrument", "an instrument", store.KindInstrument, false},
	{"/scales/{code}", "Scale", "a scale", store.KindScale, false},
	{"/assignments/{code}", "Assignment", "a plan", store.KindAssignment, true},
	{"/relations/{code}", "Relation", "a relation", store.KindRelation, false},
	{"/instruments/{code}/h3-factors", "Factor", "an H3 factor", store.KindFactor, false},
}

// lastParameter is the name of the last parameter of an address.
func lastParameter(address string) string {
	name := address[strings.LastIndexByte(address, '{')+1:]
	name, _, _ = strings.Cut(name, "}")
	return name
}

// named: the record's code stands in the last parameter of the address, which is
// described here where it is not the one that CodeParam describes.
func named(address string) option {
	return func(_ *face, op *huma.Operation) {
		if name := lastParameter(address); name != "code" {
			longest := 100
			op.Parameters = append(op.Parameters, &huma.Param{Name: name, In: "path", Required: true, Schema: &huma.Schema{Type: huma.TypeString, MaxLength: &longest}, Description: "The record's code."})
		}
	}
}

// RecordCode is the code in the last parameter of an address.
type RecordCode struct {
	CodeParam
	last, place string
}

// Resolve reads the parameter.
func (p *RecordCode) Resolve(ctx huma.Context) []error {
	path := ctx.Operation().Path
	for _, suffix := range []string{"/trace", "/verification"} {
		path = strings.TrimSuffix(path, suffix)
	}
	name := lastParameter(path)
	p.last, p.place = ctx.Param(name), "path."+name
	return nil
}

// parse is the code as the registry writes it.
func (p *RecordCode) parse(kind store.Kind, made bool) (string, error) {
	if !made {
		return p.last, nil
	}
	return parseCode(p.place, p.last, kind)
}

// address is where a version can be read for ever; "" where it has no address of its own.
func address(ref store.Ref) string {
	code := url.PathEscape(showCode(ref.Kind, ref.Code))
	record := recordAddress(ref.Key)
	switch ref.Kind {
	case store.KindDocument:
		return record
	case store.KindExclusion:
		return "/v1/sessions/" + code + "/exclusions"
	}
	if record == "" {
		return ""
	}
	if ref.Kind == store.KindFactor { // its versions are the determinations
		return record + "/" + whole(&ref.Version)
	}
	return record + "/versions/" + whole(&ref.Version)
}

// recordAddress is where a record answers with what is in force.
func recordAddress(key store.Key) string {
	code := url.PathEscape(showCode(key.Kind, key.Code))
	switch key.Kind {
	case store.KindValue:
		parts := strings.SplitN(key.Code, "/", 3)
		if len(parts) != 3 {
			return ""
		}
		return "/v1/materials/" + url.PathEscape(parts[0]) + "/values/" + url.PathEscape(parts[1]) + "/" + url.PathEscape(parts[2])
	case store.KindOutcome:
		session, quantity, _ := strings.Cut(key.Code, "/")
		return "/v1/sessions/" + store.FormatCode(session) + "/outcomes/" + url.PathEscape(quantity)
	case store.KindDocument:
		return "/v1/uploads/" + code
	case store.KindPerson:
		return "/v1/people/" + code
	case store.KindRevision:
		return "/v1/revisions/" + code
	}
	for _, r := range tracedRecords {
		if r.kind == key.Kind {
			return "/v1" + strings.Replace(r.address, "{"+lastParameter(r.address)+"}", code, 1)
		}
	}
	return ""
}

// seeAddress is address for those that the asker may read here: its own and common ones.
func seeAddress(actor registry.Actor) func(store.Ref) string {
	return func(ref store.Ref) string {
		if ref.Laboratory != actor.Laboratory && ref.Laboratory != store.Common {
			return ""
		}
		return address(ref)
	}
}
