package store

import (
	"deltamoor/calib"
)

// A Decimal is a decimal number with the digits a person typed, such as
// "-10.450". Its float64 is whatever strconv.ParseFloat makes of it.
type Decimal string

// Laboratory is the body of a laboratory.
type Laboratory struct {
	Name string `json:"name"`
	// Zone is the IANA time zone of the laboratory, for local times in files.
	Zone string `json:"zone,omitempty"`
	// SecondPerson lists the kinds (value, method) whose approval needs another person than the author.
	SecondPerson []Kind `json:"second_person,omitempty"`
}

// Form of the body.
func (Laboratory) Form() string { return "laboratory/1" }

// Person is the body of a person. Personal data beyond code and name stays in working rows.
type Person struct {
	Name  string   `json:"name"`
	Roles []string `json:"roles"`
	// Closed accounts sign in no more; the name stays in history.
	Closed bool `json:"closed,omitempty"`
}

// Form of the body.
func (Person) Form() string { return "person/1" }

// Token is the body of an access token, without its secret.
type Token struct {
	Person    string   `json:"person"`
	Label     string   `json:"label"`
	Roles     []string `json:"roles"`
	Scopes    []string `json:"scopes,omitempty"`
	ExpiresAt *Instant `json:"expires_at,omitempty"`
	Revoked   bool     `json:"revoked,omitempty"`
}

// Form of the body.
func (Token) Form() string { return "token/1" }

// SigningKey is the body of a ledger key's public half, in the C2SP signed-note verifier form.
type SigningKey struct {
	Verifier string `json:"verifier"`
}

// Form of the body.
func (SigningKey) Form() string { return "key/1" }

// Scale is the body of a delta scale in one realisation.
type Scale struct {
	Quantity    string        `json:"quantity"`
	Label       string        `json:"label"`
	Ratio       string        `json:"ratio,omitempty"`
	Status      string        `json:"status,omitempty"`
	Anchors     []ScaleAnchor `json:"anchors,omitempty"`
	Succeeds    string        `json:"succeeds,omitempty"`
	Provisional bool          `json:"provisional,omitempty"`
}

// A ScaleAnchor is one point that defines a scale.
type ScaleAnchor struct {
	Role        string `json:"role"`
	Material    string `json:"material"`
	Value       string `json:"value"`
	Uncertainty string `json:"uncertainty,omitempty"`
	RealisedBy  string `json:"realised_by,omitempty"`
	From        string `json:"from,omitempty"`
	To          string `json:"to,omitempty"`
	Source      string `json:"source,omitempty"`
	Note        string `json:"note,omitempty"`
	Provisional bool   `json:"provisional,omitempty"`
}

// Form of the body.
func (Scale) Form() string { return "scale/1" }

// Material is the body of a reference material.
type Material struct {
	Name      string `json:"name"`
	Kind      string `json:"kind"` // defining international working gas control
	Substance string `json:"substance,omitempty"`
	Formula   string `json:"formula,omitempty"`
	Matrix    string `json:"matrix,omitempty"`
	Producer  string `json:"producer,omitempty"`
	Lot       string `json:"lot,omitempty"`
	// Aliases are further names by which files may call it; never a lot.
	Aliases     []string     `json:"aliases,omitempty"`
	Identifiers []Identifier `json:"identifiers,omitempty"`
	// Status is the producer's word on it, such as current, exhausted or withdrawn.
	Status      string          `json:"status,omitempty"`
	Preparation string          `json:"preparation,omitempty"`
	Storage     string          `json:"storage,omitempty"`
	Hazards     []string        `json:"hazards,omitempty"` // GHS codes
	Minimum     *Amount         `json:"minimum_portion,omitempty"`
	Roles       []MaterialRoles `json:"roles,omitempty"`
	Document    *Hash           `json:"document,omitempty"`
	Provisional bool            `json:"provisional,omitempty"`
	Note        string          `json:"note,omitempty"`
	// Stock says how its units are kept and watched; nil asks for nothing.
	Stock *StockRule `json:"stock,omitempty"`
	// Succeeds is the code of the material that this one follows, "" for none. It
	// is no anchor before a campaign measured both side by side, or OverlapWaiver
	// says why it may be one all the same.
	Succeeds      string `json:"succeeds,omitempty"`
	OverlapWaiver string `json:"overlap_waiver,omitempty"`
}

