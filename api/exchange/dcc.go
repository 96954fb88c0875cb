package exchange

import (
	"encoding/xml"
	"fmt"
	"io"
	"strconv"
	"strings"

	"deltamoor/api/registry"
	"deltamoor/store"
)

// DCCVersion is the version of the schema of digital calibration certificates
// that [WriteDCC] follows (PTB, https://ptb.de/dcc/v3.2.0/).
const DCCVersion = "3.2.0"

// The units of a delta in D-SI. Per mil is none of them: every quantity is a
// hybrid of one real in the unit one, which machines read, and a twin in ‰.
const (
	dsiOne    = `\one`
	dsiPerMil = `\permille`
)

// A DCCOptions says what a certificate does not know about itself.
type DCCOptions struct {
	// Country of the laboratory (ISO 3166-1, two letters); "" is ZZ, which that
	// standard leaves to its users.
	Country string
	// Program and Release name the software.
	Program, Release string
}

// WriteDCC writes a certificate as a digital calibration certificate: one
// measurement result for each assigned value, its expanded uncertainty with k
// and p, the parts of its budget, and what it is traceable through. Numbers are
// those of the certificate, digit for digit; in the unit one they are moved by
// three places, not computed.
func WriteDCC(w io.Writer, c registry.Certificate, o DCCOptions) error {
	doc, err := dccOf(c, o)
	if err != nil {
		return fmt.Errorf("write certificate of %s: %w", c.Material, err)
	}
	if _, err := io.WriteString(w, xml.Header); err != nil {
		return err
	}
	e := xml.NewEncoder(w)
	e.Indent("", "  ")
	if err := e.Encode(doc); err != nil {
		return fmt.Errorf("write certificate of %s: %w", c.Material, err)
	}
	_, err = io.WriteString(w, "\n")
	return err
}

