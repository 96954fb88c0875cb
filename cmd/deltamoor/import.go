package main

import (
	"cmp"
	"context"
	"fmt"
	"io"
	"path/filepath"
	"slices"
	"strings"
	"time"

	"github.com/spf13/cobra"

	"deltamoor/api/exchange"
	"deltamoor/api/registry"
	"deltamoor/calib"
	"deltamoor/store"
)

func (p *program) buildImport(cmd *cobra.Command) {
	cmd.Long = `Bring the readings of one session from FILE (CSV, TSV, XLSX, or JSON), read by
the import mapping of the method. All rows land or none; the bytes are kept as
they came. The same bytes again are the same session. Mistakes are named by row
and column of the file. "-" reads standard input,
as the mapping says.`
	cmd.Example = `  deltamoor import run.csv --instrument EA1 --method CN-solid --preview
  deltamoor import run.csv --instrument EA1 --method CN-solid --label "week 12"`
	var q registry.SessionRequest
	var session, started string
	var preview bool
	flags := cmd.Flags()
	flags.StringVar(&q.Instrument, "instrument", "", "`code` of the instrument")
	flags.StringVar(&q.Method, "method", "", "`code` of the method")
	flags.StringVar(&q.Operator, "operator", "", "`person` who ran the session; left out: who imports")
	flags.StringVar(&q.Label, "label", "", "the session's own `name`")
	flags.StringVar(&session, "session", "", "`code` of a session opened before, instead of --instrument and --method")
	flags.BoolVar(&preview, "preview", false, "say what would happen and store nothing")
	flags.StringVar(&started, "started-at", "", "`time` the session started, as RFC 3339; needed only where the readings carry no time")
	settingFlags(cmd, "data", "database", "token")
	cmd.Args = arguments("FILE")
	cmd.RunE = p.action(func(ctx context.Context, cmd *cobra.Command, args []string) error {
		request := registry.ImportRequest{Name: fileName(args[0]), MediaType: mediaType(args[0]), Preview: preview}
		if session == "" {
			if q.Instrument == "" || q.Method == "" {
				return usagef("found no --session, expected it or both --instrument and --method")
			}
			request.New = &q
		} else {
			for _, name := range []string{"instrument", "method", "operator", "label", "started-at"} {
				if cmd.Flags().Changed(name) {
					return usagef("--%s: found with --session, expected only for a new session", name)
				}
			}
			code, err := store.ParseCode(session)
			if err != nil {
				return usagef("--session: %v", err)
			}
			request.Session = code
		}
		if started != "" {
			at, err := time.Parse(time.RFC3339, started)
			if err != nil {
				return usagef("--started-at: found %q, expected a time such as 2026-03-02T08:15:00Z", started)
			}
			instant := store.InstantOf(at)
			q.StartedAt = &instant
		}
		data, err := p.readInput(args[0], registry.MaxUpload)
		if err != nil {
			return err
		}
		o, err := p.openRegistry(ctx, cmd, toWrite)
		if err != nil {
			return err
		}
		defer o.close()
		actor, err := o.writer(ctx)
		if err != nil {
			return err
		}
		request.Bytes = data
		if request.Table, err = readTable(ctx, o, actor, request, q.Method); err != nil {
			return err
		}
		answer, err := o.ImportReadings(ctx, actor, request)
		if err != nil {
			return err
		}
		return p.printImport(answer)
	})
}

func readTable(ctx context.Context, o *opened, actor registry.Actor, q registry.ImportRequest, method string) (registry.ReadingTable, error) {
	if !actor.May(registry.MayImport) { // before the work of reading
		return registry.ReadingTable{}, registry.Refuse(registry.Refused, "%s may not import readings in laboratory %s", actor.Person, actor.Laboratory)
	}
	if q.MediaType == mediaJSON {
		return exchange.ReadReadingsJSON(q.Bytes)
	}
	mapping, err := o.ImportMapping(ctx, actor, q.Session, method)
	if err != nil {
		return registry.ReadingTable{}, err
	}
	if mapping.Format == "" {
		mapping.Format = formats[q.MediaType]
	}
	return exchange.ReadTable(mapping, q.Name, q.Bytes)
}

// Media types of what can be imported, as over HTTP.
const (
	mediaJSON  = "application/json"
	mediaCSV   = "text/csv"
	mediaTSV   = "text/tab-separated-values"
	mediaXLSX  = "application/vnd.openxmlformats-officedocument.spreadsheetml.sheet"
	mediaBytes = "application/octet-stream"
)

