package ledger_test

import (
	"bytes"
	"crypto/sha256"
	"encoding/hex"
	"encoding/json"
	"errors"
	"fmt"
	"math"
	"strings"
	"testing"
	"time"

	"github.com/transparency-dev/merkle/proof"
	"github.com/transparency-dev/merkle/rfc6962"
	"pgregory.net/rapid"

	"deltamoor/store/ledger"
)

// nodes stores the nodes of a tree in memory.
type nodes []ledger.Hash

func (n nodes) ReadHashes(indexes []int64) ([]ledger.Hash, error) {
	out := make([]ledger.Hash, len(indexes))
	for i, x := range indexes {
		if x >= int64(len(n)) {
			return nil, fmt.Errorf("node %d of %d", x, len(n))
		}
		out[i] = n[x]
	}
	return out, nil
}

// grow builds a tree of n leaves and returns its nodes, leaves and roots by size.
func grow(t *testing.T, n int) (nodes, []ledger.Hash, []ledger.Hash) {
	t.Helper()
	var tree ledger.Tree
	var stored nodes
	var leaves []ledger.Hash
	roots := []ledger.Hash{tree.Root()}
	for i := range n {
		leaf := ledger.LeafHash(fmt.Appendf(nil, "entry %d", i))
		leaves = append(leaves, leaf)
		for _, node := range tree.Append(leaf) {
			if node.Index != int64(len(stored)) {
				t.Fatalf("entry %d stores node %d after %d nodes", i, node.Index, len(stored))
			}
			stored = append(stored, node.Hash)
		}
		if want := ledger.NodeCount(int64(i) + 1); int64(len(stored)) != want {
			t.Fatalf("%d entries store %d nodes, want %d", i+1, len(stored), want)
		}
		roots = append(roots, tree.Root())
	}
	return stored, leaves, roots
}

func raw(hashes []ledger.Hash) [][]byte {
	out := make([][]byte, len(hashes))
	for i := range hashes {
		out[i] = hashes[i][:]
	}
	return out
}

// The roots of RFC 6962 for its own test leaves are published in
// certificate-transparency's merkle tests; transparency-dev/merkle, an
// independent implementation, is the reference here for every tree to size 130.
func TestTreeAgreesWithAnIndependentImplementation(t *testing.T) {
	const size = 130
	stored, leaves, roots := grow(t, size)
	h := rfc6962.DefaultHasher
	if empty := h.EmptyRoot(); !bytes.Equal(roots[0][:], empty) {
		t.Errorf("root of nothing is %x, want %x", roots[0], empty)
	}
	for n := int64(1); n <= size; n++ {
		root, err := ledger.Root(n, stored)
		if err != nil || root != roots[n] {
			t.Fatalf("root of size %d read from its nodes is %v, %v, want %v", n, root, err, roots[n])
		}
		for i := int64(0); i < n; i++ {
			p, err := ledger.ProveInclusion(n, i, stored)
			if err != nil {
				t.Fatal(err)
			}
			if err := ledger.CheckInclusion(p, n, root, i, leaves[i]); err != nil {
				t.Error(err)
			}
			if err := proof.VerifyInclusion(h, uint64(i), uint64(n), leaves[i][:], raw(p), root[:]); err != nil {
				t.Errorf("inclusion of %d in %d: the independent verifier says %v", i, n, err)
			}
		}
		for older := int64(0); older <= n; older++ {
			p, err := ledger.ProveConsistency(n, older, stored)
			if err != nil {
				t.Fatal(err)
			}
			if err := ledger.CheckConsistency(p, n, root, older, roots[older]); err != nil {
				t.Error(err)
			}
			if older == 0 {
				continue // the independent verifier wants no proof from the empty tree
			}
			if err := proof.VerifyConsistency(h, uint64(older), uint64(n), raw(p), roots[older][:], root[:]); err != nil {
				t.Errorf("%d continues %d: the independent verifier says %v", n, older, err)
			}
		}
	}
	if leaf := h.HashLeaf([]byte("entry 0")); !bytes.Equal(leaf, leaves[0][:]) {
		t.Errorf("leaf %x, want %x", leaves[0], leaf)
	}
}

