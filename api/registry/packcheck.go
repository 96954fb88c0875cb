package registry

import (
	"bytes"
	"context"
	"crypto/sha256"
	"fmt"
	"slices"
	"strconv"
	"strings"

	"golang.org/x/mod/sumdb/note"

	"deltamoor/store"
	"deltamoor/store/ledger"
)

// A PackCheckRequest names what is known from elsewhere when a pack is checked.
type PackCheckRequest struct {
	// Verifiers are public keys, and Outside signed checkpoints, that did not
	// come with the pack. Without them a pack is held against itself alone, and
	// somebody who made up all of it would not be found out.
	Verifiers []string
	Outside   [][]byte
}

// A PackFinding is one place where a pack does not say what it should.
type PackFinding struct {
	File            string
	Found, Expected string
}

func (f PackFinding) String() string {
	return fmt.Sprintf("%s: found %s, expected %s", f.File, f.Found, f.Expected)
}

// A PackVerification is the outcome of checking and recomputing a pack.
type PackVerification struct {
	Registry, Laboratory, Code string
	Value                      *PackValue // in a bundle, in place of Code
	// Versions, Readings and Uploads count what was hashed again.
	Versions, Readings, Uploads int
	// Recomputed counts calibrations, final values, assigned values and the
	// report line computed again; Equal those whose every bit was the same.
	Recomputed, Equal int
	Ledgers           []PackLedgerVerification
	Findings          []PackFinding
	// Notes say what a clean verification does not show.
	Notes []string
}

// Clean tells whether nothing was found.
func (v PackVerification) Clean() bool { return len(v.Findings) == 0 }

// A PackLedgerVerification says to which root the versions were proved, and who signed it.
type PackLedgerVerification struct {
	Origin string
	Size   int64
	Root   store.Hash
	Proved int
	// SignedBy names the keys of good checkpoints; Outside tells that one of them,
	// or a checkpoint itself, was known from outside the pack.
	SignedBy []string
	Outside  bool
}

// VerifyPack checks a pack without a store: every hash, every proof, every
// checkpoint, that nothing is missing and nothing too much, and computes every
// calibration, assigned value, final value and the report's line again, with
// the code that computes what is stored.
func VerifyPack(ctx context.Context, p Pack, q PackCheckRequest) PackVerification {
	c := packChecker{p: p, out: PackVerification{Registry: p.Registry, Laboratory: p.Laboratory, Code: p.Code, Value: p.Value}}
	c.src = packSource{raws: map[wantedVersion]store.Raw{}, readings: map[string][]store.Reading{}, decisions: map[wantedVersion][]store.Version[store.Decision]{}}
	c.entries()
	c.bodies()
	c.checkpoints(q)
	c.inputs()
	c.rows()
	c.uploads()
	c.reach()
	c.recompute(ctx)
	for _, w := range p.Withheld {
		c.out.Notes = append(c.out.Notes, fmt.Sprintf("the upload %s of %s is left out: %s", w.Hash, w.Laboratory, w.Reason))
	}
	c.out.Notes = append(c.out.Notes, "what was recorded after the sizes of the ledgers, a withdrawal included, is not in the pack")
	return c.out
}

// PackTrace is the trace of the reported delta as the pack's own versions tell it.
func PackTrace(ctx context.Context, p Pack) (Trace, error) {
	c := packChecker{p: p}
	c.src = packSource{raws: map[wantedVersion]store.Raw{}, readings: map[string][]store.Reading{}, decisions: map[wantedVersion][]store.Version[store.Decision]{}}
	c.entries()
	c.bodies()
	report, line, err := c.start()
	if err != nil {
		return Trace{}, err
	}
	var out Trace
	t := tracer{v: c.src, trace: &out, at: map[store.Ref]int{}, through: map[store.Ref]string{}}
	if err := t.walk(ctx, report.Ref, line); err != nil {
		return Trace{}, err
	}
	if p.Value != nil {
		return out, nil
	}
	d, err := c.reported(ctx, report, line)
	out.Reported = &d
	return out, err
}

