// Package ingest holds what comes in: records, in the one order that every
// later stage computes in, and samples, the values decoded from a message.
//
// A record is everything a step of the computation may depend on. Records are
// numbered by one sequencer without holes; stepping through them in that order
// gives the same outcomes every time. This package knows bytes and readings
// only: units, calibration and physics belong to later stages.
package ingest
