package store

import (
	"reflect"

	"deltamoor/store/ledger"
)

// Extra makes the canonical text of a reading's rare fields; absent ones (nil,
// "" or a nil pointer) are left out, and none at all is "".
func Extra(fields map[string]any) (string, error) {
	kept := map[string]any{}
	for name, value := range fields {
		v := reflect.ValueOf(value)
		if !v.IsValid() || v.IsZero() {
			continue
		}
		kept[name] = value
	}
	if len(kept) == 0 {
		return "", nil
	}
	text, err := ledger.Canonical(kept)
	return string(text), err
}