func TestProofsOfSomethingElseAreRefused(t *testing.T) {
	stored, leaves, roots := grow(t, 70)
	rapid.Check(t, func(t *rapid.T) {
		n := rapid.Int64Range(2, 70).Draw(t, "size")
		i := rapid.Int64Range(0, n-1).Draw(t, "position")
		older := rapid.Int64Range(1, n-1).Draw(t, "older")
		inclusion, err := ledger.ProveInclusion(n, i, stored)
		if err != nil {
			t.Fatal(err)
		}
		consistency, err := ledger.ProveConsistency(n, older, stored)
		if err != nil {
			t.Fatal(err)
		}
		wrong := func(what string, err error) {
			if _, ok := errors.AsType[*ledger.ProofError](err); !ok {
				t.Errorf("%s of size %d, position %d, older %d: %v, want a ProofError", what, n, i, older, err)
			}
		}
		place := rapid.IntRange(0, len(inclusion)-1).Draw(t, "place")
		bad := append([]ledger.Hash{}, inclusion...)
		bad[place][rapid.IntRange(0, 31).Draw(t, "byte")] ^= 1
		wrong("changed inclusion", ledger.CheckInclusion(bad, n, roots[n], i, leaves[i]))
		wrong("shortened inclusion", ledger.CheckInclusion(inclusion[1:], n, roots[n], i, leaves[i]))
		wrong("inclusion of another leaf", ledger.CheckInclusion(inclusion, n, roots[n], i, ledger.Hash{1}))
		wrong("inclusion under another root", ledger.CheckInclusion(inclusion, n, roots[n-1], i, leaves[i]))
		wrong("consistency with another root", ledger.CheckConsistency(consistency, n, roots[n], older, ledger.Hash{1}))
		wrong("consistency of another root", ledger.CheckConsistency(consistency, n, ledger.Hash{1}, older, roots[older]))
		wrong("lengthened consistency", ledger.CheckConsistency(append(consistency, ledger.Hash{}), n, roots[n], older, roots[older]))
	})
	for _, c := range [][2]int64{{5, 5}, {5, -1}, {0, 0}} {
		if _, err := ledger.ProveInclusion(c[0], c[1], stored); err == nil {
			t.Errorf("position %d of size %d was proved", c[1], c[0])
		}
		if err := ledger.CheckInclusion(nil, c[0], ledger.Hash{}, c[1], ledger.Hash{}); err == nil {
			t.Errorf("position %d of size %d was accepted", c[1], c[0])
		}
	}
	for _, c := range [][2]int64{{5, 6}, {5, -1}} {
		if _, err := ledger.ProveConsistency(c[0], c[1], stored); err == nil {
			t.Errorf("that %d continues %d was proved", c[0], c[1])
		}
		if err := ledger.CheckConsistency(nil, c[0], ledger.Hash{}, c[1], ledger.Hash{}); err == nil {
			t.Errorf("that %d continues %d was accepted", c[0], c[1])
		}
	}
	if err := ledger.CheckConsistency(nil, 5, roots[5], 0, ledger.Hash{1}); err == nil {
		t.Error("an empty tree with a root was accepted")
	}
}

func TestTreeOpenedAtASizeGrowsTheSame(t *testing.T) {
	stored, leaves, roots := grow(t, 64)
	for n := int64(0); n <= 64; n++ {
		tree, err := ledger.OpenTree(n, stored[:ledger.NodeCount(n)])
		if err != nil {
			t.Fatal(err)
		}
		at := ledger.NodeCount(n)
		for i := n; i < 64; i++ {
			for _, node := range tree.Append(leaves[i]) {
				if node.Index != at || node.Hash != stored[at] {
					t.Fatalf("continued from %d, entry %d stores node %d %v, want %d %v", n, i, node.Index, node.Hash, at, stored[at])
				}
				at++
			}
		}
		if tree.Root() != roots[64] || tree.Size() != 64 {
			t.Errorf("continued from %d it ends at size %d with root %v", n, tree.Size(), tree.Root())
		}
	}
	if _, err := ledger.OpenTree(5, nodes{}); err == nil {
		t.Error("a tree without nodes was opened at size 5")
	}
	if _, err := ledger.OpenTree(-1, stored); err == nil {
		t.Error("a tree of size -1 was opened")
	}
}

func entry() ledger.Entry {
	return ledger.Entry{At: time.Date(2026, 3, 2, 8, 15, 0, 120_000_000, time.UTC), By: "mara", Code: "C4T8ZRN1HQ",
		Hash: sha256.Sum256([]byte("body")), Kind: "calibration", Laboratory: "FJO", Version: 2}
}

