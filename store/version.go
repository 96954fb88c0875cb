package store

import (
	"encoding/hex"
	"encoding/json"
	"fmt"
	"time"
)

// A Kind is what a record is about.
type Kind string

// The kinds of records.
const (
	KindLaboratory  Kind = "laboratory"
	KindPerson      Kind = "person"
	KindToken       Kind = "token"
	KindKey         Kind = "key"
	KindScale       Kind = "scale"
	KindRelation    Kind = "relation"
	KindMaterial    Kind = "material"
	KindUnit        Kind = "unit"
	KindValue       Kind = "value"
	KindInstrument  Kind = "instrument"
	KindMethod      Kind = "method"
	KindFactor      Kind = "factor"
	KindSample      Kind = "sample"
	KindSession     Kind = "session"
	KindExclusion   Kind = "exclusion"
	KindOutcome     Kind = "outcome"
	KindCalibration Kind = "calibration"
	KindAssignment  Kind = "assignment"
	KindStudy       Kind = "study"
	KindValueSet    Kind = "valueset"
	KindFinal       Kind = "final"
	KindReport      Kind = "report"
	KindRevision    Kind = "revision"
	KindDecision    Kind = "decision"
	KindGrant       Kind = "grant"
	KindDocument    Kind = "document"
)

// Common is the reserved laboratory of public rows: international materials,
// scales, relations, constants.
const Common = "common"

// Decided reports whether versions of the kind hold only once a decision
// approved them. Versions of other kinds hold from the moment they are recorded.
func (k Kind) Decided() bool {
	switch k {
	case KindRelation, KindValue, KindMethod, KindFactor, KindCalibration, KindAssignment,
		KindValueSet, KindFinal, KindReport, KindRevision:
		return true
	}
	return false
}

// An Instant is a time in integer microseconds since the Unix epoch, UTC: the
// same on every engine. Its text form is RFC 3339 in UTC.
type Instant int64

// InstantOf cuts a time to microseconds.
func InstantOf(t time.Time) Instant { return Instant(t.UnixMicro()) }

// Time returns the instant as a UTC time.
func (i Instant) Time() time.Time { return time.UnixMicro(int64(i)).UTC() }

func (i Instant) String() string { return i.Time().Format(time.RFC3339Nano) }

// MarshalText writes RFC 3339.
func (i Instant) MarshalText() ([]byte, error) { return []byte(i.String()), nil }

// UnmarshalText reads RFC 3339, with any offset.
func (i *Instant) UnmarshalText(b []byte) error {
	t, err := time.Parse(time.RFC3339Nano, string(b))
	if err != nil {
		return fmt.Errorf("time %q: expected RFC 3339, for example 2026-03-02T08:15:00Z", b)
	}
	*i = InstantOf(t)
	return nil
}

// A Hash is a SHA-256. Its text form is lower-case hexadecimal; the zero Hash is "".
type Hash [32]byte

func (h Hash) String() string {
	if h == (Hash{}) {
		return ""
	}
	return hex.EncodeToString(h[:])
}

// MarshalText writes lower-case hexadecimal.
func (h Hash) MarshalText() ([]byte, error) { return []byte(h.String()), nil }

// UnmarshalText reads 64 hexadecimal digits, or nothing for the zero Hash.
func (h *Hash) UnmarshalText(b []byte) error {
	if len(b) == 0 {
		*h = Hash{}
		return nil
	}
	if len(b) != 64 {
		return fmt.Errorf("hash %q: expected 64 hexadecimal digits", b)
	}
	if _, err := hex.Decode(h[:], b); err != nil {
		return fmt.Errorf("hash %q: expected 64 hexadecimal digits", b)
	}
	return nil
}

// A Key names a record: everything its versions have in common.
type Key struct {
	Laboratory string `json:"laboratory"`
	Kind       Kind   `json:"kind"`
	Code       string `json:"code"`
}

func (k Key) String() string { return fmt.Sprintf("%s %s/%s", k.Kind, k.Laboratory, k.Code) }

// A Ref names one version of a record and binds its bytes.
type Ref struct {
	Key
	Version int  `json:"version"`
	Hash    Hash `json:"hash"`
}

func (r Ref) String() string { return fmt.Sprintf("%s.%d", r.Key, r.Version) }

// An Input is a version that another version rests on, and the part it plays.
type Input struct {
	Part string `json:"part"`
	Ref
}

// A Body is what one kind of version states. Its form, such as "material/1",
// names the Go type for ever: a changed shape is a new form with a type of its own.
type Body interface {
	Form() string
}

// A Version is one version of a record as it was recorded.
type Version[T any] struct {
	Ref
	Form       string
	RecordedAt Instant
	RecordedBy string
	// ValidFrom is when the statement begins to hold; nil for records without a period.
	ValidFrom *Instant
	// Position is the version's place in its laboratory's ledger.
	Position int64
	Reason   string
	// Previous is the hash of the version before; zero for the first.
	Previous Hash
	Inputs   []Input
	Value    T
}

// A Raw version has not been decoded into its body's type yet.
type Raw = Version[json.RawMessage]

// Decode turns a raw version into one of a known body type. A form other than
// the type's own is a FormError.
func Decode[T Body](raw Raw) (Version[T], error) {
	v := Version[T]{Ref: raw.Ref, Form: raw.Form, RecordedAt: raw.RecordedAt, RecordedBy: raw.RecordedBy,
		ValidFrom: raw.ValidFrom, Position: raw.Position, Reason: raw.Reason, Previous: raw.Previous, Inputs: raw.Inputs}
	if want := v.Value.Form(); raw.Form != want {
		return v, &FormError{Ref: raw.Ref, Found: raw.Form, Expected: want}
	}
	if err := json.Unmarshal(raw.Value, &v.Value); err != nil {
		return v, fmt.Errorf("decode %s: %w", raw.Ref, err)
	}
	return v, nil
}

// A Draft is a version about to be appended: number, previous hash, position
// and time are given by the transaction.
type Draft struct {
	Kind   Kind
	Code   string
	By     string
	Reason string
	// ValidFrom is nil for records without a period.
	ValidFrom *Instant
	Inputs    []Input
	Value     Body
	// After is the version number that must be the newest at this moment (0: the
	// record must not exist yet); nil accepts any. Another newest version is ErrStale.
	After *int
}

// A Moment chooses what a read sees: what held (ValidAt) and what had been
// said (AsOf). Nil means now.
type Moment struct {
	ValidAt *Instant
	AsOf    *Instant
}

// A State is read off the decisions on a version.
type State string

// The states. A version of a kind that is not decided is always Recorded.
const (
	Recorded   State = "recorded"
	Drafted    State = "draft"
	Submitted  State = "submitted"
	Approved   State = "approved"
	Declined   State = "declined"
	Withdrawn  State = "withdrawn"
	Superseded State = "superseded"
)