// A StockRule limits the units of a material and says when it is looked at; 0 asks for nothing.
type StockRule struct {
	MaximumOpenings int     `json:"maximum_openings,omitempty"`
	MaximumAgeDays  float64 `json:"maximum_age_days,omitempty"` // since the first opening
	RecheckDays     float64 `json:"recheck_days,omitempty"`     // between results that check its value
	// Portion is what one analysis takes, losses included.
	Portion *Amount `json:"portion,omitempty"`
	// LeadDays is how long before the end a successor must be begun.
	LeadDays float64 `json:"lead_days,omitempty"`
}

// An Identifier names a material in somebody else's system.
type Identifier struct {
	Scheme string `json:"scheme"`
	Value  string `json:"value"`
}

// An Amount is a decimal with its unit of measurement.
type Amount struct {
	Value Decimal `json:"value"`
	Unit  string  `json:"unit"`
}

// MaterialRoles says what a material may be used for; a quantity not listed may have any role.
type MaterialRoles struct {
	Quantity string       `json:"quantity"`
	Roles    []calib.Role `json:"roles"`
	From     *Instant     `json:"from,omitempty"`
	To       *Instant     `json:"to,omitempty"`
}

// Form of the body.
func (Material) Form() string { return "material/1" }

// Value is the body of an assigned value of a material on a scale.
type Value struct {
	// Material is the code; MaterialLaboratory says whose: the own laboratory or common.
	Material           string  `json:"material"`
	MaterialLaboratory string  `json:"material_laboratory"`
	Scale              string  `json:"scale"`
	Measurand          string  `json:"measurand"` // "total" unless said
	Value              Decimal `json:"value"`     // ‰
	// StandardUncertainty (‰) is derived from Stated by Rule. 0 only with Exact.
	StandardUncertainty float64 `json:"u"`
	Exact               bool    `json:"exact,omitempty"`
	// DegreesOfFreedom of u; nil when known.
	DegreesOfFreedom *float64 `json:"nu,omitempty"`
	Stated           *Stated  `json:"stated,omitempty"`
	Rule             string   `json:"rule,omitempty"`
	// Basis: definition certificate literature assignment conversion partner provisional.
	Basis       string   `json:"basis"`
	Evidence    string   `json:"evidence,omitempty"`
	Document    *Hash    `json:"document,omitempty"`
	ExpiresAt   *Instant `json:"expires_at,omitempty"`
	Status      string   `json:"status,omitempty"`
	Provisional bool     `json:"provisional,omitempty"`
	Note        string   `json:"note,omitempty"`
	// Sources decomposes a value made inside the registry into outside sources;
	// nil for a value from outside, which is a source itself.
	Sources []Source `json:"sources,omitempty"`
	// Groups are the variance groups that Sources name.
	Groups []Group `json:"groups,omitempty"`
	// UBetweenUnits is the homogeneity of the lot and ULongTerm its stability,
	// where a campaign assigned the value: u² = u_char² + u_bb² + u_lts². Sources
	// hold the characterisation and the stability; the homogeneity joins per unit
	// where a unit is used.
	UBetweenUnits *ValueComponent `json:"u_bb,omitempty"`
	ULongTerm     *ValueComponent `json:"u_lts,omitempty"`
	Campaign      *CampaignResult `json:"campaign,omitempty"`
	// Partner says of a value with the basis partner which version of which other
	// ledger it is; Document is then the bundle that holds its chain.
	Partner *PartnerValue `json:"partner,omitempty"`
	// BackLoaded marks a value that was assigned before the registry was in use.
	BackLoaded bool `json:"back_loaded,omitempty"`
}

