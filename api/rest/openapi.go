package rest

import (
	"net/http"
	"reflect"
	"slices"
	"strconv"
	"strings"

	"github.com/danielgtaylor/huma/v2"

	"deltamoor/api/registry"
)

// describe begins the description of the API; the routes add themselves.
func describe(version string) huma.Config {
	if version == "" {
		version = "0"
	}
	api := &huma.OpenAPI{
		OpenAPI: "3.1.0",
		Info: &huma.Info{Title: "deltamoor", Version: version, Description: "A registry of reference materials, calibrations and reported deltas of a stable-isotope laboratory. " +
			"Deltas and uncertainties are in ‰; u is a standard uncertainty (k = 1), U comes with k, p and nu_eff. Times are RFC 3339. Codes may be typed in any writing. " +
			"Nothing is replaced or deleted: a change is a POST of a further version with its reason. Refusals are RFC 9457 problems and change nothing.",
			License: &huma.License{Name: "Apache 2.0", Identifier: "Apache-2.0"}},
		Components: &huma.Components{
			Schemas: huma.NewMapRegistry("#/components/schemas/", huma.DefaultSchemaNamer),
			SecuritySchemes: map[string]*huma.SecurityScheme{
				"token": {Type: "http", Scheme: "bearer", Description: "A token of one laboratory."},
				"basic": {Type: "http", Scheme: "basic", Description: "For tools that know nothing else: any user name, the token as password."},
			},
		},
		Security: []map[string][]string{{"token": {}}, {"basic": {}}},
	}
	for _, t := range tags {
		api.Tags = append(api.Tags, &huma.Tag{Name: t[0], Description: t[1]})
	}
	return huma.Config{OpenAPI: api, Formats: map[string]huma.Format{"application/json": strictJSON, "json": strictJSON},
		DefaultFormat: "application/json", RejectUnknownQueryParameters: true}
}

var tags = [...][2]string{
	{"materials", "Reference materials, their units and their assigned values."},
	{"scales", "Delta scales, one realisation each."},
	{"sessions", "Instruments, methods, sessions and their readings."},
	{"calibrations", "Fits of sessions, and the engine by itself."},
	{"samples", "Samples, final values, reports and reported deltas."},
	{"trust", "Traces, uploads, ledger, verification."},
	{"people", "Laboratories, people, tokens."},
}

// An option completes the description of an operation.
type option func(f *face, op *huma.Operation)

// operation describes one operation of /v1.
func (f *face) operation(method, path, id, tag, summary string, options ...option) huma.Operation {
	op := huma.Operation{Method: method, Path: "/v1" + path, OperationID: id, Tags: []string{tag}, Summary: summary, MaxBodyBytes: f.options.MaxBody + 1,
		Metadata: map[string]any{}, Responses: map[string]*huma.Response{},
		Errors: []int{http.StatusUnauthorized, http.StatusForbidden, http.StatusNotFound, http.StatusUnprocessableEntity, http.StatusTooManyRequests, http.StatusServiceUnavailable}}
	if method == http.MethodPost {
		op.Errors = append(op.Errors, http.StatusRequestTimeout, http.StatusConflict, http.StatusRequestEntityTooLarge, http.StatusUnsupportedMediaType)
		op.BodyReadTimeout = f.options.Timeout
	}
	for _, o := range options {
		o(f, &op)
	}
	slices.Sort(op.Errors)
	return op
}

// creates: the operation makes something, and honours Idempotency-Key.
func creates(_ *face, op *huma.Operation) {
	op.DefaultStatus = http.StatusCreated
	op.Metadata[metaCreates] = true
	longest := 255
	op.Parameters = append(op.Parameters, &huma.Param{Name: idempotencyHeader, In: "header", Schema: &huma.Schema{Type: huma.TypeString, MaxLength: &longest},
		Description: "The sender's own name for this request: sent again with the same name it is answered as the first time and changes nothing. Kept for 7 days."})
}

// conditional: somebody else may have been first, so If-Match is asked for.
func conditional(_ *face, op *huma.Operation) {
	op.Errors = append(op.Errors, http.StatusPreconditionFailed, http.StatusPreconditionRequired)
}

// secret: the answer holds a secret, which is remembered nowhere.
func secret(_ *face, op *huma.Operation) { op.Metadata[metaSecret] = true }

// long: the operation may take longer than others.
func long(f *face, op *huma.Operation) {
	op.Metadata[metaLong] = true
	op.BodyReadTimeout = f.options.LongTimeout
}

// file: the body is a file as large as an import may be.
func file(example reflect.Type, types ...string) option {
	return func(f *face, op *huma.Operation) {
		op.MaxBodyBytes = registry.MaxUpload + 1
		op.SkipValidateBody = true // read as it came
		var schema *huma.Schema
		if example != nil {
			schema = f.api.OpenAPI().Components.Schemas.Schema(example, true, "")
		}
		op.RequestBody = &huma.RequestBody{Required: true, Content: fileContent(schema, types...)}
	}
}