// The elements of the schema that we fill. Prefixes stand in the names, as the
// encoder has no prefixes of its own.
type (
	dccDocument struct {
		XMLName        xml.Name      `xml:"dcc:digitalCalibrationCertificate"`
		DCC            string        `xml:"xmlns:dcc,attr"`
		SI             string        `xml:"xmlns:si,attr"`
		Version        string        `xml:"schemaVersion,attr"`
		Administrative dccAdmin      `xml:"dcc:administrativeData"`
		Results        []dccMeasured `xml:"dcc:measurementResults>dcc:measurementResult"`
	}
	dccAdmin struct {
		Software   []dccSoftware  `xml:"dcc:dccSoftware>dcc:software"`
		Core       dccCore        `xml:"dcc:coreData"`
		Items      []dccItem      `xml:"dcc:items>dcc:item"`
		Laboratory dccLaboratory  `xml:"dcc:calibrationLaboratory"`
		Persons    []dccPerson    `xml:"dcc:respPersons>dcc:respPerson"`
		Customer   dccContact     `xml:"dcc:customer"`
		Statements []dccStatement `xml:"dcc:statements>dcc:statement"`
	}
	dccText struct {
		Content []dccContent `xml:"dcc:content"`
	}
	dccContent struct {
		Language string `xml:"lang,attr,omitempty"`
		Text     string `xml:",chardata"`
	}
	dccSoftware struct {
		Name    dccText `xml:"dcc:name"`
		Release string  `xml:"dcc:release"`
		Type    string  `xml:"dcc:type"`
	}
	dccCore struct {
		Country           string `xml:"dcc:countryCodeISO3166_1"`
		UsedLanguage      string `xml:"dcc:usedLangCodeISO639_1"`
		MandatoryLanguage string `xml:"dcc:mandatoryLangCodeISO639_1"`
		Identifier        string `xml:"dcc:uniqueIdentifier"`
		Begin             string `xml:"dcc:beginPerformanceDate"`
		End               string `xml:"dcc:endPerformanceDate"`
		Location          string `xml:"dcc:performanceLocation"`
		Issued            string `xml:"dcc:issueDate"`
	}
	dccIdentification struct {
		Issuer string  `xml:"dcc:issuer"`
		Value  string  `xml:"dcc:value"`
		Name   dccText `xml:"dcc:name"`
	}
	dccItem struct {
		Name            dccText             `xml:"dcc:name"`
		Description     *dccText            `xml:"dcc:description"`
		Manufacturer    dccMaker            `xml:"dcc:manufacturer"`
		Identifications []dccIdentification `xml:"dcc:identifications>dcc:identification"`
	}
	dccMaker struct {
		Name dccText `xml:"dcc:name"`
	}
	dccLaboratory struct {
		Code    string     `xml:"dcc:calibrationLaboratoryCode"`
		Contact dccContact `xml:"dcc:contact"`
	}
	dccContact struct {
		Name    dccText `xml:"dcc:name"`
		Further dccText `xml:"dcc:location>dcc:further"`
	}
	dccPerson struct {
		Person     dccMaker `xml:"dcc:person"`
		Role       string   `xml:"dcc:role"`
		MainSigner bool     `xml:"dcc:mainSigner"`
	}
	dccStatement struct {
		Name        dccText `xml:"dcc:name"`
		Declaration dccText `xml:"dcc:declaration"`
	}
	dccMeasured struct {
		Name        dccText     `xml:"dcc:name"`
		Description *dccText    `xml:"dcc:description"`
		Methods     []dccMethod `xml:"dcc:usedMethods>dcc:usedMethod"`
		Results     []dccResult `xml:"dcc:results>dcc:result"`
		Meta        []dccMeta   `xml:"dcc:measurementMetaData>dcc:metaData"`
	}
	dccMethod struct {
		Name        dccText  `xml:"dcc:name"`
		Description *dccText `xml:"dcc:description"`
		Norms       []string `xml:"dcc:norm"`
	}
	dccResult struct {
		Name       dccText       `xml:"dcc:name"`
		Quantities []dccQuantity `xml:"dcc:data>dcc:quantity"`
	}
	dccMeta struct {
		Name        dccText  `xml:"dcc:name"`
		References  []string `xml:"dcc:reference"`
		Declaration *dccText `xml:"dcc:declaration"`
		Date        string   `xml:"dcc:date,omitempty"`
	}
	dccQuantity struct {
		Name   dccText    `xml:"dcc:name"`
		Hybrid *dsiHybrid `xml:"si:hybrid"`
		Plain  *dsiReal   `xml:"si:real"`
		Text   *dccText   `xml:"dcc:noQuantity"`
	}
	dsiHybrid struct {
		Reals []dsiReal `xml:"si:real"`
	}
	dsiReal struct {
		Label    string       `xml:"si:label,omitempty"`
		Value    string       `xml:"si:value"`
		Unit     string       `xml:"si:unit"`
		Expanded *dsiExpanded `xml:"si:expandedUnc"`
	}
	dsiExpanded struct {
		Uncertainty string `xml:"si:uncertainty"`
		K           string `xml:"si:coverageFactor"`
		P           string `xml:"si:coverageProbability"`
	}
)

func english(text string) dccText { return dccText{[]dccContent{{"en", plainText(text)}}} }

func englishOrNil(text string) *dccText {
	if strings.TrimSpace(text) == "" {
		return nil
	}
	t := english(text)
	return &t
}

// plainText collapses white space: strings of the schema neither begin nor end with it.
func plainText(text string) string { return strings.Join(strings.Fields(text), " ") }

func or(text, other string) string {
	if text = plainText(text); text == "" {
		return other
	}
	return text
}

