//! Remedies: counts of an independent script, exhaustive search, enumeration, cures assessed again.

#![allow(clippy::cast_possible_truncation, clippy::cast_sign_loss, reason = "random shapes of small plans")]

use std::time::Instant;

use rand::rngs::StdRng;
use rand::{RngExt, SeedableRng};
use thornmap::assess::{Setup, Verdict};
use thornmap::base::Frequency;
use thornmap::decide::remedy::{
    Change, Costs, Criterion, Positions, Proof, Standing, edges_hz, fewest_switches, hunt, intervals, remedy,
    smallest_cover, smallest_set, switches,
};
use thornmap::plan::{Plan, demo_plan, parse_dense_plan, parse_plan};

/// The parts of a plan that matter to positions.
struct Shape<'a> {
    reference: &'a str,
    range: &'a str,
    dividers: &'a str,
    modulator: &'a str,
    guard: &'a str,
    largest_q: u64,
    channels: &'a str,
    more: &'a str,
}

const WIDE: Shape = Shape {
    reference: "frequency = \"19.2 MHz\"",
    range: "[\"100 MHz\", \"8 GHz\"]",
    dividers: "minimum = 10\noutput = [4]",
    modulator: "modulus = { step = \"12.5 kHz\" }",
    guard: "200 kHz",
    largest_q: 1,
    channels: "first = \"400 MHz\"\nlast = \"470 MHz\"\nspacing = \"12.5 kHz\"",
    more: "[alternatives]\nreferences = [\"19.2 MHz\", \"20 MHz\"]",
};

fn text(shape: &Shape) -> String {
    let Shape { reference, range, dividers, modulator, guard, largest_q, channels, more } = shape;
    format!(
        "schema = 1\n[reference]\n{reference}\n[oscillator]\nrange = {range}\ngain = \"30 MHz/V\"\n[divider]\n{dividers}\n\
         [modulator]\n{modulator}\n[detector]\ncurrent = \"2 mA\"\n[loop]\nbandwidth = \"60 kHz\"\nphase_margin = \"50 deg\"\n\
         [boundary]\nguard = \"{guard}\"\nlargest_q = {largest_q}\n[[channels]]\n{channels}\n{more}\n"
    )
}

fn plan(shape: &Shape) -> Plan {
    let text = text(shape);
    parse_plan(&text, "remedy", &|_| Err("none".to_owned())).unwrap_or_else(|problems| panic!("{problems:?}\n{text}"))
}

#[test]
fn near_integer_counts_and_sets_equal_an_independent_script() {
    // Counted by an independent script with exact fractions.
    let cases = [
        (4, "200 kHz", [112, 112], 0),
        (4, "199.999 kHz", [84, 84], 0),
        (8, "200 kHz", [116, 112], 4),
        (8, "199.999 kHz", [58, 56], 2),
    ];
    for (divider, guard, bad, both) in cases {
        let dividers = format!("minimum = 10\noutput = [{divider}]");
        let plan = plan(&Shape { guard, dividers: &dividers, ..WIDE });
        let board = Setup::new(&plan).unwrap();
        let set = smallest_set(&plan, &board, &Costs::default(), Criterion::Guard, &|| {}).unwrap();
        let found: Vec<u64> = set.tried.iter().map(|tried| tried.bad).collect();
        assert_eq!(found, bad, "P = {divider}, guard {guard}");
        assert_eq!(set.cover.beyond.len(), both, "P = {divider}, guard {guard}");
        // Both are needed: one channel forces each.
        assert_eq!(set.cover.members, [0, 1]);
        assert_eq!(set.cover.forced_by.len(), 2);
        assert!(matches!(&set.cover.proof, Proof::Apart { channels } if channels.len() == 2), "{:?}", set.cover.proof);
        let covered: u64 = set.map.iter().map(|run| run.last_index - run.first_index + 1).sum();
        assert_eq!(covered, 5601);
        let unserved: u64 =
            set.map.iter().filter(|run| run.setting.is_none()).map(|run| run.last_index - run.first_index + 1).sum();
        assert_eq!(unserved, both as u64);
        assert!(set.switches <= set.switches_first_served && set.switches > 0);
    }
}

