package registry

import (
	"context"
	"errors"
	"fmt"
	"io"

	"deltamoor/store"
	"deltamoor/store/ledger"
)

// A ChainVerification is the outcome of recomputing what one number rests on.
type ChainVerification struct {
	// Nodes are the versions of the chain, the start first, generations in order.
	Nodes []NodeVerification
	// Ledgers are the heads that the versions' entries were proved against;
	// Checkpoints of each is 1 where its newest signed checkpoint leads to that head.
	Ledgers []LaboratoryVerification
	// Findings are the differences: those of ledgers, then those of nodes in their order.
	Findings []store.Finding
	// Recomputed counts calibrations, final values, assigned values and report
	// lines computed again, Equal those whose every bit was the same.
	Recomputed, Equal int
	// Proved counts the versions, decisions included, whose ledger entries were
	// proved to be in the tree.
	Proved int
	// Cut counts versions beyond MaxTrace that were not followed.
	Cut int
}

// Clean tells whether nothing was found.
func (v ChainVerification) Clean() bool { return len(v.Findings) == 0 }

// A NodeVerification says what became of one version of the chain.
type NodeVerification struct {
	store.Ref
	Depth int
	// Position in its laboratory's ledger; -1 where the version cannot be read.
	Position int64
	// Recomputed tells that it states numbers that were computed again, Equal
	// that every bit of them was the same.
	Recomputed, Equal bool
	// Numbers are those it states, as stored and as computed again; nil where it
	// states none.
	Numbers *NumbersCompared
	// Proved tells that its ledger entry is in the tree (RFC 6962, 2.1.1), Proof is
	// the audit path from the entry's leaf to the root of its laboratory in Ledgers.
	Proved bool
	Proof  []ledger.Hash
	// Findings are what differs; none means that the node is as it was recorded.
	Findings []store.Finding
}

// VerifyChain recomputes everything that one number rests on: of each version
// from the start down to where its chain ends, the hash, the ledger entry and
// its place in the Merkle tree, the readings and uploads it binds, and the
// numbers it states; and of each decision on them the entry. Code is a reported
// delta's (kind ""), or any record's with its kind; version 0 is the one in
// force. progress may be nil. What is wrong is a finding, not an error.
//
// It shows nothing of what the chain does not name: that rows are missing or
// added elsewhere, only Verify tells.
func (r *Registry) VerifyChain(ctx context.Context, actor Actor, kind store.Kind, code string, version int, progress func(done, total int64)) (ChainVerification, error) {
	var c chain
	err := r.read(ctx, actor, func(ctx context.Context, v *store.View) error {
		c = chain{v: v, heads: map[string]*chainHead{}}
		start, line, err := c.start(ctx, actor.Laboratory, kind, code, version)
		if err != nil {
			return err
		}
		return c.walk(ctx, start, line, progress)
	})
	if err != nil {
		return ChainVerification{}, fmt.Errorf("verify the chain of %s: %w", store.FormatCode(code), err)
	}
	for _, n := range c.out.Nodes {
		c.out.Findings = append(c.out.Findings, n.Findings...)
	}
	return c.out, nil
}

// A chain is the verification of one chain.
type chain struct {
	v     *store.View
	out   ChainVerification
	heads map[string]*chainHead
	// row is the derived row of the reported delta that the chain starts at, if it does.
	row *store.Reported
}

// A chainHead is the state of a ledger that entries are proved against.
type chainHead struct {
	root   ledger.Hash
	size   int64
	reader ledger.HashReader
}

// start finds the first version, and which line of a report is meant (-1: it is
// no report, or all of it).
func (c *chain) start(ctx context.Context, laboratory string, kind store.Kind, code string, version int) (store.Ref, int, error) {
	if kind != "" {
		raw, err := lookup(ctx, c.v, laboratory, kind, code, version, store.Moment{})
		var corrupt *store.CorruptError
		if errors.As(err, &corrupt) { // the walk says what is wrong with it
			return corrupt.Ref, -1, nil
		}
		return raw.Ref, -1, err
	}
	row, err := c.v.Reported(ctx, code)
	if errors.Is(err, store.ErrNotFound) || err == nil && row.Laboratory != laboratory {
		return store.Ref{}, -1, Refuse(NotFound, "no reported delta %s", store.FormatCode(code))
	}
	c.row = &row
	return store.Ref{Key: store.Key{Laboratory: row.Laboratory, Kind: store.KindReport, Code: row.Report}, Version: row.Version}, row.Line, err
}

