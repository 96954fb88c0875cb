package exchange

import (
	"archive/zip"
	"bytes"
	"fmt"
	"io"
	"math/rand/v2"
	"strings"
	"testing"

	"github.com/google/go-cmp/cmp"

	"deltamoor/api/registry"
)

func TestPackOfAReportedDeltaVerifiesWithoutItsRegistry(t *testing.T) {
	c := openChain(t, true)
	p := c.pack()
	b := packBytes(t, p)
	if !bytes.Equal(b, packBytes(t, c.pack())) {
		t.Error("the same delta packed twice gives other bytes")
	}
	verifier, err := c.key.Verifier("registry.example/FJO")
	c.must(err)
	last, err := c.LastCheckpoint(c.ctx, c.reader)
	c.must(err)
	v, err := verifyBytes(t, b, registry.PackCheckRequest{Verifiers: []string{verifier}, Outside: [][]byte{last.Note}})
	c.must(err)
	for _, f := range v.Findings {
		t.Error(f)
	}
	// 3 calibrations, 2 assigned values, 1 final value, 1 line.
	if v.Recomputed != 7 || v.Equal != 7 {
		t.Errorf("recomputed %d, equal %d, want 7 and 7", v.Recomputed, v.Equal)
	}
	// Readings: 5 × 4, 4 × 4 and 5 × 4.
	if v.Readings != 56 || v.Versions != len(p.Versions) {
		t.Errorf("readings %d, versions %d of %d", v.Readings, v.Versions, len(p.Versions))
	}
	for _, l := range v.Ledgers {
		if len(l.SignedBy) != 1 || l.Outside != (l.Origin == "registry.example/FJO") {
			t.Errorf("ledger %+v, want one signer, known from outside for FJO", l)
		}
	}
	for _, note := range v.Notes {
		if strings.Contains(note, "archive") {
			t.Errorf("note on a pack as it was written: %s", note)
		}
	}
	back, err := ReadPack(bytes.NewReader(b), int64(len(b)))
	c.must(err)
	if d := cmp.Diff(p, back); d != "" {
		t.Errorf("read back (-written +read):\n%s", d)
	}
	stored, err := c.Trace(c.ctx, c.reader, "", c.code, 0)
	c.must(err)
	packed, err := registry.PackTrace(c.ctx, back)
	c.must(err)
	if d := cmp.Diff(stored.Edges, packed.Edges); d != "" {
		t.Errorf("edges of the trace (-registry +pack):\n%s", d)
	}
	for i := range stored.Nodes {
		if stored.Nodes[i].Ref != packed.Nodes[i].Ref || stored.Nodes[i].RecordedAt != packed.Nodes[i].RecordedAt || stored.Nodes[i].State != packed.Nodes[i].State {
			t.Errorf("node %d: %+v, in the pack %+v", i, stored.Nodes[i], packed.Nodes[i])
		}
	}
}

func TestPackLeavesOutWhatNamesOtherClients(t *testing.T) {
	c := openChain(t, false)
	p := c.pack()
	// Of three sessions, the last alone has the other client's sample. The files
	// of the first two name it in the fixture for the test's sake, and are the
	// pack's client's own as far as the registry can tell.
	if len(p.Withheld) != 1 || len(p.Uploads) != 2 {
		t.Fatalf("withheld %v, uploads %d, want 1 and 2", p.Withheld, len(p.Uploads))
	}
	for _, v := range p.Versions {
		if bytes.Contains(v.Body, []byte(c.foreign)) {
			t.Errorf("%s names the other client's sample", v.File)
		}
	}
	whole, err := c.PackWithUploads(c.ctx, c.reader, c.code)
	c.must(err)
	if len(whole.Withheld) != 0 || len(whole.Uploads) != 3 {
		t.Errorf("for an assessor: withheld %v, uploads %d, want 0 and 3", whole.Withheld, len(whole.Uploads))
	}
	for name, p := range map[string]registry.Pack{"client": p, "assessor": whole} {
		v, err := verifyBytes(t, packBytes(t, p), registry.PackCheckRequest{})
		c.must(err)
		if !v.Clean() || !strings.Contains(strings.Join(v.Notes, "\n"), "not signed") {
			t.Errorf("%s: findings %v, notes %v; want none, and that it is not signed", name, v.Findings, v.Notes)
		}
	}
}

