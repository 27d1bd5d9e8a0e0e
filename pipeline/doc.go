// Package pipeline turns a raw dataset into steady series: it settles what is to
// be done to each run, does it, publishes the files, and says how it ended.
//
// The steps, and the function that starts each:
//
//  1. [Settings] are the choices that can change an output byte. They are
//     declared once, in [Choices]; command-line options, the --settings file,
//     the record and the tests are derived from that declaration.
//  2. [Survey] reads headers and sidecars and makes one [Plan] a run: inputs,
//     acquisition, faults, output names, estimated memory. Everything else
//     starts from plans, so that what is announced and what is done cannot differ.
//  3. [Steady] groups the plans into units (the echoes of one acquisition),
//     admits units within a memory budget, and runs them in parallel. A unit
//     that fails stops no other.
//  4. Within a unit, motion is estimated on the raw series of the shortest
//     echo (temporal interpolation first would spread a sudden movement over
//     its neighbours and understate it: Power et al. 2017, PLoS ONE 12(9):
//     e0182939), and applied afterwards, once.
//  5. Files are written under hidden names beside their final ones, synced, and
//     renamed together, the record last. A record that exists is a run that
//     is complete.
//  6. [ExitCode] turns typed errors and outcomes into the program's exit status,
//     in one place.
//
// Nothing here depends on how many workers or jobs there are, on the clock or on
// the machine, except the log part of a record.
//
// The package computes no voxel value itself; it hands arrays to slicetime,
// realign and quality. Its Go API may change; the command line and the files
// are what is promised.
package pipeline
