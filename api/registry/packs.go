package registry

import (
	"bytes"
	"cmp"
	"context"
	"fmt"
	"slices"
	"strings"

	"deltamoor/store"
	"deltamoor/store/ledger"
)

// A Pack is everything that one reported delta rests on, in the bytes that
// were hashed when it was recorded: enough to check and to compute it again
// without the registry. It holds what had been recorded up to the sizes of its
// ledgers; what was said later, a withdrawal included, is not in it.
type Pack struct {
	// Registry, Laboratory and Code say which reported delta it is.
	Registry, Laboratory, Code string
	// Value is set, in place of Code, in a bundle: the chain of one assigned value.
	Value    *PackValue
	Versions []PackVersion // by file
	Readings []PackReadings
	Uploads  []PackUpload
	// Withheld lists uploads that were left out because they name samples of other clients.
	Withheld []PackWithheld
	Ledgers  []PackLedger // by laboratory
}

// A PackValue names the version of an assigned value that a bundle is about.
type PackValue struct {
	Code    string `json:"code"`
	Version int    `json:"version"`
}

// Name says what the pack is about: the code of a reported delta, or a version of a value.
func (p Pack) Name() string {
	if p.Value != nil {
		return fmt.Sprintf("%s.%d", p.Value.Code, p.Value.Version)
	}
	return store.FormatCode(p.Code)
}

// A PackVersion is the canonical body of one version.
type PackVersion struct {
	File string // versions/<laboratory>/<kind>/<code>.<version>.json
	Body []byte
}

// PackReadings are the readings of one session, by number: one canonical line
// each, with a line feed after each.
type PackReadings struct {
	File  string // readings/<laboratory>/<session>.jsonl
	Bytes []byte
}

// A PackUpload is a file as a session was imported from it, or a document.
type PackUpload struct {
	File  string // uploads/<laboratory>/<SHA-256>
	Bytes []byte
}

// A PackWithheld is an upload that is left out: its hash is bound all the same.
type PackWithheld struct {
	Laboratory string     `json:"laboratory"`
	Hash       store.Hash `json:"sha256"`
	Reason     string     `json:"reason"`
}

// A PackLedger holds the entries of the pack's versions in one laboratory's
// ledger, each with its audit path (RFC 6962, 2.1.1) to one root.
type PackLedger struct {
	Laboratory  string           `json:"laboratory"`
	Origin      string           `json:"origin"`
	Size        int64            `json:"size"`
	Root        store.Hash       `json:"root"`
	Entries     []PackEntry      `json:"entries"` // by position
	Checkpoints []PackCheckpoint `json:"checkpoints"`
}

// A PackEntry is one ledger entry.
type PackEntry struct {
	Position int64        `json:"position"`
	Entry    string       `json:"entry"` // the canonical bytes, which are the leaf's datum
	Proof    []store.Hash `json:"proof"`
}

// A PackCheckpoint is a signed checkpoint with the proof (RFC 6962, 2.1.2) that
// the pack's ledger continues the one it was signed for.
type PackCheckpoint struct {
	File        string       `json:"file"` // checkpoints/<laboratory>/<size>-<key>.txt
	Note        []byte       `json:"-"`
	Size        int64        `json:"size"`
	Consistency []store.Hash `json:"consistency"`
}

// The folders of a pack.
const (
	packVersions    = "versions/"
	packReadings    = "readings/"
	packUploads     = "uploads/"
	packCheckpoints = "checkpoints/"
	// PackLedgerFile holds a pack's ledgers as canonical JSON.
	PackLedgerFile = "ledger.json"
)

// safeName writes a code as part of a file's name: letters, digits, . _ - and /
// stay, every other byte becomes %XX.
func safeName(code string) string {
	var b strings.Builder
	for i := range len(code) {
		c := code[i]
		switch {
		case 'A' <= c && c <= 'Z', 'a' <= c && c <= 'z', '0' <= c && c <= '9', c == '_', c == '-', c == '.':
			b.WriteByte(c)
		case c == '/' && i > 0 && code[i-1] != '/' && i < len(code)-1:
			b.WriteByte(c)
		default:
			fmt.Fprintf(&b, "%%%02X", c)
		}
	}
	return b.String()
}

