//! Plan files: what is refused and where, what is filled in, what stays exact.

mod defaults;
mod forms;
mod random;
mod refusals;
mod schema;

use thornmap::plan::{Plan, PlanProblem, parse_plan};

/// A small valid plan that the checks change line by line.
const PLAIN: &str = r#"schema = 1
[plan]
title = "small"
[reference]
frequency = "20 MHz"
[oscillator]
range = ["1.6 GHz", "1.9 GHz"]
gain = "30 MHz/V"
[divider]
output = [4]
[modulator]
order = 3
[detector]
current = "1 mA"
[loop]
bandwidth = "50 kHz"
phase_margin = "50 deg"
[boundary]
largest_q = 3
[limits]
margin = "6 dB"
[[channels]]
name = "a"
first = "430 MHz"
last = "431 MHz"
spacing = "25 kHz"
[analysis]
record = 4096
"#;

/// Files beside the plan, by name.
fn load(name: &str) -> Result<String, String> {
    match name {
        "channels.csv" => Ok("channel,remark\n430.1 MHz,first\n1291/3 MHz,third\n".to_owned()),
        "channels_semicolon.csv" => Ok("remark;channel\nx;430.1 MHz\n".to_owned()),
        "no_column.csv" => Ok("frequency\n430 MHz\n".to_owned()),
        "no_unit.csv" => Ok("channel\n430 MHz\n431\n".to_owned()),
        "no_rows.csv" => Ok("channel\n".to_owned()),
        "empty.csv" => Ok(String::new()),
        "charge.csv" => Ok("time_s,charge_c\n-1e-9,-1e-12\n0,0\n1e-9,1.02e-12\n".to_owned()),
        "charge_falls.csv" => Ok("time_s,charge_c\n1e-9,1e-12\n0,0\n".to_owned()),
        "charge_nan.csv" => Ok("time_s,charge_c\n0,0\n1e-9,nan\n".to_owned()),
        "h.csv" => Ok("offset_hz,gain_db,phase_deg\n1e3,0,0\n1e5,-3,-45\n".to_owned()),
        "h_one.csv" => Ok("offset_hz,gain_db,phase_deg\n1e3,0,0\n".to_owned()),
        _ => Err("no such file".to_owned()),
    }
}

fn read(text: &str) -> Result<Plan, Vec<PlanProblem>> {
    parse_plan(text, "stem", &load)
}

/// Returns the plan of a text that must be valid.
fn valid(text: &str) -> Plan {
    read(text).unwrap_or_else(|problems| panic!("{text}\n{problems:#?}"))
}

/// Returns the small plan with one line replaced; the line must be there.
fn changed(from: &str, to: &str) -> String {
    assert_eq!(PLAIN.matches(from).count(), 1, "{from} must stand once in the small plan");
    PLAIN.replace(from, to)
}
