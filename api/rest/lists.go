package rest

import (
	"bytes"
	"context"
	"encoding/base64"
	"encoding/json"
	"fmt"
	"io"
	"iter"
	"mime"
	"net/http"
	"net/url"
	"strconv"
	"strings"
	"time"

	"github.com/danielgtaylor/huma/v2"
	"github.com/danielgtaylor/huma/v2/adapters/humaecho"

	"deltamoor/api/exchange"
	"deltamoor/api/registry"
	"deltamoor/store"
)

// ListParams are the parameters of every list.
type ListParams struct {
	Limit  int    `query:"limit" minimum:"1" maximum:"500" doc:"Items on one page; left out: 100."`
	After  string `query:"after" maxLength:"1000" doc:"Where the page begins: the cursor of the page before, as it came."`
	Format string `query:"format" enum:"json,csv" doc:"csv gives the whole list, streamed; the header Accept: text/csv does the same."`
	MomentParams
	format string
	self   url.URL
}

// Resolve notes what the answer's links and form depend on.
func (p *ListParams) Resolve(ctx huma.Context) []error {
	p.self = ctx.URL()
	p.format = p.Format
	if p.format == "" {
		p.format = "json"
		if accepted(ctx.Header("Accept"), "application/json", "text/csv") == "text/csv" {
			p.format = "csv"
		}
	}
	return nil
}

// accepted chooses, of the media types that a resource has, the one that a
// client likes best (RFC 9110, 12.5.1); the first of them where it says nothing
// or likes several alike, and where it likes none.
func accepted(accept string, types ...string) string {
	best, bestQuality := types[0], 0.0
	for _, t := range types {
		if q := quality(accept, t); q > bestQuality {
			best, bestQuality = t, q
		}
	}
	return best
}

// quality is the weight that an Accept header gives a media type; its most
// specific range counts.
func quality(accept, media string) float64 {
	kind, _, _ := strings.Cut(media, "/")
	result, specific := 0.0, 0
	for _, part := range strings.Split(accept, ",") {
		name, params, err := mime.ParseMediaType(part)
		if err != nil {
			continue
		}
		level := 0
		switch name {
		case media:
			level = 3
		case kind + "/*":
			level = 2
		case "*/*":
			level = 1
		}
		if level <= specific {
			continue
		}
		q := 1.0
		if text, ok := params["q"]; ok {
			if q, err = strconv.ParseFloat(text, 64); err != nil {
				continue
			}
		}
		result, specific = q, level
	}
	return result
}

// A cursor is where the next page begins, and the moment that all pages of the
// list belong to.
type cursor struct {
	After   string         `json:"a"`
	AsOf    *store.Instant `json:"r,omitempty"`
	ValidAt *store.Instant `json:"v,omitempty"`
}

func (c cursor) String() string {
	b, err := json.Marshal(c)
	if err != nil { // strings and times only
		return ""
	}
	return base64.RawURLEncoding.EncodeToString(b)
}

// query reads the parameters; a cursor's moment goes before the one in the address.
func (p *ListParams) query() (registry.Query, error) {
	q := registry.Query{Limit: p.Limit, Moment: p.moment()}
	if q.Limit == 0 {
		q.Limit = 100
	}
	if p.After == "" {
		return q, nil
	}
	var c cursor
	b, err := base64.RawURLEncoding.DecodeString(p.After)
	if err == nil {
		err = json.Unmarshal(b, &c)
	}
	if err != nil || c.After == "" {
		return q, complain("this is not a cursor", "query.after", p.After, "the cursor of the page before, as it came")
	}
	q.After, q.Moment = c.After, store.Moment{AsOf: c.AsOf, ValidAt: c.ValidAt}
	return q, nil
}

// List is a page of a list.
type List[T any] struct {
	Items []T        `json:"items" doc:"The items of this page."`
	After string     `json:"after,omitempty" doc:"Cursor of the next page; absent at the end."`
	AsOf  *time.Time `json:"as_of,omitempty" doc:"The moment that all pages of this list belong to."`
}

