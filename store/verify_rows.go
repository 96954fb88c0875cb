package store

import (
	"context"
	"crypto/sha256"
	"encoding/hex"
	"errors"
	"fmt"
	"math"
	"slices"
	"strconv"
	"strings"
)

// rowText writes a row so that equal rows, and only they, have equal texts.
func rowText(row []any) string {
	var b strings.Builder
	for i, value := range row {
		if i > 0 {
			b.WriteByte(' ')
		}
		switch x := value.(type) {
		case nil:
			b.WriteString("NULL")
		case []byte:
			if len(x) > 64 {
				sum := sha256.Sum256(x)
				fmt.Fprintf(&b, "%d bytes %x", len(x), sum[:8])
			} else {
				b.WriteString(hex.EncodeToString(x))
			}
		case float64:
			b.WriteString(strconv.FormatFloat(x, 'g', -1, 64))
			if x == 0 && math.Signbit(x) {
				b.WriteString(" (negative)")
			}
		case string:
			b.WriteString(strconv.Quote(x))
		default:
			fmt.Fprint(&b, x)
		}
	}
	return b.String()
}

// keyColumns is how many columns at the front name a row.
func keyColumns(t string) int {
	switch t {
	case "edges":
		return 9
	case "names":
		return 5
	case "results":
		return 4
	case "shares":
		return 6
	case "sensitivities", "lines", "uses", "currents":
		return 3
	}
	return 1
}

// rowKey names a row in a finding.
func rowKey(t string, row []any) string {
	parts := make([]string, keyColumns(t))
	for i := range parts {
		parts[i] = strings.Trim(rowText(row[i:i+1]), `"`)
	}
	return strings.Join(parts, " ")
}

// derivedOf selects the derived rows of some versions.
func derivedOf(t table, kind, code, version string, of Kind) string {
	columns := make([]string, len(t.columns))
	for i, c := range t.columns {
		columns[i] = "d." + c
	}
	kindIs := "w.kind = d." + kind
	if kind == "" {
		kindIs = "w.kind = '" + string(of) + "'"
	}
	return fmt.Sprintf(`) SELECT %s FROM wanted w JOIN %s d ON d.laboratory = w.laboratory AND %s AND d.%s = w.code AND d.%s = w.version`,
		strings.Join(columns, ", "), t.name, kindIs, code, version)
}

// derived makes the derived rows of versions again and compares.
func (c *checker) derived(ctx context.Context, v *View, raws []Raw) error {
	expected := make(derived)
	position := make(map[wanted]int64, len(raws))
	refs := make([]wanted, len(raws))
	for i, raw := range raws {
		refs[i] = wanted{Key: raw.Key, version: raw.Version}
		position[refs[i]] = raw.Position
		rows, err := derive(raw, func(in Input) (Version[Final], error) {
			final, err := v.Version(ctx, in.Key, in.Version)
			if err != nil {
				return Version[Final]{}, err
			}
			return Decode[Final](final)
		})
		if err != nil {
			if v.q.worst != classOther || ctx.Err() != nil {
				return err
			}
			// A body that fits its hash but not its form was refused when it was recorded.
			c.find(raw.Position, "versions", raw.Ref.String(), err.Error(), "a body that rows can be derived from")
			continue
		}
		for name, r := range rows {
			expected[name] = append(expected[name], r...)
		}
	}
	for _, t := range derivedTables {
		found, err := v.derivedRows(ctx, t.table, t.kind, t.code, t.version, t.of, refs)
		if err != nil {
			return err
		}
		c.compareRows(t.name, expected[t.name], found, func(row []any) int64 {
			w := wanted{Key: Key{Laboratory: c.laboratory, Kind: t.of}}
			for i, column := range t.columns {
				switch column {
				case t.kind:
					w.Kind = Kind(fmt.Sprint(row[i]))
				case t.code:
					w.Code = fmt.Sprint(row[i])
				case t.version:
					n, _ := row[i].(int64)
					w.version = int(n)
				}
			}
			if p, ok := position[w]; ok {
				return p
			}
			return -1
		})
	}
	return nil
}

