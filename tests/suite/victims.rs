//! Victims and tolerances: who a tone hits, whose limit holds, and verdicts that flip within what is stated.

use thornmap::assess::{ChannelResult, Rule, Setup, Verdict};
use thornmap::plan::{Plan, parse_plan};

/// One channel 50 kHz above 85 × 20 MHz, anchor −60 dBc there, mask −55 dBc: the tone passes by 5 dB.
fn plan(tolerance: &str, more: &str) -> Plan {
    let text = format!(
        r#"schema = 1
[reference]
frequency = "20 MHz"
{tolerance}
[oscillator]
range = ["1.5 GHz", "2.0 GHz"]
gain = "30 MHz/V"
[modulator]
modulus = {{ step = "1 kHz" }}
[detector]
current = "2 mA"
mismatch = "0 %"
leakage = "1 pA"
[loop]
bandwidth = "60 kHz"
phase_margin = "50 deg"
[boundary]
guard = "10 kHz"
largest_q = 1
harmonics = 1
[[anchor]]
mechanism = "detector"
level = "-60 dBc"
at = "1.70005 GHz"
[limits]
spur = [["1 kHz", "-55 dBc"]]
margin = "4 dB"
[[channels]]
list = ["1.70005 GHz"]
{more}
"#
    );
    parse_plan(&text, "victims", &|_| Err("none".to_owned())).unwrap_or_else(|problems| panic!("{problems:?}"))
}

fn assessed(plan: &Plan) -> ChannelResult {
    let setup = Setup::new(plan).unwrap();
    setup.assess_index(0, 0, &mut setup.scratch()).unwrap()
}

#[test]
fn the_stricter_of_mask_and_victim_holds_and_the_victim_is_named() {
    let near = |victims: &str| {
        let channel = assessed(&plan("", victims));
        let tone = channel.tones.iter().find(|tone| tone.offset_hz == 50e3).unwrap().clone();
        (tone.victims, tone.limit_dbc.unwrap(), channel.verdict, channel.reasons)
    };
    let (victims, limit, verdict, _) = near("");
    assert!(victims.is_empty() && limit == -55.0);
    assert_eq!(verdict, Verdict::Marginal, "inside the loop, passes by 5 dB: M3");
    // Offsets, band (the tone below the carrier is hit too), and both edges inclusive.
    for (victim, hits) in [
        ("offsets = [\"40 kHz\", \"50 kHz\"]", true),
        ("offsets = [\"50 kHz\", \"60 kHz\"]", true),
        ("offsets = [\"50.001 kHz\", \"60 kHz\"]", false),
        ("offsets = [\"51 kHz\", \"60 kHz\"]\nwidth = \"2 kHz\"", true),
        ("offsets = [\"51.001 kHz\", \"60 kHz\"]\nwidth = \"2 kHz\"", false),
        ("band = [\"1700.1 MHz\", \"1701 MHz\"]", true),
        ("band = [\"1699 MHz\", \"1700 MHz\"]", true),
        ("band = [\"1700.001 MHz\", \"1700.099 MHz\"]", false),
    ] {
        let (victims, limit, verdict, reasons) =
            near(&format!("[[victim]]\nname = \"pager\"\nlimit = \"-70 dBc\"\n{victim}"));
        assert_eq!(victims == ["pager"], hits, "{victim}");
        assert_eq!(limit, if hits { -70.0 } else { -55.0 }, "{victim}");
        assert_eq!(verdict == Verdict::Bad, hits, "{victim}");
        if hits {
            assert_eq!(reasons[0].rule, Rule::B2);
            assert!(reasons[0].text.contains("hits pager"), "{}", reasons[0].text);
        }
    }
    // A weaker limit changes nothing but the name; without a limit as well.
    for limit in ["limit = \"-40 dBc\"", ""] {
        let (victims, held, verdict, _) =
            near(&format!("[[victim]]\nname = \"weak\"\n{limit}\noffsets = [\"1 kHz\", \"100 kHz\"]"));
        assert_eq!((victims.as_slice(), held, verdict), (&["weak".to_owned()][..], -55.0, Verdict::Marginal));
    }
}

#[test]
fn a_verdict_that_flips_within_the_tolerances_says_so() {
    let range = |tolerance: &str, more: &str| {
        let channel = assessed(&plan(tolerance, more));
        let says = channel.warnings.iter().any(|text| text.contains("within the stated tolerances"));
        (channel.verdict, channel.verdict_best, channel.verdict_worst, says)
    };
    let (marginal, bad) = (Verdict::Marginal, Verdict::Bad);
    // Nothing stated: nothing claimed.
    assert_eq!(range("", ""), (marginal, None, None, false));
    // The tone passes by 5 dB; the mask is missed from 5.0 dB of uncertainty on.
    let uncertain = |db: &str| range("", &format!("[analysis]\nlevel_uncertainty = \"{db} dB\""));
    assert_eq!(uncertain("4.9"), (marginal, Some(marginal), Some(marginal), false));
    assert_eq!(uncertain("5.1"), (marginal, Some(marginal), Some(bad), true));
}

#[test]
fn a_reference_tolerance_moves_tones_across_the_guard() {
    // No anchor covers q = 1 here: a tone of unknown level, 50 kHz, against a guard one hertz short of it.
    let at = |guard: &str, ppm: &str| {
        let mut plan = plan(&format!("tolerance = \"{ppm} ppm\""), "");
        plan.anchors.clear();
        let text_guard = thornmap::base::parse_quantity(guard, thornmap::base::Dimension::Frequency).unwrap();
        plan.boundary.guard = thornmap::plan::Guard::Offset(thornmap::base::Frequency::from_hz(text_guard));
        let channel = assessed(&plan);
        (channel.verdict, channel.verdict_best, channel.verdict_worst)
    };
    let (marginal, bad) = (Verdict::Marginal, Verdict::Bad);
    // 20 ppm of 50 kHz is 1 Hz. Outside the guard by 1 Hz: M2 (inside the loop edge), B3 within the tolerance.
    assert_eq!(at("49.999 kHz", "19"), (marginal, Some(marginal), Some(marginal)));
    assert_eq!(at("49.999 kHz", "21"), (marginal, Some(marginal), Some(bad)));
    assert_eq!(at("50 kHz", "1"), (bad, Some(marginal), Some(bad)));
    assert_eq!(at("50.001 kHz", "19"), (bad, Some(bad), Some(bad)));
    assert_eq!(at("50.001 kHz", "21"), (bad, Some(marginal), Some(bad)));
}

#[test]
fn a_victim_without_a_place_is_refused() {
    let text = thornmap::plan::example_plan()
        .replace("# [[victim]]\n", "[[victim]]\n")
        .replace("# name = \"adjacent channel\"", "name = \"nobody\"");
    let problems = parse_plan(&text, "victims", &|_| Err("none".to_owned())).unwrap_err();
    assert!(problems.iter().any(|problem| problem.text.contains("give offsets or band")), "{problems:?}");
}
