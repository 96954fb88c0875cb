package exchange

import (
	"fmt"
	"math"
	"strings"
	"time"
	_ "time/tzdata" // zone rules may not depend on the machine that reads a file

	"deltamoor/store"
)

// A civil time is what a clock on the wall showed: no offset, no zone.
type civil struct {
	year, month, day, hour, minute, second, nanosecond int
}

func (c civil) in(zone *time.Location) time.Time {
	return time.Date(c.year, time.Month(c.month), c.day, c.hour, c.minute, c.second, c.nanosecond, zone)
}

// exists reports a date of the calendar and a time of the day: no 30 February, no 24:00, no 61st second.
func (c civil) exists() bool {
	t := c.in(time.UTC)
	return c.year >= 1 && t.Year() == c.year && int(t.Month()) == c.month && t.Day() == c.day &&
		c.hour >= 0 && c.hour < 24 && c.minute >= 0 && c.minute < 60 && c.second >= 0 && c.second < 60
}

// A layoutPart is a run of digits with a meaning, or literal text.
type layoutPart struct {
	token   string // YYYY MM DD hh mm ss, "" for literal
	literal string
}

// A clock reads the times of one file.
type clock struct {
	layouts [][]layoutPart // tried in turn; the first one is that of the mapping
	text    string         // the layout as the mapping writes it
	zone    *time.Location
}

const defaultLayout = "YYYY-MM-DD hh:mm:ss"

var layoutTokens = [...]string{"YYYY", "MM", "DD", "hh", "mm", "ss"}

// newClock checks zone and layout; the texts say what was expected of them, "" when they are good.
func newClock(zone, layout string) (c clock, zoneExpected, layoutExpected string) {
	c.text, c.zone = layout, time.UTC
	if zone != "" {
		// "Local" would be the zone of whatever machine reads the file.
		z, err := time.LoadLocation(zone)
		if err != nil || zone == "Local" {
			zoneExpected = `the name of an IANA time zone, for example "Europe/Helsinki"`
		} else {
			c.zone = z
		}
	}
	if layout == "" {
		c.text, c.layouts = defaultLayout, defaultLayouts()
		return c, zoneExpected, ""
	}
	parts, layoutExpected := parseLayout(layout)
	c.layouts = [][]layoutPart{parts}
	return c, zoneExpected, layoutExpected
}

func parseLayout(layout string) ([]layoutPart, string) {
	const expected = "a layout made of YYYY MM DD hh mm and perhaps ss, each once, with the characters between them"
	if len(layout) > 64 {
		return nil, expected
	}
	var parts []layoutPart
	seen := map[string]bool{}
scan:
	for rest := layout; rest != ""; {
		for _, token := range layoutTokens {
			if strings.HasPrefix(rest, token) {
				if seen[token] {
					return nil, expected
				}
				seen[token] = true
				parts = append(parts, layoutPart{token: token})
				rest = rest[len(token):]
				continue scan
			}
		}
		if n := len(parts); n > 0 && parts[n-1].token == "" {
			parts[n-1].literal += rest[:1]
		} else {
			parts = append(parts, layoutPart{literal: rest[:1]})
		}
		rest = rest[1:]
	}
	for _, token := range layoutTokens[:5] {
		if !seen[token] {
			return nil, expected
		}
	}
	return parts, ""
}

// read turns a time's text into an instant; expected is "" when it could.
func (c clock) read(text string) (i store.Instant, expected string) {
	text = plainSpaces(text)
	// With its offset a time is absolute, whatever layout and zone say.
	if len(text) >= len("2006-01-02T15:04:05Z") && text[10] == 'T' {
		if t, err := time.Parse(time.RFC3339Nano, text); err == nil {
			return instantOf(t)
		}
	}
	for _, layout := range c.layouts {
		if at, ok := readLayout(layout, text); ok {
			return c.resolve(at)
		}
	}
	return 0, fmt.Sprintf("a time as %q, or after RFC 3339 with its offset", c.text)
}

// resolve finds the one instant at which clocks in the zone showed a civil time.
func (c clock) resolve(at civil) (store.Instant, string) {
	if !at.exists() {
		return 0, "a date that is in the calendar and a time between 00:00:00 and 23:59:59"
	}
	t := at.in(c.zone)
	// time.Date picks one of two offsets without saying so. The offsets that
	// can apply are those around it: try each and keep the ones that agree.
	naive := at.in(time.UTC)
	start, end := t.ZoneBounds()
	var found []time.Time
	try := func(offset int) {
		u := naive.Add(-time.Duration(offset) * time.Second).In(c.zone)
		if _, o := u.Zone(); o != offset {
			return
		}
		for _, f := range found {
			if f.Equal(u) {
				return
			}
		}
		found = append(found, u)
	}
	_, offset := t.Zone()
	if !start.IsZero() {
		_, before := start.Add(-time.Second).Zone()
		try(before)
	}
	try(offset)
	if !end.IsZero() {
		_, after := end.Zone()
		try(after)
	}
	switch len(found) {
	case 1:
		return instantOf(found[0])
	case 0:
		return 0, fmt.Sprintf("a time that exists in %s: clocks were put forward over this one", c.zone)
	}
	return 0, fmt.Sprintf("which of the two it was, since clocks in %s showed this time twice: write %s or %s",
		c.zone, found[0].Format(time.RFC3339), found[1].Format(time.RFC3339))
}

func instantOf(t time.Time) (store.Instant, string) {
	if y := t.UTC().Year(); y < 1 || y > 9999 {
		return 0, "a year between 1 and 9999"
	}
	return store.InstantOf(t), ""
}