func (v *View) derivedRows(ctx context.Context, t table, kind, code, version string, of Kind, refs []wanted) ([][]any, error) {
	if of != "" {
		refs = slices.DeleteFunc(slices.Clone(refs), func(w wanted) bool { return w.Kind != of })
	}
	if len(refs) == 0 {
		return nil, nil
	}
	list, err := wantedList(refs)
	if err != nil {
		return nil, err
	}
	found, err := v.rows(ctx, len(t.columns), v.q.engine.withWanted+derivedOf(t, kind, code, version, of), list)
	if err != nil {
		return nil, fmt.Errorf("read %s: %w", t.name, err)
	}
	return found, nil
}

// rows reads rows as they are.
func (v *View) rows(ctx context.Context, width int, statement string, args ...any) ([][]any, error) {
	var all [][]any
	err := v.q.each(ctx, statement, args, func(scan func(...any) error) error {
		row, into := make([]any, width), make([]any, width)
		for i := range row {
			into[i] = &row[i]
		}
		err := scan(into...)
		all = append(all, row)
		return err
	})
	return all, err
}

// compareRows compares two sets of rows of a derived table.
func (c *checker) compareRows(t string, expected, found [][]any, position func([]any) int64) {
	want := make(map[string][]any, len(expected))
	for _, row := range expected {
		want[rowKey(t, row)] = row
	}
	for _, row := range found {
		key := rowKey(t, row)
		e, ok := want[key]
		if !ok {
			c.find(position(row), t, key, rowText(row), "no row")
			continue
		}
		delete(want, key)
		if f, e := rowText(row), rowText(e); f != e {
			c.find(position(row), t, key, f, e)
		}
	}
	for key, row := range want {
		c.find(position(row), t, key, "no row", rowText(row))
	}
}

// bulk checks the rows a version binds by a hash: a session's readings, an
// upload's bytes.
func (c *checker) bulk(ctx context.Context, v *View, raw Raw) error {
	switch raw.Form {
	case Session{}.Form():
		return c.readings(ctx, v, raw)
	case Upload{}.Form():
		return c.upload(ctx, v, raw)
	}
	return nil
}

func (c *checker) readings(ctx context.Context, v *View, raw Raw) error {
	session, err := Decode[Session](raw)
	if err != nil {
		c.find(raw.Position, "versions", raw.Ref.String(), err.Error(), "a session")
		return nil
	}
	var h blockHasher
	units := make(map[string]int)
	next, total := 1, session.Value.Readings
	place := func(from, to int) string {
		return fmt.Sprintf("%s/%s numbers %d to %d", raw.Laboratory, raw.Code, from, to)
	}
	err = v.Readings(ctx, raw.Laboratory, raw.Code, func(r Reading) error {
		if r.Number != next {
			c.find(raw.Position, "readings", place(min(next, r.Number), max(next, r.Number)), "number "+strconv.Itoa(r.Number), "number "+strconv.Itoa(next))
			next = r.Number
		}
		next++
		if r.Unit != "" {
			units[r.Unit]++
		}
		if r.Number <= total {
			h.add(&r)
		}
		return nil
	})
	if err != nil {
		return err
	}
	blocks := h.sum()
	for i := range max(len(blocks), len(session.Value.Blocks)) {
		from := i*readingsPerBlock + 1
		switch {
		case i >= len(blocks):
			c.find(raw.Position, "readings", place(from, min(from+readingsPerBlock-1, total)), "no rows", "the rows the session binds")
		case i >= len(session.Value.Blocks):
			c.find(raw.Position, "readings", place(from, next-1), "rows", "none")
		case blocks[i] != session.Value.Blocks[i]:
			c.find(raw.Position, "readings", place(from, min(from+readingsPerBlock-1, total)), "rows with hash "+blocks[i].String(), "rows with hash "+session.Value.Blocks[i].String())
		}
	}
	if h.count != total {
		c.find(raw.Position, "readings", place(1, total), strconv.Itoa(h.count)+" rows", strconv.Itoa(total))
	}
	return c.lastOfSession(ctx, v, raw, next-1, total, units)
}

const selectUsesOfSession = `SELECT laboratory, session, unit, readings FROM uses WHERE laboratory = $1 AND session = $2`

