//! Exports for firmware: the words give the frequencies, and every format says the same.

use std::collections::BTreeMap;
use std::path::Path;
use std::process::Command;
use std::sync::LazyLock;

use num_bigint::BigUint;
use num_traits::ToPrimitive;
use serde_json::Value;
use thornmap::assess::{Verdict, place};
use thornmap::base::{Exact, Frequency};
use thornmap::decide::export::{DriverWord, Export, FIELDS, RoundedHz, export, pack};
use thornmap::modulator::{period, start, transient};
use thornmap::plan::{ChannelList, Plan, RegisterMap, demo_plan, parse_plan, parse_register_map};
use thornmap::report::{FirmwareFormat, firmware_bytes};
use thornmap::survey::{SurveyResult, survey};

/// A small plan; modulus, channels and further sections as given.
fn plan(modulus: &str, rest: &str) -> Plan {
    let text = format!(
        r#"
schema = 1
[plan]
title = "=sum(1) */ int broken; /* ??/"
[reference]
frequency = "20 MHz"
[oscillator]
range = ["1.6 GHz", "1.7 GHz"]
gain = "30 MHz/V"
[divider]
output = [4, 2]
[modulator]
modulus = {modulus}
[detector]
current = "2 mA"
mismatch = "2 %"
leakage = "1 nA"
[loop]
bandwidth = "60 kHz"
phase_margin = "50 deg"
[boundary]
guard = "100 kHz"
{rest}
"#
    );
    parse_plan(&text, "7 small-plan", &|_| Err("none".to_owned())).unwrap()
}

/// Channels on, near and far from 405 MHz (81 · 20 MHz / 4), one beyond the oscillator.
const LIST: &str = r#"
[[channels]]
name = "+pair"
list = ["405 MHz", "405.0125 MHz", "405.025 MHz", "1217/3 MHz", "407.4 MHz", "430 MHz"]
"#;

/// One channel, 50 kHz from 81 times the reference at the VCO.
const ONE: &str = "[[channels]]\nname = \"one\"\nlist = [\"405.0125 MHz\"]\n";

/// The demonstration plan, surveyed once.
static DEMO: LazyLock<SurveyResult> = LazyLock::new(|| survey(&demo_plan(), &|_| {}).unwrap());

/// Returns the survey of the small plan with a modulus.
fn small(modulus: &str) -> SurveyResult {
    survey(&plan(modulus, LIST), &|_| {}).unwrap()
}

fn text(export: &Export, format: FirmwareFormat) -> String {
    String::from_utf8(firmware_bytes(export, format).unwrap()).unwrap()
}

/// f_pfd·(N + K/M)/P, from the integers alone.
fn frequency_of(word: &DriverWord, reference_hz: i128) -> Exact {
    let doubled = if word.doubler { 2 } else { 1 };
    let whole = i128::from;
    let ratio = Exact::new(whole(word.n) * whole(word.m) + whole(word.k), whole(word.m)).unwrap();
    let pfd = Exact::new(reference_hz * doubled, whole(word.reference_divider)).unwrap();
    pfd.times(&ratio).unwrap().over(&Exact::from_integer(whole(word.output_divider))).unwrap()
}

#[test]
fn exported_words_give_the_achieved_frequencies_exactly() {
    let mut cases = 0;
    for (result, reference_hz) in [
        (&*DEMO, 19_200_000),
        (&small("1000"), 20_000_000),
        (&small("{ largest = 97 }"), 20_000_000),
        (&small("{ step = \"12.5 kHz\" }"), 20_000_000),
    ] {
        let found = export(result, None, None).unwrap();
        let vectors = found.vectors.iter().map(|vector| (&vector.word, vector.achieved, vector.achieved_rounded));
        let channels = found
            .channels
            .iter()
            .filter_map(|channel| Some((channel.word.as_ref()?, channel.achieved?, channel.achieved_rounded?)));
        for (word, achieved, rounded) in channels.chain(vectors) {
            assert_eq!(frequency_of(word, reference_hz), achieved.hz());
            let in_millihertz = Exact::new(rounded.hz * 1000 + rounded.millihertz, 1000).unwrap();
            let rest = in_millihertz.minus(&achieved.hz()).unwrap().abs();
            assert!(rest <= Exact::new(1, 2000).unwrap(), "{achieved}");
            assert!((-500..=500).contains(&rounded.millihertz));
            cases += 1;
        }
    }
    assert!(cases >= 354 + 3 * 5, "{cases}");
}

