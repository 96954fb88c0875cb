package rest

import (
	"context"
	"encoding/json"
	"fmt"
	"mime"
	"net/http"
	"slices"
	"strconv"
	"strings"
	"time"

	"github.com/danielgtaylor/huma/v2"

	"deltamoor/api/exchange"
	"deltamoor/api/registry"
	"deltamoor/store"
)

// A Reading is one isotope quantity of one measured peak or injection.
type Reading struct {
	Number       int        `json:"number" doc:"In the session, from 1."`
	Analysis     string     `json:"analysis,omitempty"`
	Preparation  string     `json:"preparation,omitempty"`
	Position     *int       `json:"position,omitempty"`
	Peak         *int       `json:"peak,omitempty"`
	Quantity     string     `json:"quantity" example:"d13C"`
	Role         string     `json:"role" enum:"anchor,control,monitor,blank,gas,conditioning,sample"`
	Material     string     `json:"material,omitempty"`
	Unit         string     `json:"unit,omitempty" doc:"Code of the unit it was taken from."`
	Sample       string     `json:"sample,omitempty" doc:"Code of the sample."`
	Compound     string     `json:"compound,omitempty"`
	Group        string     `json:"group,omitempty"`
	Time         *time.Time `json:"time,omitempty"`
	Raw          float64    `json:"raw" doc:"Raw delta against the working gas (‰)."`
	U            *float64   `json:"u,omitempty" doc:"Standard uncertainty of raw (‰)."`
	Size         *float64   `json:"size,omitempty"`
	Amount       *float64   `json:"amount,omitempty" doc:"Test portion (mg)."`
	Retention    *float64   `json:"retention,omitempty"`
	Width        *float64   `json:"width,omitempty" doc:"Of the peak."`
	WidthBy      string     `json:"width_by,omitempty" enum:"base,half-height"`
	Intensity    *float64   `json:"intensity,omitempty" doc:"The peak's m/z 2 intensity."`
	GasIntensity *float64   `json:"gas_intensity,omitempty"`
	GasRatio     *float64   `json:"gas_ratio,omitempty"`
	Warning      string     `json:"warning,omitempty" doc:"The instrument's own remark."`
	Excluded     bool       `json:"excluded" doc:"Left out of fits by an act of exclusion that still holds."`
}

func showReading(r store.Reading, excluded map[int]bool) Reading {
	out := Reading{Number: r.Number, Analysis: r.Analysis, Preparation: r.Preparation, Position: r.Position, Peak: r.Peak, Quantity: r.Quantity, Role: string(r.Role),
		Material: r.Material, Unit: showCode(store.KindUnit, r.Unit), Sample: showCode(store.KindSample, r.Sample), Compound: r.Compound, Group: r.Group,
		Time: timePointer(r.At), Raw: r.Raw, U: r.U, Size: r.Size, Excluded: excluded[r.Number]}
	if r.Extra != "" {
		var extra struct {
			Amount       *float64 `json:"amount"`
			Retention    *float64 `json:"retention"`
			Width        *float64 `json:"width"`
			WidthBy      string   `json:"width_by"`
			Warning      string   `json:"warning"`
			Intensity    *float64 `json:"intensity"`
			GasIntensity *float64 `json:"gas_intensity"`
			GasRatio     *float64 `json:"gas_ratio"`
		}
		if json.Unmarshal([]byte(r.Extra), &extra) == nil { // rare fields of other kinds are not shown
			out.Amount, out.Retention, out.Warning = extra.Amount, extra.Retention, extra.Warning
			out.Width, out.WidthBy = extra.Width, extra.WidthBy
			out.Intensity, out.GasIntensity, out.GasRatio = extra.Intensity, extra.GasIntensity, extra.GasRatio
		}
	}
	return out
}