func TestPackFollowsAReplacedKey(t *testing.T) {
	c := openChain(t, true)
	c.pack()
	key, err := c.key.Verifier("registry.example/FJO")
	c.must(err)
	replacement := c.key
	for i := byte(1); replacement == c.key; i++ {
		replacement = keyOf(t, i)
	}
	_, err = c.RotateKey(c.ctx, "FJO", "ada", "yearly", c.key, replacement)
	c.must(err)
	r := registry.New(c.store, registry.Options{Name: "registry.example", Key: &replacement})
	// The ledger of common is not rotated here, so it still asks for the old key.
	if _, err := r.Pack(c.ctx, c.reader, c.code); err == nil {
		t.Fatal("a key that common does not know signed it")
	}
	_, err = c.RotateKey(c.ctx, "common", "ada", "yearly", c.key, replacement)
	c.must(err)
	p, err := r.Pack(c.ctx, c.reader, c.code)
	c.must(err)
	b := packBytes(t, p)
	v, err := verifyBytes(t, b, registry.PackCheckRequest{Verifiers: []string{key}}) // the old key is the one known outside
	c.must(err)
	if !v.Clean() {
		t.Fatalf("findings: %v", v.Findings)
	}
	// Without the old key's checkpoint nothing leads from the old key to the new.
	for i, l := range p.Ledgers {
		for j, k := range l.Checkpoints {
			if strings.Contains(k.File, key[len("registry.example/FJO+"):][:8]) {
				p.Ledgers[i].Checkpoints = append(p.Ledgers[i].Checkpoints[:j:j], l.Checkpoints[j+1:]...)
				break
			}
		}
	}
	v, err = verifyBytes(t, packBytes(t, p), registry.PackCheckRequest{})
	c.must(err)
	if v.Clean() || v.Findings[0].File != "versions/FJO/key/ledger.2.json" {
		t.Errorf("without the old key's signature: %v, want versions/FJO/key/ledger.2.json named", v.Findings)
	}
}

type zipFile struct {
	name string
	data []byte
}

func unzip(t testing.TB, b []byte) []zipFile {
	t.Helper()
	z, err := zip.NewReader(bytes.NewReader(b), int64(len(b)))
	if err != nil {
		t.Fatal(err)
	}
	var out []zipFile
	for _, f := range z.File {
		r, err := f.Open()
		if err != nil {
			t.Fatal(err)
		}
		data, err := io.ReadAll(r)
		if err != nil {
			t.Fatal(err)
		}
		out = append(out, zipFile{f.Name, data})
	}
	return out
}

func rezip(t testing.TB, files []zipFile) []byte {
	t.Helper()
	var b bytes.Buffer
	z := zip.NewWriter(&b)
	for _, f := range files {
		w, err := z.CreateHeader(&zip.FileHeader{Name: f.name, Method: zip.Store})
		if err != nil {
			t.Fatal(err)
		}
		if _, err := w.Write(f.data); err != nil {
			t.Fatal(err)
		}
	}
	if err := z.Close(); err != nil {
		t.Fatal(err)
	}
	return b.Bytes()
}

// relist writes pack.json anew over changed files, as somebody would who knows the layout.
func relist(t testing.TB, files []zipFile) []zipFile {
	t.Helper()
	var named []namedFile
	var m manifest
	for _, f := range files {
		if f.name == packManifest {
			if err := packJSON(map[string][]byte{packManifest: f.data}, packManifest, &m); err != nil {
				t.Fatal(err)
			}
		} else {
			named = append(named, namedFile(f))
		}
	}
	text, err := manifestText(m, named)
	if err != nil {
		t.Fatal(err)
	}
	out := []zipFile{}
	for _, f := range named {
		out = append(out, zipFile(f))
	}
	return append(out, zipFile{packManifest, text})
}