// A PartnerValue names a version of a value in another laboratory's ledger.
type PartnerValue struct {
	Origin  string `json:"origin"` // of the ledger: <registry>/<laboratory>
	Code    string `json:"code"`
	Version int    `json:"version"`
	Hash    Hash   `json:"hash"`
	// Verifier is the public key that the importing person gave, or that was
	// given for an earlier version of the same origin; Size and Root are the
	// signed head that the chain is proved to.
	Verifier string `json:"verifier"`
	Size     int64  `json:"size"`
	Root     Hash   `json:"root"`
}

// Stated is an uncertainty as its source printed it.
type Stated struct {
	Text string `json:"text"`
	// Kind: standard expanded sd half-width exact none.
	Kind string   `json:"kind"`
	K    *float64 `json:"k,omitempty"`
	N    *int     `json:"n,omitempty"`
}

// A Source is one term of a stored decomposition.
type Source struct {
	ID          string    `json:"id"`
	Kind        string    `json:"kind"`
	U           float64   `json:"u"`
	Sensitivity float64   `json:"c"`
	Group       string    `json:"group,omitempty"`
	Per         []float64 `json:"per,omitempty"`
	Shares      []Share   `json:"shares,omitempty"`
}

// A Share is the part of a stored source's variance that scales with one group.
type Share struct {
	Group    string    `json:"group"`
	Variance float64   `json:"variance,omitempty"`
	Per      []float64 `json:"per,omitempty"`
}

// A Group is a stored variance group.
type Group struct {
	ID         string      `json:"id"`
	Variances  []float64   `json:"variances"`
	Covariance [][]float64 `json:"covariance"`
}

// Form of the body.
func (Value) Form() string { return "value/1" }

// Unit is the body of one bottle, vial, ampoule or cylinder of a material.
type Unit struct {
	Material           string  `json:"material"`
	MaterialLaboratory string  `json:"material_laboratory"`
	Label              string  `json:"label"`
	State              string  `json:"state"` // sealed open in-use suspect quarantined empty disposed
	Content            *Amount `json:"content,omitempty"`
	Location           string  `json:"location,omitempty"`
	// FillingOrder is its place in the order of filling, from 1; 0 where unknown.
	FillingOrder int `json:"filling_order,omitempty"`
	// Openings counts how often it was opened, OpenedAt is when it was first.
	Openings int      `json:"openings,omitempty"`
	OpenedAt *Instant `json:"opened_at,omitempty"`
	// SuspectSince is the last moment at which it was known to be good, for a unit
	// that is suspect or quarantined: what used it later is in doubt.
	SuspectSince *Instant `json:"suspect_since,omitempty"`
	// Container is what it is: bottle vial ampoule cylinder; "" where not said.
	Container string `json:"container,omitempty"`
	// At is when what this version says happened, where that was before it was
	// recorded; Taken is what was taken from it then.
	At    *Instant `json:"at,omitempty"`
	Taken *Amount  `json:"taken,omitempty"`
	// Excursions are the times it was not stored as it should be, oldest first.
	Excursions []Excursion `json:"excursions,omitempty"`
}

// An Excursion is a time at which a unit was not stored as it should be.
type Excursion struct {
	At   Instant `json:"at"`
	What string  `json:"what"`
}

// Form of the body.
func (Unit) Form() string { return "unit/1" }

// Instrument is the body of an instrument.
type Instrument struct {
	Name          string `json:"name"`
	Configuration string `json:"configuration,omitempty"`
	Serial        string `json:"serial,omitempty"`
	Location      string `json:"location,omitempty"`
}

// Form of the body.
func (Instrument) Form() string { return "instrument/1" }

// Method is the body of a measurement procedure: the recipe, its limits, how
// files are read and who approves.
type Method struct {
	Title       string           `json:"title"`
	Procedure   string           `json:"procedure,omitempty"`
	Quantities  []MethodQuantity `json:"quantities"`
	Corrections []Correction     `json:"corrections,omitempty"`
	Mapping     *Mapping         `json:"import,omitempty"`
	Approval    Approval         `json:"approval"`
	Final       FinalRule        `json:"final"`
}