type wantedVersion struct {
	store.Key
	version int
}

func wantedOf(ref store.Ref) wantedVersion { return wantedVersion{ref.Key, ref.Version} }

// A packSource reads a pack where a view reads the store.
type packSource struct {
	raws      map[wantedVersion]store.Raw
	readings  map[string][]store.Reading // by file
	decisions map[wantedVersion][]store.Version[store.Decision]
}

// Version reads one version; what is not in the pack is not found.
func (s packSource) Version(_ context.Context, key store.Key, version int) (store.Raw, error) {
	raw, ok := s.raws[wantedVersion{key, version}]
	if !ok {
		return raw, fmt.Errorf("%s.%d is not in the pack: %w", key, version, store.ErrNotFound)
	}
	return raw, nil
}

// Readings gives the readings of a session, by number.
func (s packSource) Readings(_ context.Context, laboratory, session string, f func(store.Reading) error) error {
	for _, rd := range s.readings[readingsFile(laboratory, session)] {
		if err := f(rd); err != nil {
			return err
		}
	}
	return nil
}

// State is read off the decisions in the pack.
func (s packSource) State(_ context.Context, ref store.Ref, _ store.Moment) (store.State, []store.Version[store.Decision], error) {
	if !ref.Kind.Decided() {
		return store.Recorded, nil, nil
	}
	decisions := s.decisions[wantedOf(ref)]
	if len(decisions) == 0 {
		return store.Drafted, nil, nil
	}
	return store.State(decisions[len(decisions)-1].Value.Act), decisions, nil
}

type packChecker struct {
	p   Pack
	src packSource
	out PackVerification
	// ledgerEntries holds what the ledgers say of each version.
	ledgerEntries map[wantedVersion]packEntry
	named         map[string]wantedVersion // by file
	intact        []store.Raw              // in the order of files
	files         map[wantedVersion]string
}

type packEntry struct {
	ledger.Entry
	position int64
	used     bool
}

// maxPackFindings bounds the list.
const maxPackFindings = 1000

func (c *packChecker) find(file, found, expected string) {
	if len(c.out.Findings) < maxPackFindings {
		c.out.Findings = append(c.out.Findings, PackFinding{file, found, expected})
	}
}

// entries proves every entry to its ledger's root.
func (c *packChecker) entries() {
	c.ledgerEntries, c.named = map[wantedVersion]packEntry{}, map[string]wantedVersion{}
	last := ""
	for _, l := range c.p.Ledgers {
		done := PackLedgerVerification{Origin: l.Origin, Size: l.Size, Root: l.Root}
		if want := ledger.Origin(c.p.Registry, l.Laboratory); l.Origin != want || l.Laboratory <= last {
			c.find(PackLedgerFile, "the ledger "+quote(l.Origin)+" of "+quote(l.Laboratory)+" after "+quote(last), want+", each once, by laboratory")
		}
		last = l.Laboratory
		before := int64(-1)
		for _, e := range l.Entries {
			place := fmt.Sprintf("%s, ledger %s, position %d", PackLedgerFile, l.Origin, e.Position)
			if e.Position <= before {
				c.find(PackLedgerFile, fmt.Sprintf("position %d after %d", e.Position, before), "rising positions")
			}
			before = e.Position
			entry, err := ledger.ParseEntry([]byte(e.Entry))
			if err != nil {
				c.find(place, err.Error(), "a ledger entry")
				continue
			}
			proof := make([]ledger.Hash, len(e.Proof))
			for i, h := range e.Proof {
				proof[i] = ledger.Hash(h)
			}
			if err := ledger.CheckInclusion(proof, l.Size, ledger.Hash(l.Root), e.Position, ledger.LeafHash([]byte(e.Entry))); err != nil {
				c.find(place, err.Error(), "entry, position and proof that lead to the root")
			} else {
				done.Proved++
			}
			if entry.Laboratory != l.Laboratory {
				c.find(place, "an entry of laboratory "+entry.Laboratory, l.Laboratory)
			}
			w := wantedVersion{store.Key{Laboratory: entry.Laboratory, Kind: store.Kind(entry.Kind), Code: entry.Code}, entry.Version}
			if _, ok := c.ledgerEntries[w]; ok {
				c.find(place, "a second entry of "+w.String()+"."+strconv.Itoa(w.version), "one")
			}
			c.ledgerEntries[w] = packEntry{Entry: entry, position: e.Position}
			c.named[versionFile(store.Ref{Key: w.Key, Version: w.version})] = w
		}
		c.out.Ledgers = append(c.out.Ledgers, done)
	}
}

