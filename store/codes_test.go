package store_test

import (
	"bytes"
	"crypto/rand"
	"errors"
	"strings"
	"testing"

	"pgregory.net/rapid"

	"deltamoor/store"
)

const symbols = "0123456789ABCDEFGHJKMNPQRSTVWXYZ"

// The three examples of the specification of codes.
var codeExamples = []string{"D7K3M-9Q2XG", "C4T8Z-RN1HQ", "S1234-5678T"}

func TestParseCodeReadsTheSpecifiedExamples(t *testing.T) {
	for _, text := range codeExamples {
		code, err := store.ParseCode(text)
		if err != nil {
			t.Errorf("ParseCode(%q): %v", text, err)
			continue
		}
		if want := strings.ReplaceAll(text, "-", ""); code != want {
			t.Errorf("ParseCode(%q) = %q, want %q", text, code, want)
		}
		if back := store.FormatCode(code); back != text {
			t.Errorf("FormatCode(%q) = %q, want %q", code, back, text)
		}
	}
}

func TestParseCodeReadsWhatPeopleWrite(t *testing.T) {
	for _, text := range []string{"c4t8zrn1hq", " C4T8Z RN1HQ ", "c4t8z-rnlhq", "C4T8ZRNIHQ", "C-4-T-8-Z-R-N-1-H-Q"} {
		if code, err := store.ParseCode(text); err != nil || code != "C4T8ZRN1HQ" {
			t.Errorf("ParseCode(%q) = %q, %v, want C4T8ZRN1HQ", text, code, err)
		}
	}
	// O is read as 0: a drawn code with a zero, written with the letter.
	for {
		code, err := store.NewCode(store.LetterCalibration, rand.Reader)
		if err != nil {
			t.Fatal(err)
		}
		if !strings.Contains(code, "0") {
			continue
		}
		if got, err := store.ParseCode(strings.ReplaceAll(code, "0", "o")); err != nil || got != code {
			t.Errorf("ParseCode with o for 0 in %q = %q, %v", code, got, err)
		}
		break
	}
}

func TestParseCodeTellsMistypedFromMalformed(t *testing.T) {
	for _, c := range []struct {
		text string
		want error
	}{
		{"C4T8Z-RN1HR", store.ErrMistyped}, // last symbol
		{"4CT8Z-RN1HQ", store.ErrMistyped}, // two exchanged
		{"", store.ErrMalformed},
		{"C4T8Z-RN1H", store.ErrMalformed},   // one short
		{"C4T8Z-RN1HQ0", store.ErrMalformed}, // one long
		{"C4T8U-RN1HQ", store.ErrMalformed},  // U
		{"C4T8Z_RN1HQ", store.ErrMalformed},
		{"Ç4T8ZRN1HQ", store.ErrMalformed},
		{"0000000000", store.ErrMalformed}, // the check fits, the letter begins no code
	} {
		code, err := store.ParseCode(c.text)
		if !errors.Is(err, c.want) {
			t.Errorf("ParseCode(%q) = %q, %v, want %v", c.text, code, err, c.want)
		}
		if e, ok := errors.AsType[*store.CodeError](err); !ok || e.Expected == "" {
			t.Errorf("ParseCode(%q): error %v does not say what was expected", c.text, err)
		}
	}
}