// A MethodQuantity is what the method says of one isotope quantity.
type MethodQuantity struct {
	Quantity  string      `json:"quantity"` // d13C, d15N, d2H …
	Scale     string      `json:"scale"`
	Measurand string      `json:"measurand,omitempty"` // "" means total
	Model     calib.Model `json:"model"`
	Limits    Limits      `json:"limits"`
	// BetweenSession (‰) is added to every result, with its evidence.
	BetweenSession *Component `json:"between_session,omitempty"`
	// SampleHomogeneity (‰) is how far a portion may be from its sample; added to
	// every sample, once, however many sessions measure it.
	SampleHomogeneity *Component     `json:"sample_homogeneity,omitempty"`
	Roles             []MaterialRole `json:"roles,omitempty"`
	// What is done to the readings before the fit; nil for nothing.
	H3      *H3Rule    `json:"h3,omitempty"`
	Blank   *BlankRule `json:"blank,omitempty"`
	Repeats *Repeats   `json:"repeats,omitempty"`
}

// A Component is an uncertainty component of a method, with where it comes from.
type Component struct {
	StandardUncertainty float64  `json:"u"`
	DegreesOfFreedom    *float64 `json:"nu,omitempty"`
	Evidence            string   `json:"evidence,omitempty"`
	Common              bool     `json:"common,omitempty"`
}

// A MaterialRole is the default role of a material in sessions of the method.
type MaterialRole struct {
	Material string     `json:"material"`
	Role     calib.Role `json:"role"`
}

// Limits are the acceptance limits of a method for one quantity; absent ones are not asked for.
type Limits struct {
	Probability      float64 `json:"probability,omitempty"`
	CoverageFactor   float64 `json:"k,omitempty"`
	LeftOut          float64 `json:"left_out_z,omitempty"`
	Studentized      float64 `json:"studentized,omitempty"`
	MinimumSpan      float64 `json:"minimum_span,omitempty"`
	AdvisedSpan      float64 `json:"advised_span,omitempty"`
	MinimumAnchors   int     `json:"minimum_anchors,omitempty"`
	SlopeFrom        float64 `json:"slope_from,omitempty"` // raw per true
	SlopeTo          float64 `json:"slope_to,omitempty"`
	ControlDeviation float64 `json:"control_deviation,omitempty"` // ‰
	ReplicateSD      float64 `json:"replicate_sd,omitempty"`      // ‰
	ControlRequired  bool    `json:"control_required,omitempty"`
	// MinimumResolution of neighbouring peaks of one analysis; 1.5 separates them to the base line.
	MinimumResolution float64 `json:"minimum_resolution,omitempty"`
	// TestLevel is the p-value below which a test of the fit is flagged; 0 means 0.05.
	TestLevel float64 `json:"test_level,omitempty"`
	// HistoryLimit flags a slope, intercept or drift further than so many standard
	// deviations from the instrument's history of HistorySessions approved sessions; 0
	// means 3, of 30 sessions.
	HistoryLimit    float64 `json:"history_limit,omitempty"`
	HistorySessions int     `json:"history_sessions,omitempty"`
}

// A Correction declares where one correction is made. State "" is "not said", which cannot be approved.
type Correction struct {
	Name      string `json:"name"`               // h3 o17 background blank dilution drift size …
	Quantity  string `json:"quantity,omitempty"` // "" for all
	State     string `json:"state"`              // earlier here "not applicable" "not said"
	By        string `json:"by,omitempty"`
	Constants string `json:"constants,omitempty"`
	// Relations are codes of registered relations whose constants it used; a
	// session pins the versions that held when it started.
	Relations []string `json:"relations,omitempty"`
}

// Approval says who approves calibrations, final values and reports of the method.
type Approval struct {
	SecondPerson bool   `json:"second_person,omitempty"`
	Role         string `json:"role,omitempty"` // "" means signatory
}

