package demo

import (
	"time"

	"deltamoor/api/registry"
	"deltamoor/calib"
	"deltamoor/store"
)

// A Summary is what Build made, with the truth behind it.
type Summary struct {
	Seed             uint64
	Laboratory, Name string
	// Who acts in the laboratory, with the roles each has.
	Administrator, Manager, Analyst, Signatory, Auditor registry.Actor

	// Sessions in the order they ran.
	Sessions []Session
	// Samples by code.
	Samples map[string]Sample
	Reports []registry.Report
	// Shown is the reported code whose trace Print prints.
	Shown string

	Jar       BadJar
	Peak      BadPeak
	SameLabel SameLabel
	Rejected  Rejection
	Campaign  Campaign

	truth truth
}

// A Session says which file became which session.
type Session struct {
	Code, Label, Method, Instrument string
	File                            string
	StartedAt                       time.Time
	Readings                        int
	// Calibrations are the records' codes by quantity.
	Calibrations map[string]string
	Rejected     bool
}

// A Sample is a client's sample.
type Sample struct{ Code, Client, Label string }

// A BadJar is the anchor that disagreed: one jar of one working standard.
type BadJar struct {
	Material, Unit, Label, Session string
	// Offset is what was wrong with it, ‰ by quantity.
	Offset map[string]float64
	// Before and After are the flags of the calibrations with and without it, by quantity.
	Before, After map[string][]calib.Flag
	// LeftOut is z of each anchor against the line through the others, before.
	LeftOut  map[string]map[string]float64
	Readings []int
}

// A BadPeak is the nitrogen peak that was left out.
type BadPeak struct {
	Sample, Session string
	Reading         int
	// CarbonReading is the carbon of the same analysis, which stayed.
	CarbonReading int
	Offset        float64
}

// A Rejection is the session that failed, by a leak, and what its fit was flagged with.
type Rejection struct {
	Session string
	Flags   []calib.Flag
}

// SameLabel are two samples that their clients call by one name.
type SameLabel struct {
	Label   string
	Samples []string
	// Refusal is what the registry said to a file that named them by their label alone.
	Refusal string
}

// True tells what a subject, a sample or material by its code, really is on a
// scale (‰); ok is false for what the invention does not know.
func (s *Summary) True(subject, scale string) (value float64, ok bool) {
	return s.truth.of(subject, scale)
}

func instant(t time.Time) *store.Instant {
	i := store.InstantOf(t)
	return &i
}
