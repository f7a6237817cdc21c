//! Bad plans: every problem points at its place and says what was found and what is allowed.

use super::{PLAIN, changed, read};

/// One bad change: the line of the small plan, its replacement with `@` before the place that must be named, the key,
/// and words that the message and hint must hold.
type Case = (&'static str, &'static str, &'static str, &'static [&'static str]);

/// Values of a wrong form, unit, sign or size.
const VALUES: &[Case] = &[
    (r#"frequency = "20 MHz""#, r#"frequency = @"20""#, "reference.frequency", &["\"20\"", "no unit", "MHz"]),
    (r#"frequency = "20 MHz""#, "frequency = @20", "reference.frequency", &["20", "unit", "MHz"]),
    (r#"frequency = "20 MHz""#, "frequency = @20.5", "reference.frequency", &["20.5", "MHz"]),
    (r#"frequency = "20 MHz""#, r#"frequency = @"20 mA""#, "reference.frequency", &["\"mA\"", "MHz"]),
    (r#"frequency = "20 MHz""#, r#"frequency = @"20 mhz""#, "reference.frequency", &["case-sensitive", "mean"]),
    (r#"frequency = "20 MHz""#, r#"frequency = @"-20 MHz""#, "reference.frequency", &["-20 MHz", "above zero"]),
    (r#"frequency = "20 MHz""#, r#"frequency = @"0 Hz""#, "reference.frequency", &["0 Hz", "above zero"]),
    (r#"frequency = "20 MHz""#, r#"frequency = @"NaN MHz""#, "reference.frequency", &["NaN", "not a number"]),
    (r#"frequency = "20 MHz""#, r#"frequency = @"inf Hz""#, "reference.frequency", &["inf", "not a number"]),
    (r#"frequency = "20 MHz""#, "frequency = @nan", "reference.frequency", &["nan", "MHz"]),
    (r#"frequency = "20 MHz""#, r#"frequency = @"1e31 Hz""#, "reference.frequency", &["1e31", "1e30"]),
    (r#"frequency = "20 MHz""#, r#"frequency = @"1/0 Hz""#, "reference.frequency", &["1/0"]),
    (r#"frequency = "20 MHz""#, "frequency = @true", "reference.frequency", &["true", "MHz"]),
    (r#"frequency = "20 MHz""#, r#"frequency = @["20 MHz"]"#, "reference.frequency", &["list"]),
    (r#"frequency = "20 MHz""#, "frequency = @2024-01-01", "reference.frequency", &["date"]),
    (r#"gain = "30 MHz/V""#, r#"gain = @"30 MHz""#, "oscillator.gain", &["\"MHz\"", "MHz/V"]),
    (r#"gain = "30 MHz/V""#, r#"gain = @"-30 MHz/V""#, "oscillator.gain", &["above zero"]),
    (r#"gain = "30 MHz/V""#, "gain = @[]", "oscillator.gain", &["empty"]),
    (r#"gain = "30 MHz/V""#, r#"gain = [@"30 MHz/V"]"#, "oscillator.gain", &["pair"]),
    (
        r#"gain = "30 MHz/V""#,
        r#"gain = [["1.8 GHz", "30 MHz/V"], [@"1.7 GHz", "28 MHz/V"]]"#,
        "oscillator.gain",
        &["rise"],
    ),
    (r#"range = ["1.6 GHz", "1.9 GHz"]"#, r#"range = @["1.9 GHz", "1.6 GHz"]"#, "oscillator.range", &["above"]),
    (r#"range = ["1.6 GHz", "1.9 GHz"]"#, r#"range = @["1.6 GHz"]"#, "oscillator.range", &["two"]),
    (r#"range = ["1.6 GHz", "1.9 GHz"]"#, r#"range = @"1.6 GHz""#, "oscillator.range", &["list"]),
    (r#"range = ["1.6 GHz", "1.9 GHz"]"#, r#"range = [@"-1 GHz", "1.9 GHz"]"#, "oscillator.range", &["-1 GHz"]),
    ("output = [4]", "output = [@0]", "divider.output", &["0", "1"]),
    ("output = [4]", "output = @4", "divider.output", &["4", "list"]),
    ("output = [4]", "output = @[]", "divider.output", &["empty"]),
    ("output = [4]", "output = [@2.5]", "divider.output", &["2.5", "whole"]),
    ("output = [4]", "output = [4]\nminimum = 10\nmaximum = @9", "divider.maximum", &["9", "10"]),
    ("output = [4]", "output = [4]\nfloor = @\"-160 dBc\"", "divider.floor", &["dBc/Hz"]),
    (r#"current = "1 mA""#, r#"current = @"0 mA""#, "detector.current", &["above zero"]),
    (r#"current = "1 mA""#, "current = \"1 mA\"\nmismatch = @\"250 %\"", "detector.mismatch", &["250", "200"]),
    (
        r#"current = "1 mA""#,
        "current = \"1 mA\"\nmismatch = @[[\"0.5 V\", \"2 %\"], [\"2 V\", \"3 %\"]]",
        "detector.mismatch",
        &["oscillator.tuning"],
    ),
    (r#"current = "1 mA""#, "current = \"1 mA\"\ndead_zone = @\"-1 ps\"", "detector.dead_zone", &["-1 ps"]),
    (r#"current = "1 mA""#, "current = \"1 mA\"\nquadratic = @inf", "detector.quadratic", &["inf"]),
    (r#"current = "1 mA""#, "current = \"1 mA\"\ncubic = @\"x\"", "detector.cubic", &["\"x\"", "not a number"]),
    (r#"current = "1 mA""#, "current = \"1 mA\"\ntable = @\"none.csv\"", "detector.table", &["none.csv", "no such"]),
    (r#"current = "1 mA""#, "current = \"1 mA\"\ntable = @\"charge_falls.csv\"", "detector.table", &["rise"]),
    (r#"current = "1 mA""#, "current = \"1 mA\"\ntable = @\"charge_nan.csv\"", "detector.table", &["line 3", "nan"]),
    (r#"phase_margin = "50 deg""#, r#"phase_margin = @"90 deg""#, "loop.phase_margin", &["90", "below"]),
    (r#"phase_margin = "50 deg""#, r#"phase_margin = @"0 deg""#, "loop.phase_margin", &["above zero"]),
    (r#"phase_margin = "50 deg""#, "phase_margin = \"50 deg\"\nedge = @\"4 dB\"", "loop.edge", &["3 dB", "unity"]),
    (
        r#"phase_margin = "50 deg""#,
        "phase_margin = \"50 deg\"\ndesign_divider = @0",
        "loop.design_divider",
        &["above zero"],
    ),
    (r#"phase_margin = "50 deg""#, "phase_margin = \"50 deg\"\nthird_pole = @0", "loop.third_pole", &["above zero"]),
    ("largest_q = 3", "largest_q = @0", "boundary.largest_q", &["0", "from 1"]),
    ("largest_q = 3", "largest_q = @\"3\"", "boundary.largest_q", &["whole"]),
    ("largest_q = 3", "guard = @\"-1 kHz\"", "boundary.guard", &["-1 kHz"]),
    ("largest_q = 3", "guard = @\"10\"", "boundary.guard", &["unit", "%"]),
    ("largest_q = 3", "guard = @10", "boundary.guard", &["10", "%"]),
    (r#"margin = "6 dB""#, r#"margin = @"6 dBc""#, "limits.margin", &["\"dBc\"", "dB"]),
    (r#"margin = "6 dB""#, r#"margin = @"-6 dB""#, "limits.margin", &["-6 dB"]),
    (r#"margin = "6 dB""#, r#"spur = [["1 kHz", "-40 dBc"], [@"1 kHz", "-50 dBc"]]"#, "limits.spur", &["rise"]),
    (r#"margin = "6 dB""#, r#"spur = [[@"0 Hz", "-40 dBc"]]"#, "limits.spur", &["0 Hz", "above zero"]),
    (r#"margin = "6 dB""#, r#"integration = @["1 MHz", "1 kHz"]"#, "limits.integration", &["above"]),
    (r#"margin = "6 dB""#, r#"integration = @["0 Hz", "1 kHz"]"#, "limits.integration", &["above zero"]),
    ("record = 4096", "record = @0", "analysis.record", &["0"]),
    ("record = 4096", "span = @\"0 Hz\"", "analysis.span", &["above zero"]),
    (r#"title = "small""#, "title = @5", "plan.title", &["5", "text"]),
    ("schema = 1", "schema = @2", "schema", &["2", "1"]),
];

/// The modulator's own rules.
const MODULATOR: &[Case] = &[
    ("order = 3", "order = @9", "modulator.order", &["9", "5"]),
    ("order = 3", "order = @-1", "modulator.order", &["-1"]),
    ("order = 3", "structure = \"error-feedback\"\norder = @5", "modulator.order", &["error-feedback", "1 … 4"]),
    ("order = 3", "structure = \"integer\"\norder = @3", "modulator.order", &["integer", "0"]),
    ("order = 3", "order = @0", "modulator.order", &["0", "1 … 5"]),
    ("order = 3", "structure = @\"mush\"", "modulator.structure", &["mush", "did you mean \"mash\"?"]),
    ("order = 3", "modulus = @1", "modulator.modulus", &["1", "2"]),
    ("order = 3", "modulus = @\"2^49\"", "modulator.modulus", &["2^49", "48"]),
    ("order = 3", "modulus = @562949953421312", "modulator.modulus", &["562949953421312"]),
    ("order = 3", "modulus = { largest = @1 }", "modulator.modulus.largest", &["1", "2"]),
    ("order = 3", "modulus = { step = @\"12.5\" }", "modulator.modulus.step", &["unit"]),
    ("order = 3", "modulus = { step = @\"0 Hz\" }", "modulator.modulus.step", &["above zero"]),
    ("order = 3", "modulus = { @lagest = 12 }", "modulator.modulus.lagest", &["did you mean \"largest\"?"]),
    ("order = 3", "modulus = @{ largest = 9, step = \"1 kHz\" }", "modulator.modulus", &["one of"]),
    ("order = 3", "modulus = @2.5", "modulator.modulus", &["2.5"]),
    ("order = 3", "seeds = @[1, 0, 0, 0]", "modulator.seeds", &["4 seeds", "3"]),
    ("order = 3", "modulus = 100\nseeds = @[100]", "modulator.seeds", &["100", "99"]),
    ("order = 3", "seeds = [@-1]", "modulator.seeds", &["-1"]),
    ("order = 3", "dither = @\"some\"", "modulator.dither", &["some", "none"]),
    ("order = 3", "dither = @{ stage = 1, register = 8 }", "modulator.dither", &["8", "7, 9"]),
    ("order = 3", "dither = @{ stage = 4, register = 9 }", "modulator.dither", &["4", "1 … 3"]),
    ("order = 3", "dither = @{ stage = 1, register = 9, seed = 512 }", "modulator.dither", &["512", "511"]),
    ("order = 3", "dither = { stage = 1, register = 9, seed = @0 }", "modulator.dither.seed", &["0"]),
    ("order = 3", "dither = @{ register = 9 }", "modulator.dither.stage", &["missing"]),
    ("order = 3", "dither = { stage = 1, register = 9, @sead = 1 }", "modulator.dither.sead", &["mean \"seed\""]),
    ("order = 3", "ntf = @[3, -3, 1]", "modulator.ntf", &["error-feedback"]),
    ("order = 3", "structure = \"error-feedback\"\norder = 2\nntf = @[2, -1, 0]", "modulator.ntf", &["3", "2"]),
    ("order = 3", "structure = \"integer\"\ndither = @{ stage = 1, register = 9 }", "modulator.dither", &["integer"]),
    ("order = 3", "structure = \"prime-mash\"\nmodulus = @100", "modulator.modulus", &["100", "prime"]),
    ("order = 3", "runs_at_zero = @1", "modulator.runs_at_zero", &["true or false"]),
];

/// Keys, sections, and what they ask of each other.
const STRUCTURE: &[Case] = &[
    (
        r#"frequency = "20 MHz""#,
        "frequency = \"20 MHz\"\n@divder = 2",
        "reference.divder",
        &["unknown", "mean \"divider\""],
    ),
    ("[boundary]", "[@boundry]", "boundry", &["unknown section", "mean \"boundary\""]),
    ("record = 4096", "record = 4096\n[@zzz]", "zzz", &["unknown section", "reference"]),
    (
        r#"frequency = "20 MHz""#,
        r#"frequency = { value = "20 MHz", @bassis = "measured" }"#,
        "reference.frequency.bassis",
        &["mean \"basis\""],
    ),
    (
        r#"frequency = "20 MHz""#,
        r#"frequency = { value = "20 MHz", basis = @"guess" }"#,
        "reference.frequency.basis",
        &["guess", "datasheet"],
    ),
    (
        r#"frequency = "20 MHz""#,
        r#"frequency = { value = "20 MHz", note = @3 }"#,
        "reference.frequency.note",
        &["3", "text"],
    ),
    (r#"frequency = "20 MHz""#, r#"frequency = @{ basis = "measured" }"#, "reference.frequency", &["value"]),
    ("[[channels]]", "@[channels]", "channels", &["[[channels]]"]),
    (r#"first = "430 MHz""#, r#"first = "432 MHz""#, "channels[1].last", &["431 MHz", "432 MHz"]),
    (r#"spacing = "25 kHz""#, r#"spacing = @"0 kHz""#, "channels[1].spacing", &["above zero"]),
    (r#"spacing = "25 kHz""#, r#"spacing = @"-25 kHz""#, "channels[1].spacing", &["above zero"]),
    (r#"spacing = "25 kHz""#, r#"spacing = @"1 mHz""#, "channels[1].spacing", &["1000000001", "10000000"]),
    (
        r#"spacing = "25 kHz""#,
        "spacing = \"25 kHz\"\ninjection = @\"-430 MHz\"",
        "channels[1].injection",
        &["above zero"],
    ),
    (r#"spacing = "25 kHz""#, "spacing = \"25 kHz\"\noutput = [@0]", "channels[1].output", &["0"]),
    (
        r#"spacing = "25 kHz""#,
        "spacing = \"25 kHz\"\nlimits = { margin = @\"6\" }",
        "channels[1].limits.margin",
        &["unit"],
    ),
    (
        r#"spacing = "25 kHz""#,
        "spacing = \"25 kHz\"\nlimits = { @marign = \"6 dB\" }",
        "channels[1].limits.marign",
        &["mean \"margin\""],
    ),
    (
        r#"bandwidth = "50 kHz""#,
        "bandwidth = \"50 kHz\"\ncomponents = { r2 = @\"1 V\", c2 = \"1 nF\" }",
        "loop",
        &["one of"],
    ),
    (
        r#"margin = "6 dB""#,
        "margin = \"6 dB\"\n[[anchor]]\nmechanism = @\"air\"\nlevel = \"-50 dBc\"\nat = \"430 MHz\"",
        "anchor[1].mechanism",
        &["air", "tuning"],
    ),
    (
        r#"margin = "6 dB""#,
        "margin = \"6 dB\"\n[[anchor]]\nmechanism = \"output\"\nlevel = \"-50 dBc\"\nat = \"430 MHz\"\noffset = @\"1 kHz\"",
        "anchor[1].offset",
        &["not both"],
    ),
    (
        r#"margin = "6 dB""#,
        "margin = \"6 dB\"\n[[anchor]]\nmechanism = \"output\"\nlevel = \"-50 dBc\"\nat = \"430 MHz\"\noutput_divider = @2",
        "anchor[1].output_divider",
        &["offset"],
    ),
    (
        r#"margin = "6 dB""#,
        "margin = \"6 dB\"\n[[anchor]]\nmechanism = \"output\"\nlevel = @\"-50 dB\"\nat = \"430 MHz\"",
        "anchor[1].level",
        &["dBc"],
    ),
    (
        r#"margin = "6 dB""#,
        "margin = \"6 dB\"\n[[clock]]\nname = \"c\"\nfrequency = @\"0 MHz\"",
        "clock[1].frequency",
        &["above zero"],
    ),
    (
        r#"gain = "30 MHz/V""#,
        "gain = \"30 MHz/V\"\ntuning_range = @[\"0.4 V\", \"2 V\"]",
        "oscillator.tuning_range",
        &["oscillator.tuning"],
    ),
    (
        r#"gain = "30 MHz/V""#,
        "gain = \"30 MHz/V\"\ntuning = @[[\"0.5 V\", \"1.9 GHz\"], [\"2 V\", \"1.6 GHz\"]]",
        "oscillator.tuning",
        &["rise"],
    ),
    (
        r#"gain = "30 MHz/V""#,
        "gain = \"30 MHz/V\"\nleeson = { noise_factor = @0.5, power = \"1 mW\", loaded_q = 20 }",
        "oscillator.leeson.noise_factor",
        &["0.5", "1"],
    ),
    (
        r#"gain = "30 MHz/V""#,
        "gain = \"30 MHz/V\"\nleeson = { noise_factor = 2, power = \"1 mW\", loaded_q = @0 }",
        "oscillator.leeson.loaded_q",
        &["above zero"],
    ),
    (
        "current = \"1 mA\"",
        "current = \"1 mA\"\noffset_current = \"1 uA\"\noffset_share = @\"2 %\"",
        "detector.offset_share",
        &["not both"],
    ),
    ("record = 4096", "record = 4096\n[alternatives]\norders = [2, @7]", "alternatives.orders", &["7", "5"]),
    ("record = 4096", "record = 4096\n[alternatives]\ndoubler = [@1]", "alternatives.doubler", &["true or false"]),
    ("record = 4096", "record = 4096\n[alternatives]\ndithers = [@\"loud\"]", "alternatives.dithers", &["loud"]),
    (
        "record = 4096",
        "record = 4096\n[alternatives]\ndithers = [@{ stage = 1, register = 8 }]",
        "alternatives.dithers",
        &["8"],
    ),
    ("record = 4096", "record = 4096\n[alternatives]\norders = @[2, 0]", "alternatives.orders", &["0", "1 … 5"]),
    (
        "record = 4096",
        "record = 4096\n[alternatives]\ndithers = [@{ stage = 4, register = 9 }]",
        "alternatives.dithers",
        &["4", "1 … 3"],
    ),
    ("record = 4096", "record = 4096\n[alternatives]\nnudge = @\"-1 Hz\"", "alternatives.nudge", &["-1 Hz"]),
    ("record = 4096", "record = @", "", &["TOML"]),
    ("record = 4096", "record = 4096\n@record = 5", "", &["TOML", "duplicate"]),
];

/// Channel files and response tables; the whole raster is replaced.
const FILES: &[(&str, &str, &[&str])] = &[
    ("file = @\"none.csv\"", "channels[1].file", &["none.csv", "no such file"]),
    ("file = @\"no_column.csv\"", "channels[1].file", &["no column channel"]),
    ("file = @\"no_unit.csv\"", "channels[1].file", &["line 3", "unit"]),
    ("file = @\"no_rows.csv\"", "channels[1].file", &["no channel"]),
    ("file = @\"empty.csv\"", "channels[1].file", &["empty.csv"]),
    ("list = @[]", "channels[1].list", &["empty"]),
    ("list = [\"430 MHz\", @\"431\"]", "channels[1].list", &["unit"]),
    ("list = [\"430 MHz\", @\"-431 MHz\"]", "channels[1].list", &["above zero"]),
    ("first = \"430 MHz\"", "channels[1].last", &["missing"]),
    ("list = @[\"430 MHz\"]\nfile = \"channels.csv\"", "channels[1]", &["one of"]),
];

/// Asserts that the text without its marker is refused at the marker, with the key and the words.
fn refused(marked: &str, key: &str, words: &[&str]) {
    if let Err(complaint) = check_refusal(marked, key, words) {
        panic!("{complaint}");
    }
}

fn check_refusal(marked: &str, key: &str, words: &[&str]) -> Result<(), String> {
    let at = marked.find('@');
    let text = marked.replace('@', "");
    let Err(problems) = read(&text) else { return Err(format!("{key}: accepted with {words:?}")) };
    let place = at.map(|at| {
        let line = text[..at].matches('\n').count() + 1;
        let column = text[..at].rsplit('\n').next().unwrap_or_default().chars().count() + 1;
        (line, column)
    });
    let fits = problems.iter().any(|problem| {
        let said = format!("{} {}", problem.text, problem.hint.clone().unwrap_or_default());
        problem.key == key
            && place.is_none_or(|place| place == (problem.line, problem.column))
            && words.iter().all(|word| said.contains(word))
    });
    if fits { Ok(()) } else { Err(format!("{key} at {place:?} with {words:?}: found {problems:?}")) }
}

#[test]
fn every_bad_value_is_refused_at_its_place() {
    let mut runs = 0;
    let mut complaints = Vec::new();
    for (from, to, key, words) in VALUES.iter().chain(MODULATOR).chain(STRUCTURE) {
        // A loop that is given twice is named at its section.
        let mark = if *key == "loop" { to.replace('@', "") } else { (*to).to_owned() };
        complaints.extend(check_refusal(&changed(from, &mark), key, words).err());
        runs += 1;
    }
    assert!(complaints.is_empty(), "{}", complaints.join("\n"));
    assert!(runs >= 110, "{runs}");
}

#[test]
fn bad_channel_lists_and_files_are_refused_at_their_place() {
    let raster = "first = \"430 MHz\"\nlast = \"431 MHz\"\nspacing = \"25 kHz\"";
    for (to, key, words) in FILES {
        let mark = if *key == "channels[1]" { to.replace('@', "") } else { (*to).to_owned() };
        refused(&changed(raster, &mark), key, words);
    }
    assert_eq!(FILES.len(), 10);
}

#[test]
fn loop_must_be_given_in_exactly_one_way() {
    let given = "bandwidth = \"50 kHz\"\nphase_margin = \"50 deg\"";
    let cases: [(&str, &str, &[&str]); 6] = [
        ("", "loop", &["missing", "bandwidth"]),
        ("phase_margin = \"50 deg\"", "loop.bandwidth", &["missing"]),
        ("bandwidth = \"50 kHz\"", "loop.phase_margin", &["missing"]),
        ("components = { r2 = \"1 kohm\", c2 = \"1 nF\", r3 = \"1 ohm\" }", "loop.components", &["belong together"]),
        ("components = { c2 = \"1 nF\" }", "loop.components.r2", &["missing"]),
        ("table = @\"h_one.csv\"", "loop.table", &["h_one.csv", "2"]),
    ];
    for (to, key, words) in cases {
        refused(&changed(given, to), key, words);
    }
}

#[test]
fn a_missing_required_key_or_section_is_named() {
    let mut runs = 0;
    for (line, key) in [
        ("schema = 1", "schema"),
        ("frequency = \"20 MHz\"", "reference.frequency"),
        ("range = [\"1.6 GHz\", \"1.9 GHz\"]", "oscillator.range"),
        ("gain = \"30 MHz/V\"", "oscillator.gain"),
        ("current = \"1 mA\"", "detector.current"),
    ] {
        refused(&changed(&format!("{line}\n"), ""), key, &["missing"]);
        runs += 1;
    }
    // Without its section a required key is missing all the same.
    refused(&changed("[reference]\nfrequency = \"20 MHz\"\n", ""), "reference.frequency", &["missing"]);
    refused(&changed("[detector]\ncurrent = \"1 mA\"\n", ""), "detector.current", &["missing"]);
    let (before, _) = PLAIN.split_once("[[channels]]").unwrap();
    refused(before, "channels", &["missing", "[[channels]]"]);
    refused("", "schema", &["missing"]);
    assert_eq!(runs, 5);
}

#[test]
fn all_problems_come_at_once_and_in_file_order() {
    let text = PLAIN
        .replace("\"20 MHz\"", "\"20\"")
        .replace("order = 3", "order = 9")
        .replace("\"1 mA\"", "\"1 mV\"")
        .replace("\"25 kHz\"", "\"0 kHz\"");
    let problems = read(&text).unwrap_err();
    let keys: Vec<&str> = problems.iter().map(|problem| problem.key.as_str()).collect();
    assert_eq!(keys, ["reference.frequency", "modulator.order", "detector.current", "channels[1].spacing"]);
    assert!(problems.windows(2).all(|pair| pair[0].line < pair[1].line));
}

#[test]
fn two_groups_of_one_name_and_too_many_channels_in_all_are_refused() {
    let second = "\n[[channels]]\nname = \"a\"\nlist = [\"432 MHz\"]\n";
    refused(&format!("{PLAIN}{second}"), "channels[2].name", &["\"a\""]);
    let wide = "name = \"NAME\"\nfirst = \"430 MHz\"\nlast = \"436 MHz\"\nspacing = \"1 Hz\"\n";
    let groups: String =
        ["x", "y"].iter().map(|name| format!("[[channels]]\n{}", wide.replace("NAME", name))).collect();
    refused(&format!("{PLAIN}{groups}"), "channels", &["12000043", "10000000"]);
}
