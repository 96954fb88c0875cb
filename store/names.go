package store

// namesOfActs are further names of what people do not name themselves: what a
// session, a calibration or a final value is found by.
func namesOfActs(raw Raw) ([]string, error) {
	switch raw.Form {
	case Session{}.Form():
		s, err := Decode[Session](raw)
		if err != nil {
			return nil, err
		}
		names := []string{s.Value.Label}
		if s.Value.Upload != nil {
			names = append(names, s.Value.Upload.String()) // the same bytes again find it
		}
		for _, day := range s.Value.days() {
			names = append(names, SessionDayName(s.Value.Instrument, day))
		}
		return names, nil
	case Calibration{}.Form():
		c, err := Decode[Calibration](raw)
		return []string{CalibrationName(c.Value.Session, c.Value.Scale, c.Value.Measurand)}, err
	case Final{}.Form():
		f, err := Decode[Final](raw)
		return []string{FinalName(f.Value.Sample, f.Value.Scale, f.Value.Measurand)}, err
	}
	return nil, nil
}

// maxSessionDays bounds the days a session is found by; a longer one is found by its first.
const maxSessionDays = 31

// days are the midnights (UTC) of the days that a session touches.
func (s Session) days() []Instant {
	if s.StartedAt == nil {
		return nil
	}
	const day = Instant(24 * 3600 * 1e6)
	first := *s.StartedAt - ((*s.StartedAt%day)+day)%day
	days := []Instant{first}
	for s.EndedAt != nil && len(days) < maxSessionDays && days[len(days)-1]+day <= *s.EndedAt {
		days = append(days, days[len(days)-1]+day)
	}
	return days
}

// SessionDayName is what the sessions of an instrument on one day (UTC) are found by.
func SessionDayName(instrument string, day Instant) string {
	return instrument + " " + day.Time().Format("2006-01-02")
}

// SessionDays are the names of the days between two instants.
func SessionDays(instrument string, from, to Instant) []string {
	var names []string
	for _, day := range (Session{StartedAt: &from, EndedAt: &to}).days() {
		names = append(names, SessionDayName(instrument, day))
	}
	return names
}

// CalibrationName is what a calibration's record is found by: one for each
// session, scale and measurand.
func CalibrationName(session, scale, measurand string) string {
	return session + "/" + scale + "/" + measurand
}

// FinalName is what a final value's record is found by: one for each sample,
// scale and measurand.
func FinalName(sample, scale, measurand string) string {
	return sample + "/" + scale + "/" + measurand
}