/// Returns a random plan on a raster.
fn random_plan(random: &mut StdRng, most_channels: u64, more: &str) -> Plan {
    let reference_khz = random.random_range(8_000..60_000u64);
    let divider = [1u64, 2, 4, 8][random.random_range(0..4usize)];
    let spacings = ["1 kHz", "12.5 kHz", "25/3 kHz", "5 kHz", "6.25 kHz", "30 Hz", "100 kHz"];
    let spacing = spacings[random.random_range(0..spacings.len())];
    let step: f64 =
        [1e3, 12.5e3, 25e3 / 3.0, 5e3, 6.25e3, 30.0, 1e5][spacings.iter().position(|other| *other == spacing).unwrap()];
    let first_khz = random.random_range(100_000..1_000_000u64);
    let count = random.random_range(2..most_channels.min((200e6 / step) as u64 + 3));
    let last_khz = first_khz + (step * count as f64 / 1e3) as u64 + 1;
    let moduli =
        ["modulus = \"2^24\"", "modulus = 4095", "modulus = \"2^18\"\norder = 2", "modulus = 999983\norder = 4"];
    let low_mhz = divider * first_khz / 1000 + random.random_range(0..10u64);
    let high_mhz = (divider * last_khz / 1000 + 1).saturating_sub(random.random_range(0..3u64));
    let guard_hz = random.random_range(1_000..400_000u64);
    let reference = format!("frequency = \"{reference_khz} kHz\"\ndivider = {}", random.random_range(1..3u64));
    let range = format!("[\"{low_mhz} MHz\", \"{} MHz\"]", high_mhz.max(low_mhz + 1));
    let dividers = format!("minimum = {}\noutput = [{divider}, {}]", random.random_range(1..30u64), 2 * divider);
    let channels = format!(
        "first = \"{first_khz} kHz\"\nlast = \"{last_khz} kHz\"\nspacing = \"{spacing}\"\ninjection = \"-10.7 kHz\""
    );
    plan(&Shape {
        reference: &reference,
        range: &range,
        dividers: &dividers,
        modulator: moduli[random.random_range(0..moduli.len())],
        guard: &format!("{guard_hz} Hz"),
        largest_q: random.random_range(1..6u64),
        channels: &channels,
        more,
    })
}

#[test]
fn whole_number_positions_equal_placing_each_channel_in_exact_rationals() {
    let mut random = StdRng::seed_from_u64(11);
    let (mut plans, mut channels, mut near, mut illegal) = (0, 0, 0, 0);
    while plans < 60 {
        let plan = random_plan(&mut random, 3000, "");
        let Ok(board) = Setup::new(&plan) else { continue };
        let positions = Positions::new(&plan, &board).unwrap();
        for index in 0..plan.groups[0].channels.len() {
            let fast = positions.standing(0, index).unwrap();
            assert_eq!(
                fast,
                positions.by_placing(0, index).unwrap(),
                "{:?} {index}",
                plan.groups[0].channels.get(index)
            );
            near += u64::from(matches!(fast, Standing::Near { .. }));
            illegal += u64::from(fast == Standing::Illegal);
            channels += 1;
        }
        plans += 1;
    }
    assert!(channels > 20_000 && near > 500 && illegal > 500, "{channels} channels, {near} near, {illegal} illegal");
}

#[test]
fn positions_agree_with_the_survey() {
    // Guard by position against the boundaries that a full assessment lists.
    let plan = plan(&Shape {
        channels: "first = \"400 MHz\"\nlast = \"410 MHz\"\nspacing = \"12.5 kHz\"",
        largest_q: 3,
        more: "[analysis]\nrecord = 1024",
        ..WIDE
    });
    let board = Setup::new(&plan).unwrap();
    let positions = Positions::new(&plan, &board).unwrap();
    let mut scratch = board.scratch();
    let mut near = 0;
    for index in 0..plan.groups[0].channels.len() {
        let channel = board.assess_index(0, index, &mut scratch).unwrap();
        let inside = channel.boundaries.iter().any(|b| b.family == "comparison" && b.inside_guard);
        assert_eq!(positions.standing(0, index).unwrap() != Standing::Free, inside, "{}", channel.channel);
        near += u64::from(inside);
    }
    assert!(near > 30, "{near}");
}