#[test]
fn the_modulator_puts_out_the_mean_of_every_exported_word() {
    let mut cases = 0;
    for modulus in ["1000", "{ largest = 97 }", "{ step = \"12.5 kHz\" }"] {
        let result = small(modulus);
        let plan = &result.plan;
        let found = export(&result, None, None).unwrap();
        for channel in found.channels.iter().filter(|channel| channel.legal) {
            let word = channel.word.as_ref().unwrap();
            let placed = place(plan, &plan.groups[0], channel.channel).unwrap();
            assert_eq!((word.k, word.m), (placed.modulator.k(), placed.modulator.modulus().get()));
            assert_eq!(word.seeds, placed.modulator.seeds());
            let length = period(&placed.modulator).length.as_ref().and_then(BigUint::to_u64).unwrap();
            let mut running = start(&placed.modulator);
            running.fill(&mut vec![0; transient(&placed.modulator)]);
            let mut outputs = vec![0; usize::try_from(length).unwrap()];
            running.fill(&mut outputs);
            let sum: i64 = outputs.iter().map(|output| i64::from(*output)).sum();
            // Mean N + K/M, so that the sum over a period is exactly period·K/M.
            assert_eq!(i128::from(sum) * i128::from(word.m), i128::from(length) * i128::from(word.k));
            cases += 1;
        }
    }
    assert_eq!(cases, 15);
}

#[test]
fn avoided_ranges_hold_every_bad_channel_and_no_other() {
    for result in [&*DEMO, &small("1000")] {
        let found = export(result, None, None).unwrap();
        let mut bad = 0;
        for channel in &result.channels {
            let inside = found.avoided.iter().any(|range| {
                range.group_index == channel.group_index
                    && range.start <= channel.channel
                    && channel.channel <= range.stop
            });
            assert_eq!(inside, channel.verdict == Verdict::Bad, "{}", channel.channel);
            bad += u64::from(inside);
        }
        assert_eq!(bad, result.summary.bad);
        assert_eq!(found.avoided.iter().map(|range| range.channels).sum::<u64>(), bad);
        assert!(bad > 0 && found.avoided.iter().all(|range| !range.rules.is_empty() && !range.reason.is_empty()));
    }
}

#[test]
fn vectors_stand_at_the_corners_and_say_when_they_are_no_channels() {
    let found = export(&DEMO, None, None).unwrap();
    assert!(found.vectors_missing.is_empty());
    assert_eq!(found.vectors.len(), 2 * 6);
    let mut kinds: BTreeMap<String, Vec<(u64, bool)>> = BTreeMap::new();
    for vector in &found.vectors {
        kinds.entry(vector.name.clone()).or_default().push((vector.word.k, vector.on_raster));
        assert!(vector.legal, "{}", vector.name);
    }
    assert!(kinds["K = 0, an exact integer"].iter().all(|(k, on)| *k == 0 && *on));
    assert!(kinds["K = 1, one step above an integer"].iter().all(|(k, on)| *k == 1 && !*on));
    assert!(kinds["K = M - 1, one step below an integer"].iter().all(|(k, on)| *k == (1 << 24) - 1 && !*on));
    assert!(kinds["lower band edge"].iter().all(|(_, on)| *on));
    // The nearest channels stand 50 kHz from an integer at the VCO: 2^24 · 50 kHz / 19.2 MHz = 43690.67 steps.
    assert!(kinds["channel nearest to an integer"].iter().all(|(k, _)| (*k).min((1 << 24) - *k) == 43_691));
    // An integer divider has no K = 1 and no K = M − 1; both are said to be missing.
    let mut integer = plan("1000", LIST);
    integer.modulator.settings.structure = thornmap::modulator::Structure::Integer;
    integer.modulator.settings.order = 0;
    integer.modulator.settings.seeds = vec![];
    integer.modulator.modulus = thornmap::modulator::ModulusRule::Fixed(thornmap::modulator::Modulus::new(1).unwrap());
    integer.groups[0].channels = ChannelList::List(vec![Frequency::from_whole_hz(405_000_000)]);
    let result = survey(&integer, &|_| {}).unwrap();
    let found = export(&result, Some("+pair"), None).unwrap();
    assert_eq!(found.vectors_missing.len(), 3, "{:?}", found.vectors_missing);
}

