package exchange

import (
	"errors"
	"fmt"
	"strconv"

	"deltamoor/api/registry"
	"deltamoor/calib"
	"deltamoor/calib/uncertain"
)

// MaxFitAnchors bounds the anchors of one stateless fit: work grows with the
// third power of their number. Readings are bounded by calib.MaxReadings.
const MaxFitAnchors = 1_000

// A FitRequest is the body of the stateless fit: anchors with their assigned
// values, readings, and the model. Deltas and uncertainties are in ‰, u is k = 1.
type FitRequest struct {
	Scale             string       `json:"scale,omitempty" doc:"The delta scale of the anchors' values." example:"d13C-VPDB"`
	Model             FitModel     `json:"model,omitempty" doc:"Terms of the model and weights of the readings; left out: the plain line with declared weights."`
	Anchors           []FitAnchor  `json:"anchors" required:"true" nullable:"false" doc:"Materials that pin the line, with their assigned values."`
	AnchorCovariance  [][]float64  `json:"anchor_covariance,omitempty" doc:"Covariance of the assigned values (‰²), in the order of anchors; overrides their u."`
	Readings          []FitReading `json:"readings" required:"true" nullable:"false" doc:"All readings of one isotope quantity of one session, in the order of the session."`
	ReadingCovariance [][]float64  `json:"reading_covariance,omitempty" doc:"Covariance of the raw deltas (‰²), in the order of all readings; overrides their u; declared weights only."`
	CrossCovariance   [][]float64  `json:"cross_covariance,omitempty" doc:"Covariance of raw deltas and assigned values (‰²), readings × anchors."`
	Probability       float64      `json:"probability,omitempty" minimum:"0" maximum:"1" doc:"Coverage probability of U; left out: 0.95." example:"0.95"`
	Companion         bool         `json:"companion,omitempty" doc:"Asks for a robust fit beside the official one, as an opinion." example:"false"`
}

// A FitModel names the terms of the model and the weights.
type FitModel struct {
	Drift             string   `json:"drift,omitempty" enum:"none,linear,quadratic,bracketed" doc:"Drift with time." example:"linear"`
	Size              string   `json:"size,omitempty" enum:"none,linear,inverse,log,blank" doc:"Dependence on the size of the peak." example:"none"`
	Memory            string   `json:"memory,omitempty" enum:"none,carryover" doc:"Carry-over from the reading before." example:"none"`
	Weights           string   `json:"weights,omitempty" enum:"declared,equal,replicate,size" doc:"Where the variance of the readings comes from; left out: declared." example:"replicate"`
	DeclaredNu        *float64 `json:"declared_nu,omitempty" doc:"Degrees of freedom of declared uncertainties; left out or null: they are known." example:"20"`
	AllowSingleAnchor bool     `json:"allow_single_anchor,omitempty" doc:"Permits a fit with one anchor, which is always flagged." example:"false"`
}

// A FitAnchor is a material with its assigned value.
type FitAnchor struct {
	Material string   `json:"material" required:"true" doc:"What readings call the material." example:"A"`
	Value    float64  `json:"value" required:"true" doc:"Assigned value (‰)." example:"-26.39"`
	U        *float64 `json:"u,omitempty" minimum:"0" doc:"Standard uncertainty of the value (‰); 0: exact. May be left out with anchor_covariance." example:"0.04"`
	Nu       *float64 `json:"nu,omitempty" doc:"Degrees of freedom of u; left out or null: u is known." example:"12"`
}

// A FitReading is one reading of the session.
type FitReading struct {
	Material    string   `json:"material,omitempty" doc:"The material, of an anchor, control, monitor, blank or gas reading." example:"A"`
	Sample      string   `json:"sample,omitempty" doc:"The sample, of a sample reading." example:"S1"`
	Role        string   `json:"role" required:"true" enum:"anchor,control,monitor,blank,gas,conditioning,sample" doc:"What the reading is for." example:"anchor"`
	Raw         float64  `json:"raw" required:"true" doc:"Raw delta against the working gas (‰)." example:"-21.07"`
	U           *float64 `json:"u,omitempty" minimum:"0" doc:"Standard uncertainty of raw (‰); needed with declared weights unless reading_covariance is given." example:"0.05"`
	Time        *float64 `json:"time,omitempty" doc:"Hours from any moment of the session; needed with drift." example:"0.25"`
	Size        *float64 `json:"size,omitempty" doc:"Size of the peak in any one unit; needed with a size term or size weights." example:"5.1"`
	Preparation string   `json:"preparation,omitempty" doc:"Readings of one preparation share its variance." example:"A1"`
	Previous    *float64 `json:"previous,omitempty" doc:"Raw delta before this reading (‰), where that reading is not in the list; for memory." example:"-20.98"`
	Excluded    bool     `json:"excluded,omitempty" doc:"Kept as a predecessor, otherwise unused." example:"false"`
}

