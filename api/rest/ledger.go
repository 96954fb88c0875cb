package rest

import (
	"context"
	"encoding/base64"
	"net/http"
	"strconv"
	"time"

	"github.com/danielgtaylor/huma/v2"

	"deltamoor/api/registry"
	"deltamoor/store"
	"deltamoor/store/ledger"
)

// A Ledger is the state of a laboratory's ledger.
type Ledger struct {
	Laboratory string `json:"laboratory"`
	Size       int64  `json:"size" doc:"Number of entries."`
	Root       string `json:"root" doc:"Root of the Merkle tree over them (RFC 6962), hexadecimal."`
}

// SizeParam chooses the size of the tree.
type SizeParam struct {
	Size int64 `query:"size" minimum:"1" doc:"Of the tree at this size; left out: the present one."`
}

func (p SizeParam) size() int64 {
	if p.Size == 0 {
		return -1
	}
	return p.Size
}

func (f *face) ledgerHead(ctx context.Context, actor registry.Actor, in *SizeParam) (*plain[Ledger], error) {
	root, size, err := f.registry.LedgerRoot(ctx, actor, in.size())
	if err != nil {
		return nil, err
	}
	return &plain[Ledger]{Ledger{actor.Laboratory, size, root.String()}}, nil
}

// An Entry is one entry of the ledger.
type Entry struct {
	Position int64     `json:"position"`
	At       time.Time `json:"at"`
	By       string    `json:"by"`
	Kind     string    `json:"kind"`
	Code     string    `json:"code"`
	Version  int       `json:"version"`
	Hash     string    `json:"hash" doc:"SHA-256 of the version's body."`
	Leaf     string    `json:"leaf" doc:"SHA-256(0x00 ‖ entry), hexadecimal."`
	Bytes    string    `json:"bytes" doc:"The entry's canonical bytes, base64: the datum of the leaf."`
}

var entryTable = table[Entry]{[]string{"position", "at", "by", "kind", "code", "version", "hash", "leaf"}, func(e Entry) []string {
	return []string{strconv.FormatInt(e.Position, 10), clock(&e.At), e.By, e.Kind, e.Code, whole(&e.Version), e.Hash, e.Leaf}
}}

func showEntry(s store.Entry) (Entry, error) {
	e, err := ledger.ParseEntry(s.Bytes)
	if err != nil {
		return Entry{}, err
	}
	leaf := store.Hash(ledger.LeafHash(s.Bytes))
	return Entry{s.Position, e.At, e.By, e.Kind, e.Code, e.Version, store.Hash(e.Hash).String(), leaf.String(), base64.StdEncoding.EncodeToString(s.Bytes)}, nil
}

func (f *face) ledgerEntries(ctx context.Context, actor registry.Actor, in *ListParams) (*answer, error) {
	read := func(ctx context.Context, q registry.Query) (registry.Page[Entry], error) {
		var page registry.Page[Entry]
		from := int64(0)
		if q.After != "" {
			n, err := readingNumber(q.After)
			if err != nil {
				return page, err
			}
			from = int64(n) + 1
		}
		entries, err := f.registry.LedgerEntries(ctx, actor, from, q.Limit)
		if err != nil {
			return page, err
		}
		for _, s := range entries {
			e, err := showEntry(s)
			if err != nil {
				return page, err
			}
			page.Items = append(page.Items, e)
		}
		if len(entries) == q.Limit {
			page.After = strconv.FormatInt(entries[len(entries)-1].Position, 10)
		}
		return page, nil
	}
	return answerList(ctx, f, in, read, same, entryTable)
}

// A Proof is a path of hashes in the Merkle tree.
type Proof struct {
	Position *int64   `json:"position,omitempty" doc:"Of the entry that is proved to be in the tree."`
	First    *int64   `json:"first,omitempty" doc:"Size of the tree that is proved to be a prefix."`
	Size     int64    `json:"size"`
	Root     string   `json:"root"`
	Path     []string `json:"path" doc:"Hashes from the leaf upwards, hexadecimal."`
}

func (f *face) inclusion(ctx context.Context, actor registry.Actor, in *struct {
	Position int64 `path:"position" minimum:"0" doc:"Of the entry."`
	SizeParam
}) (*plain[Proof], error) {
	root, size, err := f.registry.LedgerRoot(ctx, actor, in.size())
	if err != nil {
		return nil, err
	}
	if in.Position >= size {
		return nil, registry.Refuse(registry.NotFound, "no entry at position %d in a tree of %d", in.Position, size)
	}
	path, err := f.registry.LedgerInclusion(ctx, actor, in.Position, size)
	if err != nil {
		return nil, err
	}
	return &plain[Proof]{Proof{Position: &in.Position, Size: size, Root: root.String(), Path: convert(path, store.Hash.String)}}, nil
}

func (f *face) consistency(ctx context.Context, actor registry.Actor, in *struct {
	First int64 `query:"first" required:"true" minimum:"1" doc:"Size of the earlier tree."`
	SizeParam
}) (*plain[Proof], error) {
	root, size, err := f.registry.LedgerRoot(ctx, actor, in.size())
	if err != nil {
		return nil, err
	}
	if in.First > size {
		return nil, registry.Refuse(registry.NotFound, "no tree of %d entries: there are %d", in.First, size)
	}
	path, err := f.registry.LedgerConsistency(ctx, actor, in.First, size)
	if err != nil {
		return nil, err
	}
	return &plain[Proof]{Proof{First: &in.First, Size: size, Root: root.String(), Path: convert(path, store.Hash.String)}}, nil
}

// checkpoint answers with the signed text as it is.
func (f *face) checkpoint(ctx context.Context, actor registry.Actor, _ *struct{}) (*answer, error) {
	c, err := f.registry.LastCheckpoint(ctx, actor)
	if err != nil {
		return nil, err
	}
	return &answer{Body: func(hc huma.Context) {
		hc.SetHeader("Content-Type", "text/plain; charset=utf-8")
		hc.SetStatus(http.StatusOK)
		_, _ = hc.BodyWriter().Write(c.Note)
	}}, nil
}
