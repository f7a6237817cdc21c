//! What one channel costs, with the plan's tables and without: `cargo bench --bench channel`.

use std::hint::black_box;

use divan::Bencher;
use divan::counter::ItemsCount;
use thornmap::assess::{Setup, place};
use thornmap::plan::{Plan, demo_plan, parse_plan};

fn main() {
    divan::main();
}

/// Channels in one call.
const COUNT: u64 = 64;

/// Returns the demonstration plan with a raster that no small fraction meets.
fn dense_plan() -> Plan {
    let text = include_str!("../configs/demo.toml");
    let head = &text[..text.find("[[channels]]").expect("the plan has channels")];
    let group = "[[channels]]\nfirst = \"422 MHz\"\nlast = \"443 MHz\"\nspacing = \"9137 Hz\"\noutput = [4]\n";
    parse_plan(&format!("{head}{group}"), "dense", &|_| Err("no file".to_owned())).expect("a valid plan")
}

fn assess(bencher: Bencher, setup: &Setup) {
    let mut scratch = setup.scratch();
    bencher.counter(ItemsCount::new(COUNT)).bench_local(|| {
        (0..COUNT)
            .map(|index| setup.assess_index(0, black_box(index), &mut scratch).expect("a legal channel").tones.len())
            .sum::<usize>()
    });
}

#[divan::bench]
fn direct(bencher: Bencher) {
    let plan = dense_plan();
    assess(bencher, &Setup::new(&plan).expect("a plan with legal channels"));
}

#[divan::bench]
fn tabulated(bencher: Bencher) {
    let plan = dense_plan();
    assess(bencher, &Setup::new(&plan).expect("a plan with legal channels").tabulated());
}

#[divan::bench]
fn tables(bencher: Bencher) {
    let plan = demo_plan();
    bencher.bench_local(|| Setup::new(black_box(&plan)).expect("a plan with legal channels").tabulated());
}

#[divan::bench]
fn placement(bencher: Bencher) {
    let plan = dense_plan();
    let group = &plan.groups[0];
    bencher.counter(ItemsCount::new(COUNT)).bench_local(|| {
        (0..COUNT)
            .map(|index| {
                let channel = group.channels.get(black_box(index)).expect("a channel of the raster");
                place(&plan, group, channel).expect("a channel with a word").word.k
            })
            .fold(0, u64::wrapping_add)
    });
}
