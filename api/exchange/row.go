package exchange

import (
	"fmt"
	"math"
	"strconv"
	"strings"

	"deltamoor/api/registry"
	"deltamoor/store"
)

// at returns a cell of the row; what the row is too short for is empty.
func at(cells []cell, c column) cell {
	if c.index < 0 || c.index >= len(cells) {
		return cell{}
	}
	return cells[c.index]
}

func (t *tableReader) complain(c column, found, expected string) {
	t.faults.add(placeOf(t.row, c.heading), found, expected)
}

func (t *tableReader) readRow(cells []cell) {
	width := len(t.columns.headings)
	if n := len(cells); n > width && !allEmpty(cells[width:]) || n < width && !t.source.ragged {
		t.faults.add(placeOf(t.row, ""), fmt.Sprintf("%d cells", n), fmt.Sprintf("%d, as the heading row has", width))
		t.attempted++
		return
	}
	f := t.columns
	before := t.faults.count()
	common := registry.RawReading{
		Name:        t.text(cells, f.name),
		Role:        t.role(cells, f.role),
		Unit:        t.text(cells, f.unit),
		Analysis:    t.text(cells, f.analysis),
		Preparation: t.text(cells, f.preparation),
		Position:    t.whole(cells, f.position),
		Peak:        t.whole(cells, f.peak),
		Time:        t.time(cells),
		Amount:      t.amount(cells),
		Compound:    t.text(cells, f.compound),
		Retention:   t.optional(cells, f.retention, false),
		Width:       t.optional(cells, f.width, false),
		WidthBy:     t.mapping.WidthBy,
		Group:       t.text(cells, f.group),
		Warning:     t.text(cells, f.warning),
	}
	named := t.faults.count() == before
	gave := false
	for i, q := range f.quantities {
		if q.when.mapped() {
			k := at(cells, q.when)
			if k.fault != "" {
				t.complain(q.when, k.fault, "a text that the condition of "+q.quantity+" can look at")
				continue
			}
			if plainSpaces(k.text) != q.equals {
				continue
			}
		}
		t.attempted++
		sofar := t.faults.count()
		raw := t.optional(cells, q.raw, true)
		bad := t.faults.count() != sofar
		if raw == nil {
			if !q.optional && !bad {
				t.complain(q.raw, "an empty cell", "a raw delta, since "+q.quantity+" is not optional in the mapping")
			}
			// A bad raw delta has been complained of; so must be the cells beside it.
			if bad {
				t.uncertainty(cells, q.u)
				t.optional(cells, q.size, false)
			}
			continue
		}
		r := common
		r.Quantity, r.Raw = q.quantity, *raw
		r.U = t.uncertainty(cells, q.u)
		r.Size = t.optional(cells, q.size, false)
		r.Intensity = t.optional(cells, q.intensity, false)
		r.GasIntensity = t.optional(cells, q.gasIntensity, false)
		r.GasRatio = t.optional(cells, q.gasRatio, false)
		gave = true
		if t.faults.count() > 0 {
			continue // nothing will be imported: from here only the faults matter
		}
		t.table.Readings = append(t.table.Readings, r)
		t.origins = append(t.origins, origin{int32(t.row), int32(i)})
	}
	if gave && named && common.Name == "" {
		t.complain(f.name, "an empty cell", "the name of a material or sample")
	}
}

// longestText bounds names and remarks.
const longestText = 1000

// text reads a name or remark. Its white space is made plain, because a name
// with a no-break space in it would be another name that looks the same.
func (t *tableReader) text(cells []cell, c column) string {
	k := at(cells, c)
	if k.fault != "" {
		t.complain(c, k.fault, "a text")
		return ""
	}
	s := plainSpaces(k.text)
	if len(s) > longestText {
		t.complain(c, fmt.Sprintf("a text of %d bytes", len(s)), fmt.Sprintf("at most %d", longestText))
		return ""
	}
	if s == "" {
		return ""
	}
	// Copied, so that a short name does not keep the whole file in memory, and
	// once each, because columns repeat themselves.
	kept, ok := t.texts[s]
	if !ok {
		kept = strings.Clone(s)
		t.texts[kept] = kept
	}
	return kept
}

func (t *tableReader) role(cells []cell, c column) string {
	word := t.text(cells, c)
	if word == "" {
		return ""
	}
	role, ok := t.roles[strings.ToLower(word)]
	if !ok {
		expected := "one of the roles " + roleWords()
		if own := sortedKeys(t.mapping.RoleWords); len(own) > 0 {
			expected += ", or a word of the mapping: " + quoteAll(own)
		}
		t.complain(c, quote(word), expected)
		return ""
	}
	return string(role)
}