func versionFile(ref store.Ref) string {
	return fmt.Sprintf("%s%s/%s/%s.%d.json", packVersions, safeName(ref.Laboratory), safeName(string(ref.Kind)), safeName(ref.Code), ref.Version)
}

func readingsFile(laboratory, session string) string {
	return packReadings + safeName(laboratory) + "/" + safeName(session) + ".jsonl"
}

func uploadFile(laboratory string, hash store.Hash) string {
	return packUploads + safeName(laboratory) + "/" + hash.String()
}

func checkpointFile(laboratory string, c store.Checkpoint) string {
	_, key, _ := strings.Cut(c.Signer, "+")
	return fmt.Sprintf("%s%s/%d-%s.txt", packCheckpoints, safeName(laboratory), c.Size, safeName(key))
}

// Pack collects the evidence for a reported delta: every version of its trace
// with the decisions on it, the readings of its sessions, and the files they
// came in, except a file that names samples of other clients. Where the
// registry has a signing key, the ledgers' heads are signed first.
func (r *Registry) Pack(ctx context.Context, actor Actor, code string) (Pack, error) {
	return r.pack(ctx, actor, code, false)
}

// PackWithUploads is Pack with every file that a session was imported from,
// whosever samples it names: for an assessor of the laboratory.
func (r *Registry) PackWithUploads(ctx context.Context, actor Actor, code string) (Pack, error) {
	return r.pack(ctx, actor, code, true)
}

func (r *Registry) pack(ctx context.Context, actor Actor, code string, all bool) (Pack, error) {
	if err := actor.need(MayRead); err != nil {
		return Pack{}, err
	}
	if _, err := r.Reported(ctx, actor, code); err != nil {
		return Pack{}, err
	}
	return r.collect(ctx, actor, Pack{Registry: r.name, Laboratory: actor.Laboratory, Code: code}, all)
}

// collect fills a pack, having signed the heads of its ledgers where there is a key.
func (r *Registry) collect(ctx context.Context, actor Actor, pack Pack, all bool) (Pack, error) {
	if key := r.key.Load(); key != nil {
		for _, laboratory := range []string{actor.Laboratory, store.Common} {
			if _, err := r.SignCheckpoint(ctx, laboratory, *key); err != nil {
				return Pack{}, fmt.Errorf("pack %s: %w", pack.Name(), err)
			}
		}
	}
	var p packer
	err := r.read(ctx, actor, func(ctx context.Context, v *store.View) error {
		p = packer{r: r, v: v, all: all, at: map[store.Ref]int64{}, pack: pack}
		return p.collect(ctx)
	})
	if err != nil {
		return Pack{}, fmt.Errorf("pack %s: %w", pack.Name(), err)
	}
	return p.pack, nil
}

type packer struct {
	r      *Registry
	v      *store.View
	all    bool
	client string
	at     map[store.Ref]int64 // what is in already, and its position
	pack   Pack
}

func (p *packer) collect(ctx context.Context) error {
	start, line := store.Ref{}, -1
	if p.pack.Value != nil {
		raw, err := p.v.Version(ctx, store.Key{Laboratory: p.pack.Laboratory, Kind: store.KindValue, Code: p.pack.Value.Code}, p.pack.Value.Version)
		if err != nil {
			return err
		}
		start = raw.Ref
	} else {
		d, err := reported(ctx, p.v, p.pack.Laboratory, p.pack.Code)
		if err != nil {
			return err
		}
		p.client = d.Client
		report, err := p.v.Newest(ctx, store.Key{Laboratory: d.Laboratory, Kind: store.KindReport, Code: d.Report})
		if err != nil {
			return err
		}
		start, line = report.Ref, d.Line
	}
	var trace Trace
	t := tracer{v: p.v, trace: &trace, at: map[store.Ref]int{}, through: map[store.Ref]string{}}
	if err := t.walk(ctx, start, line); err != nil {
		return err
	}
	if trace.Cut > 0 {
		return Refuse(TooLarge, "%s rests on more than %d versions: too many for one pack", p.pack.Name(), MaxTrace)
	}
	for _, n := range trace.Nodes {
		if err := p.version(ctx, n.Ref); err != nil {
			return err
		}
		_, decisions, err := p.v.State(ctx, n.Ref, store.Moment{})
		if err != nil {
			return err
		}
		for _, decision := range decisions {
			if err := p.version(ctx, decision.Ref); err != nil {
				return err
			}
		}
	}
	laboratories := map[string]bool{}
	for ref := range p.at {
		laboratories[ref.Laboratory] = true
	}
	for _, laboratory := range slices.Sorted(mapKeys(laboratories)) {
		if err := p.ledger(ctx, laboratory); err != nil {
			return err
		}
	}
	slices.SortFunc(p.pack.Versions, func(a, b PackVersion) int { return cmp.Compare(a.File, b.File) })
	slices.SortFunc(p.pack.Readings, func(a, b PackReadings) int { return cmp.Compare(a.File, b.File) })
	slices.SortFunc(p.pack.Uploads, func(a, b PackUpload) int { return cmp.Compare(a.File, b.File) })
	slices.SortFunc(p.pack.Withheld, func(a, b PackWithheld) int {
		return cmp.Or(cmp.Compare(a.Laboratory, b.Laboratory), bytes.Compare(a.Hash[:], b.Hash[:]))
	})
	return nil
}