func TestEntryHasOneSpelling(t *testing.T) {
	e := entry()
	// sha256 of "body" by sha256sum(1).
	const want = `{"at":"2026-03-02T08:15:00.12Z","by":"mara","code":"C4T8ZRN1HQ","hash":"230d8358dc8e8890b4c58deeb62912ee2f20357ae92a5cc861b98e68fe31acb5","kind":"calibration","laboratory":"FJO","version":2}`
	if got := string(e.Bytes()); got != want {
		t.Errorf("entry\n%s, want\n%s", got, want)
	}
	canonical, err := ledger.CanonicalJSON(e.Bytes())
	if err != nil || string(canonical) != want {
		t.Errorf("canonical form\n%s, %v, want the same bytes", canonical, err)
	}
	back, err := ledger.ParseEntry(e.Bytes())
	if err != nil || back != e {
		t.Errorf("read back %+v, %v", back, err)
	}
	for _, bad := range []string{
		"", "{}", "null", want + " ", " " + want, strings.Replace(want, ":2}", ":02}", 1), strings.Replace(want, ":2}", ":0}", 1),
		strings.Replace(want, ":2}", ":2.0}", 1), strings.Replace(want, "230d", "230D", 1), strings.Replace(want, "230d", "", 1),
		strings.Replace(want, "Z\"", "+00:00\"", 1), strings.Replace(want, "12Z", "120Z", 1), strings.Replace(want, `"by"`, `"By"`, 1),
		strings.Replace(want, `"version":2`, `"version":2,"x":1`, 1), strings.Replace(want, "mara", `m\u0061ra`, 1), strings.Replace(want, "mara", "\xff", 1),
		strings.Replace(want, "2026-03-02T08", "2026-13-02T08", 1),
	} {
		if _, err := ledger.ParseEntry([]byte(bad)); err == nil {
			t.Errorf("accepted %s", bad)
		} else if e, ok := errors.AsType[*ledger.EntryError](err); !ok || e.Expected == "" {
			t.Errorf("error %v, want an EntryError that says what was expected", err)
		}
	}
}

func FuzzParseEntry(f *testing.F) {
	f.Add(entry().Bytes())
	f.Add([]byte(`{"at":"0001-01-01T00:00:00Z","by":"","code":"","hash":"","kind":"","laboratory":"","version":1}`))
	f.Fuzz(func(t *testing.T, text []byte) {
		e, err := ledger.ParseEntry(text)
		if err == nil && !bytes.Equal(e.Bytes(), text) {
			t.Fatalf("%q was accepted but is written %q", text, e.Bytes())
		}
	})
}

func testKey(t testing.TB) ledger.Key {
	t.Helper()
	k, err := ledger.NewKey(strings.NewReader("0123456789abcdef0123456789abcdef"))
	if err != nil {
		t.Fatal(err)
	}
	return k
}

func TestCheckpointIsSignedAndOpened(t *testing.T) {
	k := testKey(t)
	origin := ledger.Origin("registry.example", "FJO")
	c := ledger.Checkpoint{Origin: origin, Size: 1042, Root: ledger.LeafHash([]byte("x"))}
	if want := "registry.example/FJO\n1042\n" + c.Root.String() + "\n"; c.Text() != want {
		t.Errorf("text %q, want %q", c.Text(), want)
	}
	text, err := ledger.Sign(c, k)
	if err != nil {
		t.Fatal(err)
	}
	verifier, err := k.Verifier(origin)
	if err != nil {
		t.Fatal(err)
	}
	other, err := k.Verifier(ledger.Origin("registry.example", "OTHER"))
	if err != nil {
		t.Fatal(err)
	}
	signed, err := ledger.Open(text, other, verifier, verifier)
	if err != nil || signed.Checkpoint != c || !strings.HasPrefix(verifier, signed.Signer+"+") {
		t.Errorf("opened as %+v, %v", signed, err)
	}
	if by, err := ledger.SignedBy(text); err != nil || by != signed.Signer {
		t.Errorf("signed by %q, %v, want %q", by, err, signed.Signer)
	}
	for name, bad := range map[string][]byte{
		"another size": bytes.Replace(text, []byte("1042"), []byte("1043"), 1),
		"another root": bytes.Replace(text, []byte(c.Root.String()[:4]), []byte("AAAA"), 1),
		"nothing":      nil,
		"no signature": []byte(c.Text()),
	} {
		if s, err := ledger.Open(bad, verifier); err == nil {
			t.Errorf("%s: opened as %+v", name, s)
		}
	}
	if _, err := ledger.Open(text, other); err == nil {
		t.Error("opened with the key of another ledger")
	}
	if _, err := ledger.Open(text, "nonsense"); err == nil {
		t.Error("opened with a verifier that is none")
	}
	if _, err := ledger.SignedBy([]byte("nothing")); err == nil {
		t.Error("a text without signature is signed by somebody")
	}
	for _, bad := range []string{"", "a\n1\n", "a\n01\n" + c.Root.String() + "\n", "a\n-1\n" + c.Root.String() + "\n", "a\n1\nAAAA\n", c.Text() + "more\n", "\n1\n" + c.Root.String() + "\n"} {
		if c, err := ledger.ParseCheckpoint(bad); err == nil {
			t.Errorf("%q was read as %+v", bad, c)
		}
	}
	if _, err := ledger.Sign(ledger.Checkpoint{Origin: "has space"}, k); err == nil {
		t.Error("a checkpoint with a space in its origin was signed")
	}
}

