package exchange

import (
	"archive/zip"
	"bytes"
	"cmp"
	"context"
	"crypto/sha256"
	"encoding/json"
	"fmt"
	"io"
	"slices"
	"strings"
	"unicode/utf8"

	"deltamoor/api/registry"
	"deltamoor/store"
	"deltamoor/store/ledger"
)

// PackForm names the layout of an evidence pack. A changed layout, or other
// words on its page, is a new form.
const PackForm = "pack/1"

// Bounds of a pack that is read. They are checked before memory is taken.
const (
	MaxPackFiles  = 20_000
	MaxPackFile   = store.MaxUpload
	MaxPack       = 256 << 20 // unpacked, all files
	maxPackFolder = 12        // parts of a file's name
)

// The files of a pack beside those that registry names.
const (
	packManifest = "pack.json"
	packReadme   = "README.txt"
	packPage     = "page.html"
)

// A PackError is a file that is no evidence pack, or cannot be read as one.
type PackError struct {
	File            string // within the pack; "" is the whole
	Found, Expected string
}

func (e *PackError) Error() string {
	place := "pack"
	if e.File != "" {
		place += " " + e.File
	}
	return fmt.Sprintf("%s: found %s, expected %s", place, e.Found, e.Expected)
}

// manifest is pack.json: what the pack is about, and every other file with its SHA-256.
type manifest struct {
	Form       string                  `json:"form"`
	Registry   string                  `json:"registry"`
	Laboratory string                  `json:"laboratory"`
	Code       string                  `json:"code"`
	Value      *registry.PackValue     `json:"value,omitempty"` // in a bundle, in place of code
	Withheld   []registry.PackWithheld `json:"withheld"`
	Files      []manifestFile          `json:"files"` // by name
}

type manifestFile struct {
	Name   string     `json:"name"`
	Size   int64      `json:"size"`
	SHA256 store.Hash `json:"sha256"`
}

// A namedFile is one file of a pack.
type namedFile struct {
	name string
	data []byte
}

// WritePack writes a pack as one ZIP file, the same bytes for the same pack:
// a page to read, the versions, readings, uploads, ledger entries and
// checkpoints, and pack.json with the SHA-256 of every other file.
func WritePack(ctx context.Context, w io.Writer, p registry.Pack) error {
	files, err := packFiles(ctx, p)
	if err != nil {
		return fmt.Errorf("write pack %s: %w", p.Name(), err)
	}
	z := zip.NewWriter(w)
	for _, f := range files {
		// No times and no attributes: they would differ from one writing to the next.
		part, err := z.CreateHeader(&zip.FileHeader{Name: f.name, Method: zip.Deflate})
		if err != nil {
			return fmt.Errorf("write pack %s: %w", p.Name(), err)
		}
		if _, err := part.Write(f.data); err != nil {
			return fmt.Errorf("write pack %s: %w", p.Name(), err)
		}
	}
	if err := z.Close(); err != nil {
		return fmt.Errorf("write pack %s: %w", p.Name(), err)
	}
	return nil
}

// packFiles states every file of a pack: README first, then by name.
func packFiles(ctx context.Context, p registry.Pack) ([]namedFile, error) {
	var files []namedFile
	for _, v := range p.Versions {
		files = append(files, namedFile{v.File, v.Body})
	}
	for _, r := range p.Readings {
		files = append(files, namedFile{r.File, r.Bytes})
	}
	for _, u := range p.Uploads {
		files = append(files, namedFile{u.File, u.Bytes})
	}
	for _, l := range p.Ledgers {
		for _, c := range l.Checkpoints {
			files = append(files, namedFile{c.File, c.Note})
		}
	}
	entries, err := ledger.Canonical(p.Ledgers)
	if err != nil {
		return nil, err
	}
	files = append(files, namedFile{registry.PackLedgerFile, entries})
	page, err := packPageText(ctx, p)
	if err != nil {
		return nil, err
	}
	files = append(files, namedFile{packPage, page}, namedFile{packReadme, packReadmeText(p)})
	slices.SortFunc(files, func(a, b namedFile) int {
		return cmp.Or(cmp.Compare(packRank(a.name), packRank(b.name)), cmp.Compare(a.name, b.name))
	})
	m := manifest{Form: PackForm, Registry: p.Registry, Laboratory: p.Laboratory, Code: p.Code, Value: p.Value, Withheld: p.Withheld}
	text, err := manifestText(m, files)
	if err != nil {
		return nil, err
	}
	return append(files, namedFile{packManifest, text}), nil
}

// manifestText lists files in a manifest.
func manifestText(m manifest, files []namedFile) ([]byte, error) {
	if m.Withheld == nil {
		m.Withheld = []registry.PackWithheld{}
	}
	m.Files = []manifestFile{}
	for _, f := range files {
		m.Files = append(m.Files, manifestFile{Name: f.name, Size: int64(len(f.data)), SHA256: sha256.Sum256(f.data)})
	}
	return ledger.Canonical(m)
}