// lastOfSession checks what only the newest version of a session answers for:
// that there are no further rows, and how often each unit was used.
func (c *checker) lastOfSession(ctx context.Context, v *View, raw Raw, last, total int, units map[string]int) error {
	newest, err := v.Newest(ctx, raw.Key)
	if errors.Is(err, ErrNotFound) {
		return nil // told elsewhere
	}
	if err != nil || newest.Version != raw.Version {
		return err
	}
	if last > total {
		c.find(raw.Position, "readings", fmt.Sprintf("%s/%s numbers %d to %d", raw.Laboratory, raw.Code, total+1, last), "rows", "none")
	}
	var expected [][]any
	for unit, n := range units {
		expected = append(expected, []any{raw.Laboratory, raw.Code, unit, int64(n)})
	}
	found, err := v.rows(ctx, 4, selectUsesOfSession, raw.Laboratory, raw.Code)
	if err != nil {
		return fmt.Errorf("read uses: %w", err)
	}
	c.compareRows("uses", expected, found, func([]any) int64 { return raw.Position })
	return nil
}

func (c *checker) upload(ctx context.Context, v *View, raw Raw) error {
	u, err := Decode[Upload](raw)
	var hash Hash
	if err == nil {
		err = hash.UnmarshalText([]byte(raw.Code))
	}
	if err != nil {
		c.find(raw.Position, "versions", raw.Ref.String(), err.Error(), "an upload")
		return nil
	}
	key := raw.Laboratory + " " + raw.Code
	info, err := v.UploadInfo(ctx, raw.Laboratory, hash)
	switch {
	case errors.Is(err, ErrNotFound):
		c.find(raw.Position, "uploads", key, "no row", fmt.Sprintf("%+v", u.Value))
	case err != nil:
		return err
	case (Upload{Name: info.Name, MediaType: info.MediaType, Size: info.Size}) != u.Value:
		c.find(raw.Position, "uploads", key, fmt.Sprintf("%+v", Upload{info.Name, info.MediaType, info.Size}), fmt.Sprintf("%+v", u.Value))
	}
	_, err = c.content(ctx, v, raw.Position, hash, u.Value.Size)
	return err
}

const selectParts = `SELECT part, data FROM content WHERE laboratory = $1 AND sha256 = $2 ORDER BY part`

// content checks the parts of stored bytes; size -1 is not known.
func (c *checker) content(ctx context.Context, v *View, position int64, hash Hash, size int64) (bool, error) {
	key := func(part int) string { return fmt.Sprintf("%s %s part %d", c.laboratory, hash, part) }
	sum := sha256.New()
	next, length, intact := 0, int64(0), true
	bad := func(part int, found, expected string) {
		intact = false
		c.find(position, "content", key(part), found, expected)
	}
	err := v.q.each(ctx, selectParts, []any{c.laboratory, hash[:]}, func(scan func(...any) error) error {
		var part int
		var packed []byte
		if err := scan(&part, &packed); err != nil {
			return err
		}
		if part != next {
			bad(next, "part "+strconv.Itoa(part), "part "+strconv.Itoa(next))
		} else if part > 0 && length%contentPart != 0 {
			bad(part, "a part after the last", "none")
		}
		next = part + 1
		data, err := unpackPart(packed)
		if err != nil {
			bad(part, err.Error(), "an intact part")
			return nil
		}
		length += int64(len(data))
		sum.Write(data)
		return nil
	})
	if err != nil {
		return false, fmt.Errorf("read content %s: %w", hash, err)
	}
	found := Hash(sum.Sum(nil))
	switch {
	case next == 0:
		bad(0, "no row", "the bytes with this hash")
	case intact && found != hash:
		bad(next-1, "bytes with hash "+found.String(), "bytes with hash "+hash.String())
	case intact && size >= 0 && size != length:
		bad(next-1, fmt.Sprintf("%d bytes", length), fmt.Sprint(size))
	case intact && int64(next) != max(1, (length+contentPart-1)/contentPart):
		bad(next-1, "an empty part", "none")
	}
	return intact, nil
}