#[test]
fn frequencies_round_to_even_in_hertz_and_millihertz() {
    let of = |numerator, denominator| {
        let rounded = RoundedHz::of(Frequency::from_hz(Exact::new(numerator, denominator).unwrap())).unwrap();
        (rounded.hz, rounded.millihertz)
    };
    assert_eq!(of(7, 2), (4, -500));
    assert_eq!(of(5, 2), (2, 500));
    assert_eq!(of(-5, 2), (-2, -500));
    assert_eq!(of(10_001, 3), (3334, -333));
    assert_eq!(of(20_001, 2000), (10, 0));
    assert_eq!(of(20_003, 2000), (10, 2));
}

/// A map that splits K over two registers.
const MAP: &str = r#"
[[register]]
name = "A"
width = 32
address = 0
base = 0x8000_0001

[[register]]
name = "B"
width = 48
address = 1

[[field]]
name = "n"
register = "A"
msb = 23
lsb = 8

[[field]]
name = "k"
register = "A"
msb = 27
lsb = 24

[[field]]
name = "k"
register = "B"
msb = 43
lsb = 0
low = 4
"#;

fn map() -> RegisterMap {
    parse_register_map(MAP).unwrap()
}

#[test]
fn a_map_turns_words_into_registers() {
    let found = export(&DEMO, None, Some(&map())).unwrap();
    let registers = found.registers.as_ref().unwrap();
    let mut cases = 0;
    for (channel, values) in found.channels.iter().zip(&registers.channels) {
        let (word, values) = (channel.word.as_ref().unwrap(), values.as_ref().unwrap());
        assert_eq!(values[0] & 0xff, 1, "base below the fields");
        assert_eq!(values[0] >> 31, 1, "base above the fields");
        assert_eq!((values[0] >> 8) & 0xffff, word.n);
        assert_eq!(((values[0] >> 24) & 0xf) | (values[1] << 4), word.k);
        assert_eq!(*values, pack(&map(), word));
        cases += 1;
    }
    assert_eq!(cases, 354);
    assert_eq!(registers.vectors.len(), found.vectors.len());
}

#[test]
fn a_map_that_does_not_fit_is_refused_with_the_channel() {
    let refused = |map: &str| {
        let map = parse_register_map(map).unwrap();
        export(&DEMO, None, Some(&map)).unwrap_err().to_string()
    };
    let narrow = MAP.replace("msb = 43", "msb = 18");
    // The largest K of a channel needs 24 bits; the map holds 4 + 19.
    let message = refused(&narrow);
    let largest = DEMO.channels.iter().rev().max_by_key(|channel| channel.k).unwrap();
    let named = format!("channel {} of group \"{}\" needs k = {}", largest.channel, largest.group, largest.k.unwrap());
    assert!(message.contains("\"k\" is too narrow") && message.contains(&named), "{message}");
    // The one channel's K = 2 fits four bits, the vector K = M - 1 = 999 does not: it is named.
    let result = survey(&plan("1000", ONE), &|_| {}).unwrap();
    let map = parse_register_map(&MAP.replace("msb = 43\nlsb = 0\nlow = 4", "msb = 0\nlsb = 0\nlow = 48")).unwrap();
    let message = export(&result, None, Some(&map)).unwrap_err().to_string();
    assert!(message.contains("test vector \"K = M - 1, one step below an integer\""), "{message}");
    let message = refused(&MAP.replace("msb = 23\nlsb = 8", "msb = 13\nlsb = 8"));
    assert!(message.contains("\"n\" is too narrow") && message.contains("n = 92"), "{message}");
    // 92 is first needed where N reaches 92, in the downlink group.
    assert!(message.contains("channel 441.6 MHz of group \"downlink\""), "{message}");
    let message = refused(&MAP.replace("name = \"n\"", "name = \"nn\""));
    assert!(message.contains("\"nn\" is unknown") && message.contains("reference_divider, doubler"), "{message}");
}

