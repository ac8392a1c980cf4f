// Package source holds places in text and what is wrong there.
//
// A File is a text with a table of its lines; a Span is a stretch of it in bytes; a Diagnostic says what is wrong in a
// span, and what to do. Everything that reads documents reports with these, all mistakes in one pass.
//
// Line and column are made when printing: lines from 1, columns in characters from 1.
package source