func dccOf(c registry.Certificate, o DCCOptions) (dccDocument, error) {
	country := or(o.Country, "ZZ")
	doc := dccDocument{DCC: "https://ptb.de/dcc", SI: "https://ptb.de/si", Version: DCCVersion}
	a := &doc.Administrative
	a.Software = []dccSoftware{{Name: english(or(o.Program, "deltamoor")), Release: or(o.Release, "unreleased"), Type: "application"}}
	begin, end := c.IssuedAt, c.IssuedAt
	for i, v := range c.Values {
		first, last := v.First, v.Last
		if first == nil || last == nil {
			first, last = v.ValidFrom, v.ValidFrom
		}
		if first == nil || last == nil {
			continue
		}
		if i == 0 {
			begin, end = *first, *last
		}
		begin, end = min(begin, *first), max(end, *last)
	}
	a.Core = dccCore{Country: country, UsedLanguage: "en", MandatoryLanguage: "en", Identifier: or(c.Identifier, "none"), Begin: day(begin), End: day(end), Location: "laboratory", Issued: day(c.IssuedAt)}
	item := dccItem{Name: english(or(c.Name, c.Material)), Manufacturer: dccMaker{english(or(c.Producer, c.LaboratoryName))},
		Description:     englishOrNil(strings.Join([]string{c.Substance, c.Formula, c.Matrix}, " ")),
		Identifications: []dccIdentification{{"calibrationLaboratory", plainText(c.Material), english("material")}}}
	if lot := plainText(c.Lot); lot != "" {
		item.Identifications = append(item.Identifications, dccIdentification{"manufacturer", lot, english("lot")})
	}
	a.Items = []dccItem{item}
	contact := dccContact{Name: english(or(c.LaboratoryName, c.Laboratory)), Further: english("laboratory " + c.Laboratory)}
	a.Laboratory = dccLaboratory{Code: plainText(c.Laboratory), Contact: contact}
	a.Customer = contact
	seen := map[string]bool{}
	for _, s := range c.Signatures {
		if key := s.Person + " " + s.Meaning; !seen[key] {
			seen[key] = true
			a.Persons = append(a.Persons, dccPerson{dccMaker{english(or(s.Name, s.Person))}, or(s.Meaning, "made"), s.Meaning == "approved"})
		}
	}
	if len(a.Persons) == 0 {
		return doc, fmt.Errorf("nobody signed it")
	}
	for _, s := range certificateStatements(c) {
		a.Statements = append(a.Statements, dccStatement{english(s.name), english(s.text)})
	}
	for _, v := range c.Values {
		m, err := dccValue(v)
		if err != nil {
			return doc, fmt.Errorf("value %s.%d: %w", v.Code, v.Version, err)
		}
		doc.Results = append(doc.Results, m)
	}
	return doc, nil
}

func day(at store.Instant) string { return at.Time().Format("2006-01-02") }