// bodies hashes every version again and holds it against its entry.
func (c *packChecker) bodies() {
	c.files = map[wantedVersion]string{}
	for _, v := range c.p.Versions {
		c.out.Versions++
		kind := ""
		if parts := strings.SplitN(v.File, "/", 4); len(parts) == 4 {
			kind = parts[2]
		}
		raw, err := store.ParseBody(store.Kind(kind), v.Body)
		found := "bytes with SHA-256 " + store.Hash(sha256.Sum256(v.Body)).String()
		if err == nil {
			if canonical, cErr := ledger.CanonicalJSON(v.Body); cErr != nil || !bytes.Equal(canonical, v.Body) {
				err = fmt.Errorf("not canonical JSON (RFC 8785)")
			}
		}
		// The name of the file says which version it should be, whatever the bytes say.
		entry, w, ok := c.entryOfFile(v.File)
		switch {
		case !ok:
			c.find(v.File, "a version", "a file that "+PackLedgerFile+" has an entry for")
			continue
		case store.Hash(entry.Hash) != raw.Hash:
			c.find(v.File, found, "SHA-256 "+store.Hash(entry.Hash).String()+" as in its ledger entry")
			continue
		case err != nil:
			c.find(v.File, err.Error(), "the canonical body of a version")
			continue
		}
		entry.used = true
		c.ledgerEntries[w] = entry
		if _, twice := c.files[w]; twice {
			c.find(v.File, "a version that is in the pack already", "each once")
			continue
		}
		if wantedOf(raw.Ref) != w || raw.RecordedBy != entry.By {
			c.find(v.File, fmt.Sprintf("the body of %s by %s", raw.Ref, raw.RecordedBy), fmt.Sprintf("%s.%d by %s as in its ledger entry", w.Key, w.version, entry.By))
			continue
		}
		raw.RecordedAt, raw.Position = store.InstantOf(entry.At), entry.position
		c.files[w] = v.File
		c.src.raws[w] = raw
		c.intact = append(c.intact, raw)
	}
	there := map[string]bool{}
	for _, v := range c.p.Versions {
		there[v.File] = true
	}
	for _, file := range slices.Sorted(mapKeys(c.named)) {
		if e, _, _ := c.entryOfFile(file); !e.used && !there[file] {
			c.find(file, "no file", "the body with SHA-256 "+store.Hash(e.Hash).String())
		}
	}
	for _, raw := range c.intact {
		if raw.Kind != store.KindDecision {
			continue
		}
		d, err := store.Decode[store.Decision](raw)
		if err != nil {
			c.find(c.files[wantedOf(raw.Ref)], err.Error(), "a decision")
			continue
		}
		key, version, err := store.DecisionSubject(raw.Laboratory, raw.Code)
		if err != nil {
			c.find(c.files[wantedOf(raw.Ref)], err.Error(), "a decision")
			continue
		}
		w := wantedVersion{key, version}
		c.src.decisions[w] = append(c.src.decisions[w], d)
	}
	for _, list := range c.src.decisions {
		slices.SortFunc(list, func(a, b store.Version[store.Decision]) int { return a.Ref.Version - b.Ref.Version })
	}
}

func (c *packChecker) entryOfFile(file string) (packEntry, wantedVersion, bool) {
	w, ok := c.named[file]
	return c.ledgerEntries[w], w, ok
}