func (c *chain) walk(ctx context.Context, start store.Ref, line int, progress func(done, total int64)) error {
	seen := map[store.Ref]bool{start: true}
	queue := []NodeVerification{{Ref: start}}
	for i := 0; i < len(queue); i++ {
		if err := ctx.Err(); err != nil {
			return err
		}
		node := &queue[i]
		node.Position = -1
		raw, err := c.read(ctx, node)
		if err != nil {
			return err
		}
		if raw != nil {
			if i > 0 {
				line = -1
			}
			if err := c.check(ctx, node, *raw, line); err != nil {
				return err
			}
			for j, in := range raw.Inputs {
				other := raw.Kind == store.KindReport && line >= 0 && in.Part == "line" && j != line
				if other || in.Part == "amends" || seen[in.Ref] {
					continue
				}
				if len(queue) >= MaxTrace {
					c.out.Cut++
					continue
				}
				seen[in.Ref] = true
				queue = append(queue, NodeVerification{Ref: in.Ref, Depth: queue[i].Depth + 1})
			}
		}
		if progress != nil {
			progress(int64(i+1), int64(len(queue)))
		}
	}
	c.out.Nodes = queue
	return nil
}

func (n *NodeVerification) find(table, key, found, expected string) {
	n.Findings = append(n.Findings, store.Finding{Position: n.Position, Table: table, Key: key, Found: found, Expected: expected})
}

// broken makes a finding of an error, unless the verification itself cannot go on.
func (n *NodeVerification) broken(ctx context.Context, err error, table, expected string) error {
	if ctx.Err() != nil || MeaningOf(err) == Unavailable {
		return err
	}
	n.find(table, n.Ref.String(), err.Error(), expected)
	return nil
}

// read reads a node's version by the hash it is named with; nil where it is
// not as it was recorded, which becomes a finding.
func (c *chain) read(ctx context.Context, n *NodeVerification) (*store.Raw, error) {
	raw, err := c.v.Version(ctx, n.Key, n.Version)
	var corrupt *store.CorruptError
	switch {
	case errors.Is(err, store.ErrNotFound):
		n.find("versions", n.Ref.String(), "nothing", "the version with hash "+n.Hash.String())
		return nil, nil
	case errors.As(err, &corrupt) && corrupt.Found != (store.Hash{}):
		n.find("versions", n.Ref.String(), "a body with hash "+corrupt.Found.String(), corrupt.Ref.Hash.String())
		return nil, nil
	case err != nil:
		return nil, n.broken(ctx, err, "versions", "the body that was recorded")
	}
	n.Position = raw.Position
	if n.Hash == (store.Hash{}) { // the start is not named by anything
		n.Hash = raw.Hash
	}
	if raw.Hash != n.Hash {
		n.find("versions", n.Ref.String(), "a body with hash "+raw.Hash.String(), n.Hash.String()+", as the version that rests on it says")
		return nil, nil
	}
	return &raw, nil
}

// check verifies everything that one version says or binds.
func (c *chain) check(ctx context.Context, n *NodeVerification, raw store.Raw, line int) error {
	var err error
	if n.Proof, n.Proved, err = c.prove(ctx, n, raw); err != nil {
		return err
	}
	_, decisions, err := c.v.State(ctx, raw.Ref, store.Moment{})
	if err != nil {
		if err := n.broken(ctx, err, "versions", "decisions that can be read"); err != nil {
			return err
		}
	}
	for _, d := range decisions {
		if _, _, err := c.prove(ctx, n, store.Raw{Ref: d.Ref, RecordedAt: d.RecordedAt, RecordedBy: d.RecordedBy, Position: d.Position}); err != nil {
			return err
		}
	}
	if err := c.bound(ctx, n, raw); err != nil {
		return err
	}
	again := recheck{compared: &NumbersCompared{}}
	if raw.Kind == store.KindReport && line >= 0 {
		err = c.line(ctx, &again, n, raw, line)
	} else {
		err = again.version(ctx, c.v, raw)
	}
	if err != nil {
		if ctx.Err() != nil || MeaningOf(err) == Unavailable {
			return err
		}
		again.add(raw, "", "numbers that cannot be computed again: "+err.Error(), "the same numbers from the inputs it names")
	}
	n.Findings = append(n.Findings, again.findings...)
	n.Recomputed, n.Equal = again.recomputed > 0, again.recomputed > 0 && again.equal == again.recomputed
	if again.recomputed > 0 && again.compared.Compared > 0 {
		n.Numbers = again.compared
	}
	c.out.Recomputed += again.recomputed
	c.out.Equal += again.equal
	return nil
}

