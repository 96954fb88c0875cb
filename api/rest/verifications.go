package rest

import (
	"context"
	"net/http"

	"deltamoor/api/registry"
	"deltamoor/store"
	"deltamoor/store/ledger"
)

// A Verification is the outcome of recomputing what the laboratory holds.
type Verification struct {
	Clean        bool                     `json:"clean" doc:"Nothing was found."`
	Laboratories []LaboratoryVerification `json:"laboratories"`
	Recomputed   int                      `json:"recomputed" doc:"Calibrations, final values, assigned values and report lines computed again."`
	Equal        int                      `json:"equal" doc:"Those whose every bit was the same."`
	Findings     []Finding                `json:"findings" doc:"The first 500."`
	More         int                      `json:"more,omitempty" doc:"Findings beyond those listed."`
}

// A LaboratoryVerification says how much of one ledger was checked.
type LaboratoryVerification struct {
	Laboratory string `json:"laboratory"`
	Entries    int64  `json:"entries"`
	Root       string `json:"root" doc:"Root of the Merkle tree, recomputed."`
	// Checkpoints counts the signed checkpoints that lead to the recomputed roots.
	Checkpoints int `json:"checkpoints" doc:"Signed checkpoints that lead to the recomputed roots."`
}

// A Finding is one difference.
type Finding struct {
	Table    string `json:"table"`
	Key      string `json:"key"`
	Found    string `json:"found"`
	Expected string `json:"expected"`
}

func showFinding(x store.Finding) Finding { return Finding{x.Table, x.Key, x.Found, x.Expected} }

func showLedgers(list []registry.LaboratoryVerification) []LaboratoryVerification {
	return convert(list, func(l registry.LaboratoryVerification) LaboratoryVerification {
		return LaboratoryVerification{l.Laboratory, l.Entries, store.Hash(l.Root).String(), l.Checkpoints}
	})
}

// maxFindings bounds an answer.
const maxFindings = 500

// verifyAll starts the job that verifies the asker's laboratory.
func (f *face) verifyAll(ctx context.Context, actor registry.Actor, _ *struct{}) (*answer, error) {
	job, err := f.registry.StartVerification(ctx, actor)
	if err != nil {
		return nil, err
	}
	return jsonAnswer(showJob(job), http.StatusAccepted, map[string]string{"Location": "/v1/jobs/" + store.FormatCode(job.Code)})
}

// verification answers with what the job of a verification found.
func (f *face) verification(ctx context.Context, actor registry.Actor, in *CodeParam) (*plain[Verification], error) {
	code, err := parseJob(in.Code)
	if err != nil {
		return nil, err
	}
	v, err := f.registry.VerificationBy(ctx, actor, code)
	if err != nil {
		return nil, err
	}
	out := Verification{Clean: v.Clean(), Recomputed: v.Recomputed, Equal: v.Equal, Laboratories: showLedgers(v.Laboratories),
		Findings: convert(v.Findings[:min(len(v.Findings), maxFindings)], showFinding)}
	out.More = v.Count - len(out.Findings)
	return &plain[Verification]{out}, nil
}

// A ChainVerification is the outcome of recomputing what one number rests on.
type ChainVerification struct {
	Clean      bool                     `json:"clean" doc:"Nothing was found."`
	Ledgers    []LaboratoryVerification `json:"ledgers" doc:"The heads that entries were proved against; checkpoints is 1 where the newest signed one leads to that head."`
	Nodes      []NodeVerification       `json:"nodes" doc:"The versions of the chain, the start first, generations in order."`
	Recomputed int                      `json:"recomputed"`
	Equal      int                      `json:"equal" doc:"Those whose every bit was the same."`
	Proved     int                      `json:"proved" doc:"Versions, decisions included, whose entries were proved to be in the tree."`
	Findings   []Finding                `json:"findings" doc:"The first 500."`
	More       int                      `json:"more,omitempty"`
	Cut        int                      `json:"cut" doc:"Versions beyond the bound of 2000 that were not followed."`
}