// checkpoints opens every signed checkpoint and follows keys from one to the next.
func (c *packChecker) checkpoints(q PackCheckRequest) {
	given := q.Verifiers
	q.Verifiers = nil
	for i, v := range given {
		if _, err := note.NewVerifier(v); err != nil {
			c.find(fmt.Sprintf("key %d of those given", i+1), fmt.Sprintf("%.200q (%v)", v, err), "a public key as <origin>+<8 hexadecimal digits>+<base64>")
			continue
		}
		q.Verifiers = append(q.Verifiers, v)
	}
	for i, l := range c.p.Ledgers {
		done := &c.out.Ledgers[i]
		var keys []store.Version[store.SigningKey]
		for _, raw := range c.intact {
			if raw.Laboratory == l.Laboratory && raw.Kind == store.KindKey && raw.Code == KeyCode {
				key, err := store.Decode[store.SigningKey](raw)
				if err != nil {
					c.find(c.files[wantedOf(raw.Ref)], err.Error(), "a public key")
					continue
				}
				keys = append(keys, key)
			}
		}
		slices.SortFunc(keys, func(a, b store.Version[store.SigningKey]) int { return a.Ref.Version - b.Ref.Version })
		verifiers := slices.Clone(q.Verifiers)
		for _, k := range keys {
			verifiers = append(verifiers, k.Value.Verifier)
		}
		var good []store.Checkpoint
		head := false
		for _, k := range l.Checkpoints {
			if k.Note == nil {
				c.find(k.File, "no file", "the checkpoint that "+PackLedgerFile+" names")
				continue
			}
			signed, err := ledger.Open(k.Note, verifiers...)
			if err != nil {
				c.find(k.File, err.Error(), "a checkpoint signed by a key of "+l.Origin)
				continue
			}
			row := store.Checkpoint{Size: signed.Size, Signer: signed.Signer, Note: k.Note}
			if signed.Origin != l.Origin || signed.Size != k.Size || checkpointFile(l.Laboratory, row) != k.File {
				c.find(k.File, fmt.Sprintf("a checkpoint of %s at size %d by %s", signed.Origin, signed.Size, signed.Signer), "that of its name and of "+PackLedgerFile)
				continue
			}
			if err := c.consistent(l, k.Consistency, signed.Checkpoint); err != nil {
				c.find(k.File, err.Error(), "a ledger that continues the one the checkpoint was signed for")
				continue
			}
			good = append(good, row)
			head = head || signed.Size == l.Size
			if !slices.Contains(done.SignedBy, signed.Signer) {
				done.SignedBy = append(done.SignedBy, signed.Signer)
			}
			for _, v := range q.Verifiers {
				if _, err := ledger.Open(k.Note, v); err == nil {
					done.Outside = true
				}
			}
		}
		for j, vouch := range vouching(keys, good) {
			if vouch == nil {
				c.find(c.files[wantedOf(keys[j+1].Ref)], "a key that the one before has not signed", "a checkpoint by "+shortVerifier(keys[j].Value.Verifier)+" that covers it")
			}
		}
		switch {
		case len(l.Checkpoints) == 0 && len(keys) == 0:
			c.out.Notes = append(c.out.Notes, "the ledger "+l.Origin+" is not signed: nothing binds its root to anybody")
		case !head:
			c.out.Notes = append(c.out.Notes, fmt.Sprintf("no checkpoint is signed for size %d of %s, to which the entries are proved", l.Size, l.Origin))
		}
		for n, text := range q.Outside {
			signed, err := ledger.Open(text, verifiers...)
			if err != nil || signed.Origin != l.Origin {
				continue
			}
			place := fmt.Sprintf("checkpoint %d of those kept outside", n+1)
			k := slices.IndexFunc(l.Checkpoints, func(k PackCheckpoint) bool { return k.Size == signed.Size })
			switch {
			case signed.Size == l.Size && signed.Root == ledger.Hash(l.Root):
				done.Outside = true
			case signed.Size == l.Size:
				c.find(PackLedgerFile, "root "+l.Root.String()+" of "+l.Origin, "root "+store.Hash(signed.Root).String()+" as in the "+place)
			case k >= 0:
				if err := c.consistent(l, l.Checkpoints[k].Consistency, signed.Checkpoint); err != nil {
					c.find(PackLedgerFile, err.Error(), "a ledger that continues the "+place)
				} else {
					done.Outside = true
				}
			default:
				c.out.Notes = append(c.out.Notes, fmt.Sprintf("the %s is of size %d of %s; the pack has no proof from that size to its own, %d", place, signed.Size, l.Origin, l.Size))
			}
		}
		if !done.Outside && len(done.SignedBy) > 0 {
			c.out.Notes = append(c.out.Notes, "the key of "+strings.Join(done.SignedBy, ", ")+" came with the pack: compare it with one that the laboratory published")
		}
	}
	// A key given by the reader that signed nothing here is told, not passed over.
	for _, v := range q.Verifiers {
		if !slices.ContainsFunc(c.out.Ledgers, func(l PackLedgerVerification) bool { return slices.Contains(l.SignedBy, shortVerifier(v)) }) {
			c.find(PackLedgerFile, "no good checkpoint by "+shortVerifier(v), "one, since the key was given")
		}
	}
}

