// Package figure draws SVG from numbers: the trace of a delta, the line of a
// calibration and its residuals. The same input gives the same bytes.
//
// A figure needs no script and no style sheet: colours are CSS variables with a
// fallback (--figure-ink, --figure-quiet, --figure-paper, --figure-line,
// --figure-accent, --figure-warn), every mark has a <title> that says its
// numbers, and marks differ by shape as well as by colour. A figure says in its
// <desc> what it shows; the table of the same numbers stands beside it on a page.
package figure
