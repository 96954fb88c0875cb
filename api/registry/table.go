package registry

import "deltamoor/store"

// A ReadingTable is what a file or a request body holds before any name in it
// is known: one RawReading for each mapped quantity of each row.
type ReadingTable struct {
	Readings []RawReading
	// Place tells where a field of a reading stands, in the sender's own words:
	// `row 17, column "d13C raw"` for a table, `body.readings[3].raw` for JSON.
	// Fields are the JSON names of RawReading.
	Place func(reading int, field string) string
	// Encoding, Delimiter and Sheet say how the bytes were read, for the preview.
	Encoding, Delimiter, Sheet string
	// Rows counts the data rows; Ignored columns are headings that the mapping does not name.
	Rows    int
	Ignored []string
}

// A RawReading is one isotope quantity of one row, with names as they came.
type RawReading struct {
	Name        string         `json:"name"`           // material or sample, by code, alias or client's label
	Role        string         `json:"role,omitempty"` // "" asks the method
	Unit        string         `json:"unit,omitempty"`
	Analysis    string         `json:"analysis,omitempty"`
	Preparation string         `json:"preparation,omitempty"`
	Position    *int           `json:"position,omitempty"`
	Peak        *int           `json:"peak,omitempty"`
	Time        *store.Instant `json:"time,omitempty"`
	Amount      *float64       `json:"amount,omitempty"`
	Compound    string         `json:"compound,omitempty"`
	Retention   *float64       `json:"retention,omitempty"`
	Width       *float64       `json:"width,omitempty"`    // of the peak, in the unit of its retention
	WidthBy     string         `json:"width_by,omitempty"` // base or half-height
	Group       string         `json:"group,omitempty"`
	Warning     string         `json:"warning,omitempty"`
	Quantity    string         `json:"quantity"`
	Raw         float64        `json:"raw"` // ‰
	U           *float64       `json:"u,omitempty"`
	Size        *float64       `json:"size,omitempty"`
	// For the H3 factor: the peak's m/z 2 intensity, and the reference pulse's
	// intensity and ratio of m/z 3 to m/z 2.
	Intensity    *float64 `json:"intensity,omitempty"`
	GasIntensity *float64 `json:"gas_intensity,omitempty"`
	GasRatio     *float64 `json:"gas_ratio,omitempty"`
}

// MaxReadings bounds one import.
const MaxReadings = 100_000

// MaxUpload bounds the bytes of one import.
const MaxUpload = 64 << 20