func (c *packChecker) consistent(l PackLedger, proof []store.Hash, older ledger.Checkpoint) error {
	out := make([]ledger.Hash, len(proof))
	for i, h := range proof {
		out[i] = ledger.Hash(h)
	}
	return ledger.CheckConsistency(out, l.Size, ledger.Hash(l.Root), older.Size, older.Root)
}

// inputs checks that what versions rest on is there, with the hash they name.
func (c *packChecker) inputs() {
	_, line, lineErr := c.start()
	for _, raw := range c.intact {
		file := c.files[wantedOf(raw.Ref)]
		for j, in := range raw.Inputs {
			if packLeavesOut(raw, in, j, line, lineErr == nil) {
				continue
			}
			if have, ok := c.src.raws[wantedOf(in.Ref)]; !ok {
				c.find(versionFile(in.Ref), "no intact version", "SHA-256 "+in.Hash.String()+" as "+file+" names it")
			} else if have.Hash != in.Hash {
				c.find(file, fmt.Sprintf("input %d, %s, with SHA-256 %s", j, in.Ref, in.Hash), have.Hash.String())
			}
		}
		if before, ok := c.src.raws[wantedVersion{raw.Key, raw.Version - 1}]; ok && before.Hash != raw.Previous {
			c.find(file, "the version before with SHA-256 "+raw.Previous.String(), before.Hash.String())
		}
		if raw.Kind.Decided() && !c.approved(raw) {
			c.find(versionFile(store.Ref{Key: store.Key{Laboratory: raw.Laboratory, Kind: store.KindDecision, Code: store.DecisionCode(raw.Ref)}, Version: 1}),
				"no decision that approves "+raw.Ref.String(), "every decision on it, one of them approving")
		}
	}
}

// packLeavesOut tells which inputs a pack does not follow: the other lines of
// the report, the report it amends, and what a decision names beside its subject.
func packLeavesOut(raw store.Raw, in store.Input, j, line int, known bool) bool {
	switch {
	case raw.Kind == store.KindReport && in.Part == "line":
		return !known || j != line
	case in.Part == "amends":
		return true
	case raw.Kind == store.KindDecision:
		return in.Part != "subject"
	}
	return false
}

// approved tells whether the decisions on a version run without a gap and one
// approves it, its own or that on its revision.
func (c *packChecker) approved(raw store.Raw) bool {
	found := false
	for i, d := range c.src.decisions[wantedOf(raw.Ref)] {
		if d.Ref.Version != i+1 {
			return false
		}
		found = found || d.Value.Act == "approved"
	}
	for _, in := range raw.Inputs {
		if in.Kind == store.KindRevision && !found {
			revision, ok := c.src.raws[wantedOf(in.Ref)]
			found = ok && wantedOf(revision.Ref) != wantedOf(raw.Ref) && slices.ContainsFunc(c.src.decisions[wantedOf(in.Ref)],
				func(d store.Version[store.Decision]) bool { return d.Value.Act == "approved" })
		}
	}
	return found
}