// readLayout matches a text against a layout. A field may lack leading zeros
// where something other than a digit ends it; seconds may have a fraction.
func readLayout(layout []layoutPart, text string) (civil, bool) {
	var at civil
	for i, p := range layout {
		if p.token == "" {
			rest, ok := strings.CutPrefix(text, p.literal)
			if !ok {
				return at, false
			}
			text = rest
			continue
		}
		most := len(p.token)
		n := 0
		for n < len(text) && n < most && text[n] >= '0' && text[n] <= '9' {
			n++
		}
		ended := i+1 == len(layout) || layout[i+1].token == ""
		if n < most && (p.token == "YYYY" || !ended || n == 0) {
			return at, false
		}
		value := 0
		for _, d := range []byte(text[:n]) {
			value = 10*value + int(d-'0')
		}
		text = text[n:]
		switch p.token {
		case "YYYY":
			at.year = value
		case "MM":
			at.month = value
		case "DD":
			at.day = value
		case "hh":
			at.hour = value
		case "mm":
			at.minute = value
		case "ss":
			at.second = value
			at.nanosecond, text = readFraction(text)
		}
	}
	return at, text == ""
}

// readFraction reads what may follow the seconds: a decimal sign and up to nine digits.
func readFraction(text string) (nanosecond int, rest string) {
	if len(text) < 2 || (text[0] != '.' && text[0] != ',') {
		return 0, text
	}
	n, unit := 1, 100_000_000
	for n < len(text) && n <= 9 && text[n] >= '0' && text[n] <= '9' {
		nanosecond += int(text[n]-'0') * unit
		unit /= 10
		n++
	}
	if n == 1 {
		return 0, text
	}
	return nanosecond, text[n:]
}

// defaultLayouts are those of ISO 8601 local times: date and time apart by a
// space or T, with or without seconds.
func defaultLayouts() [][]layoutPart {
	date := []layoutPart{{token: "YYYY"}, {literal: "-"}, {token: "MM"}, {literal: "-"}, {token: "DD"}}
	join := func(separator string, seconds bool) []layoutPart {
		l := append(date[:len(date):len(date)], layoutPart{literal: separator}, layoutPart{token: "hh"}, layoutPart{literal: ":"}, layoutPart{token: "mm"})
		if seconds {
			l = append(l, layoutPart{literal: ":"}, layoutPart{token: "ss"})
		}
		return l
	}
	return [][]layoutPart{join(" ", true), join("T", true), join(" ", false), join("T", false)}
}

// plainSpaces trims a text, makes every run of white space one plain space and
// drops characters of no width.
func plainSpaces(s string) string {
	s = trim(s)
	for i := 0; i < len(s); i++ {
		if c := s[i]; c >= 0x80 || c < ' ' || (c == ' ' && i+1 < len(s) && s[i+1] == ' ') {
			s = strings.Map(func(r rune) rune {
				if zeroWidth(r) {
					return -1
				}
				return r
			}, s)
			return strings.Join(strings.FieldsFunc(s, padding), " ")
		}
	}
	return s
}

// Serial days outside this range are no dates that a spreadsheet can show
// (1 March 1900, the first one that all programs agree on, to the end of 9999).
const (
	firstSerial = 61
	lastSerial  = 2_958_466
)

// civilOfSerial turns a workbook's day number into a civil time, rounded to
// the millisecond that such numbers can hold. Day 0 is 30 December 1899, or 1
// January 1904 (ECMA-376 part 1, 18.17.4.1).
func civilOfSerial(serial float64, from1904 bool) (at civil, ok bool) {
	day0 := time.Date(1899, 12, 30, 0, 0, 0, 0, time.UTC)
	first, last := float64(firstSerial), float64(lastSerial)
	if from1904 {
		day0 = time.Date(1904, 1, 1, 0, 0, 0, 0, time.UTC)
		first, last = 0, last-1462
	}
	if !(serial >= first && serial < last) {
		return at, false
	}
	day, fraction := math.Modf(serial)
	t := day0.AddDate(0, 0, int(day)).Add(time.Duration(math.Round(fraction*86_400_000)) * time.Millisecond)
	return civilOf(t), true
}

// timeOfSerial turns a fraction of a day into a time of the day.
func timeOfSerial(serial float64) (at civil, ok bool) {
	if !(serial >= 0 && serial < 1) {
		return at, false
	}
	ms := math.Round(serial * 86_400_000)
	if ms >= 86_400_000 {
		return at, false
	}
	return civilOf(time.UnixMilli(int64(ms)).UTC()), true
}

func civilOf(t time.Time) civil {
	return civil{t.Year(), int(t.Month()), t.Day(), t.Hour(), t.Minute(), t.Second(), t.Nanosecond()}
}

// layoutHalves splits the layout of a file that keeps date and time in two columns.
func (c clock) layoutHalves() (date, clockTime []layoutPart) {
	layout := c.layouts[0]
	for i, p := range layout {
		if p.token == "" && strings.Contains(p.literal, " ") {
			return layout[:i], layout[i+1:]
		}
	}
	return nil, nil
}

// render writes a civil time by a layout, so that a serial number and a text can be joined.
func render(layout []layoutPart, at civil) string {
	var b strings.Builder
	for _, p := range layout {
		switch p.token {
		case "YYYY":
			fmt.Fprintf(&b, "%04d", at.year)
		case "MM":
			fmt.Fprintf(&b, "%02d", at.month)
		case "DD":
			fmt.Fprintf(&b, "%02d", at.day)
		case "hh":
			fmt.Fprintf(&b, "%02d", at.hour)
		case "mm":
			fmt.Fprintf(&b, "%02d", at.minute)
		case "ss":
			fmt.Fprintf(&b, "%02d", at.second)
			if at.nanosecond != 0 {
				fmt.Fprintf(&b, ".%09d", at.nanosecond)
			}
		default:
			b.WriteString(p.literal)
		}
	}
	return b.String()
}
