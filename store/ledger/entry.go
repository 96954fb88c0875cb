package ledger

import (
	"bytes"
	"encoding/hex"
	"encoding/json"
	"fmt"
	"strconv"
	"time"
	"unicode/utf8"
)

// An Entry binds one version of a record: what it is called, who recorded it
// and when, and the SHA-256 of its body.
type Entry struct {
	At         time.Time
	By         string
	Code       string
	Hash       [32]byte
	Kind       string
	Laboratory string
	Version    int
}

// An EntryError is an entry whose bytes are not in the one accepted form.
type EntryError struct {
	Found    string
	Expected string
}

func (e *EntryError) Error() string {
	return fmt.Sprintf("ledger entry: found %s, expected %s", e.Found, e.Expected)
}

// Bytes returns the canonical bytes: the datum of the leaf. Times are written
// in UTC, to the microsecond.
func (e Entry) Bytes() []byte {
	b := make([]byte, 0, 224+len(e.Code)+len(e.By))
	b = append(b, `{"at":"`...)
	b = e.At.UTC().Truncate(time.Microsecond).AppendFormat(b, time.RFC3339Nano)
	b = append(b, `","by":`...)
	b = AppendString(b, e.By)
	b = append(b, `,"code":`...)
	b = AppendString(b, e.Code)
	b = append(b, `,"hash":"`...)
	b = hex.AppendEncode(b, e.Hash[:])
	b = append(b, `","kind":`...)
	b = AppendString(b, e.Kind)
	b = append(b, `,"laboratory":`...)
	b = AppendString(b, e.Laboratory)
	b = append(b, `,"version":`...)
	b = strconv.AppendInt(b, int64(e.Version), 10)
	return append(b, '}')
}

// ParseEntry reads the bytes of an entry and refuses, as an EntryError, every
// spelling but the one Bytes writes.
func ParseEntry(text []byte) (Entry, error) {
	var members struct {
		At         time.Time `json:"at"`
		By         string    `json:"by"`
		Code       string    `json:"code"`
		Hash       string    `json:"hash"`
		Kind       string    `json:"kind"`
		Laboratory string    `json:"laboratory"`
		Version    int       `json:"version"`
	}
	if !utf8.Valid(text) {
		return Entry{}, &EntryError{Found: strconv.QuoteToASCII(string(text)), Expected: "UTF-8 text"}
	}
	if err := json.Unmarshal(text, &members); err != nil {
		return Entry{}, &EntryError{Found: strconv.Quote(string(text)) + " (" + err.Error() + ")", Expected: "one canonical JSON object"}
	}
	e := Entry{At: members.At.UTC(), By: members.By, Code: members.Code, Kind: members.Kind,
		Laboratory: members.Laboratory, Version: members.Version}
	hash, err := hex.DecodeString(members.Hash)
	if err != nil || len(hash) != len(e.Hash) {
		return Entry{}, &EntryError{Found: "hash " + strconv.Quote(members.Hash), Expected: "64 hexadecimal digits"}
	}
	copy(e.Hash[:], hash)
	if e.Version < 1 {
		return Entry{}, &EntryError{Found: "version " + strconv.Itoa(e.Version), Expected: "a number from 1"}
	}
	if want := e.Bytes(); !bytes.Equal(text, want) {
		return Entry{}, &EntryError{Found: strconv.Quote(string(text)), Expected: "the canonical " + strconv.Quote(string(want))}
	}
	return e, nil
}