// packRank puts what people open first.
func packRank(name string) int {
	return map[string]int{packReadme: -3, packPage: -2, packManifest: -1}[name]
}

// IsPack tells whether bytes look like an evidence pack: a ZIP file that begins
// with its README.
func IsPack(head []byte) bool {
	return len(head) >= 30+len(packReadme) && bytes.HasPrefix(head, []byte("PK\x03\x04")) && string(head[30:30+len(packReadme)]) == packReadme
}

// An openedPack is a pack as it was read, with its files before they were parsed.
type openedPack struct {
	registry.Pack
	manifest manifest
	files    []namedFile
}

// ReadPack reads an evidence pack. It checks the container alone: names,
// sizes, and that pack.json and ledger.json can be read; VerifyPack checks what
// is in it. A fault is a PackError.
func ReadPack(r io.ReaderAt, size int64) (registry.Pack, error) {
	p, err := openPack(r, size)
	return p.Pack, err
}

func openPack(r io.ReaderAt, size int64) (openedPack, error) {
	var p openedPack
	if size > MaxPack {
		return p, &PackError{Found: fmt.Sprintf("%d bytes", size), Expected: fmt.Sprintf("at most %d", MaxPack)}
	}
	z, err := zip.NewReader(r, size)
	if err != nil {
		return p, &PackError{Found: err.Error(), Expected: "a ZIP file"}
	}
	if len(z.File) > MaxPackFiles {
		return p, &PackError{Found: fmt.Sprintf("%d files", len(z.File)), Expected: fmt.Sprintf("at most %d", MaxPackFiles)}
	}
	seen := map[string][]byte{}
	total := int64(0)
	for _, f := range z.File {
		if !packName(f.Name) {
			return p, &PackError{File: fmt.Sprintf("%.100q", f.Name), Found: "that name", Expected: "a plain relative one"}
		}
		if _, twice := seen[f.Name]; twice {
			return p, &PackError{File: f.Name, Found: "it twice", Expected: "each file once"}
		}
		data, err := readZipped(f, min(MaxPackFile, MaxPack-total))
		if err != nil {
			return p, err
		}
		total += int64(len(data))
		seen[f.Name] = data
		p.files = append(p.files, namedFile{f.Name, data})
	}
	slices.SortFunc(p.files, func(a, b namedFile) int { return cmp.Compare(a.name, b.name) })
	if err := packJSON(seen, packManifest, &p.manifest); err != nil {
		return p, err
	}
	if p.manifest.Form != PackForm {
		return p, &PackError{File: packManifest, Found: fmt.Sprintf("form %.40q", p.manifest.Form), Expected: PackForm}
	}
	m := p.manifest
	p.Registry, p.Laboratory, p.Code, p.Value, p.Withheld = m.Registry, m.Laboratory, m.Code, m.Value, m.Withheld
	if len(p.Withheld) == 0 {
		p.Withheld = nil
	}
	if err := packJSON(seen, registry.PackLedgerFile, &p.Ledgers); err != nil {
		return p, err
	}
	for i, l := range p.Ledgers {
		for j, c := range l.Checkpoints {
			p.Ledgers[i].Checkpoints[j].Note = seen[c.File] // nil where it is missing: no note at all
		}
	}
	for _, f := range p.files {
		switch {
		case strings.HasPrefix(f.name, "versions/"):
			p.Versions = append(p.Versions, registry.PackVersion{File: f.name, Body: f.data})
		case strings.HasPrefix(f.name, "readings/"):
			p.Readings = append(p.Readings, registry.PackReadings{File: f.name, Bytes: f.data})
		case strings.HasPrefix(f.name, "uploads/"):
			p.Uploads = append(p.Uploads, registry.PackUpload{File: f.name, Bytes: f.data})
		}
	}
	return p, nil
}

func packJSON(files map[string][]byte, name string, into any) error {
	data, ok := files[name]
	if !ok {
		return &PackError{File: name, Found: "no file", Expected: "one, as every pack has"}
	}
	d := json.NewDecoder(bytes.NewReader(data))
	d.DisallowUnknownFields()
	if err := d.Decode(into); err != nil {
		return &PackError{File: name, Found: err.Error(), Expected: "JSON of form " + PackForm}
	}
	return nil
}

// packName accepts relative names without surprises on any file system.
func packName(name string) bool {
	if name == "" || len(name) > 500 || !utf8.ValidString(name) || strings.Count(name, "/") >= maxPackFolder {
		return false
	}
	for part := range strings.SplitSeq(name, "/") {
		if part == "" || part == "." || part == ".." {
			return false
		}
	}
	return !strings.ContainsFunc(name, func(r rune) bool { return r < ' ' || r == '\\' || r == ':' || r == 0x7f })
}

