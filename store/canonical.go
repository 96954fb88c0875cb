package store

import (
	"crypto/sha256"
	"encoding/json"
	"fmt"
	"strconv"
	"strings"
	"unicode/utf8"

	"deltamoor/store/ledger"
)

// envelope is the body of a version as it is hashed. Time and place of recording
// are not in it: they are given at commit and live in the ledger entry, so a
// repeated computation gives the same hash.
type envelope struct {
	Form       string          `json:"form"`
	Laboratory string          `json:"laboratory"`
	Code       string          `json:"code"`
	Version    int             `json:"version"`
	By         string          `json:"by"`
	Reason     string          `json:"reason"`
	Previous   *Hash           `json:"previous"`   // null for the first version
	ValidFrom  *Instant        `json:"valid_from"` // null for records without a period
	Inputs     []Input         `json:"inputs"`
	Value      json.RawMessage `json:"value"`
}

// CanonicalBody returns the canonical bytes (RFC 8785) of a draft as the given
// version of its record, and their SHA-256.
func CanonicalBody(laboratory string, d Draft, version int, previous Hash) ([]byte, Hash, error) {
	value, err := ledger.Canonical(d.Value)
	if err != nil {
		return nil, Hash{}, invalidBody(laboratory, d, err)
	}
	e := envelope{Form: d.Value.Form(), Laboratory: laboratory, Code: d.Code, Version: version, By: d.By,
		Reason: d.Reason, ValidFrom: d.ValidFrom, Inputs: d.Inputs, Value: value}
	if version > 1 {
		e.Previous = &previous
	}
	if e.Inputs == nil {
		e.Inputs = []Input{}
	}
	body, err := ledger.Canonical(e)
	if err != nil {
		return nil, Hash{}, invalidBody(laboratory, d, err)
	}
	return body, sha256.Sum256(body), nil
}

func invalidBody(laboratory string, d Draft, err error) error {
	key := Key{Laboratory: laboratory, Kind: d.Kind, Code: d.Code}
	if c, ok := err.(*ledger.CanonicalError); ok {
		place := key.String()
		if c.Path != "" {
			place += " " + c.Path
		}
		return &InvalidError{Place: place, Found: c.Found, Expected: c.Expected}
	}
	return fmt.Errorf("canonical body of %s: %w", key, err)
}

// decodeBody reads the envelope into a raw version. The columns that only the
// row knows (kind, recorded_at, position) are the caller's.
func decodeBody(raw *Raw, body []byte) error {
	_, err := decodeEnvelope(raw, body)
	return err
}

func decodeEnvelope(raw *Raw, body []byte) (envelope, error) {
	var e envelope
	if err := json.Unmarshal(body, &e); err != nil {
		return e, &CorruptError{Ref: raw.Ref, cause: err}
	}
	raw.Form = e.Form
	raw.RecordedBy = e.By
	raw.Reason = e.Reason
	raw.ValidFrom = e.ValidFrom
	raw.Inputs = e.Inputs
	raw.Value = e.Value
	if e.Previous != nil {
		raw.Previous = *e.Previous
	}
	return e, nil
}

// ReportLineHash returns the SHA-256 of the canonical bytes of a report's line:
// what the report's body holds in its place.
func ReportLineHash(line ReportLine) (Hash, error) {
	b, err := ledger.Canonical(line)
	if err != nil {
		return Hash{}, fmt.Errorf("canonical line %d of report %s: %w", line.Line, line.Report, err)
	}
	return sha256.Sum256(b), nil
}

// DecisionCode is the code of the record that holds the decisions on a version.
func DecisionCode(subject Ref) string {
	return string(subject.Kind) + "/" + subject.Code + "." + strconv.Itoa(subject.Version)
}

// DecisionSubject reads the version a decision record is about.
func DecisionSubject(laboratory, code string) (Key, int, error) {
	kind, rest, ok := strings.Cut(code, "/")
	dot := strings.LastIndexByte(rest, '.')
	if !ok || dot < 1 {
		return Key{}, 0, &InvalidError{Place: "decision " + strconv.Quote(code), Found: "no subject", Expected: "<kind>/<code>.<version>"}
	}
	version, err := strconv.Atoi(rest[dot+1:])
	if err != nil || version < 1 || strconv.Itoa(version) != rest[dot+1:] {
		return Key{}, 0, &InvalidError{Place: "decision " + strconv.Quote(code), Found: strconv.Quote(rest[dot+1:]), Expected: "a version number"}
	}
	return Key{Laboratory: laboratory, Kind: Kind(kind), Code: rest[:dot]}, version, nil
}

// textFault reports whether checkText would refuse.
func textFault(text string, limit int) bool {
	return len(text) > limit || !utf8.ValidString(text) || strings.IndexByte(text, 0) >= 0
}

// checkText refuses what one of the engines, or a page, could not show again.
func checkText(place, text string, limit int) error {
	switch {
	case !utf8.ValidString(text):
		return &InvalidError{Place: place, Found: strconv.QuoteToASCII(text), Expected: "UTF-8 text"}
	case strings.IndexByte(text, 0) >= 0:
		return &InvalidError{Place: place, Found: "a zero byte", Expected: "text without one"}
	case len(text) > limit:
		return &InvalidError{Place: place, Found: strconv.Itoa(len(text)) + " bytes", Expected: "at most " + strconv.Itoa(limit)}
	}
	return nil
}

// checkLaboratory accepts 2 to 8 of A–Z 0–9, and the reserved laboratory.
func checkLaboratory(code string) error {
	if code == Common {
		return nil
	}
	ok := len(code) >= 2 && len(code) <= 8
	for i := range len(code) {
		c := code[i]
		ok = ok && ('A' <= c && c <= 'Z' || '0' <= c && c <= '9')
	}
	if !ok {
		return &InvalidError{Place: "laboratory", Found: strconv.Quote(code), Expected: "2 to 8 of A-Z 0-9"}
	}
	return nil
}
