//! The exact survey path against a vectorised numpy and scipy script that does the same work, on the same cores:
//! `cargo bench --bench against_numpy`. Needs `python3` with numpy and scipy (`THORNMAP_PYTHON` names another one).
//!
//! Both sides survey the same channels with the same record, window, band and outputs; runs alternate, and a figure is
//! the median of the ratios of paired runs. The levels and noise of both sides are compared channel by channel.

#![allow(clippy::print_stdout, clippy::print_stderr, reason = "a bench prints what it measured")]
#![allow(clippy::unwrap_used, reason = "a bench fails by panicking")]

mod script;
mod survey;

use std::process::ExitCode;
use std::time::Instant;

use script::{Found, Script};
use survey::{Job, Transform};

/// Paired runs of each comparison.
const PAIRS: usize = 7;
/// Channels of one run.
const CHANNELS: usize = 192;
/// Channels of one run on one core beside the bare transform.
const ALONE: usize = 64;
/// Channels, and transforms, in a row.
const TURN: usize = 8;
/// Largest difference of levels and noise between both sides \[dB\]: rounding on levels near −60 dBc, where the
/// strongest bin is some 100 dB higher, stays far below.
const TOLERANCE_DB: f64 = 1e-6;

fn main() -> ExitCode {
    let job = Job::new(CHANNELS);
    println!("{}", job.describe());
    beside_the_transform(&job);
    let mut script = match Script::start(&job) {
        Ok(script) => script,
        Err(reason) => {
            eprintln!("no comparison with numpy: {reason}");
            return ExitCode::from(2);
        }
    };
    println!("\nagainst {} on {} cores, {CHANNELS} channels a run:", script.versions, job.cores());
    let agree = compare_numbers(&job, &mut script);
    for (route, what) in [
        ("output", "script through the divider's outputs"),
        ("residue", "script with the short cut over the third residue"),
    ] {
        let mut ratios = Vec::new();
        let (mut ours, mut theirs) = (Vec::new(), Vec::new());
        for _ in 0..PAIRS {
            let theirs_s = script.time(route);
            let ours_s = seconds(|| drop(job.survey()));
            ratios.push(theirs_s / ours_s);
            ours.push(ours_s);
            theirs.push(theirs_s);
        }
        let per_channel = |times: &mut Vec<f64>| 1e3 * median(times) / CHANNELS as f64;
        println!(
            "  exact path is {:5.1} x the {what} ({:.3} and {:.3} ms a channel; ratios {:.1} … {:.1})",
            median(&mut ratios),
            per_channel(&mut ours),
            per_channel(&mut theirs),
            ratios[0],
            ratios[PAIRS - 1],
        );
    }
    println!(
        "  scipy's real FFT of the record alone takes {:.2} x ours",
        script.transform_s() / Transform::new(&job).shortest_s(30)
    );
    if agree { ExitCode::SUCCESS } else { ExitCode::FAILURE }
}

/// Compares a channel on one core with the bare transform of its record.
fn beside_the_transform(job: &Job) {
    let mut transform = Transform::new(job);
    let mut worker = job.worker();
    let (mut ratios, mut bare) = (Vec::new(), Vec::new());
    for _ in 0..PAIRS {
        // A few of each in turn: what else the machine does falls on both, and each finds its own buffers in the cache.
        let (mut transforms_s, mut channels_s) = (Vec::new(), Vec::new());
        for group in job.channels()[..ALONE].chunks(TURN) {
            transforms_s.extend(group.iter().map(|_| transform.seconds()));
            for channel in group {
                channels_s.push(seconds(|| {
                    std::hint::black_box(job.channel(channel, &mut worker));
                }));
            }
        }
        ratios.push(median(&mut channels_s) / median(&mut transforms_s));
        bare.push(median(&mut transforms_s));
    }
    println!(
        "one channel on one core takes {:.2} x the bare real FFT of its record ({:.3} ms; ratios {:.2} … {:.2})",
        median(&mut ratios),
        1e3 * median(&mut bare),
        ratios[0],
        ratios[PAIRS - 1],
    );
}

/// Prints the largest differences of levels and noise; returns whether they are within the tolerance.
fn compare_numbers(job: &Job, script: &mut Script) -> bool {
    let ours = job.survey();
    let mut agree = true;
    for route in ["output", "residue"] {
        let theirs = script.show(route);
        assert_eq!(ours.len(), theirs.len(), "one result for each channel");
        let (mut worst_db, mut lines) = (0.0f64, 0);
        for (ours, Found { levels, noise_rad }) in ours.iter().zip(&theirs) {
            let known = ours.levels_dbc.iter().flatten().count();
            assert_eq!(known, levels.len(), "the same lines lie in the band");
            for (harmonic, level_dbc) in levels {
                let own = ours.levels_dbc[harmonic - 1].expect("the same lines lie in the band");
                worst_db = worst_db.max((own - level_dbc).abs());
                lines += 1;
            }
            worst_db = worst_db.max(20.0 * (ours.noise_rad / noise_rad).log10().abs());
        }
        assert!(lines > CHANNELS, "only {lines} lines were compared");
        let verdict = if worst_db <= TOLERANCE_DB { "equal" } else { "NOT EQUAL" };
        println!(
            "  {lines} levels and {} noise figures are {verdict} within {TOLERANCE_DB:e} dB ({route}: worst {worst_db:.1e} dB)",
            theirs.len()
        );
        agree &= worst_db <= TOLERANCE_DB;
    }
    agree
}

/// Returns the seconds that something takes.
fn seconds(work: impl FnOnce()) -> f64 {
    let begin = Instant::now();
    work();
    begin.elapsed().as_secs_f64()
}

/// Sorts and returns the middle of an odd number of values.
fn median(values: &mut [f64]) -> f64 {
    values.sort_by(f64::total_cmp);
    values[values.len() / 2]
}
