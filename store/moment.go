package store

import "math"

// always is the as-of of a read that is not cut: every version recorded so far.
const always Instant = math.MaxInt64

// held is what deciding what holds needs to know of one version.
type held struct {
	version    int
	recordedAt Instant
	validFrom  *Instant
	decisions  []said // in the order they were recorded
}

// said is what deciding what holds needs to know of one decision.
type said struct {
	act        string
	recordedAt Instant
	effectAt   *Instant
}

// The acts of a decision.
const (
	ActSubmitted = "submitted"
	ActApproved  = "approved"
	ActDeclined  = "declined"
	ActWithdrawn = "withdrawn"
)

// approved reports whether a decision recorded by asOf approved the version.
func (h held) approved(asOf Instant) bool {
	for _, d := range h.decisions {
		if d.recordedAt <= asOf && d.act == ActApproved {
			return true
		}
	}
	return false
}

// withdrawn reports whether a withdrawal recorded by asOf has taken effect by validAt.
func (h held) withdrawn(validAt, asOf Instant) bool {
	for _, d := range h.decisions {
		if d.recordedAt <= asOf && d.act == ActWithdrawn && d.effect() <= validAt {
			return true
		}
	}
	return false
}

// effect is when a decision takes effect: as stated, or when it was recorded.
func (d said) effect() Instant {
	if d.effectAt != nil {
		return *d.effectAt
	}
	return d.recordedAt
}

// outranks orders the candidates: the greatest valid_from, then the greatest version.
func (h held) outranks(other held) bool {
	switch {
	case h.validFrom == nil && other.validFrom == nil:
	case h.validFrom == nil:
		return false
	case other.validFrom == nil:
		return true
	case *h.validFrom != *other.validFrom:
		return *h.validFrom > *other.validFrom
	}
	return h.version > other.version
}

// inForce returns the index of the version that held at validAt as far as had
// been said by asOf, and its state; -1 if none did. Versions of kinds that are
// not decided hold from the moment they are recorded.
func inForce(versions []held, decided bool, validAt, asOf Instant) (int, State) {
	best := -1
	for i, v := range versions {
		if v.recordedAt > asOf || v.validFrom != nil && *v.validFrom > validAt || decided && !v.approved(asOf) {
			continue
		}
		if best < 0 || v.outranks(versions[best]) {
			best = i
		}
	}
	switch {
	case best < 0:
		return -1, ""
	case !decided:
		return best, Recorded
	case versions[best].withdrawn(validAt, asOf):
		return best, Withdrawn
	}
	return best, Approved
}

// stateOf reads the state of one version off what had been said of it by asOf.
func stateOf(versions []held, i int, decided bool, validAt, asOf Instant) State {
	if !decided {
		return Recorded
	}
	v := versions[i]
	if v.withdrawn(validAt, asOf) {
		return Withdrawn
	}
	state := Drafted
	for _, d := range v.decisions {
		if d.recordedAt > asOf {
			break
		}
		switch d.act {
		case ActSubmitted:
			state = Submitted
		case ActApproved:
			state = Approved
		case ActDeclined:
			state = Declined
		}
	}
	if state == Approved {
		// Only another version that holds at the same moment supersedes it.
		if best, _ := inForce(versions, decided, validAt, asOf); best >= 0 && best != i &&
			versions[best].outranks(v) && (v.validFrom == nil || *v.validFrom <= validAt) {
			return Superseded
		}
	}
	return state
}

// changesAfter returns the first instant after validAt at which the answer of
// inForce or stateOf would change with nothing more being said; nil if never.
func changesAfter(versions []held, validAt Instant) *Instant {
	var next *Instant
	consider := func(at Instant) {
		if at > validAt && (next == nil || at < *next) {
			next = &at
		}
	}
	for _, v := range versions {
		if v.validFrom != nil {
			consider(*v.validFrom)
		}
		for _, d := range v.decisions {
			if d.act == ActWithdrawn {
				consider(d.effect())
			}
		}
	}
	return next
}
