package demo

import (
	"bytes"
	"strings"
	"testing"
	"unicode/utf8"

	"deltamoor/api/exchange"
	"deltamoor/store"
)

func TestPrintedTextIsWholeAndFitsAHundredColumns(t *testing.T) {
	p, s := built(t)
	var b bytes.Buffer
	if err := Print(t.Context(), &b, p.Registry, s); err != nil {
		t.Fatal(err)
	}
	text := b.String()
	for i, line := range strings.Split(text, "\n") {
		if n := utf8.RuneCountInString(line); n > 100 {
			t.Errorf("line %d has %d columns: %s", i+1, n, line)
		}
	}
	for _, l := range s.Reports[0].Lines {
		if !strings.Contains(text, store.FormatCode(l.Code)) || !strings.Contains(text, store.FormatCode(l.Sample)) {
			t.Errorf("the report does not show %s of sample %s", store.FormatCode(l.Code), store.FormatCode(l.Sample))
		}
	}
	for _, word := range []string{"A1", "IAEA-CH-7", "USGS41", scaleC, "approved by tobren", "brings ", "safety data sheet", "local rules", "trained staff"} {
		if !strings.Contains(text, word) {
			t.Errorf("%q is not in the text", word)
		}
	}
	for _, word := range []string{"NaN", "%!"} {
		if strings.Contains(text, word) {
			t.Errorf("%q is in the text", word)
		}
	}
}

func TestDecimalsGiveTwoDigitsOfU(t *testing.T) {
	for _, c := range []struct {
		u    float64
		want int
	}{{0.052, 3}, {0.0996, 2}, {0.1, 2}, {1.13, 1}, {9.96, 0}, {12, 0}, {450, 0}, {0, 3}} {
		if got := exchange.Decimals(c.u); got != c.want {
			t.Errorf("u = %v: %d decimals, want %d", c.u, got, c.want)
		}
	}
}