// The symbols of a code without letter and length rules, so that the check can
// be proved for every symbol in every place: whatever the code, replacing or
// exchanging symbols changes the sum by a value that depends on the symbols
// concerned alone, since the sum is linear.
func TestCheckSymbolCatchesEveryWrongSymbolAndExchange(t *testing.T) {
	code, err := store.NewCode(store.LetterReported, bytes.NewReader([]byte{1, 2, 3, 4, 5}))
	if err != nil {
		t.Fatal(err)
	}
	mistyped := func(b []byte) bool {
		_, err := store.ParseCode(string(b))
		return errors.Is(err, store.ErrMistyped)
	}
	wrong, exchanged := 0, 0
	for place := range code {
		for _, s := range []byte(symbols) {
			b := []byte(code)
			if b[place] == s {
				continue
			}
			b[place] = s
			wrong++
			if !mistyped(b) {
				t.Errorf("%s with %c in place %d is accepted", code, s, place)
			}
		}
	}
	// Every pair of places with every pair of different symbols in them: make the
	// code valid again by its check symbol, exchange, and expect to be told.
	for i := range 10 {
		for j := i + 1; j < 10; j++ {
			for a := range symbols {
				for b := range symbols {
					text := []byte("D000000000")
					text[i], text[j] = symbols[a], symbols[b]
					if j < 9 {
						text = valid(t, text)
					} else {
						// The check symbol itself takes part: what it is follows from the rest.
						text[9] = '0'
						text = valid(t, text)
					}
					if text[i] == text[j] {
						continue
					}
					text[i], text[j] = text[j], text[i]
					exchanged++
					if !mistyped(text) {
						t.Errorf("%s is accepted after exchanging places %d and %d", text, i, j)
					}
				}
			}
		}
	}
	t.Logf("caught %d wrong symbols and %d exchanges", wrong, exchanged)
	if wrong != 310 {
		t.Errorf("tried %d wrong symbols, want 10 places times 31", wrong)
	}
}

// valid sets the check symbol by trying all.
func valid(t *testing.T, text []byte) []byte {
	t.Helper()
	out := bytes.Clone(text)
	for _, s := range []byte(symbols) {
		out[9] = s
		if _, err := store.ParseCode(string(out)); !errors.Is(err, store.ErrMistyped) {
			return out
		}
	}
	t.Fatalf("no check symbol fits %s", text)
	return nil
}

func TestNewCodeIsReadBackAndKeepsItsLetter(t *testing.T) {
	letters := "DVCSRBPAXJT"
	rapid.Check(t, func(t *rapid.T) {
		letter := rapid.SampledFrom([]byte(letters)).Draw(t, "letter")
		random := rapid.SliceOfN(rapid.Byte(), 5, 5).Draw(t, "random")
		code, err := store.NewCode(letter, bytes.NewReader(random))
		if err != nil {
			t.Fatal(err)
		}
		got, err := store.ParseCode(store.FormatCode(code))
		if err != nil || got != code || code[0] != letter {
			t.Fatalf("code %q read back as %q, %v", code, got, err)
		}
	})
	if _, err := store.NewCode('Z', rand.Reader); !errors.Is(err, store.ErrMalformed) {
		t.Errorf("NewCode('Z'): %v, want ErrMalformed", err)
	}
	if _, err := store.NewCode('D', strings.NewReader("abc")); err == nil {
		t.Error("NewCode drew a code from too little randomness")
	}
}

func TestCodeKindKnowsEveryLetter(t *testing.T) {
	// The letters of the specification; D and J name no record.
	want := map[byte]store.Kind{'V': store.KindFinal, 'C': store.KindCalibration, 'S': store.KindSession, 'R': store.KindReport,
		'B': store.KindUnit, 'P': store.KindSample, 'A': store.KindAssignment, 'X': store.KindRevision, 'T': store.KindToken}
	for _, s := range []byte(symbols) {
		if got := store.CodeKind(s); got != want[s] {
			t.Errorf("CodeKind(%c) = %q, want %q", s, got, want[s])
		}
	}
}

func FuzzParseCode(f *testing.F) {
	for _, c := range append(codeExamples, "", "u", "\xff", "C4T8Z-RN1HR", "０１２３４５６７８９") {
		f.Add(c)
	}
	f.Fuzz(func(t *testing.T, text string) {
		code, err := store.ParseCode(text)
		if err != nil {
			if !errors.Is(err, store.ErrMistyped) && !errors.Is(err, store.ErrMalformed) {
				t.Fatalf("ParseCode(%q): %v is neither mistyped nor malformed", text, err)
			}
			return
		}
		again, err := store.ParseCode(store.FormatCode(code))
		if err != nil || again != code || len(code) != 10 {
			t.Fatalf("ParseCode(%q) = %q, which reads back as %q, %v", text, code, again, err)
		}
	})
}
