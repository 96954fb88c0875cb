package rest

import (
	"context"
	"time"

	"deltamoor/api/exchange"
	"deltamoor/api/registry"
	"deltamoor/store"
)

// ListedUnit is one unit of a list of units.
type ListedUnit struct {
	Material     string  `json:"material" maxLength:"40"`
	Label        string  `json:"label" maxLength:"100" doc:"What stands on it; no other unit of the material has it."`
	Container    string  `json:"container,omitempty" enum:"bottle,vial,ampoule,cylinder"`
	State        string  `json:"state,omitempty" enum:"sealed,open,in-use,suspect,quarantined,empty,disposed" doc:"Left out: sealed."`
	Content      *Amount `json:"content,omitempty"`
	Location     string  `json:"location,omitempty" maxLength:"200"`
	FillingOrder int     `json:"filling_order,omitempty" minimum:"0"`
}

// ListedUnits register units of any materials.
type ListedUnits struct {
	Units []ListedUnit `json:"units" minItems:"1" maxItems:"1000"`
}

// importUnits takes the list as JSON or as a table with the headings of
// exchange.UnitHeadings.
func (f *face) importUnits(ctx context.Context, actor registry.Actor, in *struct{ FileParams }) (*plain[List[Unit]], error) {
	media, err := in.media()
	if err != nil {
		return nil, err
	}
	var rows []registry.UnitRow
	if media == mediaJSON {
		body, err := decode[ListedUnits](f, in.RawBody)
		if err != nil {
			return nil, err
		}
		for i, u := range body.Units {
			place := bodyPlace("units", i, map[string]string{"content": "content.value", "content_unit": "content.unit"})
			rows = append(rows, registry.UnitRow{Place: place, Unit: store.Unit{Material: u.Material, Label: u.Label, Container: u.Container, State: u.State, Content: u.Content.body(), Location: u.Location, FillingOrder: u.FillingOrder}})
		}
	} else if rows, err = exchange.ReadUnits(in.Name, in.RawBody); err != nil {
		return nil, err
	}
	items, err := f.registry.ImportUnits(ctx, actor, rows)
	if err != nil {
		return nil, err
	}
	return &plain[List[Unit]]{List[Unit]{Items: convert(items, showUnit)}}, nil
}

// A LoggedUse is one line of a log of uses kept outside sessions.
type LoggedUse struct {
	Unit      string     `json:"unit" maxLength:"100" doc:"Its code, or a label that means one unit."`
	Reason    string     `json:"reason" minLength:"1" maxLength:"4000" doc:"What happened and why."`
	At        *time.Time `json:"at,omitempty" doc:"Left out: now."`
	State     string     `json:"state,omitempty" enum:"sealed,open,in-use,suspect,quarantined,empty,disposed"`
	Taken     *Amount    `json:"taken,omitempty" doc:"What was taken from it."`
	Left      *Amount    `json:"left,omitempty" doc:"What is in it then."`
	Location  string     `json:"location,omitempty" maxLength:"200"`
	Excursion string     `json:"excursion,omitempty" maxLength:"1000" doc:"How it was not stored as it should be."`
}

// LoggedUses is a log of uses.
type LoggedUses struct {
	Uses []LoggedUse `json:"uses" minItems:"1" maxItems:"5000"`
}

// logUses takes the log as JSON or as a table with the headings of
// exchange.UseHeadings.
func (f *face) logUses(ctx context.Context, actor registry.Actor, in *struct{ FileParams }) (*plain[List[Unit]], error) {
	media, err := in.media()
	if err != nil {
		return nil, err
	}
	var rows []registry.UseRow
	if media == mediaJSON {
		body, err := decode[LoggedUses](f, in.RawBody)
		if err != nil {
			return nil, err
		}
		for i, u := range body.Uses {
			rows = append(rows, registry.UseRow{Unit: u.Unit, Reason: u.Reason, Place: bodyPlace("uses", i, nil),
				UnitUse: registry.UnitUse{State: u.State, Location: u.Location, Left: u.Left.body(), Taken: u.Taken.body(), At: instantPointer(u.At), Excursion: u.Excursion}})
		}
	} else if rows, err = exchange.ReadUses(in.Name, in.RawBody); err != nil {
		return nil, err
	}
	items, err := f.registry.LogUses(ctx, actor, rows)
	if err != nil {
		return nil, err
	}
	return &plain[List[Unit]]{List[Unit]{Items: convert(items, showUnit)}}, nil
}

// bodyPlace names the fields of an item of a list in a body; members gives
// those that are called otherwise there than in a table.
func bodyPlace(list string, i int, members map[string]string) func(string) string {
	return func(field string) string {
		at := "body." + list + "[" + whole(&i) + "]"
		if field == "" {
			return at
		}
		return at + "." + nameOr(members[field], field)
	}
}

