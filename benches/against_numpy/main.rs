//! The survey's exact path, and its band path, against a vectorised numpy and scipy script that does the same work, on the same cores:
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
use survey::{Engine, Job, Transform};

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
/// Largest difference between the engines \[dB\].
const BAND_TOLERANCE_DB: f64 = 0.1;
/// Engines and how they are called.
const ENGINES: [(Engine, &str); 2] = [(Engine::Exact, "exact path"), (Engine::Band, "band path ")];

fn main() -> ExitCode {
    let mut job = Job::new(CHANNELS);
    println!("{}", job.describe());
    println!("one channel on one core against the bare real FFT of its record, medians of {PAIRS} paired runs:");
    for (engine, name) in ENGINES {
        job.engine = engine;
        beside_the_transform(&job, name);
    }
    let mut agree = compare_engines(&mut job);
    let mut script = match Script::start(&job) {
        Ok(script) => script,
        Err(reason) => {
            eprintln!("no comparison with numpy: {reason}");
            return ExitCode::from(2);
        }
    };
    println!("\nagainst {} on {} cores, {CHANNELS} channels a run:", script.versions, job.cores());
    job.engine = Engine::Exact;
    agree &= compare_numbers(&job, &mut script);
    for (route, what) in [
        ("output", "script through the divider's outputs"),
        ("residue", "script with the short cut over the third residue"),
    ] {
        for (engine, name) in ENGINES {
            job.engine = engine;
            beside_the_script(&job, name, &mut script, (route, what));
        }
    }
    let ratio = script.transform_s() / Transform::new(&job).shortest_s(30);
    println!("  scipy's real FFT of the record alone takes {ratio:.2} x ours");
    if agree { ExitCode::SUCCESS } else { ExitCode::FAILURE }
}

/// Compares surveys on all cores with those of the script.
fn beside_the_script(job: &Job, name: &str, script: &mut Script, (route, what): (&str, &str)) {
    let (mut ratios, mut ours, mut theirs) = (Vec::new(), Vec::new(), Vec::new());
    for _ in 0..PAIRS {
        let theirs_s = script.time(route);
        let ours_s = seconds(|| drop(job.survey()));
        ratios.push(theirs_s / ours_s);
        ours.push(1e3 * ours_s / CHANNELS as f64);
        theirs.push(1e3 * theirs_s / CHANNELS as f64);
    }
    println!(
        "  {name} is {:5.1} x the {what} ({:.3} and {:.3} ms a channel; ratios {:.1} … {:.1})",
        median(&mut ratios),
        median(&mut ours),
        median(&mut theirs),
        ratios[0],
        ratios[PAIRS - 1],
    );
}

/// Compares a channel on one core with the bare transform of its record.
fn beside_the_transform(job: &Job, name: &str) {
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
        "  {name} takes {:.2} x the transform ({:.3} ms; ratios {:.2} … {:.2})",
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

/// Prints the largest differences between the engines; returns whether they are within the tolerance.
fn compare_engines(job: &mut Job) -> bool {
    job.engine = Engine::Exact;
    let exact = job.survey();
    job.engine = Engine::Band;
    let (mut worst_db, mut worst_noise_db, mut lines) = (0.0f64, 0.0f64, 0);
    for (exact, band) in exact.iter().zip(job.survey()) {
        // A line below the noise in its own width is noise: a reading nobody relies on.
        let least_dbc = job.noise_of_a_line_dbc(exact.noise_rad);
        let levels = exact.levels_dbc.iter().flatten().zip(band.levels_dbc.iter().flatten());
        for (exact, band) in levels.filter(|(exact, _)| **exact > least_dbc) {
            worst_db = worst_db.max((exact - band).abs());
            lines += 1;
        }
        worst_noise_db = worst_noise_db.max(20.0 * (exact.noise_rad / band.noise_rad).log10().abs());
    }
    assert!(lines > CHANNELS, "only {lines} lines were compared");
    let agree = worst_db.max(worst_noise_db) <= BAND_TOLERANCE_DB;
    let verdict = if agree { "agree" } else { "DO NOT AGREE" };
    println!(
        "  both {verdict} within {BAND_TOLERANCE_DB} dB: {lines} levels above their noise {worst_db:.4} dB, noise {worst_noise_db:.4} dB at worst"
    );
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
