package rest

import (
	"bytes"
	"encoding/json"
	"fmt"
	"io"
	"net/http"
	"reflect"
	"strconv"
	"strings"
	"unicode/utf8"

	"github.com/danielgtaylor/huma/v2"

	"deltamoor/api/registry"
)

// strictJSON is huma's JSON, with what encoding/json lets pass refused: members
// that stand twice, broken UTF-8, and anything behind the value. (Unknown
// members and members in another case are refused by the schema.) On the way
// out, HTML is not escaped: these are numbers for programs, not text in a page.
var strictJSON = huma.Format{
	Marshal: func(w io.Writer, v any) error {
		// To a buffer first: a value that cannot be written must not leave half an answer.
		var b bytes.Buffer
		e := json.NewEncoder(&b)
		e.SetEscapeHTML(false)
		if err := e.Encode(v); err != nil {
			return err
		}
		_, err := w.Write(b.Bytes())
		return err
	},
	Unmarshal: func(data []byte, v any) error {
		if _, first := v.(*any); first { // huma decodes twice; once is enough to look
			if err := checkJSON(data); err != nil {
				return err
			}
		}
		return json.Unmarshal(data, v)
	},
}

// maxDepth bounds how deep JSON may be nested.
const maxDepth = 32

// checkJSON refuses JSON in which a member stands twice, naming its path.
func checkJSON(data []byte) error {
	if !utf8.Valid(data) {
		return fmt.Errorf("expected JSON in UTF-8")
	}
	d := json.NewDecoder(bytes.NewReader(data))
	d.UseNumber()
	if err := checkValue(d, "body", 0); err != nil {
		return err
	}
	if _, err := d.Token(); err != io.EOF {
		return fmt.Errorf("expected one JSON value and nothing behind it")
	}
	return nil
}

func checkValue(d *json.Decoder, place string, depth int) error {
	if depth > maxDepth {
		return fmt.Errorf("%s: expected JSON of at most %d levels", place, maxDepth)
	}
	token, err := d.Token()
	if err != nil {
		return jsonError(err)
	}
	delimiter, ok := token.(json.Delim)
	if !ok {
		return nil
	}
	seen := map[string]bool{}
	for i := 0; d.More(); i++ {
		at := place + "[" + strconv.Itoa(i) + "]"
		if delimiter == '{' {
			key, err := d.Token()
			if err != nil {
				return jsonError(err)
			}
			name, _ := key.(string)
			at = place + "." + name
			if seen[name] {
				return fmt.Errorf("%s stands twice; expected it once", at)
			}
			seen[name] = true
		}
		if err := checkValue(d, at, depth+1); err != nil {
			return err
		}
	}
	_, err = d.Token()
	return jsonError(err)
}

func jsonError(err error) error {
	if err == nil {
		return nil
	}
	if err == io.EOF || err == io.ErrUnexpectedEOF {
		return fmt.Errorf("expected a whole JSON value; it breaks off")
	}
	return fmt.Errorf("expected JSON: %s", strings.TrimPrefix(err.Error(), "json: "))
}

// decode reads JSON that came as raw bytes, by the schema of its type.
func decode[T any](f *face, data []byte) (T, error) {
	var v T
	var parsed any
	if err := strictJSON.Unmarshal(data, &parsed); err != nil {
		return v, registry.Complain("the body cannot be read", []registry.Complaint{{Place: "body", Expected: strings.TrimPrefix(err.Error(), "expected ")}})
	}
	schemas := f.api.OpenAPI().Components.Schemas
	schema := schemas.SchemaFromRef("#/components/schemas/" + huma.DefaultSchemaNamer(reflect.TypeFor[T](), ""))
	path, result := huma.NewPathBuffer(nil, 0), huma.ValidateResult{}
	path.Push("body")
	huma.Validate(schemas, schema, path, huma.ModeWriteToServer, parsed, &result)
	if len(result.Errors) > 0 {
		return v, humaProblem("", http.StatusUnprocessableEntity, "validation failed", result.Errors)
	}
	if err := json.Unmarshal(data, &v); err != nil {
		return v, registry.Complain("the body cannot be read", []registry.Complaint{{Place: "body", Expected: err.Error()}})
	}
	return v, nil
}