const fitMessage = "read the fit request"

// DecodeFit reads the body of a stateless fit. It refuses, each fault by its
// place (`body.readings[3].raw`): unknown and repeated members, wrong types,
// missing members, words the contract does not have, subjects that do not suit
// the role, impossible uncertainties. What only the arithmetic can tell (rank,
// times a drift needs) is refused by calib.Fit, see FitComplaints.
func DecodeFit(data []byte) (FitRequest, error) {
	var r FitRequest
	if err := bounded(fitMessage, data); err != nil {
		return r, err
	}
	if err := decodeStrict(fitMessage, "body", data, &r); err != nil {
		return FitRequest{}, err
	}
	if err := r.check(); err != nil {
		return FitRequest{}, err
	}
	return r, nil
}

func (r FitRequest) check() error {
	if n := len(r.Anchors); n > MaxFitAnchors {
		return registry.Refuse(registry.TooLarge, "%s: %d anchors, more than the %d that one fit may have", fitMessage, n, MaxFitAnchors)
	}
	if n := len(r.Readings); n > calib.MaxReadings {
		return registry.Refuse(registry.TooLarge, "%s: %d readings, more than the %d that one fit may have", fitMessage, n, calib.MaxReadings)
	}
	var faults complaints
	if len(r.Anchors) == 0 {
		faults.add("body.anchors", "an empty list", "at least one anchor")
	}
	if len(r.Readings) == 0 {
		faults.add("body.readings", "an empty list", "at least one reading")
	}
	if p := r.Probability; p < 0 || p >= 1 {
		faults.add("body.probability", FormatNumber(p), "a probability above 0 and below 1")
	}
	positive(&faults, "body.model.declared_nu", r.Model.DeclaredNu)
	first := map[string]int{}
	for i, a := range r.Anchors {
		place := "body.anchors[" + strconv.Itoa(i) + "]"
		if a.Material == "" {
			faults.add(place+".material", "an empty text", "the material's name")
		}
		if j, ok := first[a.Material]; ok {
			faults.add(place+".material", fmt.Sprintf("%s, which anchors[%d] is as well", quote(a.Material), j), "each material once")
		} else {
			first[a.Material] = i
		}
		switch {
		case a.U == nil && r.AnchorCovariance == nil:
			faults.add(place+".u", "nothing", "the standard uncertainty of the value (‰), 0 for an exact one, or anchor_covariance")
		case a.U != nil && *a.U < 0:
			faults.add(place+".u", FormatNumber(*a.U), "a standard uncertainty, which is not negative")
		}
		positive(&faults, place+".nu", a.Nu)
		if a.Nu != nil && r.AnchorCovariance != nil {
			faults.add(place+".nu", FormatNumber(*a.Nu), "no nu beside anchor_covariance, whose entries count as known")
		}
	}
	for i, reading := range r.Readings {
		reading.check(&faults, "body.readings["+strconv.Itoa(i)+"]")
	}
	return faults.err(fitMessage)
}

func (r FitReading) check(faults *complaints, place string) {
	role := calib.Role(r.Role)
	switch {
	case r.Material != "" && r.Sample != "":
		faults.add(place, fmt.Sprintf("material %s and sample %s", quote(r.Material), quote(r.Sample)), "one of the two")
	case role == calib.Sample && r.Sample == "":
		faults.add(place+".sample", "nothing", "the sample's name, since the role is sample")
	case role != calib.Sample && r.Sample != "":
		faults.add(place+".sample", quote(r.Sample), "material, since the role is "+r.Role)
	case r.Material == "" && (role == calib.Anchor || role == calib.Control || role == calib.Monitor):
		faults.add(place+".material", "nothing", "the material's name, since the role is "+r.Role)
	}
	if r.U != nil && *r.U < 0 {
		faults.add(place+".u", FormatNumber(*r.U), "a standard uncertainty, which is not negative")
	}
}

func positive(faults *complaints, place string, nu *float64) {
	if nu != nil && !(*nu > 0) {
		faults.add(place, FormatNumber(*nu), "degrees of freedom above 0; left out where the uncertainty is known")
	}
}

