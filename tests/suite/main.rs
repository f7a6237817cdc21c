//! The one integration binary: each module checks one stage against the outside or end to end.

#![allow(clippy::unwrap_used, reason = "a test fails by panicking")]

mod cli;
mod diffs;
mod examples;
mod exports;
mod identifications;
mod loops;
mod measurements;
mod modulators;
mod outside;
mod plans;
mod reports;
mod spectra;
mod surveys;
mod tree;
mod verdicts;