// FinalRule says, before the data, how a final value comes from sessions.
type FinalRule struct {
	// SessionsRequired is how many accepted sessions a final value needs; 0 means 1.
	SessionsRequired int `json:"sessions_required,omitempty"`
	// Rule names the combination; "" means "one accepted session".
	Rule string `json:"rule,omitempty"`
	// Complete asks that a report says everything that the completeness check asks
	// for; else what is missing is only told.
	Complete bool `json:"complete,omitempty"`
}

// Form of the body.
func (Method) Form() string { return "method/1" }

// Mapping says how a table of raw deltas is read: dialect, columns by the
// file's own headings, and one set of columns for each quantity.
type Mapping struct {
	Format    string `json:"format,omitempty"`     // csv tsv xlsx; "" by what the bytes are
	Sheet     string `json:"sheet,omitempty"`      // xlsx; "" means the first
	HeaderRow int    `json:"header_row,omitempty"` // 1-based; 0 means 1
	Encoding  string `json:"encoding,omitempty"`   // utf-8 utf-16le utf-16be windows-1252 iso-8859-1; "" means a byte order mark, else utf-8
	Delimiter string `json:"delimiter,omitempty"`  // one character; "" means comma for csv, tab for tsv
	Decimal   string `json:"decimal,omitempty"`    // "." or ","; "" means "."
	Zone      string `json:"zone,omitempty"`       // IANA zone of times without offset; "" means UTC
	// TimeLayout is made of YYYY MM DD hh mm ss and literal characters; "" means RFC 3339 or "YYYY-MM-DD hh:mm:ss".
	TimeLayout string            `json:"time_layout,omitempty"`
	Columns    Columns           `json:"columns"`
	Quantities []QuantityColumns `json:"quantities"`
	// WidthBy says where the widths of peaks are measured: "base" or "half-height".
	WidthBy string `json:"width_by,omitempty"`
	// RoleWords translates the role column's words.
	RoleWords map[string]calib.Role `json:"role_words,omitempty"`
}

// Columns are the headings of columns that belong to a whole row; "" means the file has none.
type Columns struct {
	Name        string `json:"name"`
	Role        string `json:"role,omitempty"`
	Unit        string `json:"unit,omitempty"`
	Analysis    string `json:"analysis,omitempty"`
	Preparation string `json:"preparation,omitempty"`
	Position    string `json:"position,omitempty"`
	Peak        string `json:"peak,omitempty"`
	Time        string `json:"time,omitempty"`
	Date        string `json:"date,omitempty"` // where date and time are two columns: joined with a space
	Amount      string `json:"amount,omitempty"`
	AmountUnit  string `json:"amount_unit,omitempty"` // of its figures: mg ug g; "" means mg, in which they are kept
	Compound    string `json:"compound,omitempty"`
	Retention   string `json:"retention,omitempty"`
	Width       string `json:"width,omitempty"`
	Group       string `json:"group,omitempty"`
	Warning     string `json:"warning,omitempty"`
}

// QuantityColumns are the columns of one quantity; When restricts it to rows where a column has a value.
type QuantityColumns struct {
	Quantity string `json:"quantity"`
	Raw      string `json:"raw"`
	U        string `json:"u,omitempty"`
	Size     string `json:"size,omitempty"`
	// For the H3 factor: the peak's m/z 2 intensity, and the reference pulse's
	// intensity and ratio of m/z 3 to m/z 2.
	Intensity    string     `json:"intensity,omitempty"`
	GasIntensity string     `json:"gas_intensity,omitempty"`
	GasRatio     string     `json:"gas_ratio,omitempty"`
	When         *Condition `json:"when,omitempty"`
	// Optional quantities may be empty in a row, which then gives no reading of it.
	Optional bool `json:"optional,omitempty"`
}

// A Condition holds for a row when the column's text equals Equals.
type Condition struct {
	Column string `json:"column"`
	Equals string `json:"equals"`
}