#[test]
fn a_malformed_map_names_every_problem_with_its_line() {
    let cases = [
        (MAP.replace("msb = 27\nlsb = 24", "msb = 27\nlsb = 23"), "overlaps field \"n\" in bit 23"),
        (MAP.replace("register = \"B\"", "register = \"C\""), "no register \"C\"; there are \"A\", \"B\""),
        (MAP.replace("msb = 43", "msb = 48"), "do not lie in the 48 bits"),
        (MAP.replace("width = 48", "width = 65"), "outside 1 to 64"),
        (MAP.replace("0x8000_0001", "0x1_0000_0000"), "wider than 32 bits"),
        (MAP.replace("name = \"B\"", "name = \"A\""), "is given twice"),
        (MAP.replace("low = 4", "low = 64"), "outside 0 to 63"),
        (MAP.replace("low = 4", "lou = 4"), "unknown field `lou`"),
        (String::new(), "no [[register]]"),
        ("[[register".to_owned(), "1:"),
    ];
    let mut count = 0;
    for (map, want) in cases {
        let problems = parse_register_map(&map).unwrap_err();
        assert!(problems.iter().any(|problem| problem.contains(want)), "{want}: {problems:?}");
        count += 1;
    }
    assert_eq!(count, 10);
    let both = MAP.replace("width = 48", "width = 65").replace("lsb = 24", "lsb = 23");
    assert!(parse_register_map(&both).unwrap_err().len() >= 2);
}

#[test]
fn csv_and_json_hold_the_same_words_and_csv_cells_are_inert() {
    let result = small("1000");
    let (plan, found) = (&result.plan, export(&result, None, Some(&map())).unwrap());
    let json: Value = serde_json::from_str(&text(&found, FirmwareFormat::Json)).unwrap();
    assert_eq!(json["schema"], "thornmap.export/1");
    assert_eq!(json["plan_sha256"].as_str().unwrap(), plan.sha256);
    let table = text(&found, FirmwareFormat::Csv);
    let mut reader = csv::Reader::from_reader(table.as_bytes());
    let names = reader.headers().unwrap().clone();
    let rows: Vec<BTreeMap<String, String>> = reader
        .records()
        .map(|row| names.iter().map(str::to_owned).zip(row.unwrap().iter().map(str::to_owned)).collect())
        .collect();
    for cell in rows.iter().flat_map(BTreeMap::values) {
        let formula = cell.starts_with(['=', '+', '@']) || (cell.starts_with('-') && cell.parse::<i64>().is_err());
        assert!(!formula, "{cell}");
    }
    assert!(rows.iter().any(|row| row["group"] == "'+pair"));
    let mut cases = 0;
    for (place, row) in rows.iter().filter(|row| row["row"] == "channel").enumerate() {
        let channel = &json["channels"][place];
        for field in FIELDS.iter().filter(|field| channel["word"].get(field.name).is_some_and(Value::is_u64)) {
            assert_eq!(channel["word"][field.name].to_string(), row[field.name], "{}", field.name);
        }
        let legal = channel["legal"] == true;
        assert_eq!(row["legal"], legal.to_string());
        assert_eq!(row["k"].is_empty(), !legal);
        assert_eq!(row["achieved_hz"].is_empty(), !legal);
        assert_eq!(row["register A"].is_empty(), !legal);
        assert_eq!(channel["channel_exact"].as_str().unwrap(), row["channel_exact"]);
        cases += 1;
    }
    assert_eq!(cases, 6);
    assert_eq!(rows.iter().filter(|row| row["row"] == "avoided").count(), found.avoided.len());
    assert_eq!(rows.iter().filter(|row| row["row"] == "vector").count(), found.vectors.len());
}

