package rest

import (
	"context"

	"deltamoor/api/registry"
	"deltamoor/store"
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

// maxFindings bounds an answer.
const maxFindings = 500

// verifyAll verifies the asker's laboratory, within the time that a long
// request has and one at a time.
func (f *face) verifyAll(ctx context.Context, actor registry.Actor, _ *struct{}) (*plain[Verification], error) {
	if !actor.May(registry.MayRead) {
		return nil, registry.Refuse(registry.Refused, "%s may not read in laboratory %s", actor.Person, actor.Laboratory)
	}
	if !f.verify.TryLock() {
		return nil, registry.Refuse(registry.TooMany, "a verification is running; ask again when it has ended")
	}
	defer f.verify.Unlock()
	v, err := f.registry.Verify(ctx, registry.VerifyRequest{Laboratories: []string{actor.Laboratory}, Workers: 1})
	if err != nil {
		if ctx.Err() != nil {
			return nil, &registry.Error{Meaning: registry.Unavailable, Message: "verification did not end within the time of one request; the command verify has no such bound", Err: err}
		}
		return nil, err
	}
	out := Verification{Clean: v.Clean(), Recomputed: v.Recomputed, Equal: v.Equal,
		Laboratories: convert(v.Laboratories, func(l registry.LaboratoryVerification) LaboratoryVerification {
			return LaboratoryVerification{l.Laboratory, l.Entries, store.Hash(l.Root).String(), l.Checkpoints}
		}),
		Findings: convert(v.Findings[:min(len(v.Findings), maxFindings)], func(x store.Finding) Finding {
			return Finding{x.Table, x.Key, x.Found, x.Expected}
		})}
	out.More = v.Count - len(out.Findings)
	return &plain[Verification]{out}, nil
}
