package main

import (
	"encoding/json"
	"errors"
	"fmt"
	"io"
	"io/fs"
	"math"
	"slices"
	"strconv"
	"strings"
	"time"
	"unicode/utf8"

	"github.com/vbauerster/mpb/v8"
	"github.com/vbauerster/mpb/v8/decor"

	"deltamoor/api/registry"
)

// printJSON writes an answer for programs.
func (p *program) printJSON(answer any) error { return writeJSON(p.stdout, answer) }

func writeJSON(w io.Writer, answer any) error {
	encoder := json.NewEncoder(w)
	encoder.SetEscapeHTML(false)
	encoder.SetIndent("", "  ")
	return encoder.Encode(answer)
}

// A table is rows of cells under headings. A heading that begins with > sets
// its column to the right, as numbers want it.
type table struct {
	headings []string
	rows     [][]string
}

func newTable(headings ...string) *table { return &table{headings: headings} }

func (t *table) add(cells ...string) { t.rows = append(t.rows, cells) }

// print writes the table with its columns two spaces apart. A table without
// rows is not printed at all.
func (t *table) print(w io.Writer) error {
	if len(t.rows) == 0 {
		return nil
	}
	head := make([]string, len(t.headings))
	right := make([]bool, len(t.headings))
	widths := make([]int, len(t.headings))
	for i, h := range t.headings {
		head[i], right[i] = strings.CutPrefix(h, ">")
	}
	lines := append([][]string{head}, t.rows...)
	for _, line := range lines {
		for i, cell := range line {
			widths[i] = max(widths[i], utf8.RuneCountInString(cell))
		}
	}
	var b strings.Builder
	for _, line := range lines {
		var row strings.Builder
		for i, cell := range line {
			if i > 0 {
				row.WriteString("  ")
			}
			padding := strings.Repeat(" ", widths[i]-utf8.RuneCountInString(cell))
			if right[i] {
				row.WriteString(padding + cell)
			} else {
				row.WriteString(cell + padding)
			}
		}
		b.WriteString(strings.TrimRight(row.String(), " ") + "\n")
	}
	_, err := io.WriteString(w, b.String())
	return err
}

// printPairs writes names and their values, one pair a line.
func printPairs(w io.Writer, namesAndValues ...string) error {
	width := 0
	for i := 0; i < len(namesAndValues); i += 2 {
		width = max(width, utf8.RuneCountInString(namesAndValues[i]))
	}
	var b strings.Builder
	for i := 0; i+1 < len(namesAndValues); i += 2 {
		name := namesAndValues[i]
		b.WriteString(name + strings.Repeat(" ", width-utf8.RuneCountInString(name)) + "  " + namesAndValues[i+1] + "\n")
	}
	_, err := io.WriteString(w, b.String())
	return err
}

// shortest stands for "as many decimals as the number has" where decimals go.
const shortest = -1

// decimals tells how many decimals a column of values gets: those of two
// significant digits of its median standard uncertainty (a median that rounds
// up to the next power of ten counts as that power). Without any uncertainty
// above zero it is shortest.
func decimals(uncertainties ...float64) int {
	us := slices.DeleteFunc(slices.Clone(uncertainties), func(u float64) bool { return !(u > 0) || math.IsInf(u, 0) })
	if len(us) == 0 {
		return shortest
	}
	slices.Sort(us)
	median := us[len(us)/2]
	if len(us)%2 == 0 {
		median = (us[len(us)/2-1] + median) / 2
	}
	text := strconv.FormatFloat(median, 'e', 1, 64) // d.de±xx, rounded to two digits
	exponent, err := strconv.Atoi(text[strings.IndexByte(text, 'e')+1:])
	if err != nil {
		return shortest
	}
	return max(0, 1-exponent)
}

// number writes a value for people, with a true minus sign. What is no number is a dash.
func number(x float64, decimals int) string {
	if math.IsNaN(x) {
		return "–"
	}
	if math.IsInf(x, 0) {
		return strings.Replace(strings.Replace(strconv.FormatFloat(x, 'g', -1, 64), "+Inf", "∞", 1), "-Inf", "−∞", 1)
	}
	text := strconv.FormatFloat(x, 'f', decimals, 64)
	if decimals == shortest && x != 0 && (math.Abs(x) < 1e-6 || math.Abs(x) >= 1e15) {
		text = strconv.FormatFloat(x, 'e', -1, 64)
	}
	if strings.Trim(text, "-0.") == "" {
		text = strings.TrimPrefix(text, "-") // −0.00 is 0.00
	}
	return strings.Replace(text, "-", "−", 1)
}

// optional writes what x points to, and a dash where there is nothing.
func optional(x *float64, decimals int) string {
	if x == nil {
		return "–"
	}
	return number(*x, decimals)
}

// significant writes a statistic that has no uncertainty of its own with n significant digits.
func significant(x *float64, n int) string {
	if x == nil {
		return "–"
	}
	return strings.Replace(strconv.FormatFloat(*x, 'g', n, 64), "-", "−", 1)
}

// A progress shows on a terminal how far a long piece of work has come.
// Elsewhere it shows nothing: a log wants no bars.
type progress struct {
	container *mpb.Progress
	bar       *mpb.Bar
}

// startProgress begins a bar for work of the given number of steps; 0 when it
// is not known yet.
func (p *program) startProgress(what string, total int64) *progress {
	if !p.terminal {
		return &progress{}
	}
	container := mpb.New(mpb.WithOutput(p.stderr), mpb.WithWidth(60), mpb.WithAutoRefresh(), mpb.WithRefreshRate(100*time.Millisecond))
	bar := container.AddBar(total,
		mpb.PrependDecorators(decor.Name(what, decor.WCSyncSpaceR), decor.CountersNoUnit("%d of %d", decor.WCSyncSpace)),
		mpb.AppendDecorators(decor.Percentage(decor.WCSyncSpace), decor.AverageETA(decor.ET_STYLE_GO, decor.WCSyncSpace)))
	return &progress{container, bar}
}

// reached tells how many steps of how many are done.
func (g *progress) reached(done, total int64) {
	if g.bar != nil {
		g.bar.SetTotal(total, false)
		g.bar.SetCurrent(done)
	}
}

// end takes the bar to its end, or leaves it where the work stopped.
func (g *progress) end(completed bool) {
	if g.bar == nil {
		return
	}
	if completed {
		g.bar.SetTotal(-1, true)
	} else {
		g.bar.Abort(false)
	}
	g.container.Wait()
}

// A refusal is an error as --json shows it on stderr.
type refusal struct {
	Meaning registry.Meaning     `json:"meaning"`
	Message string               `json:"message"`
	Errors  []registry.Complaint `json:"errors,omitempty"`
	// More counts faults beyond those listed.
	More int `json:"more,omitempty"`
}

// printRefusal says on stderr why a command did nothing, in the form that was asked for.
func (p *program) printRefusal(who string, err error) {
	if !p.json {
		fmt.Fprintf(p.stderr, "%s: %v\n", who, err)
		return
	}
	answer := refusal{Meaning: registry.MeaningOf(err), Message: err.Error()}
	var detailed *registry.Error
	switch {
	case errors.As(err, &detailed):
		answer.Message, answer.Errors, answer.More = detailed.Message, detailed.Complaints, detailed.More
	case errors.Is(err, fs.ErrNotExist):
		answer.Meaning = registry.NotFound
	}
	text, err := json.Marshal(answer)
	if err != nil {
		text = []byte(strconv.Quote(answer.Message))
	}
	fmt.Fprintf(p.stderr, "%s\n", text)
}