// A NodeVerification says what became of one version of the chain.
type NodeVerification struct {
	Input
	Depth      int               `json:"depth"`
	Position   int64             `json:"position" doc:"In its laboratory's ledger; -1 where it cannot be read."`
	Recomputed bool              `json:"recomputed" doc:"It states numbers, and they were computed again."`
	Equal      bool              `json:"equal" doc:"Every bit of them was the same."`
	Compared   int               `json:"compared" doc:"How many numbers were compared."`
	Numbers    []NumberCompared  `json:"numbers" doc:"Value and u; of a calibration its parameters."`
	Largest    *NumberCompared   `json:"largest,omitempty" doc:"The number that differs most; absent where none does."`
	Inclusion  *InclusionCompact `json:"inclusion" doc:"Proof that its entry is in the ledger (RFC 6962, 2.1.1); null where there is none."`
	Findings   []Finding         `json:"findings"`
}

// A NumberCompared is one number as stored and as computed again.
type NumberCompared struct {
	Place      string  `json:"place"`
	Stored     float64 `json:"stored"`
	Recomputed float64 `json:"recomputed"`
	Difference float64 `json:"difference"`
}

// An InclusionCompact is an audit path to the root of the laboratory's ledger in ledgers.
type InclusionCompact struct {
	Index int64    `json:"index" doc:"Of the leaf."`
	Size  int64    `json:"size" doc:"Of the tree."`
	Path  []string `json:"path" doc:"Hashes from the leaf to the root."`
}

func showCompared(n registry.ComparedNumber) NumberCompared {
	return NumberCompared{n.Place, n.Stored, n.Again, n.Difference()}
}

func showChain(c registry.ChainVerification) ChainVerification {
	out := ChainVerification{Clean: c.Clean(), Ledgers: showLedgers(c.Ledgers), Recomputed: c.Recomputed, Equal: c.Equal, Proved: c.Proved, Cut: c.Cut,
		Findings: convert(c.Findings[:min(len(c.Findings), maxFindings)], showFinding)}
	out.More = len(c.Findings) - len(out.Findings)
	size := map[string]int64{}
	for _, l := range c.Ledgers {
		size[l.Laboratory] = l.Entries
	}
	for _, n := range c.Nodes {
		x := NodeVerification{Input: showVersionRef("", n.Ref), Depth: n.Depth, Position: n.Position, Recomputed: n.Recomputed, Equal: n.Equal, Numbers: []NumberCompared{},
			Findings: convert(n.Findings, showFinding)}
		if n.Numbers != nil {
			x.Compared, x.Numbers = n.Numbers.Compared, convert(n.Numbers.Stated, showCompared)
			if n.Numbers.Largest != nil {
				largest := showCompared(*n.Numbers.Largest)
				x.Largest = &largest
			}
		}
		if n.Proved {
			x.Inclusion = &InclusionCompact{n.Position, size[n.Laboratory], convert(n.Proof, func(h ledger.Hash) string { return store.Hash(h).String() })}
		}
		out.Nodes = append(out.Nodes, x)
	}
	return out
}

func (f *face) answerChain(ctx context.Context, actor registry.Actor, kind store.Kind, code string, version int) (*plain[ChainVerification], error) {
	c, err := f.registry.VerifyChain(ctx, actor, kind, code, version, nil)
	if err != nil {
		return nil, err
	}
	return &plain[ChainVerification]{showChain(c)}, nil
}

func (f *face) verifyReported(ctx context.Context, actor registry.Actor, in *CodeParam) (*plain[ChainVerification], error) {
	code, err := parseCode("path.code", in.Code, kindReported)
	if err != nil {
		return nil, err
	}
	return f.answerChain(ctx, actor, "", code, 0)
}

// VersionParam chooses a version of a record.
type VersionParam struct {
	Version int `query:"version" minimum:"1" doc:"Of this version; left out: the one in force, else the newest."`
}

// verificationOf recomputes the chain of a record of a kind.
func (f *face) verificationOf(kind store.Kind, made bool) func(context.Context, registry.Actor, *struct {
	RecordCode
	VersionParam
}) (*plain[ChainVerification], error) {
	return func(ctx context.Context, actor registry.Actor, in *struct {
		RecordCode
		VersionParam
	}) (*plain[ChainVerification], error) {
		code, err := in.parse(kind, made)
		if err != nil {
			return nil, err
		}
		return f.answerChain(ctx, actor, kind, code, in.Version)
	}
}

func (f *face) verifyValue(ctx context.Context, actor registry.Actor, in *struct {
	ValueParams
	VersionParam
}) (*plain[ChainVerification], error) {
	code, err := in.code(ctx, f, actor)
	if err != nil {
		return nil, err
	}
	return f.answerChain(ctx, actor, store.KindValue, code, in.Version)
}