func FuzzParseCheckpoint(f *testing.F) {
	f.Add("registry.example/FJO\n1042\nAAAAAAAAAAAAAAAAAAAAAAAAAAAAAAAAAAAAAAAAAAA=\n")
	f.Fuzz(func(t *testing.T, text string) {
		if c, err := ledger.ParseCheckpoint(text); err == nil && c.Text() != text {
			t.Fatalf("%q was accepted but is written %q", text, c.Text())
		}
	})
}

func TestKeyKeepsItsSecret(t *testing.T) {
	k := testKey(t)
	back, err := ledger.ParseKey(k.Secret() + "\n")
	if err != nil || back != k {
		t.Errorf("key read back: %v", err)
	}
	for _, text := range []string{fmt.Sprint(k), fmt.Sprintf("%+v", k), fmt.Sprintf("%#v", k), k.String()} {
		if strings.Contains(text, "0123") || strings.Contains(text, hex.EncodeToString([]byte("0123"))) || strings.Contains(text, "48 49") {
			t.Errorf("printing the key shows it: %s", text)
		}
	}
	for _, bad := range []string{"", "ed25519-seed:", "ed25519-seed:AAAA", strings.TrimPrefix(k.Secret(), "ed25519-seed:")} {
		if _, err := ledger.ParseKey(bad); err == nil || len(bad) > 20 && strings.Contains(err.Error(), bad) {
			t.Errorf("ParseKey(%q): %v, want an error that does not repeat it", bad, err)
		}
	}
	if _, err := ledger.NewKey(strings.NewReader("short")); err == nil {
		t.Error("a key was drawn from too little randomness")
	}
}

func TestCanonicalFollowsRFC8785(t *testing.T) {
	for _, c := range []struct{ in, want string }{
		// RFC 8785, 3.2.2 and 3.2.3, and its appendix B for numbers.
		{`{"numbers":[333333333.33333329,1E30,4.50,2e-3,0.000000000000000000000000001],"string":"\u20ac$\u000F\u000aA'\u0042\u0022\u005c\\\"\/","literals":[null,true,false]}`,
			`{"literals":[null,true,false],"numbers":[333333333.3333333,1e+30,4.5,0.002,1e-27],"string":"€$\u000f\nA'B\"\\\\\"/"}`},
		{`{"\u20ac":"Euro Sign","\r":"Carriage Return","\ufb33":"Hebrew Letter Dalet With Dagesh","1":"One","\ud83d\ude00":"Emoji: Grinning Face","\u0080":"Control","\u00f6":"Latin Small Letter O With Diaeresis"}`,
			`{"\r":"Carriage Return","1":"One","` + "\u0080" + `":"Control","ö":"Latin Small Letter O With Diaeresis","€":"Euro Sign","😀":"Emoji: Grinning Face","` + "\ufb33" + `":"Hebrew Letter Dalet With Dagesh"}`},
		{`[-0,-0.0,9007199254740992,9007199254740994,1e21,295147905179352830000]`, `[0,0,9007199254740992,9007199254740994,1e+21,295147905179352830000]`},
	} {
		got, err := ledger.CanonicalJSON([]byte(c.in))
		if err != nil || string(got) != c.want {
			t.Errorf("canonical form of %s\n%s, %v, want\n%s", c.in, got, err, c.want)
		}
	}
	for _, bad := range []string{"", "{", `{"a":1,"a":2}`, `"\ud800"`, "\"\xff\"", "1e400", "01", "NaN", `{"a":9007199254740993}`, "[123456789012345678901]", "[-9007199254740993]", "1 2"} {
		if got, err := ledger.CanonicalJSON([]byte(bad)); err == nil {
			t.Errorf("%s has a canonical form: %s", bad, got)
		} else if _, ok := errors.AsType[*ledger.CanonicalError](err); !ok {
			t.Errorf("%s: error %v, want a CanonicalError", bad, err)
		}
	}
}

