package store

// KindClosing is what became of one set of a revision: record
// "<revision>/<report>", undecided, since it is a decision itself.
const KindClosing Kind = "closing"

// The phases of a revision: version 1 proposes and freezes, version 2 states
// what was drafted, and is what an approval binds.
const (
	RevisionProposed = "proposed"
	RevisionDrafted  = "drafted"
)

// Revision is the body of a revision: what is taken to have changed, the moment
// its affected set is frozen at, and, once everything is drawn up again, the
// hash over the drafts. A draft of it names version 1 as an input of part "revision".
type Revision struct {
	Phase      string              `json:"phase"` // proposed drafted
	Values     []RevisedValue      `json:"values,omitempty"`
	Units      []SuspectUnit       `json:"units,omitempty"`
	Methods    []ReplacedMethod    `json:"methods,omitempty"`
	Factors    []ReplacedFactor    `json:"factors,omitempty"`
	Exclusions []RevisionExclusion `json:"exclusions,omitempty"`
	// Position is the size of the ledger at which the affected set is frozen, and
	// FrozenAt the time of its last entry: nothing recorded later belongs to the set.
	Position int64   `json:"position"`
	FrozenAt Instant `json:"frozen_at"`
	// Drafted is the set of the drafts; nil while proposed.
	Drafted *RevisionSet `json:"drafted,omitempty"`
}

// Form of the body.
func (Revision) Form() string { return "revision/1" }

// A RevisedValue is one assigned value that changes or falls away.
type RevisedValue struct {
	// Old is the version that is no longer to be used.
	Old Ref `json:"old"`
	// New is a recorded version to use in its place; nil where the revision drafts
	// one of Value, or where the value is withdrawn.
	New       *Ref `json:"new,omitempty"`
	Withdrawn bool `json:"withdrawn,omitempty"`
	// From restricts the change to sessions that started then or later; nil is all.
	From *Instant `json:"from,omitempty"`
	// Value (‰) as typed, and its standard uncertainty (‰), of a value that the revision drafts.
	Value               Decimal `json:"value,omitempty"`
	StandardUncertainty float64 `json:"u,omitempty"`
	// Stated, Basis and Evidence are those of the value that the revision drafts.
	Stated   *Stated `json:"stated,omitempty"`
	Basis    string  `json:"basis,omitempty"`
	Evidence string  `json:"evidence,omitempty"`
}

// A SuspectUnit is a bottle whose readings do not count in sessions that
// started at Since or later; nil is all.
type SuspectUnit struct {
	Unit  string   `json:"unit"`
	Since *Instant `json:"since,omitempty"`
}

// A ReplacedMethod says which version of a method a calibration should have been made by.
type ReplacedMethod struct {
	Old Ref `json:"old"`
	New Ref `json:"new"`
}

// A ReplacedFactor says which determination of an H3 factor should have been
// used. Deltas that a program formed with the old one have it undone first.
type ReplacedFactor struct {
	Old Ref `json:"old"`
	New Ref `json:"new"`
}

// A RevisionExclusion names readings of a session that should have been left out.
type RevisionExclusion struct {
	Session  string `json:"session"`
	Readings []int  `json:"readings"`
}

// A RevisionSet is what a revision drafted.
type RevisionSet struct {
	Calibrations int64 `json:"calibrations"`
	Values       int64 `json:"values"`
	Finals       int64 `json:"finals"`
	// Hash is SHA-256 over the drafts' body hashes, sorted.
	Hash Hash `json:"hash"`
	// Untold are the versions that could not be drawn up again, and why.
	Untold []UntoldVersion `json:"untold,omitempty"`
}

// An UntoldVersion is a version whose new value cannot be told.
type UntoldVersion struct {
	Ref Ref    `json:"ref"`
	Why string `json:"why"`
}

// Closing is the body of the decision that ends one set of a revision: the
// deltas of one report. Inputs: the revision as "revision", the report as
// "report", and the amended report as "reissued".
type Closing struct {
	Action string `json:"action"` // re-issue annotate "no action"
	// Lines counts the report's lines that the revision moves.
	Lines int `json:"lines"`
	// Reissued is the code of the amended report, with action re-issue.
	Reissued string `json:"reissued,omitempty"`
}

// Form of the body.
func (Closing) Form() string { return "closing/1" }