var readingTable = table[Reading]{[]string{"number", "analysis", "preparation", "position", "peak", "quantity", "role", "material", "unit", "sample", "compound", "group",
	"time", "raw", "u", "size", "amount", "retention", "width", "width_by", "intensity", "gas_intensity", "gas_ratio", "warning", "excluded"}, func(r Reading) []string {
	return []string{whole(&r.Number), r.Analysis, r.Preparation, whole(r.Position), whole(r.Peak), r.Quantity, r.Role, r.Material, r.Unit, r.Sample, r.Compound, r.Group,
		clock(r.Time), number(r.Raw), optional(r.U), optional(r.Size), optional(r.Amount), optional(r.Retention), optional(r.Width), r.WidthBy,
		optional(r.Intensity), optional(r.GasIntensity), optional(r.GasRatio), r.Warning, strconv.FormatBool(r.Excluded)}
}}

func (f *face) readings(ctx context.Context, actor registry.Actor, in *struct {
	CodeParam
	ListParams
}) (*answer, error) {
	session, err := sessionKind.code(in.Code)
	if err != nil {
		return nil, err
	}
	acts, err := f.exclusionActs(ctx, actor, session)
	if err != nil {
		return nil, err
	}
	_, excluded := excludedNow(acts)
	read := func(ctx context.Context, q registry.Query) (registry.Page[store.Reading], error) {
		var page registry.Page[store.Reading]
		after, err := readingNumber(q.After)
		if err != nil {
			return page, err
		}
		if page.Items, err = f.registry.ReadingsPage(ctx, actor, session, after, q.Limit); err == nil && len(page.Items) == q.Limit {
			page.After = strconv.Itoa(page.Items[len(page.Items)-1].Number)
		}
		return page, err
	}
	show := func(r store.Reading) Reading { return showReading(r, excluded) }
	return answerList(ctx, f, &in.ListParams, read, show, readingTable)
}

func readingNumber(after string) (int, error) {
	if after == "" {
		return 0, nil
	}
	n, err := strconv.Atoi(after)
	if err != nil {
		return 0, complain("this is not a cursor", "query.after", after, "the cursor of the page before, as it came")
	}
	return n, nil
}

func sortedNumbers(set map[int]bool) []int {
	out := make([]int, 0, len(set))
	for n := range set {
		out = append(out, n)
	}
	slices.Sort(out)
	return out
}

// Media types of readings and lists of samples.
const (
	mediaJSON  = "application/json"
	mediaCSV   = "text/csv"
	mediaTSV   = "text/tab-separated-values"
	mediaXLSX  = "application/vnd.openxmlformats-officedocument.spreadsheetml.sheet"
	mediaBytes = "application/octet-stream"
)

var fileFormats = map[string]string{mediaCSV: "csv", mediaTSV: "tsv", mediaXLSX: "xlsx", mediaBytes: ""}

// FileParams are a file as the body of a request, with its name.
type FileParams struct {
	Name        string `query:"name" maxLength:"200" doc:"The file's name, for messages and for the record." example:"session-17.csv"`
	ContentType string `header:"Content-Type" hidden:"true"`
	RawBody     []byte `contentType:"text/csv"`
}

// media reads the media type and refuses those that are not taken.
func (p FileParams) media() (string, error) {
	if p.ContentType == "" {
		return mediaBytes, nil
	}
	media, params, err := mime.ParseMediaType(p.ContentType)
	if err == nil && media == mediaJSON {
		return media, nil
	}
	if _, ok := fileFormats[media]; err != nil || !ok {
		return "", StatusProblem(http.StatusUnsupportedMediaType, fmt.Sprintf("found the media type %q, expected one of %s",
			p.ContentType, strings.Join([]string{mediaJSON, mediaCSV, mediaTSV, mediaXLSX, mediaBytes}, ", ")), "")
	}
	if charset := params["charset"]; charset != "" && !strings.EqualFold(charset, "utf-8") {
		return "", complain("the encoding of a file is the mapping's to say", "header.Content-Type", p.ContentType, "no charset, or utf-8")
	}
	return media, nil
}