func dccValue(v registry.CertificateValue) (dccMeasured, error) {
	title := fmt.Sprintf("%s on %s (%s)", v.Quantity, v.Scale, v.Measurand)
	m := dccMeasured{Name: english(title), Description: englishOrNil(basisText(v))}
	method := dccMethod{Name: english("value by " + v.Basis), Description: englishOrNil(v.Evidence)}
	if v.Campaign != "" {
		method = dccMethod{Name: english("value assignment campaign " + store.FormatCode(v.Campaign)),
			Description: englishOrNil(fmt.Sprintf("%d sessions; variance between sessions by %s; homogeneity: %s; stability: %s", v.Sessions, strings.ReplaceAll(v.Estimator, "_", " "), v.Homogeneity, v.Stability)),
			Norms:       []string{"ISO 33405:2024", "JCGM 100:2008"}}
	}
	m.Methods = []dccMethod{method}
	value, err := hybrid("assigned value", string(v.Value), &dsiExpanded{FormatNumber(v.Expanded), FormatNumber(max(v.K, 1)), FormatNumber(v.P)})
	if err != nil {
		return m, err
	}
	if v.U == 0 {
		name := "assigned value, no uncertainty stated"
		if v.Exact {
			name = "assigned value, exact by definition"
		}
		if value, err = hybrid(name, string(v.Value), nil); err != nil {
			return m, err
		}
	}
	m.Results = []dccResult{{Name: english("assigned value"), Quantities: []dccQuantity{value}}}
	budget := dccResult{Name: english("standard uncertainty and its parts (k = 1)")}
	add := func(name string, u float64) error {
		q, err := hybrid(name, FormatNumber(u), nil)
		budget.Quantities = append(budget.Quantities, q)
		return err
	}
	if v.U > 0 {
		if err := add("standard uncertainty", v.U); err != nil {
			return m, err
		}
	}
	for _, line := range v.Budget {
		if err := add(line.Line, line.StandardUncertainty); err != nil {
			return m, err
		}
	}
	if v.NuEff != nil {
		budget.Quantities = append(budget.Quantities, dccQuantity{Name: english("effective degrees of freedom"), Plain: &dsiReal{Value: FormatNumber(*v.NuEff), Unit: dsiOne}})
	}
	if len(budget.Quantities) > 0 {
		m.Results = append(m.Results, budget)
	}
	m.Meta = append(m.Meta, dccMeta{Name: english("version of the value"), References: []string{fmt.Sprintf("%s.%d", v.Code, v.Version), plainText("SHA-256 " + v.Hash.String())}})
	if len(v.Anchors) > 0 {
		trace := dccMeta{Name: english("traceable through")}
		for _, a := range v.Anchors {
			trace.References = append(trace.References, fmt.Sprintf("%s: %s ‰, u %s ‰, %s", a.Version, a.Value, FormatNumber(a.U), a.Basis))
		}
		m.Meta = append(m.Meta, trace)
	}
	if v.ValidFrom != nil {
		m.Meta = append(m.Meta, dccMeta{Name: english("valid from"), Date: day(*v.ValidFrom)})
	}
	if v.ExpiresAt != nil {
		m.Meta = append(m.Meta, dccMeta{Name: english("valid until"), Date: day(*v.ExpiresAt)})
	}
	return m, nil
}

// hybrid states one quantity twice: in the unit one and in ‰.
func hybrid(name, perMil string, expanded *dsiExpanded) (dccQuantity, error) {
	one, err := movePoint(perMil, -3)
	if err != nil {
		return dccQuantity{}, err
	}
	q := dsiHybrid{Reals: []dsiReal{{Label: name, Value: one, Unit: dsiOne}, {Label: name + " in per mil", Value: strings.TrimPrefix(perMil, "+"), Unit: dsiPerMil, Expanded: expanded}}}
	if expanded != nil {
		e := *expanded
		if e.Uncertainty, err = movePoint(expanded.Uncertainty, -3); err != nil {
			return dccQuantity{}, err
		}
		q.Reals[0].Expanded = &e
	}
	return dccQuantity{Name: english(name), Hybrid: &q}, nil
}

// movePoint multiplies a decimal by a power of ten without touching its digits.
func movePoint(decimal string, places int) (string, error) {
	mantissa, exponent, has := strings.Cut(strings.ToLower(strings.TrimPrefix(decimal, "+")), "e")
	shift := places
	if has {
		n, err := strconv.Atoi(exponent)
		if err != nil {
			return "", fmt.Errorf("number %q: expected a decimal", decimal)
		}
		shift += n
	}
	sign := ""
	if strings.HasPrefix(mantissa, "-") {
		sign, mantissa = "-", mantissa[1:]
	}
	whole, fraction, _ := strings.Cut(mantissa, ".")
	digits, point := whole+fraction, len(whole)+shift
	if digits == "" || strings.Trim(digits, "0123456789") != "" {
		return "", fmt.Errorf("number %q: expected a decimal", decimal)
	}
	if point <= 0 {
		digits, point = strings.Repeat("0", 1-point)+digits, 1
	}
	if point > len(digits) {
		digits += strings.Repeat("0", point-len(digits))
	}
	out := strings.TrimLeft(digits[:point], "0")
	if out == "" {
		out = "0"
	}
	if point < len(digits) {
		out += "." + digits[point:]
	}
	return sign + out, nil
}