// formats are the mapping's words for them.
var formats = map[string]string{mediaCSV: "csv", mediaTSV: "tsv", mediaXLSX: "xlsx"}

// mediaType goes by the end of the file's name; what that does not tell, the
// method's mapping has to.
func mediaType(name string) string {
	switch strings.ToLower(filepath.Ext(name)) {
	case ".json":
		return mediaJSON
	case ".csv":
		return mediaCSV
	case ".tsv":
		return mediaTSV
	case ".xlsx":
		return mediaXLSX
	}
	return mediaBytes
}

// fileName is what a file is called in messages and in the record.
func fileName(name string) string {
	if name == "-" {
		return ""
	}
	return filepath.Base(name)
}

// An importAnswer is what import prints for programs.
type importAnswer struct {
	Session  string       `json:"session,omitempty"`
	Existed  bool         `json:"existed"`
	Preview  bool         `json:"preview"`
	Rows     int          `json:"rows"`
	Readings int          `json:"readings"`
	Roles    []roleAnswer `json:"roles"`
	Encoding string       `json:"encoding,omitempty"`
	Ignored  []string     `json:"ignored_columns,omitempty"`
	Flags    []calib.Flag `json:"flags"`
}

func (p *program) printImport(a registry.ImportAnswer) error {
	out := importAnswer{Existed: a.Existed, Preview: a.Preview, Rows: a.Rows, Readings: len(a.Readings), Roles: countRoles(a.Readings), Encoding: a.Encoding, Ignored: a.Ignored, Flags: a.Flags}
	if !a.Preview || a.Existed {
		out.Session = store.FormatCode(a.Session.Code)
		if a.Existed {
			out.Readings = a.Session.Value.Readings
		}
	}
	if out.Flags == nil {
		out.Flags = []calib.Flag{}
	}
	switch {
	case p.json:
		return p.printJSON(out)
	case a.Existed:
		_, err := fmt.Fprintf(p.stdout, "these bytes are session %s already; nothing was stored\n", out.Session)
		return err
	}
	pairs := []string{"rows", fmt.Sprint(a.Rows), "readings", fmt.Sprint(len(a.Readings)), "encoding", orDash(a.Encoding)}
	if len(a.Ignored) > 0 {
		pairs = append(pairs, "columns not used", strings.Join(a.Ignored, ", "))
	}
	if a.Preview {
		pairs = append(pairs, "stored", "nothing: this was a preview")
	} else {
		pairs = append(pairs, "session", out.Session)
	}
	if err := printPairs(p.stdout, pairs...); err != nil {
		return err
	}
	fmt.Fprintln(p.stdout)
	t := newTable("quantity", "role", "of", ">readings")
	for _, r := range out.Roles {
		t.add(r.Quantity, r.Role, orDash(r.Subject), fmt.Sprint(r.Readings))
	}
	if err := t.print(p.stdout); err != nil {
		return err
	}
	return printFlags(p.stdout, a.Flags)
}

// A roleAnswer counts the readings of one subject in one role for one quantity.
type roleAnswer struct {
	Quantity string `json:"quantity"`
	Role     string `json:"role"`
	Subject  string `json:"subject,omitempty"` // a material's or a sample's code
	Readings int    `json:"readings"`
}

// countRoles counts readings by quantity and role, subjects in the order of the file.
func countRoles(readings []store.Reading) []roleAnswer {
	out := []roleAnswer{}
	at := map[roleAnswer]int{}
	for _, rd := range readings {
		key := roleAnswer{Quantity: rd.Quantity, Role: string(rd.Role), Subject: rd.Material}
		if rd.Sample != "" {
			key.Subject = store.FormatCode(rd.Sample)
		}
		i, ok := at[key]
		if !ok {
			i = len(out)
			at[key] = i
			out = append(out, key)
		}
		out[i].Readings++
	}
	slices.SortStableFunc(out, func(a, b roleAnswer) int {
		return cmp.Or(cmp.Compare(a.Quantity, b.Quantity), cmp.Compare(a.Role, b.Role))
	})
	return out
}

func printFlags(w io.Writer, flags []calib.Flag) error {
	for _, f := range flags {
		text := fmt.Sprintf("\n%s (%s): %s", f.Severity, f.Code, f.Message)
		if f.Advice != "" {
			text += "\n  " + f.Advice
		}
		if _, err := fmt.Fprintln(w, text); err != nil {
			return err
		}
	}
	return nil
}