#[test]
fn intervals_equal_enumeration() {
    let mut random = StdRng::seed_from_u64(12);
    let (mut plans, mut lost, mut illegal) = (0, 0, 0);
    while plans < 100 {
        let most = if plans < 5 { 100_000 } else { 4000 };
        let plan = random_plan(&mut random, most, "");
        let Ok(board) = Setup::new(&plan) else { continue };
        let positions = Positions::new(&plan, &board).unwrap();
        let found = intervals(&plan).unwrap().remove(0);
        let mut near_by_index = vec![false; plan.groups[0].channels.len() as usize];
        for interval in &found.intervals {
            for index in interval.first_index..=interval.last_index {
                near_by_index[index as usize] = true;
            }
        }
        let mut counts = (0, 0);
        for (index, is_near) in near_by_index.iter().enumerate() {
            let standing = positions.standing(0, index as u64).unwrap();
            assert_eq!(*is_near, matches!(standing, Standing::Near { .. }), "channel {index}");
            counts.0 += u64::from(standing == Standing::Illegal);
            counts.1 += u64::from(*is_near);
        }
        assert_eq!((found.illegal, found.near), counts);
        let share = (counts.0 + counts.1) as f64 / near_by_index.len() as f64;
        assert!((found.share - share).abs() < 1e-12);
        illegal += counts.0;
        lost += counts.1;
        plans += 1;
    }
    assert!(lost > 1000 && illegal > 1000, "{lost} {illegal}");
}

#[test]
fn a_six_gigahertz_generator_in_one_hertz_steps_answers_at_once() {
    let text = text(&Shape {
        reference: "frequency = \"100 MHz\"",
        range: "[\"3 GHz\", \"6 GHz\"]",
        dividers: "minimum = 20\noutput = [1, 2, 4, 8, 16]",
        modulator: "modulus = { step = \"1 Hz\" }",
        guard: "50 kHz",
        largest_q: 4,
        channels: "first = \"200 MHz\"\nlast = \"6 GHz\"\nspacing = \"1 Hz\"",
        more: "",
    });
    assert!(parse_plan(&text, "wide", &|_| Err("none".to_owned())).is_err(), "never enumerated");
    let plan = parse_dense_plan(&text, "wide", &|_| Err("none".to_owned())).unwrap();
    let started = Instant::now();
    let found = intervals(&plan).unwrap().remove(0);
    let seconds = started.elapsed().as_secs_f64();
    assert!(seconds < 1.0, "{seconds} s");
    assert_eq!((found.channels, found.illegal), (5_800_000_001, 0));
    // At P = 1 an interval at p/q is 2·guard/q wide, at P it is narrower by P, but for the exact channel.
    let integer = found.intervals.iter().filter(|i| i.q == 1 && i.output_divider == 1 && i.p == 40);
    let [below, above] = integer.collect::<Vec<_>>()[..] else { panic!("one interval each side") };
    assert_eq!((below.channels(), above.channels()), (50_000, 50_000));
    assert_eq!(below.last.to_f64_hz(), 3_999_999_999.0);
    // The closed form's edges hold the outermost channels.
    let guard = Frequency::from_whole_hz(50_000);
    let mut checked = 0;
    for interval in &found.intervals {
        let pfd = Frequency::from_whole_hz(100_000_000);
        let (low, high) = edges_hz(interval.p, interval.q, pfd, guard, interval.output_divider).unwrap();
        // A word is at most f_pfd/(2M·P) from the request.
        assert!(interval.first.to_f64_hz() >= low.to_f64() - 0.02 && interval.last.to_f64_hz() <= high.to_f64() + 0.02);
        checked += 1;
    }
    assert!(checked > 500, "{checked}");
}

