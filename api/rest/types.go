package rest

import (
	"bytes"
	"encoding/json"
	"fmt"
	"regexp"
	"strings"
	"time"

	"github.com/danielgtaylor/huma/v2"

	"deltamoor/api/registry"
	"deltamoor/calib"
	"deltamoor/store"
)

// A Decimal is a JSON number that keeps the digits it was typed with.
type Decimal string

var jsonNumber = regexp.MustCompile(`^-?(0|[1-9][0-9]*)(\.[0-9]+)?([eE][-+]?[0-9]+)?$`)

// MarshalJSON writes the digits as they are, less a sign and zeros that JSON
// does not have in front of a number.
func (d Decimal) MarshalJSON() ([]byte, error) {
	s := strings.TrimPrefix(string(d), "+")
	sign := ""
	if strings.HasPrefix(s, "-") {
		sign, s = "-", s[1:]
	}
	for len(s) > 1 && s[0] == '0' && s[1] >= '0' && s[1] <= '9' {
		s = s[1:]
	}
	if s = sign + s; !jsonNumber.MatchString(s) {
		return nil, fmt.Errorf("decimal %q is no number", string(d))
	}
	return []byte(s), nil
}

// UnmarshalJSON takes a JSON number, and no text.
func (d *Decimal) UnmarshalJSON(b []byte) error {
	b = bytes.TrimSpace(b)
	if bytes.Equal(b, []byte("null")) {
		return nil
	}
	if !jsonNumber.Match(b) {
		return fmt.Errorf("expected a number, found %s", b)
	}
	*d = Decimal(b)
	return nil
}

// Schema says that it is a number.
func (Decimal) Schema(huma.Registry) *huma.Schema {
	return &huma.Schema{Type: huma.TypeNumber, Examples: []any{json.Number("-10.450")}, Description: "A number that comes back with the digits it was typed with."}
}

// Recorded is what every version of every record has.
type Recorded struct {
	Code       string     `json:"code" doc:"The record's code." example:"C4T8Z-RN1HQ"`
	Version    int        `json:"version" doc:"Number of this version, from 1 without gaps." example:"2"`
	Laboratory string     `json:"laboratory" doc:"Whose record it is; common belongs to everybody." example:"FJO"`
	State      string     `json:"state" doc:"What has been decided: recorded where nothing is decided on such records, else draft, submitted, approved, declined, withdrawn or superseded." enum:"recorded,draft,submitted,approved,declined,withdrawn,superseded"`
	RecordedAt *time.Time `json:"recorded_at" doc:"When it was recorded; null in a preview."`
	RecordedBy string     `json:"recorded_by" doc:"Who recorded it."`
	Position   *int64     `json:"position" doc:"Place in the laboratory's ledger; null in a preview."`
	ValidFrom  *time.Time `json:"valid_from" doc:"Since when it holds; null for records without a period."`
	Reason     string     `json:"reason" doc:"Why this version was made."`
	Hash       string     `json:"hash" doc:"SHA-256 of the version's canonical bytes; empty in a preview."`
	Previous   string     `json:"previous" doc:"Hash of the version before; empty for the first."`
	Inputs     []Input    `json:"inputs" doc:"The versions that this one rests on."`
	Decisions  []Decision `json:"decisions" doc:"What was decided about it, in order."`
}

// An Input is a version that another one rests on.
type Input struct {
	Part       string `json:"part" doc:"The part it plays." example:"anchor"`
	Laboratory string `json:"laboratory"`
	Kind       string `json:"kind" example:"value"`
	Code       string `json:"code" example:"USGS40/d13C-VPDB-LSVEC/total"`
	Version    int    `json:"version"`
	Hash       string `json:"hash"`
}

// A Decision is something said about a version.
type Decision struct {
	Decision string     `json:"decision" enum:"submitted,approved,declined,withdrawn"`
	By       string     `json:"by"`
	At       time.Time  `json:"at"`
	Reason   string     `json:"reason"`
	EffectAt *time.Time `json:"effect_at,omitempty" doc:"When a withdrawal takes effect, where that is not when it was recorded."`
	Meaning  string     `json:"meaning,omitempty" doc:"What the signature stands for."`
}