// headed: a table in place of JSON has these headings in its first row, in any
// order; the first of them must be there.
func headed(headings string, needed int) option {
	names := strings.Split(headings, ",")
	return func(_ *face, op *huma.Operation) {
		op.Description = "As a table (CSV, TSV or XLSX), the first row holds the headings, in any order: " + strings.Join(names[:needed], ", ") + ", and perhaps " + strings.Join(names[needed:], ", ") +
			". A file divided by semicolons or tabs may use decimal commas. One fault refuses the whole, naming row and column."
	}
}

// listing: the answer is a page of a list, or the whole as CSV.
func listing[T any](f *face, op *huma.Operation) {
	long(f, op)
	answers[List[T]](f, op)
	ok := op.Responses["200"]
	ok.Headers = map[string]*huma.Param{"Link": {Schema: &huma.Schema{Type: huma.TypeString}, Description: `The next page, as rel="next"; absent at the end.`}}
	also("text/csv", "The whole list, with a heading row.")(f, op)
}

// answers: the answer writes itself, in this shape.
func answers[T any](f *face, op *huma.Operation) {
	schema := f.api.OpenAPI().Components.Schemas.Schema(reflect.TypeFor[T](), true, "")
	op.Responses["200"] = &huma.Response{Description: "OK", Content: map[string]*huma.MediaType{"application/json": {Schema: schema}}}
}

// also: the answer has another form too.
func also(media, description string) option {
	return func(_ *face, op *huma.Operation) {
		if op.Responses["200"] == nil {
			op.Responses["200"] = &huma.Response{Description: "OK", Content: map[string]*huma.MediaType{}}
		}
		op.Responses["200"].Content[media] = &huma.MediaType{Schema: &huma.Schema{Type: huma.TypeString, Description: description}}
	}
}

// previewed: with preview=true the answer has the status 200 in place of 201.
func previewed[T any](f *face, op *huma.Operation) {
	schema := f.api.OpenAPI().Components.Schemas.Schema(reflect.TypeFor[T](), true, "")
	op.Responses["200"] = &huma.Response{Description: "A preview, or what was there already: nothing was stored.", Content: map[string]*huma.MediaType{"application/json": {Schema: schema}}}
}

// made: the answer that writes itself has this shape when something was made.
func made[T any](f *face, op *huma.Operation) {
	schema := f.api.OpenAPI().Components.Schemas.Schema(reflect.TypeFor[T](), true, "")
	op.Responses["201"] = &huma.Response{Description: "Created", Content: map[string]*huma.MediaType{"application/json": {Schema: schema}}}
}

// conflicts: a read that what is there may not allow.
func conflicts(_ *face, op *huma.Operation) { op.Errors = append(op.Errors, http.StatusConflict) }

// finishDescription says once what holds for every operation: its refusals
// become references to responses that all share.
func finishDescription(api *huma.OpenAPI) {
	allowNull(api.Components.Schemas)
	api.Components.Responses = map[string]*huma.Response{}
	for _, item := range api.Paths {
		for _, op := range []*huma.Operation{item.Get, item.Post} {
			if op == nil {
				continue
			}
			if marked(op, metaOnlyJSON) {
				delete(op.RequestBody.Content, mediaBytes)
			}
			for status, r := range op.Responses {
				if r.Content[problemType] == nil {
					continue
				}
				k := kindOfStatus(statusOf(status))
				name := strings.ReplaceAll(string(k.Meaning), "-", "_")
				r.Description = k.Title
				api.Components.Responses[name] = r
				op.Responses[status] = &huma.Response{Ref: "#/components/responses/" + name}
			}
		}
	}
}

// allowNull describes members that are null where something cannot be computed:
// pointers to objects that are always written.
func allowNull(schemas huma.Registry) {
	for name, s := range schemas.Map() {
		t := schemas.TypeFromRef("#/components/schemas/" + name)
		if t == nil || t.Kind() != reflect.Struct {
			continue
		}
		for _, field := range reflect.VisibleFields(t) {
			member, rest, _ := strings.Cut(field.Tag.Get("json"), ",")
			p := s.Properties[member]
			if p == nil || p.Ref == "" || field.Type.Kind() != reflect.Pointer || strings.Contains(rest, "omitempty") {
				continue
			}
			s.Properties[member] = &huma.Schema{AnyOf: []*huma.Schema{{Ref: p.Ref}, {Type: "null"}}, Description: p.Description}
		}
	}
}

func statusOf(text string) int {
	n, err := strconv.Atoi(text)
	if err != nil {
		return http.StatusInternalServerError
	}
	return n
}