/// Compiles a C99 program with every warning as an error, and returns what it prints.
fn compiled(folder: &Path, program: &str) -> String {
    std::fs::write(folder.join("driver.c"), program).unwrap();
    let compiler = std::env::var("CC").unwrap_or_else(|_| "cc".to_owned());
    let built = Command::new(compiler)
        .current_dir(folder)
        .args(["-Wall", "-Wextra", "-Werror", "-std=c99", "-o", "driver", "driver.c"])
        .output()
        .unwrap();
    assert!(built.status.success(), "{}", String::from_utf8_lossy(&built.stderr));
    let ran = Command::new(folder.join("driver")).output().unwrap();
    assert!(ran.status.success());
    String::from_utf8(ran.stdout).unwrap()
}

/// Returns a program that prints every word, range and register of a header.
fn reading_program(name: &str) -> String {
    let upper = name.to_ascii_uppercase();
    let fields: Vec<&str> = FIELDS.iter().map(|field| field.name).collect();
    let formats = " %llu".repeat(fields.len());
    let values: Vec<String> = fields.iter().map(|field| format!("(unsigned long long)w->{field}")).collect();
    let values = values.join(", ");
    format!(
        r#"#include "words.h"
#include "words.h"
#include <stdio.h>
static void show(const struct {name}_word *w) {{
    printf("%u %lld %d %lld %d{formats}\n", (unsigned)w->group, (long long)w->channel_hz, w->channel_millihertz,
        (long long)w->achieved_hz, w->achieved_millihertz, {values});
}}
int main(void) {{
    int i, j;
    for (i = 0; i < {upper}_CHANNELS; i++) {{
        show(&{name}_channels[i]);
        for (j = 0; j < {upper}_REGISTERS; j++) printf("r %llx\n", (unsigned long long){name}_channel_registers[i][j]);
    }}
    for (i = 0; i < {upper}_VECTORS; i++) show(&{name}_vectors[i]);
    for (i = 0; i < {upper}_AVOIDED; i++)
        printf("a %lld %lld %s\n", (long long){name}_avoided[i].start_hz, (long long){name}_avoided[i].stop_hz,
            {name}_avoided[i].reason);
    printf("%s %s %u\n", {upper}_SCHEMA, {upper}_PLAN_SHA256, (unsigned)sizeof {name}_vector_registers[0]);
    return 0;
}}
"#
    )
}