// A tampered pack is told, and the file that was touched is named, whether or
// not pack.json was made to agree.
func TestEveryTamperingOfAPackIsNamed(t *testing.T) {
	c := openChain(t, true)
	b := packBytes(t, c.pack())
	original := unzip(t, b)
	if v, err := verifyBytes(t, rezip(t, original), registry.PackCheckRequest{}); err != nil || !v.Clean() || !strings.Contains(strings.Join(v.Notes, "\n"), "archive") {
		t.Fatalf("the same files packed anew: %v %v %v, want clean with a note", err, v.Findings, v.Notes)
	}
	random := rand.New(rand.NewPCG(11, 12))
	kinds := map[string]int{}
	const rounds = 350
	for round := range rounds {
		files := make([]zipFile, len(original))
		for i, f := range original {
			files[i] = zipFile{f.name, bytes.Clone(f.data)}
		}
		i := random.IntN(len(files))
		touched := []string{files[i].name}
		kind := []string{"flip", "flip", "drop", "add", "swap", "cut", "line"}[round%7]
		switch kind {
		case "flip":
			at := random.IntN(len(files[i].data))
			files[i].data[at] ^= byte(1 + random.IntN(255))
		case "drop":
			files = append(files[:i:i], files[i+1:]...)
		case "add":
			name := fmt.Sprintf("versions/FJO/sample/P%d.1.json", random.IntN(1000))
			if random.IntN(2) == 0 {
				name = fmt.Sprintf("notes/%d.txt", random.IntN(1000))
			}
			touched = []string{name}
			files = append(files, zipFile{name, bytes.Clone(files[i].data)})
		case "swap":
			j := (i + 1 + random.IntN(len(files)-1)) % len(files)
			touched = append(touched, files[j].name)
			files[i].data, files[j].data = files[j].data, files[i].data
		case "cut":
			files[i].data = files[i].data[:random.IntN(len(files[i].data))]
		case "line": // a reading's digits, or a version's
			at := bytes.IndexAny(files[i].data, "123456789")
			if at < 0 {
				continue
			}
			files[i].data[at] = '1' + (files[i].data[at]-'0')%9
		}
		agree := round%2 == 1 && kind != "drop" && touched[0] != packManifest && touched[len(touched)-1] != packManifest
		if agree {
			files = relist(t, files)
		}
		kinds[kind]++
		v, err := verifyBytes(t, rezip(t, files), registry.PackCheckRequest{})
		var told string
		switch {
		case err != nil:
			told = err.Error()
		case v.Clean():
			t.Errorf("round %d: %s of %v (pack.json agrees: %v) is not noticed", round, kind, touched, agree)
			continue
		default:
			for _, f := range v.Findings {
				told += f.String() + "\n"
			}
		}
		named := false
		for _, name := range touched {
			named = named || strings.Contains(told, name)
		}
		if !named {
			t.Errorf("round %d: %s of %v (pack.json agrees: %v) is told without its name:\n%s", round, kind, touched, agree, told)
		}
	}
	if len(kinds) != 6 {
		t.Errorf("kinds tried: %v", kinds)
	}
}

// A flipped byte of the archive itself never passes as the pack that was written.
func TestFlippedByteOfTheArchiveIsNoticed(t *testing.T) {
	c := openChain(t, true)
	b := packBytes(t, c.pack())
	random := rand.New(rand.NewPCG(3, 4))
	for range 150 {
		changed := bytes.Clone(b)
		at := random.IntN(len(b))
		changed[at] ^= byte(1 + random.IntN(255))
		v, err := verifyBytes(t, changed, registry.PackCheckRequest{})
		if err == nil && v.Clean() && !strings.Contains(strings.Join(v.Notes, "\n"), "archive") {
			t.Errorf("byte %d of %d changed: not noticed", at, len(b))
		}
	}
}

