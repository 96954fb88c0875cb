package rest

import (
	"net/http"
	"reflect"

	"deltamoor/api/exchange"
	"deltamoor/store"
)

const (
	get  = http.MethodGet
	post = http.MethodPost
)

// routes is the one table of the API: every operation with its address, what
// describes it, and what answers it.
func (f *face) routes() {
	o := f.operation

	handle(f, o(get, "/scales", "listScales", "scales", "List scales", listing[Scale]), f.scales)
	handle(f, o(get, "/scales/{code}", "getScale", "scales", "Read a scale"), recordOf(f, scaleKind))
	handle(f, o(get, "/scales/{code}/versions", "listScaleVersions", "scales", "List the definition history of a scale", listing[Scale]), versionsOf(f, scaleKind))
	handle(f, o(get, "/scales/{code}/versions/{version}", "getScaleVersion", "scales", "Read one version of a scale"), versionOf(f, scaleKind))

	handle(f, o(get, "/relations", "listRelations", "materials", "List relations: conversions, constants, rules", listing[Relation]), f.relations)
	handle(f, o(post, "/relations", "addRelation", "materials", "State a relation: a draft", creates), f.addRelation)
	handle(f, o(get, "/relations/{code}", "getRelation", "materials", "Read a relation"), recordOf(f, relationKind))
	handle(f, o(get, "/relations/{code}/versions", "listRelationVersions", "materials", "List the versions of a relation", listing[Relation]), versionsOf(f, relationKind))
	handle(f, o(post, "/relations/{code}/versions", "changeRelation", "materials", "State a further version of a relation: a draft", creates, conditional), f.changeRelation)
	handle(f, o(get, "/relations/{code}/versions/{version}", "getRelationVersion", "materials", "Read one version of a relation"), versionOf(f, relationKind))
	handle(f, o(get, "/relations/{code}/decisions", "listRelationDecisions", "materials", "List the decisions on a relation", listing[VersionDecision]), decisionsOn(f, relationKind))
	handle(f, o(post, "/relations/{code}/decisions", "decideRelation", "materials", "Submit, approve, decline or withdraw a relation", creates, conditional), decisionOn(f, relationKind))

	materialKind := kindOfRecord[store.Material, Material]{kind: store.KindMaterial, show: showMaterial, csv: materialTable}
	handle(f, o(get, "/materials", "listMaterials", "materials", "List reference materials", listing[Material]), f.materials)
	handle(f, o(post, "/materials", "addMaterial", "materials", "Register a reference material", creates), f.addMaterial)
	handle(f, o(get, "/materials/{code}", "getMaterial", "materials", "Read a material by its code, name or alias"), f.material)
	handle(f, o(get, "/materials/{code}/versions", "listMaterialVersions", "materials", "List the versions of a material", listing[Material]), versionsOf(f, materialKind))
	handle(f, o(post, "/materials/{code}/versions", "changeMaterial", "materials", "State a further version of a material", creates, conditional), f.changeMaterial)
	handle(f, o(get, "/materials/{code}/versions/{version}", "getMaterialVersion", "materials", "Read one version of a material"), versionOf(f, materialKind))

	handle(f, o(get, "/materials/{code}/units", "listMaterialUnits", "materials", "List the units of a material", listing[Unit]), f.materialUnits)
	handle(f, o(post, "/materials/{code}/units", "addUnits", "materials", "Register units of a material", creates), f.addUnits)
	handle(f, o(get, "/units", "listUnits", "materials", "List units", listing[Unit]), f.units)
	handle(f, o(get, "/units/{code}", "getUnit", "materials", "Read a unit"), recordOf(f, unitKind))
	handle(f, o(get, "/units/{code}/versions", "listUnitVersions", "materials", "List the states of a unit", listing[Unit]), versionsOf(f, unitKind))
	handle(f, o(post, "/units/{code}/versions", "changeUnit", "materials", "State a further version of a unit", creates, conditional), f.changeUnit)
	handle(f, o(get, "/units/{code}/versions/{version}", "getUnitVersion", "materials", "Read one version of a unit"), versionOf(f, unitKind))

	handle(f, o(post, "/units/{code}/quarantine", "quarantineUnit", "materials", "Take a unit out of use, in doubt since its last good moment", creates, conditional), f.quarantine)
	handle(f, o(get, "/units/{code}/affected", "listAffected", "materials", "List the sessions that used a unit since a moment, with what rests on them"), f.affected)
	handle(f, o(get, "/materials/{code}/stock", "getStock", "materials", "Read what is left of a material, who used it, and when it runs out"), f.stock)
	handle(f, o(post, "/units/import", "importUnits", "materials", "Register units from a list: all or none", creates, long,
		file(reflect.TypeFor[ListedUnits](), mediaJSON, mediaCSV, mediaTSV, mediaXLSX, mediaBytes), headed(exchange.UnitHeadings, 2)), f.importUnits)
	handle(f, o(post, "/units/uses", "logUses", "materials", "Log what happened to units outside sessions: all lines or none", creates, long,
		file(reflect.TypeFor[LoggedUses](), mediaJSON, mediaCSV, mediaTSV, mediaXLSX, mediaBytes), headed(exchange.UseHeadings, 2)), f.logUses)
	handle(f, o(get, "/materials/{code}/handling", "getHandling", "materials", "Read how a material is kept and what its hazards are"), f.handling)
	handle(f, o(get, "/materials/{code}/depth", "getDepth", "materials", "Read how deep the values of a material stand in the hierarchy"), f.depth)
	handle(f, o(get, "/materials/{code}/labels", "getLabels", "materials", "Print labels of units as a sheet", also("image/svg+xml", "One sheet, in true size."), also("text/html", "All sheets, as a page for printing.")), f.labels)
	handle(f, o(get, "/materials/{code}/certificate", "getCertificate", "materials", "Read the certificate of a material's values", answers[Certificate],
		also("text/html", "A page for printing."), also("application/xml", "A digital calibration certificate, schema 3.2.0.")), f.certificate)
	handle(f, o(get, "/due", "listDue", "materials", "List what falls due: expiry, checks, successors, units beyond their limits", answers[List[DueItem]], also("text/csv", "The list."), also("text/html", "A page for printing.")), f.due)

	const value = "/materials/{code}/values/{scale}/{measurand}"
	handle(f, o(post, "/values/import", "backLoadValues", "materials", "Bring values assigned before: all or none, as drafts", creates, long,
		file(reflect.TypeFor[BackLoad](), mediaJSON, mediaCSV, mediaTSV, mediaXLSX, mediaBytes), headed(exchange.ValueHeadings, 6)), f.backLoad)
	handle(f, o(post, "/values/covariance", "compareValues", "materials", "Read how much assigned values share: covariance, correlation, the difference of two"), f.covariance)
	handle(f, o(get, value+"/series", "getValueSeries", "materials", "Read the approved versions of a value, each against the one before", answers[List[ValueStep]], also("text/csv", "The series.")), f.valueSeries)
	handle(f, o(get, value+"/monitor", "getMonitor", "materials", "Follow a value after its assignment: results, trend, the next check", long), f.monitor)
	handle(f, o(get, "/materials/{code}/values", "listValues", "materials", "List the assigned values of a material", listing[Value]), f.materialValues)
	handle(f, o(post, "/materials/{code}/values", "addValue", "materials", "State an assigned value: a draft", creates), f.addValue)
	handle(f, o(get, value, "getValue", "materials", "Read the value in force"), f.value)
	handle(f, o(get, value+"/versions", "listValueVersions", "materials", "List the versions of a value", listing[Value]), f.valueVersions)
	handle(f, o(post, value+"/versions", "changeValue", "materials", "State a further version of a value: a draft", creates, conditional), f.changeValue)
	handle(f, o(get, value+"/versions/{version}", "getValueVersion", "materials", "Read one version of a value"), f.valueVersion)
	handle(f, o(post, value+"/assignments", "assignValue", "materials", "State a value from the sessions that measured the material: a draft", creates, conditional), f.assignValue)
	handle(f, o(get, value+"/decisions", "listValueDecisions", "materials", "List the decisions on a value", listing[VersionDecision]), f.valueDecisions)
	handle(f, o(post, value+"/conversions", "convertValue", "materials", "State a value on another scale by a relation: a draft", creates), f.convertValue)
	handle(f, o(post, value+"/decisions", "decideValue", "materials", "Submit, approve, decline or withdraw a value", creates, conditional), f.decideValue)
	handle(f, o(get, value+"/trace", "traceValue", "trust", "Trace a value", tracing), f.traceValue)
	handle(f, o(get, value+"/bundle", "getBundle", "trust", "The signed chain of a value, for another laboratory", long, conflicts, also(mediaZIP, "A bundle.")), f.valueBundle)
	handle(f, o(get, value+"/verification", "verifyValue", "trust", "Recompute the chain of a value now", long), f.verifyValue)

	handle(f, o(get, "/assignments", "listAssignments", "materials", "List value-assignment campaigns", listing[Assignment]), recordsOf(f, assignmentKind))
	handle(f, o(post, "/assignments", "planAssignment", "materials", "Plan a campaign: a draft", creates), f.planAssignment)
	handle(f, o(get, "/assignments/{code}", "getAssignment", "materials", "Read a campaign's plan"), recordOf(f, assignmentKind))
	handle(f, o(get, "/assignments/{code}/versions", "listAssignmentVersions", "materials", "List the versions of a plan", listing[Assignment]), versionsOf(f, assignmentKind))
	handle(f, o(post, "/assignments/{code}/versions", "changeAssignment", "materials", "Plan a campaign anew, before its approval: a draft", creates, conditional), f.changeAssignment)
	handle(f, o(get, "/assignments/{code}/versions/{version}", "getAssignmentVersion", "materials", "Read one version of a plan"), versionOf(f, assignmentKind))
	handle(f, o(get, "/assignments/{code}/decisions", "listAssignmentDecisions", "materials", "List the decisions on a plan", listing[VersionDecision]), decisionsOn(f, assignmentKind))
	handle(f, o(post, "/assignments/{code}/decisions", "decideAssignment", "materials", "Submit, approve, decline or withdraw a plan", creates, conditional), decisionOn(f, assignmentKind))
	handle(f, o(get, "/assignments/{code}/prospects", "getProspects", "materials", "Read the uncertainty to be expected of a plan, and what buys the most", answers[PlanProspects], also("text/html", "The plan as a page for printing.")), f.prospects)
	handle(f, o(post, "/assignments/prospects", "evaluatePlan", "materials", "Read the uncertainty to be expected of a plan that is not stored"), f.evaluatePlan)
	handle(f, o(get, "/assignments/{code}/simulation", "getSimulation", "materials", "Run a plan many times, with its planning values as the truth", long), f.simulation)
	handle(f, o(post, "/assignments/simulation", "simulatePlan", "materials", "Run a plan that is not stored many times", long), f.simulatePlan)
	handle(f, o(get, "/assignments/{code}/studies", "listStudies", "materials", "List the studies that were stated for a campaign"), f.studies)
	handle(f, o(post, "/assignments/{code}/studies", "stateStudy", "materials", "State the measurements of homogeneity or stability of a campaign, whole", creates, conditional, long,
		file(reflect.TypeFor[StudyBody](), mediaJSON, mediaCSV, mediaTSV, mediaXLSX, mediaBytes), headed(exchange.StudyHeadings, 2)), f.stateStudy)
	handle(f, o(get, "/assignments/{code}/analysis", "analyseAssignment", "materials", "Read where a campaign stands", long), f.analyseAssignment)
	handle(f, o(post, "/assignments/{code}/values", "concludeAssignment", "materials", "Draw up a value of an approved campaign: a draft", creates, conditional, long), f.concludeAssignment)

	handle(f, o(get, "/instruments", "listInstruments", "sessions", "List instruments", listing[Instrument]), recordsOf(f, instrumentKind))
	handle(f, o(post, "/instruments", "addInstrument", "sessions", "Register an instrument", creates), f.addInstrument)
	handle(f, o(get, "/instruments/{code}", "getInstrument", "sessions", "Read an instrument"), recordOf(f, instrumentKind))
	handle(f, o(get, "/instruments/{code}/versions", "listInstrumentVersions", "sessions", "List the versions of an instrument", listing[Instrument]), versionsOf(f, instrumentKind))
	handle(f, o(post, "/instruments/{code}/versions", "changeInstrument", "sessions", "State a further version of an instrument", creates, conditional), f.changeInstrument)
	handle(f, o(get, "/instruments/{code}/versions/{version}", "getInstrumentVersion", "sessions", "Read one version of an instrument"), versionOf(f, instrumentKind))
	handle(f, o(get, "/instruments/{code}/h3-factors", "listFactors", "sessions", "List the determinations of an instrument's H3 factor", listing[Factor]), f.factors)
	handle(f, o(post, "/instruments/{code}/h3-factors", "addFactor", "sessions", "Determine an H3 factor from pulses, or record one applied elsewhere: a draft", creates), f.addFactor)
	handle(f, o(get, "/instruments/{code}/h3-factors/{version}", "getFactor", "sessions", "Read one determination of an H3 factor"), versionOf(f, factorKind))
	handle(f, o(get, "/instruments/{code}/h3-factors/decisions", "listFactorDecisions", "sessions", "List the decisions on H3 factors", listing[VersionDecision]), decisionsOn(f, factorKind))
	handle(f, o(post, "/instruments/{code}/h3-factors/decisions", "decideFactor", "sessions", "Submit, approve, decline or withdraw an H3 factor", creates, conditional), decisionOn(f, factorKind))

	handle(f, o(get, "/instruments/{code}/lines", "listLines", "sessions", "List an instrument's slopes, intercepts and drifts, for a chart", listing[InstrumentLine]), f.lines)

	handle(f, o(get, "/methods", "listMethods", "sessions", "List methods", listing[Method]), recordsOf(f, methodKind))
	handle(f, o(post, "/methods", "addMethod", "sessions", "State a method: a draft", creates), f.addMethod)
	handle(f, o(get, "/methods/{code}", "getMethod", "sessions", "Read the method in force"), recordOf(f, methodKind))
	handle(f, o(get, "/methods/{code}/versions", "listMethodVersions", "sessions", "List the versions of a method", listing[Method]), versionsOf(f, methodKind))
	handle(f, o(post, "/methods/{code}/versions", "changeMethod", "sessions", "State a further version of a method: a draft", creates, conditional), f.changeMethod)
	handle(f, o(get, "/methods/{code}/versions/{version}", "getMethodVersion", "sessions", "Read one version of a method"), versionOf(f, methodKind))
	handle(f, o(get, "/methods/{code}/decisions", "listMethodDecisions", "sessions", "List the decisions on a method", listing[VersionDecision]), decisionsOn(f, methodKind))
	handle(f, o(post, "/methods/{code}/decisions", "decideMethod", "sessions", "Submit, approve, decline or withdraw a method", creates, conditional), decisionOn(f, methodKind))

	handle(f, o(get, "/sessions", "listSessions", "sessions", "List sessions", listing[Session]), recordsOf(f, sessionKind))
	handle(f, o(post, "/sessions", "addSession", "sessions", "Open a session without readings", creates), f.addSession)
	handle(f, o(post, "/sessions/import", "importSession", "sessions", "Open a session and bring its readings in one act", creates, long, previewed[Imported],
		file(reflect.TypeFor[NewReadings](), mediaJSON, mediaCSV, mediaTSV, mediaXLSX, mediaBytes)), f.importSession)
	handle(f, o(get, "/sessions/{code}", "getSession", "sessions", "Read a session"), recordOf(f, sessionKind))
	handle(f, o(get, "/sessions/{code}/versions", "listSessionVersions", "sessions", "List the versions of a session", listing[Session]), versionsOf(f, sessionKind))
	handle(f, o(get, "/sessions/{code}/versions/{version}", "getSessionVersion", "sessions", "Read one version of a session"), versionOf(f, sessionKind))
	handle(f, o(get, "/sessions/{code}/readings", "listReadings", "sessions", "List the readings of a session", listing[Reading]), f.readings)
	handle(f, o(post, "/sessions/{code}/readings", "importReadings", "sessions", "Bring the readings of a session: all rows or none", creates, long, previewed[Imported],
		file(reflect.TypeFor[NewReadings](), mediaJSON, mediaCSV, mediaTSV, mediaXLSX, mediaBytes)), f.importReadings)
	handle(f, o(get, "/sessions/{code}/exclusions", "listExclusions", "sessions", "List the acts of exclusion in a session", answers[Exclusions], also("text/csv", "The acts.")), f.exclusions)
	handle(f, o(post, "/sessions/{code}/exclusions", "exclude", "sessions", "Exclude readings, or readmit them", creates, conditional), f.exclude)
	handle(f, o(get, "/sessions/{code}/outcomes", "listOutcomes", "sessions", "List the outcomes of a session", answers[List[Outcome]], also("text/csv", "The outcomes.")), f.outcomes)
	handle(f, o(post, "/sessions/{code}/outcomes", "stateOutcome", "sessions", "State the outcome of a session for a quantity", creates, conditional), f.stateOutcome)
	handle(f, o(get, "/sessions/{code}/outcomes/{quantity}", "getOutcome", "sessions", "Read the outcome for a quantity"), f.outcome)
	handle(f, o(get, "/sessions/{code}/outcomes/{quantity}/versions", "listOutcomeVersions", "sessions", "List the versions of an outcome", listing[Outcome]), f.outcomeVersions)
	handle(f, o(get, "/sessions/{code}/outcomes/{quantity}/versions/{version}", "getOutcomeVersion", "sessions", "Read one version of an outcome"), f.outcomeVersion)

	handle(f, o(get, "/sessions/{code}/calibrations", "listCalibrations", "calibrations", "List the calibrations of a session", listing[Calibration]), f.calibrations)
	handle(f, o(post, "/sessions/{code}/calibrations", "fitSession", "calibrations", "Fit a quantity of a session: a draft", creates, previewed[Calibration]), f.fitSession)
	handle(f, o(get, "/calibrations/{code}", "getCalibration", "calibrations", "Read a calibration"), recordOf(f, calibrationKind))
	handle(f, o(get, "/calibrations/{code}/versions", "listCalibrationVersions", "calibrations", "List the versions of a calibration", listing[Calibration]), versionsOf(f, calibrationKind))
	handle(f, o(get, "/calibrations/{code}/versions/{version}", "getCalibrationVersion", "calibrations", "Read one version of a calibration"), versionOf(f, calibrationKind))
	handle(f, o(get, "/calibrations/{code}/changes", "getCalibrationChanges", "calibrations", "Set two versions of a calibration against each other: what changed, and what that moved", conflicts), f.calibrationChanges)
	handle(f, o(get, "/calibrations/{code}/results", "listResults", "calibrations", "List the results of a calibration", listing[Result]), f.results)
	handle(f, o(get, "/calibrations/{code}/companion", "getCompanion", "calibrations", "Read a robust fit beside a calibration, as an opinion"), f.companion)
	handle(f, o(get, "/calibrations/{code}/decisions", "listCalibrationDecisions", "calibrations", "List the decisions on a calibration", listing[VersionDecision]), decisionsOn(f, calibrationKind))
	handle(f, o(post, "/calibrations/{code}/decisions", "decideCalibration", "calibrations", "Submit, approve, decline or withdraw a calibration", creates, conditional), decisionOn(f, calibrationKind))
	handle(f, o(post, "/calculations/fit", "calculateFit", "calibrations", "Fit without storing anything", fitBody), f.calculateFit)
	handle(f, o(post, "/calculations/conversion", "calculateConversion", "calibrations", "Convert a delta to another scale without storing anything"), f.calculateConversion)
	handle(f, o(post, "/calculations/propagation", "calculatePropagation", "calibrations", "Propagate distributions through a fit without storing anything", propagationBody), f.calculatePropagation)
	handle(f, o(post, "/calibrations/{code}/propagation", "propagateCalibration", "trust", "Propagate distributions through the whole chain of a calibration's results; nothing is stored"), f.propagateCalibration)

	handle(f, o(get, "/samples", "listSamples", "samples", "List samples", listing[Sample]), recordsOf(f, sampleKind))
	handle(f, o(post, "/samples", "addSamples", "samples", "Put samples on the list: all or none", creates, long,
		file(reflect.TypeFor[NewSamples](), mediaJSON, mediaCSV, mediaTSV, mediaXLSX, mediaBytes), headed(exchange.SampleHeadings, 3)), f.addSamples)
	handle(f, o(get, "/samples/{code}", "getSample", "samples", "Read a sample and where it stands"), f.sample)
	handle(f, o(get, "/samples/{code}/versions", "listSampleVersions", "samples", "List the versions of a sample", listing[Sample]), versionsOf(f, sampleKind))
	handle(f, o(get, "/samples/{code}/versions/{version}", "getSampleVersion", "samples", "Read one version of a sample"), versionOf(f, sampleKind))

	handle(f, o(get, "/finals", "listFinals", "samples", "List final values", listing[Final]), recordsOf(f, finalKind))
	handle(f, o(post, "/finals", "addFinal", "samples", "Draw up the final value of a sample: a draft", creates), f.addFinal)
	handle(f, o(get, "/finals/{code}", "getFinal", "samples", "Read a final value"), recordOf(f, finalKind))
	handle(f, o(get, "/finals/{code}/versions", "listFinalVersions", "samples", "List the versions of a final value", listing[Final]), versionsOf(f, finalKind))
	handle(f, o(post, "/finals/{code}/versions", "changeFinal", "samples", "Draw a final value up again: a draft", creates, conditional), f.changeFinal)
	handle(f, o(get, "/finals/{code}/versions/{version}", "getFinalVersion", "samples", "Read one version of a final value"), versionOf(f, finalKind))
	handle(f, o(get, "/finals/{code}/decisions", "listFinalDecisions", "samples", "List the decisions on a final value", listing[VersionDecision]), decisionsOn(f, finalKind))
	handle(f, o(post, "/finals/{code}/decisions", "decideFinal", "samples", "Submit, approve, decline or withdraw a final value", creates, conditional), decisionOn(f, finalKind))
	handle(f, o(post, "/finals/{code}/conversions", "convertFinal", "samples", "Draw up a final value on another scale: a draft", creates), f.convertFinal)

	handle(f, o(get, "/reports", "listReports", "samples", "List reports", listing[ReportSummary]), recordsOf(f, reportKind))
	handle(f, o(post, "/reports", "issueReport", "samples", "Issue final values: each line gets its permanent code", creates), f.issue)
	handle(f, o(get, "/reports/{code}", "getReport", "samples", "Read a report with its lines", reporting), f.report)
	handle(f, o(get, "/reports/{code}/completeness", "getCompleteness", "samples", "Hold a report against what a reported delta must carry"), f.completeness)
	handle(f, o(get, "/reports/{code}/methods", "getMethodsText", "samples", "How a report was measured: a paragraph for a paper, anchors and controls", answers[MethodsText], also(mediaHTML, "A page for printing."), also(mediaText, "Plain text.")), f.methodsText)
	handle(f, o(get, "/reports/{code}/versions", "listReportVersions", "samples", "List the versions of a report", listing[ReportSummary]), versionsOf(f, reportKind))
	handle(f, o(get, "/reports/{code}/versions/{version}", "getReportVersion", "samples", "Read one version of a report"), versionOf(f, reportKind))
	handle(f, o(get, "/reports/{code}/decisions", "listReportDecisions", "samples", "List the decisions on a report", listing[VersionDecision]), decisionsOn(f, reportKind))
	handle(f, o(post, "/reports/{code}/decisions", "decideReport", "samples", "Withdraw a report", creates, conditional), decisionOn(f, reportKind))
	handleClaimed(f, o(get, "/reported/{code}", "getReported", "samples", "Read a reported delta by its permanent code"), f.reportedShort, f.reported)
	handle(f, o(get, "/reported/{code}/today", "getReportedToday", "trust", "Read a reported delta as it would be with the assigned values in force"), f.today)
	handle(f, o(get, "/reported/{code}/trace", "traceReported", "trust", "Trace a reported delta to where its chain ends", tracing), f.traceReported)
	handle(f, o(get, "/reported/{code}/pack", "getPack", "trust", "The evidence for a reported delta, as one file that needs no registry", long, also(mediaZIP, "An evidence pack.")), f.reportedPack)
	handle(f, o(post, "/comparisons", "compare", "trust", "Set reported deltas against each other, shared sources cancelled"), f.compare)
	handle(f, o(get, "/reported/{code}/verification", "verifyReported", "trust", "Recompute the chain of a reported delta now", long), f.verifyReported)

	for _, r := range tracedRecords {
		handle(f, o(get, r.address+"/trace", "trace"+r.operation, "trust", "Trace "+r.phrase, tracing, named(r.address)), f.traceOf(r.kind, r.made))
		handle(f, o(get, r.address+"/verification", "verify"+r.operation, "trust", "Recompute the chain of "+r.phrase+" now", long, named(r.address)), f.verificationOf(r.kind, r.made))
	}
	handle(f, o(post, "/reported/{code}/propagation", "propagateReported", "trust", "Propagate distributions through the whole chain of a reported delta; nothing is stored"), f.propagateReported)

	handle(f, o(get, "/revisions", "listRevisions", "trust", "List revisions", listing[Revision]), recordsOf(f, revisionKind))
	handle(f, o(post, "/revisions", "addRevision", "trust", "Say what may have been wrong: what moves, and with preview=false everything drawn up again as a job", creates, long, previewed[RevisionPreview], accepted202[RevisionMade]), f.addRevision)
	handle(f, o(get, "/revisions/{code}", "getRevision", "trust", "Read a revision"), recordOf(f, revisionKind))
	handle(f, o(get, "/revisions/{code}/versions", "listRevisionVersions", "trust", "List the versions of a revision", listing[Revision]), versionsOf(f, revisionKind))
	handle(f, o(get, "/revisions/{code}/versions/{version}", "getRevisionVersion", "trust", "Read one version of a revision"), versionOf(f, revisionKind))
	handle(f, o(get, "/revisions/{code}/decisions", "listRevisionDecisions", "trust", "List the decisions on a revision", listing[VersionDecision]), decisionsOn(f, revisionKind))
	handle(f, o(post, "/revisions/{code}/decisions", "decideRevision", "trust", "Approve the set of a revision by its hash, or decline it", creates, conditional), f.decideRevision)
	handle(f, o(get, "/revisions/{code}/sets", "listRevisionSets", "trust", "List the reports that a revision moves, and what became of them", listing[RevisionSet]), f.revisionSets)
	handle(f, o(post, "/revisions/{code}/closings", "closeRevision", "trust", "Say what becomes of one report: re-issue, annotate, no action", creates), f.closeRevision)
	handle(f, o(get, "/revisions/{code}/sets/{report}/lines", "listRevisionLines", "trust", "List the lines of a report before and after a revision", listing[Notice]), f.revisionNotice)
	handle(f, o(get, "/jobs", "listJobs", "trust", "List long work, latest first", listing[Job]), f.jobs)
	handle(f, o(get, "/jobs/{code}", "getJob", "trust", "Read the progress of long work"), f.job)
	handle(f, o(post, "/jobs/{code}/cancellation", "cancelJob", "trust", "End long work; what it did stays"), f.cancelJob)

	handle(f, o(get, "/laboratories", "listLaboratories", "people", "List the laboratories of who asks", listing[Laboratory]), f.laboratories)
	handle(f, o(get, "/laboratories/{code}", "getLaboratory", "people", "Read a laboratory"), f.laboratory)
	handle(f, o(get, "/people", "listPeople", "people", "List people", listing[Person]), f.people)
	handle(f, o(post, "/people", "addPerson", "people", "Register a person", creates), f.addPerson)
	handle(f, o(get, "/people/{code}", "getPerson", "people", "Read a person"), recordOf(f, personKind))
	handle(f, o(get, "/people/{code}/versions", "listPersonVersions", "people", "List the versions of a person", listing[Person]), versionsOf(f, personKind))
	handle(f, o(post, "/people/{code}/versions", "changePerson", "people", "State a further version of a person", creates, conditional), f.changePerson)
	handle(f, o(get, "/people/{code}/versions/{version}", "getPersonVersion", "people", "Read one version of a person"), versionOf(f, personKind))
	handle(f, o(get, "/tokens", "listTokens", "people", "List tokens", listing[Token]), f.tokens)
	handle(f, o(post, "/tokens", "addToken", "people", "Make a token; its secret is shown once", creates, secret), f.addToken)
	handle(f, o(get, "/tokens/{code}", "getToken", "people", "Read a token"), f.oneToken)
	handle(f, o(get, "/tokens/{code}/versions", "listTokenVersions", "people", "List the versions of a token", listing[Token]), f.tokenVersions)
	handle(f, o(post, "/tokens/{code}/versions", "revokeToken", "people", "Revoke a token", creates, conditional), f.revokeToken)
	handle(f, o(get, "/tokens/{code}/versions/{version}", "getTokenVersion", "people", "Read one version of a token"), f.tokenVersion)

	handle(f, o(post, "/verification", "verify", "trust", "Recompute everything the laboratory holds, as a job", accepted202[Job]), f.verifyAll)
	handle(f, o(get, "/verification/{code}", "getVerification", "trust", "Read what the job of a verification found", conflicts), f.verification)
	handle(f, o(post, "/bundles", "importBundle", "trust", "Bring a partner's value with its whole chain: verified in full, a draft until somebody accepts it", creates, long, previewed[ImportedBundle], made[ImportedBundle], file(nil, mediaZIP, mediaBytes)), f.importBundle)
	handle(f, o(get, "/ledger/key", "getPublicKey", "trust", "The public key that signs the laboratory's ledger", conflicts), f.publicKey)
	handle(f, o(get, "/uploads/{sha256}", "getUpload", "trust", "The bytes as they came", long, also(mediaBytes, "The bytes.")), f.upload)
	handle(f, o(get, "/uploads/{sha256}/trace", "traceUpload", "trust", "Trace an upload: upwards, what was made of it", tracing), f.traceUpload)
	handle(f, o(get, "/ledger", "getLedger", "trust", "Size and root of the ledger"), f.ledgerHead)
	handle(f, o(get, "/ledger/entries", "listEntries", "trust", "List the entries of the ledger", listing[Entry]), f.ledgerEntries)
	handle(f, o(get, "/ledger/entries/{position}/inclusion", "proveInclusion", "trust", "Prove that an entry is in the ledger"), f.inclusion)
	handle(f, o(get, "/ledger/consistency", "proveConsistency", "trust", "Prove that an earlier ledger is a prefix of a later one"), f.consistency)
	handle(f, o(get, "/ledger/checkpoint", "getCheckpoint", "trust", "The newest signed checkpoint", also("text/plain", "A signed note.")), f.checkpoint)
}