// answer is an answer that writes itself: JSON, CSV, or bytes as they came.
type answer struct {
	Body func(huma.Context)
}

// A pages function reads one page of a list.
type pages[T any] func(ctx context.Context, q registry.Query) (registry.Page[T], error)

// A table says how a list looks as CSV: headings, and the fields of one item.
type table[T any] struct {
	header []string
	row    func(T) []string
}

// answerList answers a list in the form that was asked for. The first page is
// read before anything is written, so a refusal still is one.
func answerList[S, T any](ctx context.Context, f *face, p *ListParams, read pages[S], show func(S) T, csv table[T]) (*answer, error) {
	q, err := p.query()
	if err != nil {
		return nil, err
	}
	if p.format == "csv" {
		q.Limit = registry.MaxPage
	}
	page, err := read(ctx, q)
	if err != nil {
		return nil, err
	}
	if page.AsOf != 0 && q.Moment.AsOf == nil {
		q.Moment.AsOf = &page.AsOf
	}
	if p.format == "csv" {
		return &answer{Body: func(hc huma.Context) { streamCSV(hc, f, csv, allRows(hc.Context(), q, page, read, show, csv)) }}, nil
	}
	list := List[T]{Items: make([]T, 0, len(page.Items)), AsOf: timePointer(q.Moment.AsOf)}
	for _, s := range page.Items {
		list.Items = append(list.Items, show(s))
	}
	link := ""
	if page.After != "" {
		list.After = cursor{page.After, q.Moment.AsOf, q.Moment.ValidAt}.String()
		next := p.self.Query()
		next.Set("after", list.After)
		for _, name := range []string{"as_of", "valid_at"} { // the cursor holds them
			next.Del(name)
		}
		link = fmt.Sprintf(`<%s?%s>; rel="next"`, p.self.Path, next.Encode())
	}
	return jsonAnswer(list, http.StatusOK, map[string]string{"Link": link})
}

// jsonAnswer writes JSON to a buffer first, so that what cannot be written is a
// refusal and not half an answer.
func jsonAnswer(v any, status int, headers map[string]string) (*answer, error) {
	var b bytes.Buffer
	if err := strictJSON.Marshal(&b, v); err != nil {
		return nil, fmt.Errorf("write the answer: %w", err)
	}
	return &answer{Body: func(hc huma.Context) {
		for name, value := range headers {
			if value != "" {
				hc.SetHeader(name, value)
			}
		}
		hc.SetHeader("Content-Type", "application/json")
		hc.SetStatus(status)
		_, _ = hc.BodyWriter().Write(b.Bytes()) // who has gone needs no answer
	}}, nil
}

// allRows reads a list page by page, holding one page at a time.
func allRows[S, T any](ctx context.Context, q registry.Query, page registry.Page[S], read pages[S], show func(S) T, csv table[T]) iter.Seq2[[]string, error] {
	return func(yield func([]string, error) bool) {
		for {
			for _, s := range page.Items {
				if !yield(csv.row(show(s)), nil) {
					return
				}
			}
			if page.After == "" {
				return
			}
			q.After = page.After
			var err error
			if page, err = read(ctx, q); err != nil {
				yield(nil, err)
				return
			}
		}
	}
}

// streamCSV writes a table row by row. A fault in the middle cuts the
// connection, since a list that merely ends would look whole.
func streamCSV[T any](hc huma.Context, f *face, csv table[T], rows iter.Seq2[[]string, error]) {
	hc.SetHeader("Content-Type", "text/csv; charset=utf-8; header=present")
	hc.SetHeader("Content-Disposition", "attachment; filename=\""+csvName(hc.URL())+"\"")
	hc.SetStatus(http.StatusOK)
	w := hc.BodyWriter()
	if err := exchange.WriteCSV(flushing{w, humaecho.Unwrap(hc).Response().Flush}, csv.header, rows); err != nil {
		if hc.Context().Err() == nil {
			f.options.Log.ErrorContext(hc.Context(), "list broke off", "request_id", requestID(hc.Context()), "error", err.Error())
		}
		panic(http.ErrAbortHandler)
	}
}