#[test]
fn a_c_program_reads_the_header_back() {
    let mut words = 0;
    let with_void = format!("{LIST}\n[[channels]]\nname = \"void\"\nlist = [\"500 MHz\"]\n");
    let void = survey(&plan("1000", &with_void), &|_| {}).unwrap();
    let wide = survey(&plan("\"2^48\"", ONE), &|_| {}).unwrap();
    let cases = [
        (&*DEMO, None, "thornmap_demo"),
        (&small("1000"), None, "thornmap_7_small_plan"),
        // The widest words there are.
        (&wide, None, "thornmap_7_small_plan"),
        // A group without any legal word: its array holds no row.
        (&void, Some("void"), "thornmap_7_small_plan"),
    ];
    for (result, group, name) in cases {
        let plan = &result.plan;
        let found = export(result, group, Some(&map())).unwrap();
        let folder = tempfile::TempDir::new().unwrap();
        let header = text(&found, FirmwareFormat::CHeader);
        assert!(!header.contains("float") && !header.contains("double "), "no floats");
        assert!(header.contains("verify on hardware") && header.contains(&plan.sha256));
        std::fs::write(folder.path().join("words.h"), header).unwrap();
        let printed = compiled(folder.path(), &reading_program(name));
        let row = |group: usize, at: RoundedHz, achieved: RoundedHz, word: &DriverWord| {
            let values: Vec<String> = FIELDS.iter().map(|field| (field.value)(word).to_string()).collect();
            format!("{group} {} {} {} {} {}", at.hz, at.millihertz, achieved.hz, achieved.millihertz, values.join(" "))
        };
        let mut want = Vec::new();
        for channel in found.channels.iter().filter(|channel| channel.legal) {
            let word = channel.word.as_ref().unwrap();
            want.push(row(channel.group_index, channel.channel_rounded, channel.achieved_rounded.unwrap(), word));
            want.extend(pack(&map(), word).iter().map(|value| format!("r {value:x}")));
            words += 1;
        }
        for vector in &found.vectors {
            let group = plan.groups.iter().position(|group| group.name == vector.group).unwrap();
            want.push(row(group, vector.channel_rounded, vector.achieved_rounded, &vector.word));
            words += 1;
        }
        for range in &found.avoided {
            let hz = |at| RoundedHz::of(at).unwrap().hz;
            want.push(format!("a {} {} {}: {}", hz(range.start), hz(range.stop), range.rules.join(" "), range.reason));
        }
        want.push(format!("thornmap.export/1 {} 16", plan.sha256));
        assert_eq!(printed.lines().collect::<Vec<_>>(), want);
    }
    // 500 MHz lies on an integer: that group has no vector for the nearest channel beside one.
    assert_eq!(words, (354 + 12) + (5 + 6) + (1 + 6) + 5);
}

/// A plan of one channel for the binary.
const PLAN_FILE: &str = r#"schema = 1
[reference]
frequency = "20 MHz"
[oscillator]
range = ["1.5 GHz", "2.0 GHz"]
gain = "30 MHz/V"
[modulator]
modulus = 1000
[detector]
current = "2 mA"
[loop]
bandwidth = "60 kHz"
phase_margin = "50 deg"
[[channels]]
list = ["1.708 GHz"]
"#;

#[test]
fn the_binary_writes_a_file_or_standard_output() {
    let folder = tempfile::TempDir::new().unwrap();
    std::fs::write(folder.path().join("plan.toml"), PLAN_FILE).unwrap();
    std::fs::write(folder.path().join("bits.toml"), MAP).unwrap();
    let run = |arguments: &[&str]| {
        assert_cmd::Command::cargo_bin("thornmap").unwrap().current_dir(folder.path()).args(arguments).output().unwrap()
    };
    let printed = run(&["export", "plan.toml", "--as", "csv"]);
    assert_eq!(printed.status.code(), Some(0), "{}", String::from_utf8_lossy(&printed.stderr));
    let written = run(&["export", "plan.toml", "--as", "csv", "--out", "words.csv"]);
    assert_eq!(written.status.code(), Some(0));
    assert!(written.stdout.is_empty());
    assert_eq!(std::fs::read(folder.path().join("words.csv")).unwrap(), printed.stdout);
    assert!(
        std::fs::read_dir(folder.path())
            .unwrap()
            .all(|entry| { !entry.unwrap().file_name().to_string_lossy().ends_with(".part") })
    );
    assert_eq!(run(&["export", "plan.toml", "--as", "csv", "--out", "."]).status.code(), Some(1));
    assert_eq!(run(&["export", "plan.toml", "--as", "json", "--map", "absent.toml"]).status.code(), Some(1));
    assert_eq!(run(&["export", "plan.toml", "--as", "json", "--group", "none"]).status.code(), Some(2));
    assert_eq!(run(&["export", "plan.toml", "--as", "json", "--map", "bits.toml"]).status.code(), Some(0));
    std::fs::write(folder.path().join("bits.toml"), MAP.replace("msb = 43\nlsb = 0", "msb = 3\nlsb = 0")).unwrap();
    let narrow = run(&["export", "plan.toml", "--as", "json", "--map", "bits.toml"]);
    assert_eq!(narrow.status.code(), Some(2));
    assert!(String::from_utf8_lossy(&narrow.stderr).contains("\"k\" is too narrow"));
}
