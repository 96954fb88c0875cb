package exchange

import (
	"bytes"
	"encoding"
	"encoding/json"
	"errors"
	"fmt"
	"math"
	"reflect"
	"slices"
	"strconv"
	"strings"
	"unicode/utf8"
)

// decodeStrict reads one JSON value into v, which points to a struct, and names
// every fault by its place below root: a key that v has no field for, a key
// twice, a value of the wrong type, a member tagged `required:"true"` that is
// missing, a word that is not in its `enum:"…"` tag. Keys are compared exactly.
// null stands for "absent" and is refused where a member is required.
//
// encoding/json by itself takes the last of two equal keys, matches keys
// without regard to case and replaces broken characters: for numbers that are
// hashed, each of these is a way to say one thing and mean another.
func decodeStrict(message, root string, data []byte, v any) error {
	if !utf8.Valid(data) {
		return refuseOne(message, root, fmt.Sprintf("the byte 0x%02X at offset %d", data[invalidUTF8(data)], invalidUTF8(data)), "JSON in UTF-8")
	}
	if len(bytes.TrimSpace(data)) == 0 {
		return refuseOne(message, root, "nothing", "a JSON object")
	}
	// The syntax is checked as a whole first, so that the walk below meets none of it.
	var raw json.RawMessage
	if err := json.Unmarshal(data, &raw); err != nil {
		var syntax *json.SyntaxError
		if errors.As(err, &syntax) {
			at := min(int(syntax.Offset), len(data))
			return refuseOne(message, root, fmt.Sprintf("broken JSON in line %d, at offset %d: %v", lineOf(data, at), at, err), "one JSON object")
		}
		return refuseOne(message, root, err.Error(), "one JSON object")
	}
	d := &strictDecoder{Decoder: json.NewDecoder(bytes.NewReader(data)), root: root, shapes: map[reflect.Type]*shape{}}
	d.UseNumber()
	t, err := d.Token()
	if err == nil {
		err = d.from(t, reflect.ValueOf(v).Elem(), "")
	}
	if err != nil {
		return fmt.Errorf("%s: %w", message, err)
	}
	return d.faults.err(message)
}

type strictDecoder struct {
	*json.Decoder
	root   string
	path   []step
	shapes map[reflect.Type]*shape
	faults complaints
}

// A step leads from a value into one of its parts: a member, or an element of a list.
type step struct {
	member string
	index  int
}

// complain names the value that is being read.
func (d *strictDecoder) complain(found, expected string) {
	var b strings.Builder
	b.WriteString(d.root)
	for _, s := range d.path {
		if s.member == "" {
			fmt.Fprintf(&b, "[%d]", s.index)
		} else {
			b.WriteString("." + s.member)
		}
	}
	d.faults.add(b.String(), found, expected)
}

func (d *strictDecoder) enter(s step) { d.path = append(d.path, s) }
func (d *strictDecoder) leave()       { d.path = d.path[:len(d.path)-1] }

// A shape is what the members of a struct are called and must be.
type shape struct {
	names    []string
	index    [][]int // of the field, through embedded structs
	enums    []string
	required []bool
}

func (d *strictDecoder) shape(t reflect.Type) *shape {
	if s := d.shapes[t]; s != nil {
		return s
	}
	s := &shape{}
	for _, f := range reflect.VisibleFields(t) {
		if f.Anonymous {
			continue
		}
		name, _, _ := strings.Cut(f.Tag.Get("json"), ",")
		s.names, s.index = append(s.names, name), append(s.index, f.Index)
		s.enums = append(s.enums, f.Tag.Get("enum"))
		s.required = append(s.required, f.Tag.Get("required") == "true")
	}
	d.shapes[t] = s
	return s
}

// from reads the value that begins with t into v. enum lists the words that a string may be.
func (d *strictDecoder) from(t json.Token, v reflect.Value, enum string) error {
	if v.Kind() == reflect.Pointer {
		v.Set(reflect.New(v.Type().Elem()))
		return d.from(t, v.Elem(), enum)
	}
	switch v.Kind() {
	case reflect.Struct:
		if t != json.Delim('{') {
			return d.mismatch(t, "an object")
		}
		return d.object(v)
	case reflect.Slice:
		if t != json.Delim('[') {
			return d.mismatch(t, "a list")
		}
		return d.list(v)
	case reflect.Float64:
		n, ok := t.(json.Number)
		if !ok {
			return d.mismatch(t, "a number")
		}
		x, err := strconv.ParseFloat(string(n), 64)
		if err != nil || math.IsInf(x, 0) {
			d.complain(shorten(string(n), longestQuote), "a number of magnitude below 1.8e308")
			return nil
		}
		if x == 0 {
			x = 0 // −0 becomes 0
		}
		v.SetFloat(x)
	case reflect.Int:
		n, ok := t.(json.Number)
		if !ok {
			return d.mismatch(t, "a whole number")
		}
		i, err := strconv.ParseInt(string(n), 10, 32)
		if err != nil {
			d.complain(shorten(string(n), longestQuote), "a whole number")
			return nil
		}
		v.SetInt(i)
	case reflect.Uint64:
		n, ok := t.(json.Number)
		if !ok {
			return d.mismatch(t, "a whole number")
		}
		i, err := strconv.ParseUint(string(n), 10, 64)
		if err != nil {
			d.complain(shorten(string(n), longestQuote), "a whole number that is not negative")
			return nil
		}
		v.SetUint(i)
	case reflect.Bool:
		b, ok := t.(bool)
		if !ok {
			return d.mismatch(t, "true or false")
		}
		v.SetBool(b)
	case reflect.Int64: // store.Instant
		s, ok := t.(string)
		if !ok {
			return d.mismatch(t, "a text")
		}
		if u, ok := v.Addr().Interface().(encoding.TextUnmarshaler); !ok || u.UnmarshalText([]byte(s)) != nil {
			d.complain(quote(s), "a time after RFC 3339 with its offset, for example 2026-03-02T08:15:00Z")
		}
	case reflect.String:
		s, ok := t.(string)
		if !ok {
			return d.mismatch(t, "a text")
		}
		d.text(s, v, enum)
	default:
		return fmt.Errorf("no rule for %s", v.Type())
	}
	return nil
}