// flushing sends what is written at once: rows reach the reader as they come.
type flushing struct {
	w     io.Writer
	flush func()
}

func (f flushing) Write(b []byte) (int, error) {
	n, err := f.w.Write(b)
	if err == nil {
		f.flush()
	}
	return n, err
}

// csvName is the file name of a list: the last word of its address.
func csvName(u url.URL) string {
	name := u.Path[strings.LastIndexByte(u.Path, '/')+1:]
	safe := strings.Map(func(r rune) rune {
		if r >= 'a' && r <= 'z' || r >= '0' && r <= '9' || r == '-' {
			return r
		}
		return -1
	}, name)
	return safe + ".csv"
}

// wholeList makes pages of a list that is read at once and is short by nature.
func wholeList[T any](items []T, err error) pages[T] {
	return func(context.Context, registry.Query) (registry.Page[T], error) {
		return registry.Page[T]{Items: items}, err
	}
}

// versionPages reads the versions of a record; the cursor is the number of the last.
func versionPages[T store.Body](f *face, actor registry.Actor, kind store.Kind, code string) pages[registry.Item[T]] {
	return func(ctx context.Context, q registry.Query) (registry.Page[registry.Item[T]], error) {
		var page registry.Page[registry.Item[T]]
		after := 0
		if q.After != "" {
			var err error
			if after, err = strconv.Atoi(q.After); err != nil {
				return page, complain("this is not a cursor", "query.after", q.After, "the cursor of the page before, as it came")
			}
		}
		items, err := registry.Versions[T](ctx, f.registry, actor, kind, code, after, q.Limit)
		if err != nil {
			return page, err
		}
		page.Items = items
		if len(items) == q.Limit {
			page.After = strconv.Itoa(items[len(items)-1].Ref.Version)
		}
		return page, nil
	}
}

// Fields of CSV.

func number(x float64) string { return exchange.FormatNumber(x) }

func optional(x *float64) string { return exchange.FormatOptional(x) }

func whole(n *int) string {
	if n == nil {
		return ""
	}
	return strconv.Itoa(*n)
}

func clock(t *time.Time) string {
	if t == nil {
		return ""
	}
	return t.Format(time.RFC3339Nano)
}

// FormatParam chooses the form of a list that is short by nature.
type FormatParam struct {
	Format string `query:"format" enum:"json,csv" doc:"csv gives the list as CSV; the header Accept: text/csv does the same."`
	format string
}

// Resolve settles the form.
func (p *FormatParam) Resolve(ctx huma.Context) []error {
	p.format = p.Format
	if p.format == "" && accepted(ctx.Header("Accept"), "application/json", "text/csv") == "text/csv" {
		p.format = "csv"
	}
	return nil
}

// PrintedParam chooses between JSON, CSV and a page for printing.
type PrintedParam struct {
	Format string `query:"format" enum:"json,csv,html" doc:"html is a page for printing; the header Accept does the same."`
	format string
}

// Resolve settles the form.
func (p *PrintedParam) Resolve(ctx huma.Context) []error {
	p.format = p.Format
	if p.format == "" {
		p.format = map[string]string{"text/csv": "csv", "text/html": "html"}[accepted(ctx.Header("Accept"), "application/json", "text/csv", "text/html")]
	}
	return nil
}

// csvAnswer writes a list that is at hand as CSV.
func csvAnswer[T any](f *face, items []T, csv table[T]) *answer {
	return &answer{Body: func(hc huma.Context) {
		streamCSV(hc, f, csv, func(yield func([]string, error) bool) {
			for _, t := range items {
				if !yield(csv.row(t), nil) {
					return
				}
			}
		})
	}}
}
