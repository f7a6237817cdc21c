//! The one integration binary: each module checks one stage against the outside or end to end.

mod cli;
mod loops;
mod modulators;
mod outside;
mod plans;
mod reports;
mod spectra;
mod surveys;
mod tree;
mod verdicts;