func TestCanonicalNamesThePlaceOfWhatItRefuses(t *testing.T) {
	type line struct {
		U float64 `json:"u"`
		N int64   `json:"n,omitempty"`
	}
	type body struct {
		Lines []line         `json:"lines"`
		Text  string         `json:"text"`
		Map   map[string]any `json:"map,omitempty"`
		Skip  float64        `json:"-"`
		When  *time.Time     `json:"when,omitempty"`
	}
	for _, c := range []struct {
		body  body
		path  string
		found string
	}{
		{body{Lines: []line{{}, {U: math.NaN()}}}, "lines[1].u", "NaN"},
		{body{Lines: []line{{U: math.Inf(-1)}}}, "lines[0].u", "-Inf"},
		{body{Lines: []line{{N: 1<<53 + 1}}}, "lines[0].n", "9007199254740993"},
		{body{Text: "a\xff"}, "text", `"a\xff"`},
		{body{Map: map[string]any{"k": []any{1.0, math.NaN()}}}, "map.k[1]", "NaN"},
	} {
		_, err := ledger.Canonical(c.body)
		e, ok := errors.AsType[*ledger.CanonicalError](err)
		if !ok || e.Path != c.path || e.Found != c.found {
			t.Errorf("error %v, want %s at %s", err, c.found, c.path)
		}
	}
	now := time.Now()
	if _, err := ledger.Canonical(body{Skip: math.NaN(), When: &now}); err != nil {
		t.Errorf("what is not written was refused: %v", err)
	}
}

func TestAppendedNumbersAndStringsAreCanonical(t *testing.T) {
	rapid.Check(t, func(t *rapid.T) {
		f := rapid.Float64().Filter(func(f float64) bool { return !math.IsNaN(f) && !math.IsInf(f, 0) }).Draw(t, "number")
		want, err := ledger.Canonical(f)
		if err != nil {
			t.Fatal(err)
		}
		if got := ledger.AppendNumber(nil, f); !bytes.Equal(got, want) {
			t.Fatalf("number %s, want %s", got, want)
		}
		s := rapid.String().Draw(t, "text")
		if want, err = ledger.Canonical(s); err != nil {
			t.Fatal(err)
		}
		if got := ledger.AppendString(nil, s); !bytes.Equal(got, want) {
			t.Fatalf("text %s, want %s", got, want)
		}
	})
}

func FuzzCanonicalJSON(f *testing.F) {
	for _, s := range []string{`{"b":1,"a":[1e400,-0]}`, `"\ud83d\ude00"`, `9007199254740993`, `[1,2,{"x":null}]`, "\"\x00\""} {
		f.Add([]byte(s))
	}
	f.Fuzz(func(t *testing.T, text []byte) {
		canonical, err := ledger.CanonicalJSON(text)
		if err != nil {
			return
		}
		again, err := ledger.CanonicalJSON(canonical)
		if err != nil || !bytes.Equal(again, canonical) {
			t.Fatalf("%q becomes %q, which becomes %q, %v", text, canonical, again, err)
		}
		if !json.Valid(canonical) {
			t.Fatalf("%q becomes %q, which is no JSON", text, canonical)
		}
	})
}

func ExampleTree() {
	var tree ledger.Tree
	for _, e := range []string{"first", "second", "third"} {
		tree.Append(ledger.LeafHash([]byte(e)))
	}
	c := ledger.Checkpoint{Origin: ledger.Origin("registry.example", "FJO"), Size: tree.Size(), Root: tree.Root()}
	fmt.Print(strings.SplitAfterN(c.Text(), "\n", 3)[0], strings.SplitAfterN(c.Text(), "\n", 3)[1])
	// Output:
	// registry.example/FJO
	// 3
}

func BenchmarkAppend(b *testing.B) {
	var tree ledger.Tree
	text := entry().Bytes()
	b.ReportAllocs()
	for b.Loop() {
		tree.Append(ledger.LeafHash(text))
	}
}

func BenchmarkCheckInclusion(b *testing.B) {
	var tree ledger.Tree
	var stored nodes
	for range 1 << 12 {
		for _, n := range tree.Append(ledger.LeafHash(entry().Bytes())) {
			stored = append(stored, n.Hash)
		}
	}
	p, err := ledger.ProveInclusion(1<<12, 77, stored)
	if err != nil {
		b.Fatal(err)
	}
	for b.Loop() {
		if err := ledger.CheckInclusion(p, 1<<12, tree.Root(), 77, ledger.LeafHash(entry().Bytes())); err != nil {
			b.Fatal(err)
		}
	}
}