// optional reads a number; nil for an empty cell and after a complaint.
func (t *tableReader) optional(cells []cell, c column, perMil bool) *float64 {
	k := at(cells, c)
	var x float64
	switch {
	case k.fault != "":
		t.complain(c, k.fault, aNumber(t.decimal))
		return nil
	case k.number:
		stored, ok := readStored(k.text)
		if !ok {
			t.complain(c, quote(k.text), "a number")
			return nil
		}
		x = stored
	case trim(k.text) == "":
		return nil
	default:
		read, expected := readNumber(k.text, t.decimal, perMil)
		if expected != "" {
			t.complain(c, quote(k.text), expected)
			return nil
		}
		x = read
	}
	return &x
}

func (t *tableReader) uncertainty(cells []cell, c column) *float64 {
	u := t.optional(cells, c, true)
	if u != nil && *u < 0 {
		t.complain(c, quote(at(cells, c).text), "a standard uncertainty, which is not negative")
		return nil
	}
	return u
}

// whole reads a position or a peak's number.
func (t *tableReader) whole(cells []cell, c column) *int {
	k := at(cells, c)
	s := trim(k.text)
	if k.fault == "" && s == "" {
		return nil
	}
	n, err := strconv.Atoi(s)
	if k.number {
		// A program may store 3 as 3.0.
		if x, ok := readStored(s); ok && x >= 0 && x < 1e9 && x == float64(int(x)) {
			n, err = int(x), nil
		}
	}
	if k.fault != "" || err != nil || n < 0 || n > 1_000_000_000 || s[0] == '+' {
		found := k.fault
		if found == "" {
			found = quote(k.text)
		}
		t.complain(c, found, "a whole number, 0 or more")
		return nil
	}
	return &n
}

// time reads the time of a row; nil when its cells are empty.
func (t *tableReader) time(cells []cell) *store.Instant {
	f := t.columns
	if !f.time.mapped() {
		return nil
	}
	k, d := at(cells, f.time), at(cells, f.date)
	for _, p := range []struct {
		column
		cell
	}{{f.time, k}, {f.date, d}} {
		if p.fault != "" {
			t.complain(p.column, p.fault, "a time")
			return nil
		}
	}
	timeEmpty, dateEmpty := trim(k.text) == "", trim(d.text) == ""
	var i store.Instant
	var expected string
	found := quote(k.text)
	switch {
	case f.date.mapped() && timeEmpty != dateEmpty:
		missing, there := f.time, f.date
		if dateEmpty {
			missing, there = f.date, f.time
		}
		t.complain(missing, "an empty cell", "a value, since column "+quote(there.heading)+" of the same row has one")
		return nil
	case timeEmpty:
		return nil
	case f.date.mapped():
		found = quote(d.text + " " + k.text)
		i, expected = t.dateAndTime(d, k)
	case k.number:
		i, found, expected = t.serial(k.text)
	default:
		i, expected = t.clock.read(k.text)
	}
	if expected != "" {
		t.complain(f.time, found, expected)
		return nil
	}
	return &i
}

// serial reads a workbook's day number. found is the number, with what the
// workbook shows for it.
func (t *tableReader) serial(text string) (i store.Instant, found, expected string) {
	found = quote(text)
	x, ok := readStored(text)
	at, valid := civilOfSerial(x, t.source.from1904)
	if !ok || !valid {
		return 0, found, "a date with a time, as the workbook stores it or as text"
	}
	i, expected = t.clock.resolve(at)
	if expected != "" {
		found += ", which is " + render(defaultLayouts()[0], at)
	}
	return i, found, expected
}

// dateAndTime joins two cells, either of which may be a workbook's number.
func (t *tableReader) dateAndTime(date, clockTime cell) (store.Instant, string) {
	dateLayout, timeLayout := t.clock.layoutHalves()
	first, second := date.text, clockTime.text
	if date.number {
		x, ok := readStored(date.text)
		at, valid := civilOfSerial(x, t.source.from1904)
		if !ok || !valid {
			return 0, "a date, as the workbook stores it or as text"
		}
		first = render(dateLayout, at)
	}
	if clockTime.number {
		x, ok := readStored(clockTime.text)
		// A cell that shows a time only may hold the day as well.
		_, fraction := math.Modf(x)
		at, valid := timeOfSerial(fraction)
		if !ok || !valid {
			return 0, "a time of the day, as the workbook stores it or as text"
		}
		second = render(timeLayout, at)
	}
	return t.clock.read(first + " " + second)
}

// amount is the test portion of a row in mg.
func (t *tableReader) amount(cells []cell) *float64 {
	x := t.optional(cells, t.columns.amount, false)
	if x == nil {
		return nil
	}
	v := *x
	switch t.columns.amountUnit {
	case "ug":
		v /= 1000
	case "g":
		v *= 1000
	}
	return &v
}