func recorded[T store.Body](it registry.Item[T]) Recorded {
	r := Recorded{Code: showCode(it.Kind, it.Code), Version: it.Ref.Version, Laboratory: it.Laboratory, State: string(it.State),
		RecordedBy: it.RecordedBy, ValidFrom: timePointer(it.ValidFrom), Reason: it.Reason, Hash: it.Hash.String(), Previous: it.Previous.String(),
		Inputs: make([]Input, 0, len(it.Inputs)), Decisions: make([]Decision, 0, len(it.Decisions))}
	if it.RecordedAt != 0 {
		at, position := it.RecordedAt.Time(), it.Position
		r.RecordedAt, r.Position = &at, &position
	}
	for _, in := range it.Inputs {
		r.Inputs = append(r.Inputs, Input{Part: in.Part, Laboratory: in.Laboratory, Kind: string(in.Kind), Code: showCode(in.Kind, in.Code),
			Version: in.Ref.Version, Hash: in.Hash.String()})
	}
	for _, d := range it.Decisions {
		r.Decisions = append(r.Decisions, showDecision(d))
	}
	return r
}

func showDecision(d store.Version[store.Decision]) Decision {
	return Decision{Decision: d.Value.Act, By: d.RecordedBy, At: d.RecordedAt.Time(), Reason: d.Reason, EffectAt: timePointer(d.Value.EffectAt), Meaning: d.Value.Meaning}
}

// recordedHeader and recordedRow are the columns that every list of versions begins with.
var recordedHeader = []string{"code", "version", "laboratory", "state", "recorded_at", "recorded_by", "valid_from", "reason", "hash"}

func (r Recorded) row(more ...string) []string {
	return append([]string{r.Code, fmt.Sprint(r.Version), r.Laboratory, r.State, clock(r.RecordedAt), r.RecordedBy, clock(r.ValidFrom), r.Reason, r.Hash}, more...)
}

func columns(more ...string) []string { return append(append([]string{}, recordedHeader...), more...) }

// An Amount is a decimal with its unit of measurement.
type Amount struct {
	Value Decimal `json:"value"`
	Unit  string  `json:"unit" maxLength:"20" example:"mg"`
}

func (a *Amount) body() *store.Amount {
	if a == nil {
		return nil
	}
	return &store.Amount{Value: store.Decimal(a.Value), Unit: a.Unit}
}

func showAmount(a *store.Amount) *Amount {
	if a == nil {
		return nil
	}
	return &Amount{Value: Decimal(a.Value), Unit: a.Unit}
}

func (a *Amount) text() string {
	if a == nil {
		return ""
	}
	return string(a.Value) + " " + a.Unit
}

// A Flag is a judgement that travels with a result.
type Flag struct {
	Code     string `json:"code" example:"extrapolation"`
	Severity string `json:"severity" enum:"note,warning,serious"`
	Readings []int  `json:"readings" doc:"Numbers of the readings concerned."`
	Subject  string `json:"subject,omitempty" doc:"Material or sample concerned."`
	Message  string `json:"message"`
	Advice   string `json:"advice,omitempty" doc:"What to do about it."`
}

func showFlags(flags []calib.Flag) []Flag {
	out := make([]Flag, 0, len(flags))
	for _, f := range flags {
		out = append(out, Flag{f.Code, string(f.Severity), append([]int{}, f.Readings...), showSubject(f.Subject), f.Message, f.Advice})
	}
	return out
}

// showSubject writes a sample's code for people; a material's code is its own.
func showSubject(subject string) string {
	if code, err := store.ParseCode(subject); err == nil && code == subject && code[0] == store.LetterSample {
		return store.FormatCode(code)
	}
	return subject
}

// Wanted is a quantity asked for, on a scale.
type Wanted struct {
	Scale     string `json:"scale" maxLength:"40" example:"d13C-VPDB-LSVEC"`
	Measurand string `json:"measurand,omitempty" maxLength:"60" doc:"Left out: total."`
}

// convert applies a conversion to every element; the result is never nil.
func convert[S, T any](in []S, f func(S) T) []T {
	out := make([]T, 0, len(in))
	for _, s := range in {
		out = append(out, f(s))
	}
	return out
}

// convertOrNil is convert for lists whose absence is stored as absence.
func convertOrNil[S, T any](in []S, f func(S) T) []T {
	if len(in) == 0 {
		return nil
	}
	return convert(in, f)
}

// pointed converts what a pointer points to; nil stays nil.
func pointed[S, T any](in *S, f func(S) T) *T {
	if in == nil {
		return nil
	}
	out := f(*in)
	return &out
}

func parseHash(place, text string) (*store.Hash, error) {
	if text == "" {
		return nil, nil
	}
	var h store.Hash
	if err := h.UnmarshalText([]byte(text)); err != nil {
		return nil, complain("this is not a SHA-256", place, text, "64 hexadecimal digits")
	}
	return &h, nil
}

func hashText(h *store.Hash) string {
	if h == nil {
		return ""
	}
	return h.String()
}

// spaced joins codes for one field of CSV.
func spaced(list []string) string { return strings.Join(list, " ") }