// PreviewParam asks for the answer without the effect.
type PreviewParam struct {
	Preview bool `query:"preview" doc:"true answers as if done and stores nothing."`
}

// An Imported says what an import did, or would do.
type Imported struct {
	Session  Session   `json:"session"`
	Existed  bool      `json:"existed" doc:"The same bytes were imported before, into this session; nothing was stored."`
	Preview  bool      `json:"preview" doc:"Nothing was stored."`
	Rows     int       `json:"rows" doc:"Rows of data."`
	Encoding string    `json:"encoding,omitempty" doc:"How the bytes were read."`
	Ignored  []string  `json:"ignored" doc:"Headings that the mapping does not name."`
	Flags    []Flag    `json:"flags"`
	Readings []Reading `json:"readings" doc:"In a preview, the first 1000 readings as they would be stored."`
}

// shownReadings bounds the readings in the answer of a preview.
const shownReadings = 1000

// importedAnswer has the status 201 where something was stored.
type importedAnswer struct {
	Status   int
	ETag     string `header:"ETag"`
	Location string `header:"Location"`
	Body     Imported
}

func showImport(a registry.ImportAnswer) *importedAnswer {
	out := Imported{Session: showSession(a.Session), Existed: a.Existed, Preview: a.Preview, Rows: a.Rows, Encoding: a.Encoding,
		Ignored: append([]string{}, a.Ignored...), Flags: showFlags(a.Flags), Readings: []Reading{}}
	answer := &importedAnswer{Status: http.StatusCreated, ETag: quoteTag(a.Session.Tag()), Location: "/v1/sessions/" + out.Session.Code}
	if a.Preview {
		for _, r := range a.Readings[:min(len(a.Readings), shownReadings)] {
			out.Readings = append(out.Readings, showReading(r, nil))
		}
		answer.ETag, answer.Location = "", ""
		if out.Session.RecordedAt == nil { // of a session that a preview does not open there is no code either
			out.Session.Code, out.Session.Version = "", 0
		}
	}
	if a.Preview || a.Existed {
		answer.Status = http.StatusOK
	}
	answer.Body = out
	return answer
}

// readTable reads the body by the mapping of a session's or a method's.
func (f *face) readTable(ctx context.Context, actor registry.Actor, p FileParams, session, method string) (registry.ReadingTable, string, error) {
	media, err := p.media()
	if err != nil {
		return registry.ReadingTable{}, "", err
	}
	if !actor.May(registry.MayImport) { // before the work of reading
		return registry.ReadingTable{}, "", registry.Refuse(registry.Refused, "%s may not import readings in laboratory %s", actor.Person, actor.Laboratory)
	}
	if media == mediaJSON {
		table, err := exchange.ReadReadingsJSON(p.RawBody)
		return table, media, err
	}
	mapping, err := f.registry.ImportMapping(ctx, actor, session, method)
	if err != nil {
		return registry.ReadingTable{}, "", err
	}
	if mapping.Format == "" {
		mapping.Format = fileFormats[media]
	}
	table, err := exchange.ReadTable(mapping, p.Name, p.RawBody)
	return table, media, err
}

func (f *face) importReadings(ctx context.Context, actor registry.Actor, in *struct {
	CodeParam
	PreviewParam
	FileParams
}) (*importedAnswer, error) {
	session, err := sessionKind.code(in.Code)
	if err != nil {
		return nil, err
	}
	if _, err := registry.One[store.Session](ctx, f.registry, actor, store.KindSession, session, 0, store.Moment{}); err != nil {
		return nil, err
	}
	table, media, err := f.readTable(ctx, actor, in.FileParams, session, "")
	if err != nil {
		return nil, err
	}
	a, err := f.registry.ImportReadings(ctx, actor, registry.ImportRequest{Session: session, Name: in.Name, MediaType: media, Bytes: in.RawBody, Table: table, Preview: in.Preview})
	if err != nil {
		return nil, err
	}
	return showImport(a), nil
}

