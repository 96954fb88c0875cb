package store

import (
	"crypto/sha256"
	"encoding/json"
	"fmt"
)

// BodyBytes returns the canonical bytes of a stored version: what its hash covers.
func BodyBytes(raw Raw) ([]byte, error) {
	body, hash, err := CanonicalBody(raw.Laboratory, Draft{Kind: raw.Kind, Code: raw.Code, By: raw.RecordedBy, Reason: raw.Reason,
		ValidFrom: raw.ValidFrom, Inputs: raw.Inputs, Value: formed{raw.Form, raw.Value}}, raw.Version, raw.Previous)
	if err != nil {
		return nil, err
	}
	if hash != raw.Hash {
		return nil, &CorruptError{Ref: raw.Ref, cause: fmt.Errorf("found hash %s, expected %s", hash, raw.Hash)}
	}
	return body, nil
}

// ParseBody reads the canonical bytes of a version of the given kind without
// a store. What only the ledger knows (RecordedAt, Position) stays zero.
func ParseBody(kind Kind, body []byte) (Raw, error) {
	raw := Raw{}
	raw.Kind, raw.Hash = kind, sha256.Sum256(body)
	e, err := decodeEnvelope(&raw, body)
	raw.Laboratory, raw.Code, raw.Version = e.Laboratory, e.Code, e.Version
	return raw, err
}

// formed is a value whose canonical JSON and form are known already.
type formed struct {
	form string
	json.RawMessage
}

func (f formed) Form() string { return f.form }