// A StudyBody brings the measurements of a study.
type StudyBody struct {
	Measurements []StudyMeasurement `json:"measurements" minItems:"3" maxItems:"5000"`
}

// A StudyMeasurement is one measured test portion.
type StudyMeasurement struct {
	Unit    string  `json:"unit" maxLength:"100" doc:"The unit that the portion came from."`
	Value   float64 `json:"value" doc:"‰."`
	Session string  `json:"session,omitempty" maxLength:"100" doc:"What was measured together: a block. Left out: all of them."`
	Portion float64 `json:"portion_mg,omitempty" minimum:"0" doc:"Mass of the test portion."`
	Days    float64 `json:"days,omitempty" minimum:"0" doc:"Of storage."`
	Order   float64 `json:"order,omitempty" minimum:"0" doc:"Of filling; left out: unknown."`
}

// A Study is a version of a study that was stated for a campaign.
type Study struct {
	Recorded
	Assignment   string             `json:"assignment"`
	Scale        string             `json:"scale"`
	Measurand    string             `json:"measurand"`
	Of           string             `json:"of" enum:"homogeneity,stability"`
	Isochronous  bool               `json:"isochronous,omitempty"`
	Upload       string             `json:"upload,omitempty" doc:"SHA-256 of the file it came as."`
	Measurements []StudyMeasurement `json:"measurements"`
}

func showStudy(it registry.Item[store.Study]) Study {
	s := it.Value
	return Study{Recorded: recorded(it), Assignment: store.FormatCode(s.Assignment), Scale: s.Scale, Measurand: s.Measurand, Of: s.Of, Isochronous: s.Isochronous, Upload: hashText(s.Upload),
		Measurements: convert(s.Measurements, func(m store.StudyMeasurement) StudyMeasurement { return StudyMeasurement(m) })}
}

// studies lists what was stated for a campaign.
func (f *face) studies(ctx context.Context, actor registry.Actor, in *CodeParam) (*plain[List[Study]], error) {
	code, err := assignmentKind.code(in.Code)
	if err != nil {
		return nil, err
	}
	items, err := f.registry.Studies(ctx, actor, code)
	if err != nil {
		return nil, err
	}
	return &plain[List[Study]]{List[Study]{Items: convert(items, showStudy)}}, nil
}

// StudyParams say of what campaign and value a study is, in words that a file
// has no place for.
type StudyParams struct {
	CodeParam
	Scale       string `query:"scale" required:"true" maxLength:"40" doc:"One of the plan's."`
	Measurand   string `query:"measurand" maxLength:"60" doc:"Left out: total."`
	Of          string `query:"of" required:"true" enum:"homogeneity,stability"`
	Isochronous bool   `query:"isochronous" doc:"Units stored for different times were measured together."`
	Reason      string `query:"reason" maxLength:"4000" doc:"Why this version replaces the one before."`
}

// stateStudy takes the measurements as JSON or as a table with the headings of
// exchange.StudyHeadings.
func (f *face) stateStudy(ctx context.Context, actor registry.Actor, in *struct {
	StudyParams
	FurtherMatch
	FileParams
}) (*one[Study], error) {
	code, err := assignmentKind.code(in.Code)
	if err != nil {
		return nil, err
	}
	media, err := in.media()
	if err != nil {
		return nil, err
	}
	q := registry.StudyRequest{Scale: in.Scale, Measurand: in.Measurand, Of: in.Of, Isochronous: in.Isochronous, Name: in.Name, MediaType: media}
	if media == mediaJSON {
		body, err := decode[StudyBody](f, in.RawBody)
		if err != nil {
			return nil, err
		}
		q.Measurements = convert(body.Measurements, func(m StudyMeasurement) store.StudyMeasurement { return store.StudyMeasurement(m) })
		q.Place = func(i int, field string) string { return bodyPlace("measurements", i, nil)(field) }
	} else if q.Measurements, q.Place, err = exchange.ReadStudy(in.Name, in.RawBody); err != nil {
		return nil, err
	}
	q.Bytes = in.RawBody
	e := registry.Edit{Reason: in.Reason}
	if actor.May(registry.MayImport) { // the registry refuses everybody else in its own words
		if _, err := newestItem[store.Assignment](ctx, f, actor, store.KindAssignment, code); err != nil {
			return nil, err
		}
		if e.After, err = firstOrSeen[store.Study](ctx, f, actor, store.KindStudy, registry.StudyCode(code, in.Scale, in.Measurand, in.Of), in.IfMatch); err != nil {
			return nil, err
		}
	}
	it, err := f.registry.StateStudy(ctx, actor, code, q, e)
	if err != nil {
		return nil, err
	}
	return &one[Study]{ETag: quoteTag(it.Tag()), Body: showStudy(it)}, nil
}
