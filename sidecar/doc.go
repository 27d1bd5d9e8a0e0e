// Package sidecar turns the JSON files beside a BOLD run into a checked
// [Acquisition]: what the scanner said about time, slices, phase encoding and
// echoes, in seconds and array axes, each value with the file it came from.
// What is missing, contradictory or doubtful becomes a fault of package fault;
// nothing is ever guessed.
//
// The steps, in order:
//
//  1. [Merge] scans every file strictly (RFC 8259, UTF-8, no key twice), finds
//     fields that can identify a person, and merges root to leaf, the lower file
//     winning key by key (BIDS, "The Inheritance Principle").
//  2. [Document.Acquisition] reads the values it needs with their types, checks
//     them against each other and against the image header, and says which
//     values it used and which stay true of a corrected series.
//
// Properties that tests take one by one:
//
//  1. No input makes the package panic, and every finding is a fault with a
//     declared identifier, the file the value came from, and a remedy.
//  2. The same sources give the same faults in the same order.
//  3. No fault holds a value that can identify a person, nor any text of the
//     file beyond numbers as they stand there, words of closed vocabularies, and
//     keys that look like metadata keys. Other text is described, not shown.
//  4. Used and Carried hold allow-listed keys only, and of those only values of
//     the right type.
//  5. One wrong value draws one fault: a list in milliseconds is not also out of
//     range, and what hangs on a file that could not be read is not complained of.
//
// The package knows neither the dataset's tree nor voxels. References to BIDS
// are to version 1.11.1 of the specification, pages "Common principles" and
// "Magnetic Resonance Imaging".
package sidecar