// Session converts the request into the engine's terms. Each assigned value
// becomes a number of one source, anchor:<material>, with the declared degrees
// of freedom as its variance group (Var(u²) = 2u⁴/ν); with anchor_covariance
// the values share sources. A reading's identity is its index in the request.
func (r FitRequest) Session() (calib.Session, calib.Model, calib.Policy, error) {
	if err := r.check(); err != nil {
		return calib.Session{}, calib.Model{}, calib.Policy{}, err
	}
	s := calib.Session{ReadingCovariance: r.ReadingCovariance, CrossCovariance: r.CrossCovariance}
	var err error
	if s.Anchors, s.Groups, err = r.assignedValues(); err != nil {
		return calib.Session{}, calib.Model{}, calib.Policy{}, err
	}
	for i, reading := range r.Readings {
		subject := reading.Material
		if calib.Role(reading.Role) == calib.Sample {
			subject = reading.Sample
		}
		s.Readings = append(s.Readings, calib.Reading{
			ID:                  strconv.Itoa(i),
			Subject:             subject,
			Role:                calib.Role(reading.Role),
			Raw:                 reading.Raw,
			StandardUncertainty: reading.U,
			Time:                reading.Time,
			Size:                reading.Size,
			Preparation:         reading.Preparation,
			Previous:            reading.Previous,
			Excluded:            reading.Excluded,
		})
	}
	m := calib.Model{
		Drift:             calib.Drift(r.Model.Drift),
		Size:              calib.Size(r.Model.Size),
		Memory:            calib.Memory(r.Model.Memory),
		Weights:           calib.Weights(r.Model.Weights),
		DeclaredDF:        r.Model.DeclaredNu,
		AllowSingleAnchor: r.Model.AllowSingleAnchor,
	}
	return s, m, calib.Policy{Probability: r.Probability}, nil
}

func (r FitRequest) assignedValues() ([]calib.AssignedValue, []uncertain.Group, error) {
	prefix := string(uncertain.KindAnchor) + ":"
	anchors := make([]calib.AssignedValue, len(r.Anchors))
	if r.AnchorCovariance != nil {
		codes, values := make([]string, len(anchors)), make([]float64, len(anchors))
		for i, a := range r.Anchors {
			codes[i], values[i] = a.Material, a.Value
		}
		numbers, err := uncertain.FromCovariance(prefix, uncertain.KindAnchor, codes, values, r.AnchorCovariance)
		if err != nil {
			return nil, nil, anchorCovarianceError(err)
		}
		for i, a := range r.Anchors {
			anchors[i] = calib.AssignedValue{Material: a.Material, Value: numbers[i]}
		}
		return anchors, nil, nil
	}
	var groups []uncertain.Group
	for i, a := range r.Anchors {
		n := uncertain.Number{Value: a.Value}
		if u := *a.U; u > 0 {
			s := uncertain.Source{ID: prefix + a.Material, Kind: uncertain.KindAnchor, U: u}
			if a.Nu != nil {
				s.Group = s.ID
				groups = append(groups, uncertain.NewGroup(s.ID, u*u, *a.Nu))
			}
			n.Terms = []uncertain.Term{{Source: s, Sensitivity: 1}}
		}
		anchors[i] = calib.AssignedValue{Material: a.Material, Value: n}
	}
	return anchors, groups, nil
}

// anchorCovarianceError places a refused matrix in the body.
func anchorCovarianceError(err error) error {
	var v *uncertain.ValueError
	if !errors.As(err, &v) {
		return fmt.Errorf("%s: %w", fitMessage, err)
	}
	return refuseOne(fitMessage, "body.anchor_"+v.Place, v.Found, v.Expected)
}

// FitComplaints turns what calib.Fit refuses into a refusal of the request,
// each fault with its place in the body: `body.readings[3].time`. Errors that
// carry no place are returned as they are, and nil stays nil.
func FitComplaints(err error) error {
	refused := refusals(err)
	if len(refused) == 0 {
		return err
	}
	var faults complaints
	for _, r := range refused {
		place := "body"
		if r.Place != "" {
			place += "." + r.Place
		}
		faults.add(place, r.Found, r.Expected)
	}
	refusal := faults.err("the fit was refused").(*registry.Error)
	refusal.Err = err
	if tooMany := (*calib.TooManyError)(nil); errors.As(err, &tooMany) {
		refusal.Meaning = registry.TooLarge
	}
	return refusal
}

// refusals finds the engine's refusals in a tree of wrapped and joined errors, in order.
func refusals(err error) []calib.Refusal {
	switch e := err.(type) {
	case nil:
		return nil
	case interface{ Refused() calib.Refusal }:
		return []calib.Refusal{e.Refused()}
	case interface{ Unwrap() []error }:
		var list []calib.Refusal
		for _, part := range e.Unwrap() {
			list = append(list, refusals(part)...)
		}
		return list
	}
	return refusals(errors.Unwrap(err))
}