func TestPackMadeUpWholeIsRefusedAgainstAKeyFromOutside(t *testing.T) {
	c := openChain(t, true)
	forger := openChain(t, false)
	forged := keyOf(t, 77)
	r := registry.New(forger.store, registry.Options{Name: "registry.example", Key: &forged})
	p, err := r.Pack(forger.ctx, forger.reader, forger.code)
	c.must(err)
	b := packBytes(t, p)
	verifier, err := c.key.Verifier("registry.example/FJO")
	c.must(err)
	v, err := verifyBytes(t, b, registry.PackCheckRequest{Verifiers: []string{verifier}})
	c.must(err)
	if v.Clean() {
		t.Error("a pack signed by another key passes against the laboratory's own")
	}
	if v, err = verifyBytes(t, b, registry.PackCheckRequest{}); err != nil || !strings.Contains(strings.Join(v.Notes, "\n"), "came with the pack") {
		t.Errorf("without a key from outside: %v, notes %v; want to be told that the key came with the pack", err, v.Notes)
	}
}

func TestReadPackRefusesBombsAndPaths(t *testing.T) {
	bomb := func(name string, n int) []byte {
		var b bytes.Buffer
		z := zip.NewWriter(&b)
		w, err := z.CreateHeader(&zip.FileHeader{Name: name, Method: zip.Deflate})
		if err != nil {
			t.Fatal(err)
		}
		zeros := make([]byte, 1<<20)
		for range n {
			if _, err := w.Write(zeros); err != nil {
				t.Fatal(err)
			}
		}
		if err := z.Close(); err != nil {
			t.Fatal(err)
		}
		return b.Bytes()
	}
	many := func() []byte {
		var b bytes.Buffer
		z := zip.NewWriter(&b)
		for i := range MaxPackFiles + 1 {
			if _, err := z.CreateHeader(&zip.FileHeader{Name: fmt.Sprint("notes/", i)}); err != nil {
				t.Fatal(err)
			}
		}
		if err := z.Close(); err != nil {
			t.Fatal(err)
		}
		return b.Bytes()
	}
	for name, c := range map[string]struct {
		data []byte
		want string
	}{
		"no zip":       {[]byte("hello"), "expected a ZIP file"},
		"bomb":         {bomb("versions/big", 70), "expected at most"},
		"many":         {many(), "expected at most 20000"},
		"parent":       {rezip(t, []zipFile{{"../../etc/x", nil}}), "a plain relative one"},
		"absolute":     {rezip(t, []zipFile{{"/etc/x", nil}}), "a plain relative one"},
		"backslash":    {rezip(t, []zipFile{{`versions\x`, nil}}), "a plain relative one"},
		"drive":        {rezip(t, []zipFile{{"C:x", nil}}), "a plain relative one"},
		"twice":        {rezip(t, []zipFile{{"a", nil}, {"a", nil}}), "each file once"},
		"no manifest":  {rezip(t, []zipFile{{"a", nil}}), "pack.json: found no file"},
		"other form":   {rezip(t, []zipFile{{"pack.json", []byte(`{"form":"pack/9"}`)}}), "pack/1"},
		"no ledger":    {rezip(t, []zipFile{{"pack.json", []byte(`{"form":"pack/1"}`)}}), "ledger.json: found no file"},
		"ledger words": {rezip(t, []zipFile{{"pack.json", []byte(`{"form":"pack/1"}`)}, {"ledger.json", []byte(`{"a":1}`)}}), "ledger.json"},
	} {
		_, err := ReadPack(bytes.NewReader(c.data), int64(len(c.data)))
		if err == nil || !strings.Contains(err.Error(), c.want) {
			t.Errorf("%s: %v, want %q", name, err, c.want)
		}
	}
}
