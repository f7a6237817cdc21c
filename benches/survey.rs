//! Whole surveys and the rows they write: `cargo bench --bench survey`.

use std::hint::black_box;

use divan::Bencher;
use divan::counter::ItemsCount;
use thornmap::assess::{AssessError, ChannelResult};
use thornmap::plan::{Plan, demo_plan, parse_plan};
use thornmap::report::{ChannelRows, Detail, RenderOptions, channels_csv, render};
use thornmap::survey::{Keep, Steps, SurveyResult, survey, survey_in_blocks};

fn main() {
    divan::main();
}

/// Returns the demonstration plan with a raster of about so many channels.
fn plan_of(channels: u64) -> Plan {
    let text = include_str!("../configs/demo.toml");
    let head = &text[..text.find("[[channels]]").expect("the plan has channels")];
    let spacing_hz = 21_000_000 / channels;
    let group =
        format!("[[channels]]\nfirst = \"422 MHz\"\nlast = \"443 MHz\"\nspacing = \"{spacing_hz} Hz\"\noutput = [4]\n");
    parse_plan(&format!("{head}{group}"), "dense", &|_| Err("no file".to_owned())).expect("a valid plan")
}

fn surveyed(channels: u64) -> SurveyResult {
    survey(&plan_of(channels), &|_| {}).expect("a plan with legal channels")
}

#[divan::bench]
fn demonstration(bencher: Bencher) {
    let plan = demo_plan();
    bencher.bench_local(|| survey(black_box(&plan), &|_| {}).expect("a plan with legal channels").summary.bad);
}

/// Nothing is kept and nothing written: what the channels themselves cost, with the run's own checks.
#[divan::bench(args = [1_000, 10_000, 100_000], sample_count = 3, sample_size = 1)]
fn channels(bencher: Bencher, count: u64) {
    let plan = plan_of(count);
    let steps = Steps { render: &|_: &[ChannelResult]| Ok::<(), AssessError>(()), done: &|_| {} };
    bencher.counter(ItemsCount::new(count)).bench_local(|| {
        survey_in_blocks(black_box(&plan), Keep::WorstAndSample, &steps, &mut |()| Ok(()))
            .map(|found| found.summary.bad)
    });
}

#[divan::bench]
fn rows_of_csv(bencher: Bencher) {
    let result = surveyed(1_000);
    bencher
        .counter(ItemsCount::new(result.channels.len()))
        .bench_local(|| channels_csv(black_box(&result.channels)).expect("finite figures").len());
}

#[divan::bench(args = [Detail::All, Detail::Flagged])]
fn rows_of_both(bencher: Bencher, detail: Detail) {
    let result = surveyed(1_000);
    bencher.counter(ItemsCount::new(result.channels.len())).bench_local(|| {
        ChannelRows::new(black_box(&result.channels), &RenderOptions { detail, ..RenderOptions::default() })
            .expect("finite figures")
    });
}

#[divan::bench(sample_count = 10)]
fn report_set(bencher: Bencher) {
    let result = surveyed(1_000);
    bencher.bench_local(|| render(black_box(&result), &RenderOptions::default()).expect("finite figures").files.len());
}