// Sample is the body of an entry of the list of samples. Only here does the client's own label stand.
type Sample struct {
	Client string   `json:"client"`
	Label  string   `json:"label"`
	Wanted []Wanted `json:"wanted"`
	Matrix string   `json:"matrix,omitempty"`
	Note   string   `json:"note,omitempty"`
}

// Wanted is one quantity asked for, on a scale.
type Wanted struct {
	Scale     string `json:"scale"`
	Measurand string `json:"measurand,omitempty"`
}

// Form of the body.
func (Sample) Form() string { return "sample/1" }

// Session is the body of one uninterrupted series on one instrument.
type Session struct {
	Label       string       `json:"label,omitempty"`
	Instrument  string       `json:"instrument"`
	Method      string       `json:"method"`
	Operator    string       `json:"operator"`
	StartedAt   *Instant     `json:"started_at,omitempty"`
	EndedAt     *Instant     `json:"ended_at,omitempty"`
	Corrections []Correction `json:"corrections,omitempty"`
	// Upload is the SHA-256 of the bytes as they came, and the name they came under.
	Upload     *Hash  `json:"upload,omitempty"`
	UploadName string `json:"upload_name,omitempty"`
	// Readings counts them; Blocks holds one SHA-256 for every 64, by number, over their canonical lines.
	Readings int    `json:"readings"`
	Blocks   []Hash `json:"blocks,omitempty"`
}

// Form of the body.
func (Session) Form() string { return "session/1" }

// Exclusion is the body of one act on a session's readings: record (session), one version for each act.
type Exclusion struct {
	Session  string `json:"session"`
	Act      string `json:"act"` // exclude readmit
	Readings []int  `json:"readings"`
	Cause    string `json:"cause"`
}

// Form of the body.
func (Exclusion) Form() string { return "exclusion/1" }

// Outcome is the body of what became of a session for one quantity.
type Outcome struct {
	Session  string `json:"session"`
	Quantity string `json:"quantity"`
	Outcome  string `json:"outcome"` // accepted "in part" rejected
	From     int    `json:"from,omitempty"`
	To       int    `json:"to,omitempty"`
	Cause    string `json:"cause,omitempty"`
}

// Form of the body.
func (Outcome) Form() string { return "outcome/1" }

// Decision is the body of something said about a version: record
// "<kind>/<code>.<version>", one version for each decision; the version it is
// about is the only input, with part "subject".
type Decision struct {
	Act string `json:"act"` // submitted approved declined withdrawn
	// EffectAt is when a withdrawal takes effect; nil means when recorded.
	EffectAt *Instant `json:"effect_at,omitempty"`
	// Meaning says what the signature stands for: made, reviewed, approved.
	Meaning string `json:"meaning,omitempty"`
}

// Form of the body.
func (Decision) Form() string { return "decision/1" }

// Reading is one row of the readings: one isotope quantity of one measured peak or injection.
type Reading struct {
	Session     string     `json:"session"`
	Number      int        `json:"number"` // from 1
	Analysis    string     `json:"analysis,omitempty"`
	Preparation string     `json:"preparation,omitempty"`
	Position    *int       `json:"position,omitempty"`
	Peak        *int       `json:"peak,omitempty"`
	Quantity    string     `json:"quantity"`
	Role        calib.Role `json:"role"`
	Material    string     `json:"material,omitempty"`
	Unit        string     `json:"unit,omitempty"`
	Sample      string     `json:"sample,omitempty"`
	Compound    string     `json:"compound,omitempty"`
	Group       string     `json:"group,omitempty"`
	At          *Instant   `json:"at,omitempty"`
	Raw         float64    `json:"raw"` // ‰
	U           *float64   `json:"u,omitempty"`
	Size        *float64   `json:"size,omitempty"`
	// Extra is a canonical JSON object of rare fields (retention, width, amount, intensities, warnings); "" for none.
	Extra string `json:"extra,omitempty"`
}
