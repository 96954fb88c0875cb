// Package exchange reads the files that come in and writes those that go out.
// It knows no HTTP: the server, the pages and the command line use it alike.
//
// # What it promises
//
// A file is read exactly as its [store.Mapping] says, or it is refused. Nothing
// about a file is guessed in silence: not its encoding (a byte order mark or
// valid UTF-8 speak for themselves; everything else must be named), not its
// decimal sign, not a number with a separator that could be one of thousands,
// not a local time that a change of clocks makes ambiguous. What can be sniffed
// is offered by [SuggestMapping] as a proposal for a person to look at.
//
// Every fault is named in the words of the sender's own file, all of them at
// once up to [registry.MaxComplaints], as place, found and expected:
//
//	row 17, column "d13C raw": found "n/a", expected a number with the decimal sign "."
//	body.readings[3].raw: found text, expected a number
//
// Rows are counted as a spreadsheet counts them: from 1, heading rows, empty
// rows and skipped rows included; a quoted field with line breaks is one row.
//
// # Formats
//
//	table of raw deltas   CSV, TSV, XLSX ([ReadTable]); JSON ([ReadReadingsJSON])
//	list of samples       CSV, TSV, XLSX ([ReadSamples])
//	stateless fit         JSON in and out ([DecodeFit], [NewFitAnswer])
//	lists going out       CSV after RFC 4180 ([WriteCSV])
//
// # Numbers
//
// A cell holds digits with at most one decimal sign, the mapping's, and perhaps
// an exponent. Read as a minus sign are U+002D, U+2010, U+2011, U+2012, U+2013
// and U+2212; white space around a number (no-break and thin spaces included)
// is dropped, and so is a per-mil sign behind a delta or its uncertainty. Minus
// zero becomes zero. Numbers that a workbook stores as numbers are taken with
// every stored digit, whatever the decimal sign of the mapping.
//
// # Times
//
// A time without an offset is local to the mapping's zone. One that the clocks
// skipped does not exist, one that they showed twice is ambiguous: both are
// refused with their row, and a time written with its offset after RFC 3339
// (2026-10-25T02:30:00+01:00) is accepted in any file, so that the answer can
// be given in the file itself. Zone rules are compiled in: reading does not
// depend on the machine.
//
// # Bounds
//
// [registry.MaxUpload] bytes, [registry.MaxReadings] readings, and for
// workbooks [MaxUnzipped] bytes once unpacked. A refusal names the bound.
package exchange