#[test]
fn the_set_finder_equals_exhaustive_search_on_random_plans() {
    let mut random = StdRng::seed_from_u64(13);
    let (mut plans, mut sizes) = (0, [0; 8]);
    while plans < 200 {
        let references: Vec<String> =
            (0..random.random_range(1..4)).map(|_| format!("\"{} kHz\"", random.random_range(9_000..50_000))).collect();
        let more = format!("[alternatives]\nreferences = [{}]\ndividers = [1, 2]", references.join(", "));
        let plan = random_plan(&mut random, 120, &more);
        let Ok(board) = Setup::new(&plan) else { continue };
        let set = smallest_set(&plan, &board, &Costs::default(), Criterion::Guard, &|| {}).unwrap();
        // Every channel against every setting by exact rationals, every subset of settings tried.
        let mut serves = vec![0u64; plan.groups[0].channels.len() as usize];
        for (s, tried) in set.tried.iter().enumerate() {
            let candidate = tried.setting.applied(&plan);
            let positions = Positions::new(&candidate, &board).unwrap();
            for (index, need) in serves.iter_mut().enumerate() {
                *need |= u64::from(positions.by_placing(0, index as u64).unwrap() == Standing::Free) << s;
            }
        }
        let beyond = serves.iter().filter(|need| **need == 0).count();
        let smallest = (0u64..1 << set.tried.len())
            .filter(|subset| serves.iter().all(|need| *need == 0 || need & subset != 0))
            .map(u64::count_ones)
            .min()
            .unwrap();
        assert_eq!((set.cover.members.len(), set.cover.beyond.len()), (smallest as usize, beyond));
        let chosen = set.cover.members.iter().fold(0u64, |set, s| set | 1 << s);
        assert!(serves.iter().all(|need| *need == 0 || need & chosen != 0));
        sizes[smallest as usize] += 1;
        plans += 1;
    }
    assert!(sizes[1] > 20 && sizes[2] > 20, "{sizes:?}");
}

#[test]
fn hard_covers_and_maps_equal_exhaustive_search() {
    let mut random = StdRng::seed_from_u64(14);
    let (mut searched, mut apart) = (0, 0);
    for _ in 0..300 {
        let settings = random.random_range(2..9usize);
        let density = random.random_range(0.2..0.7);
        let serves: Vec<u64> = (0..random.random_range(1..25))
            .map(|_| (0..settings).map(|s| u64::from(random.random_bool(density)) << s).sum())
            .collect();
        let cost: Vec<f64> = (0..settings).map(|_| f64::from(random.random_range(0..5u8))).collect();
        let cover = smallest_cover(&serves, &cost);
        let is_cover = |subset: u64| serves.iter().all(|need| *need == 0 || need & subset != 0);
        let price = |subset: u64| -> f64 { (0..settings).filter(|s| subset >> s & 1 == 1).map(|s| cost[s]).sum() };
        let best = (0u64..1 << settings)
            .filter(|subset| is_cover(*subset))
            .min_by(|a, b| a.count_ones().cmp(&b.count_ones()).then(price(*a).total_cmp(&price(*b))))
            .unwrap();
        let chosen = cover.members.iter().fold(0u64, |set, s| set | 1 << s);
        assert!(is_cover(chosen));
        assert_eq!(chosen.count_ones(), best.count_ones());
        assert!((price(chosen) - price(best)).abs() < 1e-12, "cheapest among the smallest");
        assert_eq!(cover.forced_by.len(), cover.members.len());
        match &cover.proof {
            Proof::Apart { channels } => {
                assert_eq!(channels.len(), cover.members.len());
                for (i, a) in channels.iter().enumerate() {
                    assert!(channels[..i].iter().all(|b| serves[*a] & serves[*b] == 0));
                }
                apart += 1;
            }
            Proof::Search { branches } => {
                assert!(*branches > 0);
                searched += 1;
            }
        }
        // Fewest switches against dynamic programming over the served channels.
        let map = fewest_switches(&serves, &cover.members, &cost);
        let served: Vec<u64> = serves.iter().map(|need| need & chosen).filter(|need| *need != 0).collect();
        let mut least = vec![usize::MAX; settings];
        for (i, need) in served.iter().enumerate() {
            let cheapest = least.iter().min().copied().unwrap();
            least = (0..settings)
                .map(|s| match (need >> s & 1 == 1, i) {
                    (false, _) => usize::MAX,
                    (true, 0) => 0,
                    (true, _) => least[s].min(cheapest.saturating_add(1)),
                })
                .collect();
        }
        let fewest = least.into_iter().min().filter(|_| !served.is_empty()).unwrap_or(0);
        assert_eq!(switches(&map), fewest);
        for (need, place) in serves.iter().zip(&map) {
            match place {
                Some(s) => assert!(need >> s & 1 == 1 && chosen >> s & 1 == 1),
                None => assert_eq!(need & chosen, 0),
            }
        }
    }
    assert!(searched > 20 && apart > 20, "{searched} by search, {apart} apart");
}

