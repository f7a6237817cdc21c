//! Every form of a value, exactness, files, and finding a frequency.

use std::fs;

use thornmap::base::{Basis, Exact, Frequency};
use thornmap::modulator::{Dither, ModulusRule, Structure};
use thornmap::plan::{
    AnchorPlace, ChannelList, Colour, Gain, Guard, LoopEdge, LoopPlan, MismatchPoints, OscillatorNoise, PlanFailure,
    demo_plan, example_plan, read_plan_file, render_problems,
};

use super::{PLAIN, changed, read, valid};

fn hz(numerator: i128, denominator: i128) -> Frequency {
    Frequency::from_hz(Exact::new(numerator, denominator).expect("the cases have a denominator"))
}

#[test]
fn every_form_of_the_modulator_is_read() {
    let rule =
        |modulus: &str| valid(&changed("order = 3", &format!("order = 3\nmodulus = {modulus}"))).modulator.modulus;
    assert!(matches!(rule("4095"), ModulusRule::Fixed(modulus) if modulus.get() == 4095));
    assert!(matches!(rule("\"2^20\""), ModulusRule::Fixed(modulus) if modulus.get() == 1 << 20));
    assert!(matches!(rule("{ largest = 4095 }"), ModulusRule::Largest(modulus) if modulus.get() == 4095));
    assert!(matches!(rule("{ step = \"25/3 kHz\" }"), ModulusRule::Step(step) if step == hz(25_000, 3)));
    assert!(matches!(rule("{ value = \"2^48\", basis = \"datasheet\" }"), ModulusRule::Fixed(m) if m.get() == 1 << 48));
    let dithered = valid(&changed("order = 3", "order = 3\ndither = { stage = 2, register = 23 }"));
    let want = Dither::Register { stage: 2, register: 23, seed: 1, weight: 1 };
    assert_eq!(dithered.modulator.settings.dither, want);
    assert!(dithered.assumptions.iter().any(|a| a.key == "modulator.dither.seed" && a.basis == Basis::Default));
    let structures = [
        ("structure = \"integer\"", Structure::Integer, 0),
        ("structure = \"prime-mash\"\norder = 2", Structure::PrimeMash, 2),
        ("structure = \"output-fed\"\norder = 5", Structure::OutputFed, 5),
        ("structure = \"error-feedback\"\norder = 2\nntf = [2, -1]", Structure::ErrorFeedback, 2),
        ("structure = \"error-feedback\"\norder = 4", Structure::ErrorFeedback, 4),
    ];
    for (text, structure, order) in structures {
        let settings = valid(&changed("order = 3", text)).modulator.settings;
        assert_eq!((settings.structure, settings.order), (structure, order), "{text}");
    }
}

#[test]
fn fewer_seeds_than_stages_stand_and_a_free_modulus_takes_any() {
    let seeds = |text: &str| valid(&changed("order = 3", text)).modulator.settings.seeds;
    assert_eq!(seeds("order = 3\nseeds = [5]"), [5]);
    assert_eq!(seeds("order = 3\nseeds = [5000, 1, 2]\nmodulus = { largest = 100 }"), [5000, 1, 2]);
}