// readZipped reads one file of an archive whatever size it claims, up to most bytes.
func readZipped(f *zip.File, most int64) ([]byte, error) {
	if f.UncompressedSize64 > uint64(most) {
		return nil, &PackError{File: f.Name, Found: fmt.Sprintf("%d bytes", f.UncompressedSize64), Expected: fmt.Sprintf("at most %d", most)}
	}
	r, err := f.Open()
	if err != nil {
		return nil, &PackError{File: f.Name, Found: err.Error(), Expected: "a readable file"}
	}
	defer r.Close()
	data, err := io.ReadAll(io.LimitReader(r, most+1))
	if err != nil {
		return nil, &PackError{File: f.Name, Found: err.Error(), Expected: "a readable file"}
	}
	if int64(len(data)) > most {
		return nil, &PackError{File: f.Name, Found: "more bytes than it claims", Expected: fmt.Sprintf("at most %d", most)}
	}
	return data, nil
}

// VerifyPack reads a pack and checks all of it without a store: that the files
// are those that pack.json lists, everything registry.VerifyPack checks, and
// that page and README say what the versions say, by writing them again. An
// error means that the bytes are no pack that can be read; what is wrong within
// a pack is a finding.
func VerifyPack(ctx context.Context, r io.ReaderAt, size int64, q registry.PackCheckRequest) (registry.PackVerification, error) {
	p, err := openPack(r, size)
	if err != nil {
		return registry.PackVerification{}, err
	}
	out := registry.VerifyPack(ctx, p.Pack, q)
	listed := listedFindings(p)
	out.Findings = append(out.Findings, listed...)
	if !out.Clean() {
		return out, nil
	}
	again, err := packFiles(ctx, p.Pack)
	if err != nil {
		return out, fmt.Errorf("write pack %s again: %w", p.Name(), err)
	}
	want := map[string][]byte{}
	for _, f := range again {
		want[f.name] = f.data
	}
	for _, f := range p.files {
		if text, ok := want[f.name]; !ok {
			out.Findings = append(out.Findings, registry.PackFinding{File: f.name, Found: "a file", Expected: "none of that name in a pack"})
		} else if !bytes.Equal(text, f.data) {
			out.Findings = append(out.Findings, registry.PackFinding{File: f.name,
				Found: "SHA-256 " + hashText(f.data), Expected: "SHA-256 " + hashText(text) + ", as it is written from the versions"})
		}
	}
	var whole bytes.Buffer
	if err := WritePack(ctx, &whole, p.Pack); err != nil {
		return out, err
	}
	if out.Clean() && !sameBytes(r, size, whole.Bytes()) {
		out.Notes = append(out.Notes, "the files are packed into the archive in another way than they were written, or by another program; what is in them is the same")
	}
	return out, nil
}

func sameBytes(r io.ReaderAt, size int64, want []byte) bool {
	if size != int64(len(want)) {
		return false
	}
	have, err := io.ReadAll(io.NewSectionReader(r, 0, size))
	return err == nil && bytes.Equal(have, want)
}

func hashText(b []byte) string { return store.Hash(sha256.Sum256(b)).String() }

// listedFindings compares the files with pack.json.
func listedFindings(p openedPack) []registry.PackFinding {
	var out []registry.PackFinding
	listed := map[string]manifestFile{}
	for _, f := range p.manifest.Files {
		if _, twice := listed[f.Name]; twice {
			out = append(out, registry.PackFinding{File: packManifest, Found: fmt.Sprintf("%.100q twice", f.Name), Expected: "each file once"})
		}
		listed[f.Name] = f
	}
	for _, f := range p.files {
		if f.name == packManifest {
			continue
		}
		want, ok := listed[f.name]
		delete(listed, f.name)
		switch found := hashText(f.data); {
		case !ok:
			out = append(out, registry.PackFinding{File: f.name, Found: "a file", Expected: "only files that " + packManifest + " lists"})
		case want.SHA256.String() != found || want.Size != int64(len(f.data)):
			out = append(out, registry.PackFinding{File: f.name, Found: fmt.Sprintf("%d bytes with SHA-256 %s", len(f.data), found),
				Expected: fmt.Sprintf("%d bytes with SHA-256 %s as in %s", want.Size, want.SHA256, packManifest)})
		}
	}
	for _, f := range p.manifest.Files {
		if _, missing := listed[f.Name]; missing {
			out = append(out, registry.PackFinding{File: f.Name, Found: "no file", Expected: "the one with SHA-256 " + f.SHA256.String() + " as in " + packManifest})
			delete(listed, f.Name)
		}
	}
	return out
}