#[test]
fn a_hunt_counts_what_single_plans_count() {
    let plan = plan(&Shape { largest_q: 2, ..WIDE });
    let board = Setup::new(&plan).unwrap();
    let references: Vec<Frequency> = (10..40).map(|mhz| Frequency::from_whole_hz(mhz * 1_000_000)).collect();
    let ranked = hunt(&plan, &board, &references, &|| {}).unwrap();
    assert_eq!(ranked.len(), 30);
    for pair in ranked.windows(2) {
        assert!(pair[0].bad.unwrap_or(u64::MAX) <= pair[1].bad.unwrap_or(u64::MAX));
    }
    let mut checked = 0;
    for hunted in ranked.iter().filter(|hunted| hunted.bad.is_some()).take(3) {
        let own = hunted.setting.applied(&plan);
        let positions = Positions::new(&own, &board).unwrap();
        let bad = (0..own.groups[0].channels.len())
            .filter(|index| positions.by_placing(0, *index).unwrap() != Standing::Free)
            .count();
        assert_eq!(hunted.bad, Some(bad as u64));
        let ratio_db = 10.0 * (19.2e6 / hunted.setting.reference.to_f64_hz()).log10();
        assert!((hunted.noise_penalty_db - ratio_db).abs() < 1e-9);
        checked += 1;
    }
    assert_eq!(checked, 3);
}

#[test]
fn every_cure_assessed_again_keeps_its_promise() {
    let mut plan = demo_plan();
    plan.alternatives.nudge = Frequency::from_whole_hz(30_000);
    plan.alternatives.offset_currents_a = vec![60e-6];
    plan.alternatives.seeds = vec![12_345];
    plan.analysis.record = 8192;
    let board = Setup::new(&plan).unwrap();
    let found = remedy(&plan, &Costs::default(), Criterion::Guard, &|| {}).unwrap();
    assert_eq!(found.channels.len(), 30, "every flagged channel of the demonstration plan");
    let mut cured = 0;
    let mut kinds = std::collections::BTreeSet::new();
    for channel in &found.channels {
        let before = &channel.before;
        for (i, cure) in channel.cures.iter().enumerate() {
            assert!(cure.after.verdict < before.verdict);
            if i > 0 {
                assert!(channel.cures[i - 1].cost <= cure.cost);
            }
            // The whole plan changed, on the same board; the channel picked out of it.
            let changed = cure.changes.iter().fold(plan.clone(), |plan, change| change.applied(&plan));
            let setup = board.on_same_board(&changed).unwrap();
            let shift = cure.changes.iter().find_map(|change| match change {
                Change::Nudge(shift) => Some(shift.hz()),
                _ => None,
            });
            let moved =
                shift.map_or(before.channel, |shift| Frequency::from_hz(before.channel.hz().plus(&shift).unwrap()));
            let again = setup.assess(before.group_index, before.index, moved, &mut setup.scratch()).unwrap();
            assert_eq!(again.verdict, cure.after.verdict, "{} {}", before.channel, cure.words());
            assert_eq!((again.n, again.k, again.m), (cure.after.n, cure.after.k, cure.after.m));
            kinds.extend(cure.changes.iter().map(|change| change.kind(&plan)));
            cured += 1;
        }
    }
    assert!(cured > 60, "{cured}");
    assert!(kinds.len() >= 4, "{kinds:?}");
    let without = found.channels.iter().filter(|channel| channel.cures.is_empty()).count();
    let still_bad = found.channels.iter().filter(|c| c.cures.is_empty() && c.before.verdict == Verdict::Bad).count();
    assert!(without < 5 && still_bad < 3, "{without} without a cure, {still_bad} of them bad");
}