#[test]
fn every_form_of_detector_oscillator_and_loop_is_read() {
    let tuned = "gain = [[\"1.6 GHz\", \"30 MHz/V\"], [\"1.9 GHz\", \"25 MHz/V\"]]\n\
        tuning = [[\"0.5 V\", \"1.6 GHz\"], [\"2.5 V\", \"1.9 GHz\"]]\ntuning_range = [\"0.4 V\", \"2.9 V\"]\n\
        leeson = { noise_factor = 4, power = \"1 mW\", loaded_q = 20, corner = \"10 kHz\" }";
    let text = changed("gain = \"30 MHz/V\"", tuned)
        .replace("current = \"1 mA\"", "current = \"1 mA\"\nmismatch = [[\"0.5 V\", \"-2 %\"], [\"2.5 V\", \"3 %\"]]");
    let plan = valid(&text);
    assert_eq!(plan.oscillator.gain, Gain::Table(vec![(1.6e9, 30e6), (1.9e9, 25e6)]));
    assert_eq!(plan.oscillator.tuning, Some(vec![(0.5, 1.6e9), (2.5, 1.9e9)]));
    assert_eq!(plan.oscillator.tuning_range_v, Some((0.4, 2.9)));
    let want = OscillatorNoise::Leeson {
        noise_factor: 4.0,
        power_w: 1e-3,
        loaded_q: 20.0,
        corner_hz: 10e3,
        temperature_k: 290.0,
    };
    assert_eq!(plan.oscillator.noise, Some(want));
    assert_eq!(plan.detector.mismatch, Some(MismatchPoints::Table(vec![(0.5, -0.02), (2.5, 0.03)])));

    let charge = valid(&changed("current = \"1 mA\"", "current = \"1 mA\"\ntable = \"charge.csv\""));
    assert_eq!(charge.detector.table.unwrap().points, [(-1e-9, -1e-12), (0.0, 0.0), (1e-9, 1.02e-12)]);
    let loops = "bandwidth = \"50 kHz\"\nphase_margin = \"50 deg\"";
    let built =
        valid(&changed(loops, "components = { c1 = \"2.2 nF\", r2 = \"510 ohm\", c2 = \"15 nF\" }\nedge = \"3 dB\""));
    let LoopPlan::Components(filter) = built.loop_plan else { panic!("{:?}", built.loop_plan) };
    assert_eq!((filter.c1_farad, filter.r2_ohm, filter.c2_farad), (Some(2.2e-9), 510.0, 15e-9));
    assert_eq!(built.boundary.edge, LoopEdge::ThreeDb);
    let measured = valid(&changed(loops, "table = \"h.csv\""));
    let LoopPlan::Measured(response) = measured.loop_plan else { panic!("{:?}", measured.loop_plan) };
    // −3 dB is an amplitude of 10^(−3/20), −45 deg turns it: exact to the last bits of the formula.
    let want = 10f64.powf(-0.15);
    assert!(
        (response.points[1].1.norm() - want).abs() < 1e-15
            && (response.points[1].1.arg() + std::f64::consts::FRAC_PI_4).abs() < 1e-15
    );
}

#[test]
fn guard_and_anchor_places_are_exact() {
    let guard = |text: &str| valid(&changed("largest_q = 3", text)).boundary.guard;
    assert_eq!(guard("guard = \"25/3 kHz\""), Guard::Offset(hz(25_000, 3)));
    assert_eq!(guard("guard = \"1.25 %\""), Guard::ShareOfPfd(Exact::new(1, 80).unwrap()));
    assert_eq!(guard("guard = \"0 Hz\""), Guard::Offset(hz(0, 1)));
    let anchors = "margin = \"6 dB\"\n[[anchor]]\nmechanism = \"tuning\"\nlevel = \"-50 dBc\"\noffset = \"7.5 kHz\"\n\
        [[anchor]]\nmechanism = \"output\"\nlevel = { value = \"-60 dBc\", basis = \"measured\" }\nat = \"430.1 MHz\"\nq = 2\nroll_off = \"3 dB\"\n\
        [[clock]]\nname = \"c\"\nfrequency = \"48 MHz\"\nanchor = { mechanism = \"output\", level = \"-70 dBc\", at = \"430 MHz\" }";
    let plan = valid(&changed("margin = \"6 dB\"", anchors));
    let place = AnchorPlace::Offset { offset: hz(7_500, 1), output_divider: 4 };
    assert_eq!((plan.anchors[0].place, plan.anchors[0].q, plan.anchors[0].roll_off_db), (place, 1, 0.0));
    assert_eq!(plan.anchors[1].place, AnchorPlace::Channel(hz(430_100_000, 1)));
    assert_eq!((plan.anchors[1].basis, plan.anchors[1].q, plan.anchors[1].roll_off_db), (Basis::Measured, 2, 3.0));
    assert_eq!(plan.clocks[0].anchor.as_ref().unwrap().level_dbc, -70.0);
}

