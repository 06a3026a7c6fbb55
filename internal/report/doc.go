// Package report draws what people read: one self-contained HTML file, and one
// table for the terminal.
//
// A Page is plain data: the finding in one sentence, cautions, what needs a
// person's eye, plans, charts, tables, the method, and the names of the files
// that hold the numbers. Write turns it into a single file with inline SVG: no
// script, nothing fetched, light or dark by the reader's system setting, sized
// for a desk, a phone and A4 paper, and never larger than MaxBytes. The file is
// also well-formed XML, so that other programs can read it strictly.
//
// Everything is drawn in the manner of a survey plan. Equal scales on both axes
// of a plan; robots named at the start and at the newest pose of their tracks;
// verdicts told apart by the form of the line before anything else; uncertainty
// with its magnification written beside it; figures right-aligned under their
// unit. Hue helps and is never the only mark.
//
// The same Page gives the same bytes: the package reads no clock, draws no
// random number and walks no map. Names and sentences are taken as hostile:
// they are escaped, control and direction-changing characters are shown as a
// replacement mark, and over-long names are shortened where they are drawn.
//
// Units are SI throughout: metres, radians, seconds.
package report
