package store

import (
	"errors"
	"fmt"
)

// The meanings of errors. Detailed errors are types of their own; errors.Is
// tells their meaning.
var (
	// ErrNotFound: no such record, version or row in that laboratory.
	ErrNotFound = errors.New("not found")
	// ErrConflict: somebody was first, or the code is taken.
	ErrConflict = errors.New("conflict")
	// ErrStale: the newest version is not the one the writer had seen.
	ErrStale = errors.New("stale")
	// ErrInvalid: the content of a write cannot be stored; the error says where.
	ErrInvalid = errors.New("invalid")
	// ErrUnavailable: try again later (retries used up, clock behind, disk full,
	// database gone).
	ErrUnavailable = errors.New("unavailable")
	// ErrNewer: the database was made by a newer program.
	ErrNewer = errors.New("database is newer than the program")
	// ErrOutdated: the database needs a migration first.
	ErrOutdated = errors.New("database is older than the program")
	// ErrReadOnly: the store was opened for reading.
	ErrReadOnly = errors.New("store is read-only")
	// ErrKeyReused: an idempotency key came again with another request.
	ErrKeyReused = errors.New("idempotency key was used for another request")
)

// A NotFoundError says what was looked for.
type NotFoundError struct {
	What string
}

func (e *NotFoundError) Error() string { return e.What + ": not found" }

// Is makes it an ErrNotFound.
func (e *NotFoundError) Is(target error) bool { return target == ErrNotFound }

func notFound(format string, args ...any) error {
	return &NotFoundError{What: fmt.Sprintf(format, args...)}
}

// A FormError is a body of another form than the type it is decoded into.
type FormError struct {
	Ref             Ref
	Found, Expected string
}

func (e *FormError) Error() string {
	return fmt.Sprintf("%s: found form %q, expected %q", e.Ref, e.Found, e.Expected)
}

// A StaleError says which version is the newest, and which the writer took for it.
type StaleError struct {
	Key Key
	// Found is the newest version (0: the record does not exist), Expected the
	// one in Draft.After.
	Found, Expected int
	// Said tells what the newest version says, where somebody wrote it meanwhile.
	Said string
}

func (e *StaleError) Error() string {
	found := e.Said
	if found == "" {
		found = fmt.Sprintf("version %d", e.Found)
	}
	if e.Expected == 0 {
		return fmt.Sprintf("%s: found %s, expected a new record", e.Key, found)
	}
	return fmt.Sprintf("%s: found %s as the newest, expected version %d", e.Key, found, e.Expected)
}

// Is makes it an ErrStale, and an ErrConflict where a new record was expected.
func (e *StaleError) Is(target error) bool {
	return target == ErrStale || target == ErrConflict && e.Expected == 0
}

// A ConflictError says what stood in the way of a write.
type ConflictError struct {
	// Key of the record; zero where it is no record.
	Key Key
	// Found is what somebody else wrote first.
	Found string
	// Expected is what the write needed.
	Expected string
	cause    error
}

func (e *ConflictError) Error() string {
	text := fmt.Sprintf("found %s, expected %s", e.Found, e.Expected)
	if e.Key == (Key{}) {
		return text
	}
	return e.Key.String() + ": " + text
}

// Is makes it an ErrConflict.
func (e *ConflictError) Is(target error) bool { return target == ErrConflict }

func (e *ConflictError) Unwrap() error { return e.cause }

// An InvalidError is content that cannot be stored.
type InvalidError struct {
	// Place says where, as in "session FJO/S12345678T reading 17".
	Place           string
	Found, Expected string
}

func (e *InvalidError) Error() string {
	return fmt.Sprintf("%s: found %s, expected %s", e.Place, e.Found, e.Expected)
}

// Is makes it an ErrInvalid.
func (e *InvalidError) Is(target error) bool { return target == ErrInvalid }

// An UnavailableError says why nothing can be done now.
type UnavailableError struct {
	Reason string
	cause  error
}

func (e *UnavailableError) Error() string {
	if e.cause == nil {
		return e.Reason
	}
	return e.Reason + ": " + e.cause.Error()
}

// Is makes it an ErrUnavailable.
func (e *UnavailableError) Is(target error) bool { return target == ErrUnavailable }

func (e *UnavailableError) Unwrap() error { return e.cause }

// A SchemaError compares the number of the database's newest migration with
// the program's.
type SchemaError struct {
	Found, Expected int64
}

func (e *SchemaError) Error() string {
	return fmt.Sprintf("database: found migration %d, expected %d", e.Found, e.Expected)
}

// Is makes it an ErrNewer or an ErrOutdated.
func (e *SchemaError) Is(target error) bool {
	return target == ErrNewer && e.Found > e.Expected || target == ErrOutdated && e.Found < e.Expected
}

// A CorruptError is a stored row that cannot be what was recorded. Verify names
// the place of every one.
type CorruptError struct {
	Ref Ref
	// Found is the hash of what is stored, where it is not the hash in Ref.
	Found Hash
	cause error
}

func (e *CorruptError) Error() string {
	if e.cause == nil {
		return fmt.Sprintf("%s is corrupt: found a body with hash %s, expected %s", e.Ref, e.Found, e.Ref.Hash)
	}
	return fmt.Sprintf("%s is corrupt: %v", e.Ref, e.cause)
}

func (e *CorruptError) Unwrap() error { return e.cause }