#[test]
fn channels_are_exact_in_every_form() {
    let raster = "first = \"430 MHz\"\nlast = \"431 MHz\"\nspacing = \"25 kHz\"";
    let group = |text: &str| valid(&changed(raster, text)).groups[0].channels.clone();
    let thirds = group("first = \"430 MHz\"\nlast = \"431 MHz\"\nspacing = \"25/3 kHz\"");
    assert_eq!(thirds.len(), 121);
    assert_eq!(thirds.get(1), Some(hz(1_290_025_000, 3)));
    assert_eq!(thirds.get(120), Some(hz(431_000_000, 1)));
    assert_eq!(thirds.get(121), None);
    let one = group("first = \"430 MHz\"\nlast = \"430 MHz\"\nspacing = \"0 Hz\"");
    assert_eq!((one.len(), one.get(0)), (1, Some(hz(430_000_000, 1))));
    let list = group("list = [\"430.1 MHz\", \"1291/3 MHz\"]");
    assert_eq!(list.get(1), Some(hz(1_291_000_000, 3)));
    let file = group("file = \"channels.csv\"");
    assert_eq!((file.len(), file.get(1)), (2, Some(hz(1_291_000_000, 3))));
    assert_eq!(group("file = \"channels_semicolon.csv\"").get(0), Some(hz(430_100_000, 1)));
    assert!(matches!(file, ChannelList::List(_)));
}

#[test]
fn the_largest_permitted_raster_is_read_at_once() {
    let text = changed("last = \"431 MHz\"", "last = \"439.999999 MHz\"").replace("\"25 kHz\"", "\"1 Hz\"");
    assert_eq!(valid(&text).groups[0].channels.len(), 10_000_000);
}

#[test]
fn a_frequency_is_found_in_the_first_group_that_holds_it() {
    let second = "[[channels]]\nname = \"b\"\nlist = [\"430.5 MHz\", \"440 MHz\"]\n";
    let plan = valid(&format!("{PLAIN}{second}"));
    let at = |khz: i128| hz(khz * 1_000, 1);
    let cases = [
        (at(430_000), None, Some((0, Some(0)))),
        (at(430_500), None, Some((0, Some(20)))),
        (at(430_510), None, Some((0, None))),
        (at(431_000), None, Some((0, Some(40)))),
        (at(430_500), Some("b"), Some((1, Some(0)))),
        (at(435_000), None, Some((1, None))),
        (at(440_000), None, Some((1, Some(1)))),
        (at(440_000), Some("a"), None),
        (at(440_000), Some("c"), None),
        (at(429_999), None, None),
        (at(440_001), None, None),
        (hz(1_290_000_001, 3), None, Some((0, None))),
    ];
    for (frequency, name, want) in cases {
        assert_eq!(plan.locate(frequency, name), want, "{frequency} {name:?}");
    }
}

#[test]
fn the_starter_plan_the_demonstration_and_every_plan_in_configs_are_valid() {
    valid(&example_plan());
    assert_eq!(demo_plan().stem, "demo");
    let folder = concat!(env!("CARGO_MANIFEST_DIR"), "/configs");
    let mut names: Vec<_> = fs::read_dir(folder).unwrap().map(|entry| entry.unwrap().path()).collect();
    names.sort();
    let mut runs = 0;
    for path in names.iter().filter(|path| path.extension().is_some_and(|ending| ending == "toml")) {
        let plan = read_plan_file(path).unwrap_or_else(|failure| panic!("{failure}"));
        assert!(plan.warnings.is_empty(), "{} {:?}", path.display(), plan.warnings);
        assert_eq!(Some(plan.stem.as_str()), path.file_stem().and_then(|stem| stem.to_str()));
        runs += 1;
    }
    assert!(runs >= 4, "{runs}");
}

#[test]
fn files_beside_the_plan_are_found_from_its_own_folder() {
    let folder = tempfile::tempdir().unwrap();
    let path = folder.path().join("lake.toml");
    let raster = "first = \"430 MHz\"\nlast = \"431 MHz\"\nspacing = \"25 kHz\"";
    fs::write(&path, changed(raster, "file = \"mine.csv\"")).unwrap();
    fs::write(folder.path().join("mine.csv"), "channel\n430 MHz\n").unwrap();
    let plan = read_plan_file(&path).unwrap();
    assert_eq!((plan.stem.as_str(), plan.groups[0].channels.len()), ("lake", 1));
}

