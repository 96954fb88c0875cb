package store

// NewReportLine states a report's line from its permanent code, its place, and
// the final value it reports: everything else in it follows.
func NewReportLine(code, report string, line int, final Version[Final]) ReportLine {
	f := final.Value
	return ReportLine{Code: code, Report: report, Line: line, Final: final.Ref, Sample: f.Sample, Quantity: f.Quantity, Scale: f.Scale,
		Measurand: f.Measurand, Value: f.Value, StandardUncertainty: f.StandardUncertainty, K: f.K, Expanded: f.Expanded, Probability: f.Probability}
}