// importSession opens a session and brings its readings in one act.
func (f *face) importSession(ctx context.Context, actor registry.Actor, in *struct {
	Instrument string    `query:"instrument" required:"true" maxLength:"40" doc:"Code of the instrument." example:"EA1"`
	Method     string    `query:"method" required:"true" maxLength:"40" doc:"Code of the method." example:"EA-CN"`
	Operator   string    `query:"operator" maxLength:"100" doc:"Left out: who asks."`
	Label      string    `query:"label" maxLength:"200" doc:"The laboratory's own name for the session."`
	StartedAt  time.Time `query:"started_at" required:"false" doc:"Needed only where the readings carry no time."`
	PreviewParam
	FileParams
}) (*importedAnswer, error) {
	table, media, err := f.readTable(ctx, actor, in.FileParams, "", in.Method)
	if err != nil {
		return nil, err
	}
	a, err := f.registry.ImportReadings(ctx, actor, registry.ImportRequest{
		New:  &registry.SessionRequest{Label: in.Label, Instrument: in.Instrument, Method: in.Method, Operator: in.Operator, StartedAt: instantOf(in.StartedAt)},
		Name: in.Name, MediaType: media, Bytes: in.RawBody, Table: table, Preview: in.Preview})
	if err != nil {
		return nil, err
	}
	return showImport(a), nil
}

// fileContent documents the media types of a file as the body.
func fileContent(json *huma.Schema, types ...string) map[string]*huma.MediaType {
	out := map[string]*huma.MediaType{}
	for _, t := range types {
		schema := &huma.Schema{Type: huma.TypeString, Description: "A table with a heading row."}
		if t == mediaXLSX || t == mediaBytes || t == mediaZIP {
			schema = &huma.Schema{Type: huma.TypeString, Format: "binary"}
		}
		if t == mediaJSON {
			schema = json
		}
		out[t] = &huma.MediaType{Schema: schema}
	}
	return out
}

// NewReadings are readings sent as JSON.
type NewReadings struct {
	Readings []NewReading `json:"readings" minItems:"1" maxItems:"100000"`
}

// A NewReading is one isotope quantity of one peak, with names as they came.
type NewReading struct {
	Name         string     `json:"name" doc:"Material or sample, by code, alias or client's label."`
	Role         string     `json:"role,omitempty" enum:"anchor,control,monitor,blank,gas,conditioning,sample" doc:"Left out: as the method says."`
	Unit         string     `json:"unit,omitempty"`
	Analysis     string     `json:"analysis,omitempty"`
	Preparation  string     `json:"preparation,omitempty"`
	Position     *int       `json:"position,omitempty"`
	Peak         *int       `json:"peak,omitempty"`
	Time         *time.Time `json:"time,omitempty"`
	Amount       *float64   `json:"amount,omitempty" doc:"Test portion (mg)."`
	Compound     string     `json:"compound,omitempty"`
	Retention    *float64   `json:"retention,omitempty"`
	Width        *float64   `json:"width,omitempty" doc:"Of the peak."`
	WidthBy      string     `json:"width_by,omitempty" enum:"base,half-height"`
	Intensity    *float64   `json:"intensity,omitempty" doc:"The peak's m/z 2 intensity."`
	GasIntensity *float64   `json:"gas_intensity,omitempty"`
	GasRatio     *float64   `json:"gas_ratio,omitempty"`
	Group        string     `json:"group,omitempty"`
	Warning      string     `json:"warning,omitempty"`
	Quantity     string     `json:"quantity" example:"d13C"`
	Raw          float64    `json:"raw" doc:"Raw delta against the working gas (‰)."`
	U            *float64   `json:"u,omitempty"`
	Size         *float64   `json:"size,omitempty"`
}