// version takes one version in, and what it binds beside its inputs.
func (p *packer) version(ctx context.Context, ref store.Ref) error {
	if _, ok := p.at[ref]; ok {
		return nil
	}
	raw, err := p.v.Version(ctx, ref.Key, ref.Version)
	if err != nil {
		return err
	}
	body, err := store.BodyBytes(raw)
	if err != nil {
		return err
	}
	p.at[ref] = raw.Position
	p.pack.Versions = append(p.pack.Versions, PackVersion{File: versionFile(ref), Body: body})
	switch raw.Kind {
	case store.KindSession:
		s, err := store.Decode[store.Session](raw)
		if err != nil {
			return err
		}
		others, err := p.readings(ctx, s)
		if err != nil || s.Value.Upload == nil {
			return err
		}
		return p.upload(ctx, raw.Laboratory, *s.Value.Upload, others)
	case store.KindStudy:
		s, err := store.Decode[store.Study](raw)
		if err != nil || s.Value.Upload == nil {
			return err
		}
		return p.upload(ctx, raw.Laboratory, *s.Value.Upload, false)
	case store.KindValue:
		value, err := store.Decode[store.Value](raw)
		if err != nil || value.Value.Document == nil {
			return err
		}
		return p.upload(ctx, raw.Laboratory, *value.Value.Document, false)
	case store.KindMaterial:
		m, err := store.Decode[store.Material](raw)
		if err != nil || m.Value.Document == nil {
			return err
		}
		return p.upload(ctx, raw.Laboratory, *m.Value.Document, false)
	}
	return nil
}

// readings takes a session's readings in; others tells that some are of samples
// of other clients.
func (p *packer) readings(ctx context.Context, s store.Version[store.Session]) (others bool, err error) {
	file := readingsFile(s.Laboratory, s.Code)
	var b bytes.Buffer
	samples := map[string]bool{}
	err = p.v.Readings(ctx, s.Laboratory, s.Code, func(rd store.Reading) error {
		if rd.Number <= s.Value.Readings {
			b.Write(store.ReadingLine(rd))
			b.WriteByte('\n')
		}
		if rd.Sample != "" {
			samples[rd.Sample] = true
		}
		return nil
	})
	if err != nil {
		return false, err
	}
	for code := range samples {
		sample, err := newest[store.Sample](ctx, p.v, store.Key{Laboratory: s.Laboratory, Kind: store.KindSample, Code: code})
		if err != nil {
			return false, err
		}
		others = others || sample.Value.Client != p.client
	}
	i := slices.IndexFunc(p.pack.Readings, func(r PackReadings) bool { return r.File == file })
	if i < 0 {
		p.pack.Readings = append(p.pack.Readings, PackReadings{File: file, Bytes: b.Bytes()})
	} else if b.Len() > len(p.pack.Readings[i].Bytes) { // a further version of the session with more rows
		p.pack.Readings[i].Bytes = b.Bytes()
	}
	return others, nil
}