// prove holds a version against its ledger entry, and the entry against the
// root of the ledger.
func (c *chain) prove(ctx context.Context, n *NodeVerification, raw store.Raw) ([]ledger.Hash, bool, error) {
	key := fmt.Sprintf("%s position %d", raw.Laboratory, raw.Position)
	head, err := c.head(ctx, raw.Laboratory)
	if err != nil {
		return nil, false, n.broken(ctx, err, "tree_hashes", "the nodes of the ledger of "+raw.Laboratory)
	}
	entries, err := c.v.Entries(ctx, raw.Laboratory, raw.Position, 1)
	if err != nil {
		return nil, false, err
	}
	want := ledger.Entry{At: raw.RecordedAt.Time(), By: raw.RecordedBy, Code: raw.Code, Hash: raw.Hash, Kind: string(raw.Kind), Laboratory: raw.Laboratory, Version: raw.Ref.Version}.Bytes()
	if len(entries) == 0 || entries[0].Position != raw.Position {
		n.find("entries", key, "nothing", string(want))
		return nil, false, nil
	}
	if string(entries[0].Bytes) != string(want) {
		n.find("entries", key, string(entries[0].Bytes), string(want))
		return nil, false, nil
	}
	proof, err := ledger.ProveInclusion(head.size, raw.Position, head.reader)
	if err != nil {
		return nil, false, n.broken(ctx, err, "tree_hashes", "a proof that the entry is in the ledger")
	}
	if err := ledger.CheckInclusion(proof, head.size, head.root, raw.Position, ledger.LeafHash(want)); err != nil {
		n.find("tree_hashes", key, err.Error(), "a proof that leads from the entry to the root")
		return nil, false, nil
	}
	c.out.Proved++
	return proof, true, nil
}

// head reads a ledger's root once.
func (c *chain) head(ctx context.Context, laboratory string) (*chainHead, error) {
	if h, ok := c.heads[laboratory]; ok {
		return h, nil
	}
	root, size, err := c.v.Root(ctx, laboratory, -1)
	if err != nil {
		return nil, err
	}
	h := &chainHead{root, size, c.v.TreeHashReader(ctx, laboratory)}
	c.heads[laboratory] = h
	l := LaboratoryVerification{Laboratory: laboratory, Entries: size, Root: root}
	if l.Checkpoints, err = c.anchor(ctx, laboratory, h); err != nil {
		return nil, err
	}
	c.out.Ledgers = append(c.out.Ledgers, l)
	return h, nil
}

// anchor holds a ledger's root, which is read off stored nodes, against the
// newest signed checkpoint: 1 where that leads to it, 0 where there is none or
// it does not, which is a finding.
func (c *chain) anchor(ctx context.Context, laboratory string, h *chainHead) (int, error) {
	last, err := c.v.LastCheckpoint(ctx, laboratory)
	if errors.Is(err, store.ErrNotFound) {
		return 0, nil
	}
	if err != nil {
		return 0, err
	}
	keys, err := keysOf(ctx, c.v, laboratory)
	if err == nil {
		var signed ledger.Signed
		if signed, err = ledger.Open(last.Note, each(keys, func(k store.Version[store.SigningKey]) string { return k.Value.Verifier })...); err == nil {
			err = h.continues(signed)
		}
	}
	if err == nil {
		return 1, nil
	}
	if ctx.Err() != nil || MeaningOf(err) == Unavailable {
		return 0, err
	}
	c.out.Findings = append(c.out.Findings, store.Finding{Position: -1, Table: "checkpoints", Key: fmt.Sprintf("%s size %d %s", laboratory, last.Size, last.Signer),
		Found: err.Error(), Expected: fmt.Sprintf("a signed checkpoint that leads to the root %s of %d entries", store.Hash(h.root), h.size)})
	return 0, nil
}