func (d *strictDecoder) text(s string, v reflect.Value, enum string) {
	switch {
	case strings.ContainsRune(s, utf8.RuneError):
		d.complain(quote(s), "characters of Unicode, without halves of surrogate pairs")
	case len(s) > longestText:
		d.complain(fmt.Sprintf("a text of %d bytes", len(s)), fmt.Sprintf("at most %d", longestText))
	case enum != "" && !inEnum(s, enum):
		d.complain(quote(s), "one of "+strings.ReplaceAll(strings.TrimPrefix(enum, ","), ",", ", "))
	default:
		v.SetString(s)
	}
}

func inEnum(s, enum string) bool {
	for word := range strings.SplitSeq(enum, ",") {
		if s == word {
			return true
		}
	}
	return false
}

// mismatch complains of the type of a value and passes over it.
func (d *strictDecoder) mismatch(t json.Token, expected string) error {
	found := ""
	switch t := t.(type) {
	case nil:
		found = "null"
	case bool:
		found = strconv.FormatBool(t)
	case json.Number:
		found = "the number " + shorten(string(t), longestQuote)
	case string:
		found = "the text " + quote(t)
	case json.Delim:
		found = "an object"
		if t == '[' {
			found = "a list"
		}
	}
	d.complain(found, expected)
	return d.skip(t)
}

// skip passes over the rest of a value whose first token was read.
func (d *strictDecoder) skip(t json.Token) error {
	open, ok := t.(json.Delim)
	if !ok || (open != '{' && open != '[') {
		return nil
	}
	for depth := 1; depth > 0; {
		t, err := d.Token()
		if err != nil {
			return err
		}
		switch t {
		case json.Delim('{'), json.Delim('['):
			depth++
		case json.Delim('}'), json.Delim(']'):
			depth--
		}
	}
	return nil
}

func (d *strictDecoder) object(v reflect.Value) error {
	shape := d.shape(v.Type())
	var seen uint64 // a bit for each member; the shapes here have fewer than 64
	var unknown map[string]bool
	for {
		t, err := d.Token()
		if err != nil {
			return err
		}
		key, ok := t.(string)
		if !ok {
			break // the closing brace
		}
		if t, err = d.Token(); err != nil {
			return err
		}
		at := slices.Index(shape.names, key)
		switch {
		case at < 0:
			d.enter(step{member: shorten(strings.Trim(strconv.Quote(key), `"`), longestQuote)})
			if unknown[key] {
				d.complain("the member a second time", "each member once")
			} else if n := nearest(key, shape.names); n != "" {
				d.complain("an unknown member", "a known member; the nearest is "+n)
			} else {
				d.complain("an unknown member", "one of the members "+strings.Join(shape.names, ", "))
			}
			if unknown == nil {
				unknown = map[string]bool{}
			}
			unknown[key] = true
			err = d.skip(t)
		case seen&(1<<at) != 0:
			d.enter(step{member: key})
			d.complain("the member a second time", "each member once")
			err = d.skip(t)
		default:
			d.enter(step{member: key})
			seen |= 1 << at
			// null is an absent member, unless it must be there.
			if t != nil || shape.required[at] {
				err = d.from(t, v.FieldByIndex(shape.index[at]), shape.enums[at])
			}
		}
		d.leave()
		if err != nil {
			return err
		}
	}
	for i, n := range shape.names {
		if seen&(1<<i) == 0 && shape.required[i] {
			d.enter(step{member: n})
			d.complain("nothing", "the member "+n)
			d.leave()
		}
	}
	return nil
}

func (d *strictDecoder) list(v reflect.Value) error {
	v.Set(reflect.MakeSlice(v.Type(), 0, 0))
	for i := 0; ; i++ {
		t, err := d.Token()
		if err != nil {
			return err
		}
		if t == json.Delim(']') {
			return nil
		}
		v.Grow(1)
		v.SetLen(i + 1)
		d.enter(step{index: i})
		err = d.from(t, v.Index(i), "")
		d.leave()
		if err != nil {
			return err
		}
	}
}
