package registry

import (
	"context"
	"errors"
	"fmt"
	"strings"

	"deltamoor/store"
)

// A Meaning says what kind of refusal an error is. There are few, and every
// face of the program (HTTP, pages, command line) translates them by one table.
type Meaning string

// The meanings.
const (
	Unauthenticated Meaning = "unauthenticated"   // who asks is not known
	Refused         Meaning = "refused"           // known, but may not
	NotFound        Meaning = "not-found"         // unknown, or of another laboratory
	Conflict        Meaning = "conflict"          // code taken, illegal state, decision already made
	Stale           Meaning = "stale"             // someone wrote between
	Unconditional   Meaning = "unconditional"     // the request must say which version it saw
	TooLarge        Meaning = "too-large"         // over a bound, which is named
	Invalid         Meaning = "invalid"           // content
	TooMany         Meaning = "too-many-requests" // slow down
	Unavailable     Meaning = "unavailable"       // try again later
	Internal        Meaning = "internal"          // our fault: logged, never shown
)

// A Complaint is one fault of what somebody sent: where, in their own words
// (`row 17, column "d13C raw"` or `body.readings[3].raw`), what stood there, and
// what was expected.
type Complaint struct {
	Place    string `json:"place"`
	Found    string `json:"found,omitempty"`
	Expected string `json:"expected"`
}

func (c Complaint) String() string {
	if c.Found == "" {
		return c.Place + ": expected " + c.Expected
	}
	return fmt.Sprintf("%s: found %s, expected %s", c.Place, c.Found, c.Expected)
}

// An Error is a refusal with a meaning, a sentence for people, and the faults one by one.
type Error struct {
	Meaning    Meaning
	Message    string
	Complaints []Complaint
	// More counts further complaints beyond those listed.
	More int
	Err  error
}

func (e *Error) Error() string {
	var b strings.Builder
	b.WriteString(e.Message)
	for _, c := range e.Complaints {
		b.WriteString("\n  " + c.String())
	}
	if e.More > 0 {
		fmt.Fprintf(&b, "\n  and %d more", e.More)
	}
	return b.String()
}

func (e *Error) Unwrap() error { return e.Err }

// Refuse makes an error of a meaning.
func Refuse(meaning Meaning, format string, args ...any) *Error {
	return &Error{Meaning: meaning, Message: fmt.Sprintf(format, args...)}
}

// MaxComplaints bounds how many faults one refusal lists; the rest are counted.
const MaxComplaints = 50

// Complain makes an Invalid error of complaints, or nil when there are none.
func Complain(message string, complaints []Complaint) error {
	if len(complaints) == 0 {
		return nil
	}
	e := &Error{Meaning: Invalid, Message: message, Complaints: complaints}
	if len(complaints) > MaxComplaints {
		e.Complaints, e.More = complaints[:MaxComplaints:MaxComplaints], len(complaints)-MaxComplaints
	}
	return e
}

// MeaningOf tells what an error means; what nobody gave a meaning is Internal.
func MeaningOf(err error) Meaning {
	var e *Error
	switch {
	case errors.As(err, &e):
		return e.Meaning
	case errors.Is(err, store.ErrNotFound):
		return NotFound
	case errors.Is(err, store.ErrStale):
		return Stale
	case errors.Is(err, store.ErrConflict):
		return Conflict
	case errors.Is(err, store.ErrInvalid), errors.Is(err, store.ErrKeyReused):
		return Invalid
	case errors.Is(err, store.ErrUnavailable), errors.Is(err, context.DeadlineExceeded):
		return Unavailable
	}
	return Internal
}