#[test]
fn the_command_writes_cures_and_explains_itself() {
    let folder = tempfile::TempDir::new().unwrap();
    let small = text(&Shape {
        channels: "first = \"432 MHz\"\nlast = \"432.2 MHz\"\nspacing = \"12.5 kHz\"",
        more: "[alternatives]\nreferences = [\"20 MHz\"]\n[analysis]\nrecord = 1024",
        ..WIDE
    });
    std::fs::write(folder.path().join("small.toml"), small).unwrap();
    let run = |arguments: &[&str]| {
        assert_cmd::Command::cargo_bin("thornmap").unwrap().current_dir(folder.path()).args(arguments).output().unwrap()
    };
    // 432 MHz = 90 × 19.2 MHz / 4 exactly: clear; the next four are 50 to 200 kHz away. 20 MHz cures three; the second
    // has K/M = 81/200 there, a period so short that a line of unknown level lies inside the guard: it stays bad.
    let output = run(&["remedy", "small.toml", "--json", "--quiet", "--fail-on", "bad"]);
    assert_eq!(output.status.code(), Some(3), "{}", String::from_utf8_lossy(&output.stderr));
    let json: serde_json::Value = serde_json::from_slice(&output.stdout).unwrap();
    assert_eq!(json["schema"], "thornmap.remedy/1");
    let channels = json["channels"].as_array().unwrap();
    let flagged: Vec<&str> = channels.iter().map(|channel| channel["channel_exact"].as_str().unwrap()).collect();
    assert_eq!(flagged, ["432012500 Hz", "432025000 Hz", "432037500 Hz", "432050000 Hz"]);
    assert_eq!(channels[1]["cures"].as_array().unwrap().len(), 0);
    assert_eq!(json["set"]["cover"]["beyond"].as_array().unwrap().len(), 1);
    for channel in [&channels[0], &channels[2], &channels[3]] {
        assert_eq!(channel["cures"][0]["verdict"], "clear");
        assert_eq!(channel["cures"][0]["pfd_hz"], 20e6);
        assert_eq!(channel["cures"][0]["cost"], 20.0);
    }
    let set = folder.path().join("reports/small");
    assert_eq!(std::fs::read(set.join("remedy.json")).unwrap(), output.stdout);
    let page = std::fs::read_to_string(set.join("remedy.html")).unwrap();
    assert!(page.contains("Of 4 bad and marginal channels 3 have a cure"), "{page}");
    assert_eq!(std::fs::read_to_string(set.join("remedy.csv")).unwrap().lines().count(), 5);
    // A cost of one's own, a hunt, intervals.
    let output = run(&["remedy", "small.toml", "--cost", "reference=3", "--json", "--quiet"]);
    let json: serde_json::Value = serde_json::from_slice(&output.stdout).unwrap();
    assert_eq!(json["channels"][0]["cures"][0]["cost"], 3.0);
    let output = run(&["remedy", "small.toml", "--hunt", "19.2 MHz, 20 MHz", "--json", "--quiet"]);
    let json: serde_json::Value = serde_json::from_slice(&output.stdout).unwrap();
    assert_eq!((json["ranked"][0]["bad"].as_u64(), json["ranked"][1]["bad"].as_u64()), (Some(0), Some(4)));
    let output = run(&["remedy", "small.toml", "--intervals", "--json"]);
    let json: serde_json::Value = serde_json::from_slice(&output.stdout).unwrap();
    assert_eq!(json["groups"][0]["near"], 4);
    assert_eq!(json["groups"][0]["intervals"][0]["first_exact"], "432012500 Hz");
    for (arguments, said) in [
        (vec!["--cost", "luck=1"], "one of seed, dither"),
        (vec!["--cost", "order=-1"], "at least 0"),
        (vec!["--hunt", "10 MHz..52 MHz"], "needs --step"),
        (vec!["--hunt", "52 MHz..10 MHz", "--step", "1 MHz"], "rising"),
        (vec!["--hunt", "10..52 MHz", "--step", "1 MHz"], "unit"),
        (vec!["--hunt", "10 MHz..52 MHz", "--step", "0 Hz"], "above zero"),
        (vec!["--step", "1 MHz"], "--hunt"),
    ] {
        let mut all = vec!["remedy", "small.toml"];
        all.extend(arguments);
        let output = run(&all);
        let message = String::from_utf8_lossy(&output.stderr).into_owned();
        assert_eq!(output.status.code(), Some(2), "{message}");
        assert!(message.contains(said), "{message}");
    }
}
