package calib

import "deltamoor/calib/uncertain"

// A Role says what a reading is for, within one session and one quantity.
type Role string

// The roles of a reading. Only anchors and monitors enter the fit; every role
// remains a predecessor for memory, whatever it is.
const (
	Anchor       Role = "anchor"       // pins the line
	Control      Role = "control"      // checks the line, never in the fit
	Monitor      Role = "monitor"      // informs drift, size and memory only
	Blank        Role = "blank"        // nothing but the procedure
	Gas          Role = "gas"          // working-gas pulse
	Conditioning Role = "conditioning" // kept, never used
	Sample       Role = "sample"       // its delta is wanted
)

// A Session is the input of one fit: the readings of one isotope quantity of
// one session, and the values of its anchors on one scale. Fit never writes to it.
type Session struct {
	// Anchors lists the assigned values, in the order that AnchorSensitivities
	// of the result and CrossCovariance use.
	Anchors []AssignedValue
	// Groups describes the variance groups that the anchors' sources name. A
	// source whose group is not listed, or empty, has a known variance.
	Groups []uncertain.Group
	// NoiseGroup is the identity of this fit's variance estimates, which its
	// readings' sources name as their group; "" takes "fit:" and the identity of
	// the first fitted reading.
	NoiseGroup string

	Readings []Reading

	// Materials lists subjects that are measured as unknowns and are no samples:
	// reference materials, whose heterogeneity is that of their units and not
	// [Policy.SampleHomogeneity]. Anchors and controls need not be in it.
	Materials []string

	// ReadingCovariance, in the order of Readings (‰²), replaces the readings'
	// own StandardUncertainty; declared weights only; nil for none.
	ReadingCovariance [][]float64
	// CrossCovariance is readings × anchors (‰²); nil for none.
	CrossCovariance [][]float64

	// Corrections are the inputs common to many readings with which their raw
	// deltas were corrected before the fit (an H3 factor, a blank known
	// independently, a relation). They do not enter the weights; their sources
	// are propagated to every parameter and result.
	Corrections []Correction
}

// A Correction is one input of the corrections made before the fit.
type Correction struct {
	// Name says which, for people.
	Name string
	// Input is its value with its sources; the value itself is already in the
	// raw deltas.
	Input uncertain.Number
	// PerReading is ∂raw/∂input of each reading, in the order of Readings; 0
	// where the reading was not corrected with it.
	PerReading []float64
	// Blank says that the input is a blank known independently, already taken out of
	// the raw deltas: a model with size blank would take it out twice and is refused.
	Blank bool
}

// An AssignedValue is what an anchor is worth on the scale of the fit (‰).
// Its number's terms are the value's sources, down to outside values: values
// that share a source are correlated through it.
type AssignedValue struct {
	Material string
	Value    uncertain.Number
}

// A Reading is one isotope quantity of one measured peak or injection.
type Reading struct {
	// ID is the reading's lasting identity, "<session>/<number>"; the source of
	// its noise is "reading:<ID>".
	ID string
	// Subject is the material's or the sample's code. A sample and a material
	// of the same code are told apart by Role.
	Subject string
	Role    Role
	// Raw is the raw delta against the working gas (‰).
	Raw float64
	// StandardUncertainty is that of Raw (‰); used by declared weights, where nil is an error.
	StandardUncertainty *float64
	// Time is in hours from the first reading of the session; nil where no term needs it.
	Time *float64
	// Size is the peak's size in whatever unit the method uses; nil where no term needs it.
	Size *float64
	// Preparation names the portion; readings of one preparation share its variance. "" for one of its own.
	Preparation string
	// Previous is the raw delta before a reading whose predecessor is not in the list (‰).
	Previous *float64
	// Excluded readings stay in the list as predecessors and are otherwise unused.
	Excluded bool
}