#[test]
fn what_is_no_text_file_is_told_apart() {
    let folder = tempfile::tempdir().unwrap();
    let missing = read_plan_file(&folder.path().join("none.toml")).unwrap_err();
    assert!(matches!(&missing, PlanFailure::Io { .. }) && missing.to_string().contains("no such file"), "{missing}");
    let directory = read_plan_file(folder.path()).unwrap_err();
    assert!(matches!(&directory, PlanFailure::Io { .. }) && directory.to_string().contains("folder"), "{directory}");
    let latin = folder.path().join("latin.toml");
    fs::write(&latin, b"schema = 1\n# gr\xfc\xdfe\n").unwrap();
    let PlanFailure::Content { problems, .. } = read_plan_file(&latin).unwrap_err() else {
        panic!("no content problem")
    };
    assert_eq!((problems[0].line, problems[0].column), (2, 5));
    assert!(problems[0].text.contains("UTF-8"), "{problems:?}");
    let table = folder.path().join("table.toml");
    let raster = "first = \"430 MHz\"\nlast = \"431 MHz\"\nspacing = \"25 kHz\"";
    fs::write(&table, changed(raster, "file = \"latin.csv\"")).unwrap();
    fs::write(folder.path().join("latin.csv"), b"channel\n430 MHz \xfc\n").unwrap();
    let PlanFailure::Content { problems, .. } = read_plan_file(&table).unwrap_err() else {
        panic!("no content problem")
    };
    assert!(problems[0].text.contains("UTF-8") && problems[0].key == "channels[1].file", "{problems:?}");
}

#[test]
fn problems_are_drawn_under_their_lines() {
    let text = changed("frequency = \"20 MHz\"", "frequency = \"20 MHz\"\ndivder = 2").replace("\"1 mA\"", "\"1 mV\"");
    let problems = read(&text).unwrap_err();
    let plain = render_problems(&problems, "river.toml", &text, Colour::Plain);
    for part in ["river.toml:6:1", "divder", "^^^^^^", "did you mean \"divider\"?", "river.toml:15:11", "2 problems"] {
        assert!(plain.contains(part), "{part} in:\n{plain}");
    }
    assert!(!plain.contains('\u{1b}'));
    assert!(render_problems(&problems, "river.toml", &text, Colour::Styled).contains('\u{1b}'));
}

#[test]
fn a_byte_order_mark_and_foreign_line_ends_are_read() {
    valid(&format!("\u{feff}{}", PLAIN.replace('\n', "\r\n")));
}

#[test]
fn an_offset_current_may_be_a_time_or_a_share() {
    let offset = |typed: &str| {
        valid(&changed("current = \"1 mA\"", &format!("current = \"1 mA\"\n{typed}"))).detector.offset_current_a
    };
    assert!((offset("offset_current = \"40 uA\"") / 40e-6 - 1.0).abs() < 1e-12);
    assert!((offset("offset_share = \"4 %\"") / 40e-6 - 1.0).abs() < 1e-12);
    // The charge of 40 uA over a cycle of 1/f_pfd is that of 1 mA over a twenty-fifth of it.
    let pfd_hz = valid(&changed("current = \"1 mA\"", "current = \"1 mA\"")).reference.pfd().unwrap().to_f64_hz();
    let time_ps = 1e12 / pfd_hz / 25.0;
    assert!((offset(&format!("offset_time = \"{time_ps} ps\"")) / 40e-6 - 1.0).abs() < 1e-9);
}

#[test]
fn direction_controls_are_replaced_and_scripts_are_kept() {
    let text = changed("title = \"small\"", "title = \"\u{202e}a \u{5d0}\u{5d1} \u{200f}b\u{2069}\"");
    let plan = valid(&text);
    assert_eq!(plan.identity.title, "\u{fffd}a \u{5d0}\u{5d1} \u{200f}b\u{fffd}");
    assert!(plan.warnings.iter().any(|w| w.contains("plan.title: direction controls")), "{:?}", plan.warnings);
}