// upload takes bytes in with the version that binds them, or notes that they are left out.
func (p *packer) upload(ctx context.Context, laboratory string, hash store.Hash, others bool) error {
	key := store.Key{Laboratory: laboratory, Kind: store.KindDocument, Code: hash.String()}
	document, err := p.v.Version(ctx, key, 1)
	if err != nil {
		return err
	}
	if _, ok := p.at[document.Ref]; ok {
		return nil
	}
	if others && !p.all {
		w := PackWithheld{Laboratory: laboratory, Hash: hash, Reason: "it names samples of other clients"}
		if !slices.Contains(p.pack.Withheld, w) {
			p.pack.Withheld = append(p.pack.Withheld, w)
		}
		return nil
	}
	if err := p.version(ctx, document.Ref); err != nil {
		return err
	}
	var b bytes.Buffer
	if _, err := p.v.Upload(ctx, laboratory, hash, &b); err != nil {
		return err
	}
	p.pack.Uploads = append(p.pack.Uploads, PackUpload{File: uploadFile(laboratory, hash), Bytes: b.Bytes()})
	return nil
}

// ledger proves every version of one laboratory to one root: that of the newest
// checkpoint if it covers them all, else that of the head.
func (p *packer) ledger(ctx context.Context, laboratory string) error {
	keys, err := keysOf(ctx, p.v, laboratory)
	if err != nil {
		return err
	}
	for _, key := range keys {
		if err := p.version(ctx, key.Ref); err != nil {
			return err
		}
	}
	var positions []int64
	for ref, position := range p.at {
		if ref.Laboratory == laboratory {
			positions = append(positions, position)
		}
	}
	slices.Sort(positions)
	checkpoints, err := allCheckpoints(ctx, p.v, laboratory)
	if err != nil {
		return err
	}
	size := int64(-1)
	if n := len(checkpoints); n > 0 && checkpoints[n-1].Size > positions[len(positions)-1] {
		size = checkpoints[n-1].Size
	}
	out := PackLedger{Laboratory: laboratory, Origin: p.r.Origin(laboratory), Entries: []PackEntry{}, Checkpoints: []PackCheckpoint{}}
	root, size, err := p.v.Root(ctx, laboratory, size)
	if err != nil {
		return err
	}
	out.Size, out.Root = size, store.Hash(root)
	tree := p.v.TreeHashReader(ctx, laboratory)
	for _, position := range positions {
		entries, err := p.v.Entries(ctx, laboratory, position, 1)
		if err != nil {
			return err
		}
		if len(entries) != 1 || entries[0].Position != position {
			return fmt.Errorf("ledger %s has no entry %d", laboratory, position)
		}
		proof, err := ledger.ProveInclusion(size, position, tree)
		if err != nil {
			return err
		}
		out.Entries = append(out.Entries, PackEntry{Position: position, Entry: string(entries[0].Bytes), Proof: hashes(proof)})
	}
	// The newest checkpoint, and those by which one key vouches for the next.
	var wanted []store.Checkpoint
	for _, c := range vouching(keys, checkpoints) {
		if c != nil {
			wanted = append(wanted, *c)
		}
	}
	for i := len(checkpoints) - 1; i >= 0 && checkpoints[i].Size == checkpoints[len(checkpoints)-1].Size; i-- {
		wanted = append(wanted, checkpoints[i])
	}
	for _, c := range wanted {
		file := checkpointFile(laboratory, c)
		if slices.ContainsFunc(out.Checkpoints, func(k PackCheckpoint) bool { return k.File == file }) {
			continue
		}
		proof, err := ledger.ProveConsistency(size, c.Size, tree)
		if err != nil {
			return err
		}
		out.Checkpoints = append(out.Checkpoints, PackCheckpoint{File: file, Note: c.Note, Size: c.Size, Consistency: hashes(proof)})
	}
	slices.SortFunc(out.Checkpoints, func(a, b PackCheckpoint) int {
		return cmp.Or(cmp.Compare(a.Size, b.Size), cmp.Compare(a.File, b.File))
	})
	p.pack.Ledgers = append(p.pack.Ledgers, out)
	return nil
}

// hashes is never nil, so that no proof is written as null.
func hashes(proof []ledger.Hash) []store.Hash {
	out := make([]store.Hash, len(proof))
	for i, h := range proof {
		out[i] = store.Hash(h)
	}
	return out
}

// PackVersionFile names the file of a version in a pack.
func PackVersionFile(ref store.Ref) string { return versionFile(ref) }