// continues proves that the head has grown out of what was signed (RFC 6962, 2.1.2).
func (h *chainHead) continues(signed ledger.Signed) error {
	proof, err := ledger.ProveConsistency(h.size, signed.Size, h.reader)
	if err != nil {
		return err
	}
	return ledger.CheckConsistency(proof, h.size, h.root, signed.Size, signed.Root)
}

// bound verifies what a version holds by hash outside its own body: the
// readings of a session, the bytes of uploads and documents.
func (c *chain) bound(ctx context.Context, n *NodeVerification, raw store.Raw) error {
	var upload *store.Hash
	switch raw.Kind {
	case store.KindSession:
		s, err := store.Decode[store.Session](raw)
		if err != nil {
			return n.broken(ctx, err, "versions", "a session")
		}
		if err := c.readings(ctx, n, s); err != nil {
			return err
		}
		upload = s.Value.Upload
	case store.KindValue:
		if s, err := store.Decode[store.Value](raw); err == nil { // else the recomputation tells
			upload = s.Value.Document
		}
	case store.KindMaterial:
		s, err := store.Decode[store.Material](raw)
		if err != nil {
			return n.broken(ctx, err, "versions", "a material")
		}
		upload = s.Value.Document
	}
	if upload == nil {
		return nil
	}
	if _, err := c.v.Upload(ctx, raw.Laboratory, *upload, io.Discard); err != nil {
		return n.broken(ctx, err, "content", "the bytes with SHA-256 "+upload.String())
	}
	return nil
}

// readings hashes the rows of a session again, 64 at a time as its body has them.
func (c *chain) readings(ctx context.Context, n *NodeVerification, s store.Version[store.Session]) error {
	var rows []store.Reading
	err := c.v.Readings(ctx, s.Laboratory, s.Code, func(rd store.Reading) error {
		if rd.Number <= s.Value.Readings {
			rows = append(rows, rd)
		}
		return nil
	})
	if err != nil {
		return n.broken(ctx, err, "readings", "the readings of the session")
	}
	key := fmt.Sprintf("%s/%s", s.Laboratory, s.Code)
	if len(rows) != s.Value.Readings {
		n.find("readings", key, fmt.Sprintf("%d rows", len(rows)), fmt.Sprintf("%d", s.Value.Readings))
	}
	found := store.ReadingBlocks(rows)
	for i, want := range s.Value.Blocks {
		if i >= len(found) || found[i] != want {
			have := "nothing"
			if i < len(found) {
				have = "rows with hash " + found[i].String()
			}
			n.find("readings", fmt.Sprintf("%s numbers %d to %d", key, 64*i+1, min(64*(i+1), s.Value.Readings)), have, want.String())
		}
	}
	return nil
}

// line computes one line of a report again, and holds the derived row of its
// code against it.
func (c *chain) line(ctx context.Context, again *recheck, n *NodeVerification, raw store.Raw, line int) error {
	report, err := store.Decode[store.Report](raw)
	if err != nil {
		return err
	}
	if line >= len(report.Value.Lines) || line >= len(report.Inputs) || report.Inputs[line].Part != "line" {
		n.find("reported", c.row.Code, fmt.Sprintf("line %d of %s", line, raw.Ref), "a line that the report has")
		return nil
	}
	again.recomputed++
	stated := report.Value.Lines[line]
	final, err := decodeVersion[store.Final](ctx, c.v, report.Inputs[line].Ref)
	if err != nil {
		return err
	}
	again.compared.add("value", c.row.Value, final.Value.Value, true)
	again.compared.add("u", c.row.StandardUncertainty, final.Value.StandardUncertainty, true)
	hash, err := store.ReportLineHash(store.NewReportLine(stated.Code, report.Code, line, final))
	if err != nil {
		return err
	}
	if hash == stated.Hash {
		again.equal++
	} else {
		again.add(raw, fmt.Sprintf("lines[%d]", line), stated.Hash.String(), hash.String()+" (computed again)")
	}
	want := store.Reported{Code: stated.Code, Laboratory: raw.Laboratory, Report: raw.Code, Version: raw.Ref.Version, Line: line, Final: store.Ref{Key: final.Key, Version: final.Ref.Version},
		Value: final.Value.Value, StandardUncertainty: final.Value.StandardUncertainty, Hash: stated.Hash}
	if *c.row != want {
		n.find("reported", c.row.Code, fmt.Sprintf("%+v", *c.row), fmt.Sprintf("%+v", want))
	}
	return nil
}
