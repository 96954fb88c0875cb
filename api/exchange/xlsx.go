package exchange

import (
	"archive/zip"
	"bytes"
	"encoding/binary"
	"encoding/xml"
	"errors"
	"fmt"
	"io"
	"path"
	"strings"
)

// Bounds of a workbook. An archive can unpack to a thousand times its size, so
// what is counted is what comes out. Sheets of numbers shrink to a tenth or a
// twentieth; what shrinks much further is no sheet.
const (
	// MaxUnzipped bounds the bytes of all parts of one workbook that are read,
	// once unpacked; below it, a workbook may unpack to 16 MiB or to 50 times its size.
	MaxUnzipped   = 256 << 20
	freeUnzipped  = 16 << 20
	unzippedRatio = 50
	// maxUntagged bounds the bytes between two tags, which are held in memory.
	maxUntagged = 1 << 20
	// maxParts bounds the files in the archive, which cost memory before any of them is opened.
	maxParts = 10_000
	// maxColumns bounds the columns of a table.
	maxColumns = 1_000
)

// Workbooks are read here and not by a spreadsheet library, for four reasons
// that matter to a registry: a number stored as a number must be told from a
// text that looks like one (the mapping's decimal sign holds for the second
// only); a formula that was never computed must not pass as an empty cell; a
// sheet that breaks off must be refused, not read up to the break; and rows
// stream from the archive, so memory does not grow with the sheet. What is read
// of ECMA-376 part 1: workbook (18.2), cells and their types (18.3.1.4,
// 18.18.11), shared strings (18.4).

// errUnzipped says that more came out of the archive than it may hold, and
// errUntagged that a single text in it is longer than any cell.
var (
	errUnzipped = errors.New("unpacks to too many bytes")
	errUntagged = errors.New("holds a single text of more than 1 MiB")
)

// A workbook is an open .xlsx file.
type workbook struct {
	message  string
	parts    map[string]*zip.File
	limit    int64 // bytes that may be unpacked in all
	left     int64 // and how many of them are left
	sheets   []sheetEntry
	from1904 bool
	strings  []string
	// stringsPart is the part that holds the shared strings.
	stringsPart string
}

type sheetEntry struct{ name, part string }

// openWorkbook reads everything but the sheet.
func openWorkbook(message string, data []byte) (*workbook, error) {
	if what, ok := otherFormat(data); ok && !bytes.HasPrefix(data, []byte("PK")) {
		return nil, refuseOne(message, "the first bytes", what, "an .xlsx workbook")
	}
	limit := min(MaxUnzipped, max(freeUnzipped, unzippedRatio*int64(len(data))))
	w := &workbook{message: message, parts: map[string]*zip.File{}, limit: limit, left: limit}
	if n := declaredParts(data); n > maxParts {
		return nil, w.broken("the archive", fmt.Sprintf("%d files", n), fmt.Sprintf("at most %d", maxParts))
	}
	archive, err := zip.NewReader(bytes.NewReader(data), int64(len(data)))
	if err != nil {
		return nil, w.broken("the file", "no readable zip archive", "an .xlsx workbook")
	}
	if len(archive.File) > maxParts {
		return nil, w.broken("the archive", fmt.Sprintf("%d files", len(archive.File)), fmt.Sprintf("at most %d", maxParts))
	}
	for _, f := range archive.File {
		w.parts[partName(f.Name)] = f
	}
	if err := w.readWorkbook(); err != nil {
		return nil, err
	}
	return w, w.readStrings()
}

// declaredParts reads the number of files from the archive's end record, before
// anything is allocated for them.
func declaredParts(data []byte) int {
	const endRecord = 22
	for i := len(data) - endRecord; i >= 0 && i >= len(data)-endRecord-65535; i-- {
		if bytes.HasPrefix(data[i:], []byte("PK\x05\x06")) {
			return int(binary.LittleEndian.Uint16(data[i+10:]))
		}
	}
	return 0
}

