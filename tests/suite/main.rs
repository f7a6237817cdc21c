//! The one integration binary: each module checks one stage against the outside or end to end.

#![allow(clippy::unwrap_used, reason = "a test fails by panicking")]

mod beats;
mod calibrations;
mod cli;
mod comparisons;
mod diffs;
mod examples;
mod exports;
mod identifications;
mod loops;
mod measurements;
mod modulators;
mod outside;
mod plans;
mod remedies;
mod reports;
mod sequences;
mod simulations;
mod spectra;
mod surveys;
mod tree;
mod tuned;
mod verdicts;
mod victims;