func partName(s string) string {
	return strings.ToLower(strings.TrimPrefix(path.Clean(strings.ReplaceAll(s, `\`, "/")), "/"))
}

func (w *workbook) broken(place, found, expected string) error {
	return refuseOne(w.message, place, found, expected)
}

// partError says why a part could not be read.
func (w *workbook) partError(part string, err error) error {
	var syntax *xml.SyntaxError
	switch {
	case errors.Is(err, errUnzipped):
		found := fmt.Sprintf("more than the %d bytes that a workbook of this size may unpack to", w.limit)
		return w.broken(part+" in the workbook", found, "a smaller workbook, or the sheet as CSV")
	case errors.As(err, &syntax):
		return w.broken(part+" in the workbook", fmt.Sprintf("broken XML in its line %d", syntax.Line), "a workbook that is complete; save it again")
	}
	return w.broken(part+" in the workbook", shorten(err.Error(), 120), "a workbook that is complete; save it again")
}

// A partReader unpacks one part, charges what comes out to the workbook, and
// keeps the first error, which encoding/xml would otherwise hide behind its own.
type partReader struct {
	io.ReadCloser
	w        *workbook
	untagged int // bytes since the last tag began
	err      error
}

func (p *partReader) Read(b []byte) (int, error) {
	if p.w.left <= 0 {
		p.err = errUnzipped
		return 0, p.err
	}
	if int64(len(b)) > p.w.left {
		b = b[:p.w.left]
	}
	n, err := p.ReadCloser.Read(b)
	p.w.left -= int64(n)
	if tag := bytes.LastIndexByte(b[:n], '<'); tag >= 0 {
		p.untagged = n - tag
	} else if p.untagged += n; p.untagged > maxUntagged {
		p.err = errUntagged
		return 0, p.err
	}
	if err != nil && err != io.EOF {
		p.err = err
	}
	return n, err
}

// An xmlPart reads the elements of one part.
type xmlPart struct {
	name   string
	source *partReader
	*xml.Decoder
}

func (w *workbook) open(name string) (*xmlPart, error) {
	f := w.parts[partName(name)]
	if f == nil {
		return nil, nil
	}
	r, err := f.Open()
	if err != nil {
		return nil, w.partError(name, err)
	}
	source := &partReader{ReadCloser: r, w: w}
	return &xmlPart{name: name, source: source, Decoder: xml.NewDecoder(source)}, nil
}

// next returns the next token; io.EOF at the proper end.
func (p *xmlPart) next() (xml.Token, error) {
	t, err := p.Token()
	if err != nil && p.source.err != nil {
		err = p.source.err
	}
	return t, err
}

func attribute(e xml.StartElement, name string) string {
	for _, a := range e.Attr {
		if a.Name.Local == name {
			return a.Value
		}
	}
	return ""
}

// each calls f for every start element of a part.
func (w *workbook) each(name string, f func(xml.StartElement) error) error {
	p, err := w.open(name)
	if err != nil {
		return err
	}
	if p == nil {
		return w.broken("the workbook", "no part "+name, "an .xlsx workbook")
	}
	defer p.source.Close()
	for {
		t, err := p.next()
		if err == io.EOF {
			return nil
		}
		if err != nil {
			return w.partError(name, err)
		}
		if e, ok := t.(xml.StartElement); ok {
			if err := f(e); err != nil {
				return err
			}
		}
	}
}

// readWorkbook lists the sheets in their order and finds the part of each.
func (w *workbook) readWorkbook() error {
	root := "xl/workbook.xml"
	if w.parts["_rels/.rels"] != nil {
		err := w.each("_rels/.rels", func(e xml.StartElement) error {
			if e.Name.Local == "Relationship" && strings.HasSuffix(attribute(e, "Type"), "/officeDocument") {
				root = partName(attribute(e, "Target"))
			}
			return nil
		})
		if err != nil {
			return err
		}
	}
	folder := path.Dir(root)
	targets := map[string]string{}
	relations := path.Join(folder, "_rels", path.Base(root)+".rels")
	err := w.each(relations, func(e xml.StartElement) error {
		if e.Name.Local != "Relationship" {
			return nil
		}
		target := attribute(e, "Target")
		if !strings.HasPrefix(target, "/") {
			target = path.Join(folder, target)
		}
		switch kind := attribute(e, "Type"); {
		case strings.HasSuffix(kind, "/worksheet"):
			targets[attribute(e, "Id")] = partName(target)
		case strings.HasSuffix(kind, "/sharedStrings"):
			w.stringsPart = partName(target)
		}
		return nil
	})
	if err != nil {
		return err
	}
	err = w.each(root, func(e xml.StartElement) error {
		switch e.Name.Local {
		case "workbookPr":
			v := attribute(e, "date1904")
			w.from1904 = v == "1" || v == "true"
		case "sheet":
			id := ""
			for _, a := range e.Attr {
				// r:id, told from sheetId by its namespace.
				if a.Name.Local == "id" && a.Name.Space != "" {
					id = a.Value
				}
			}
			if part, ok := targets[id]; ok {
				w.sheets = append(w.sheets, sheetEntry{attribute(e, "name"), part})
			}
		}
		return nil
	})
	if err == nil && len(w.sheets) == 0 {
		err = w.broken("the workbook", "no sheet with cells", "an .xlsx workbook with at least one")
	}
	return err
}

// readStrings reads the shared strings; of formatted text the text, not the phonetic hints.
func (w *workbook) readStrings() error {
	name := w.stringsPart
	p, err := w.open(name)
	if err != nil || p == nil {
		return err
	}
	defer p.source.Close()
	var item strings.Builder
	phonetic, inText := 0, false
	for {
		t, err := p.next()
		if err == io.EOF {
			return nil
		}
		if err != nil {
			return w.partError(name, err)
		}
		switch t := t.(type) {
		case xml.StartElement:
			switch t.Name.Local {
			case "si":
				item.Reset()
			case "rPh":
				phonetic++
			case "t":
				inText = phonetic == 0
			}
		case xml.EndElement:
			switch t.Name.Local {
			case "si":
				w.strings = append(w.strings, item.String())
			case "rPh":
				phonetic--
			case "t":
				inText = false
			}
		case xml.CharData:
			if inText {
				item.Write(t)
			}
		}
	}
}
