//! Every default that applies is filled in and listed; every given figure is listed with its basis.

use thornmap::base::{Basis, Frequency};
use thornmap::modulator::{Dither, ModulusRule, Structure};
use thornmap::plan::{ChannelList, Guard, LoopEdge, LoopPlan, keys};

use super::{PLAIN, changed, valid};

/// The plan with nothing but what must be given.
fn bare() -> String {
    let mut text = PLAIN.to_owned();
    for line in [
        "[plan]\ntitle = \"small\"\n",
        "[divider]\noutput = [4]\n",
        "[modulator]\norder = 3\n",
        "[boundary]\nlargest_q = 3\n",
        "[limits]\nmargin = \"6 dB\"\n",
        "name = \"a\"\n",
        "[analysis]\nrecord = 4096\n",
    ] {
        assert!(text.contains(line), "{line}");
        text = text.replace(line, "");
    }
    text
}

#[test]
fn defaults_are_those_of_the_interface() {
    let plan = valid(&bare());
    assert_eq!(plan.identity.title, "stem");
    assert_eq!(plan.identity.revision, None);
    assert!(!plan.reference.doubler);
    assert_eq!(plan.reference.divider, 1);
    assert_eq!((plan.reference.tolerance, plan.reference.noise.is_some()), (None, false));
    assert!(plan.oscillator.noise.is_none());
    assert_eq!((plan.divider.minimum, plan.divider.maximum), (1, None));
    assert_eq!(plan.divider.output, [1]);
    assert_eq!(plan.divider.floor_dbc_per_hz, None);
    let settings = &plan.modulator.settings;
    assert_eq!((settings.structure, settings.order), (Structure::Mash, 3));
    assert_eq!((settings.seeds.as_slice(), settings.dither), ([1].as_slice(), Dither::None));
    assert!(!settings.runs_at_zero && settings.noise_transfer.is_none());
    assert!(matches!(plan.modulator.modulus, ModulusRule::Fixed(modulus) if modulus.get() == 1 << 24));
    assert!(plan.detector.mismatch.is_none() && plan.detector.leakage_a.is_none());
    assert!(plan.detector.maximum_frequency.is_none() && plan.detector.floor_dbc_per_hz.is_none());
    let zeros = [plan.detector.dead_zone_s, plan.detector.offset_current_a, plan.detector.quadratic_per_cycle];
    assert_eq!(zeros, [0.0; 3]);
    assert_eq!(plan.boundary.edge, LoopEdge::UnityGain);
    assert_eq!(plan.boundary.guard, Guard::LoopEdge);
    assert_eq!((plan.boundary.largest_q, plan.boundary.harmonics), (3, 5));
    assert!(plan.anchors.is_empty() && plan.clocks.is_empty());
    assert!(plan.limits.spur.is_none() && plan.limits.phase_error_deg.is_none());
    assert_eq!(plan.limits.margin_db, 6.0);
    assert_eq!(plan.limits.integration_hz, (1e3, 10e6));
    assert_eq!(plan.groups[0].name, "group 1");
    assert_eq!(plan.groups[0].injection, Frequency::from_whole_hz(0));
    assert_eq!(plan.groups[0].output_dividers, [1]);
    assert_eq!((plan.analysis.record, plan.analysis.span_hz, plan.analysis.tone_floor_dbc), (131_072, 10e6, -120.0));
    let other = &plan.alternatives;
    assert_eq!(other.references, [plan.reference.frequency]);
    assert_eq!((other.dividers.as_slice(), other.doubler.as_slice()), ([1].as_slice(), [false].as_slice()));
    assert_eq!((other.orders.as_slice(), other.dithers.as_slice()), ([3].as_slice(), [Dither::None].as_slice()));
    assert!(other.injections.is_empty());
    assert_eq!(other.nudge, Frequency::from_whole_hz(0));
    let LoopPlan::Designed(design) = plan.loop_plan else { panic!("{:?}", plan.loop_plan) };
    assert_eq!((design.bandwidth_hz, design.phase_margin_deg, design.design_divider), (50e3, 50.0, None));
}

#[test]
fn every_default_of_the_key_table_is_listed() {
    let plan = valid(&bare());
    let listed = |key: &str| plan.assumptions.iter().filter(|a| a.key == key && a.basis == Basis::Default).count();
    let mut runs = 0;
    let single = keys::SECTIONS.iter().map(|(name, _)| (*name, (*name).to_owned()));
    let lists = [("channels", "channels[1]".to_owned())];
    for (section, path) in single.chain(lists) {
        for key in keys::keys_of(section).filter(|key| key.default.is_some()) {
            // The error filter belongs to one structure only.
            if (section, key.name) != ("modulator", "ntf") {
                assert_eq!(listed(&format!("{path}.{}", key.name)), 1, "{path}.{}", key.name);
                runs += 1;
            }
        }
    }
    assert!(runs >= 45, "{runs}");
    for list in ["anchor", "clock"] {
        assert_eq!(listed(list), 1, "{list}");
    }
    // Nothing is listed twice.
    let mut seen: Vec<&str> = plan.assumptions.iter().map(|a| a.key.as_str()).collect();
    let before = seen.len();
    seen.sort_unstable();
    seen.dedup();
    assert_eq!(seen.len(), before);
}

#[test]
fn half_the_pfd_frequency_bounds_span_and_integration() {
    let plan = valid(&changed("frequency = \"20 MHz\"", "frequency = \"20 MHz\"\ndivider = 4"));
    assert_eq!(plan.analysis.span_hz, 2.5e6);
    assert_eq!(plan.limits.integration_hz, (1e3, 2.5e6));
    let doubled = valid(&changed("frequency = \"20 MHz\"", "frequency = \"20 MHz\"\ndivider = 4\ndoubler = true"));
    assert_eq!(doubled.analysis.span_hz, 5e6);
    assert_eq!(doubled.reference.pfd().unwrap(), Frequency::from_whole_hz(10_000_000));
}

#[test]
fn given_figures_are_listed_with_basis_and_note() {
    let text =
        changed("current = \"1 mA\"", "current = { value = \"1 mA\", basis = \"measured\", note = \"two boards\" }")
            .replace("gain = \"30 MHz/V\"", "gain = { value = \"30 MHz/V\", basis = \"datasheet\" }");
    let plan = valid(&text);
    let find = |key: &str| plan.assumptions.iter().find(|a| a.key == key).unwrap_or_else(|| panic!("{key}"));
    let current = find("detector.current");
    assert_eq!((current.value.as_str(), current.basis), ("1 mA", Basis::Measured));
    assert_eq!(current.note.as_deref(), Some("two boards"));
    assert_eq!(find("oscillator.gain").basis, Basis::Datasheet);
    assert_eq!(find("reference.frequency").basis, Basis::Assumed);
    assert_eq!(plan.basis_of("detector.current"), Basis::Measured);
    assert_eq!(plan.basis_of("detector.leakage"), Basis::Default);
}

#[test]
fn a_group_takes_what_its_limits_leave_out_from_the_plan() {
    let text = changed("spacing = \"25 kHz\"", "spacing = \"25 kHz\"\nlimits = { phase_error = \"2 deg\" }")
        .replace("margin = \"6 dB\"", "margin = \"3 dB\"\nspur = [[\"1 kHz\", \"-40 dBc\"]]");
    let plan = valid(&text);
    let limits = &plan.groups[0].limits;
    assert_eq!((limits.phase_error_deg, limits.margin_db), (Some(2.0), 3.0));
    assert_eq!(limits.spur, plan.limits.spur);
    assert_eq!(plan.limits.phase_error_deg, None);
}

#[test]
fn a_last_channel_off_the_raster_is_a_warning_and_the_raster_stops_below() {
    let plan = valid(&changed("last = \"431 MHz\"", "last = \"431.01 MHz\""));
    let ChannelList::Raster { count, .. } = plan.groups[0].channels else { panic!("no raster") };
    assert_eq!(count, 41);
    assert!(
        plan.warnings.iter().any(|text| text.contains("431.01 MHz") && text.contains("431 MHz")),
        "{:?}",
        plan.warnings
    );
    assert!(valid(PLAIN).warnings.is_empty());
}

#[test]
fn the_hash_is_that_of_the_file() {
    // sha256sum of the three bytes "abc" is published in FIPS 180-2, appendix B.1; here the plan's own bytes matter.
    let (a, b) = (valid(PLAIN).sha256, valid(&format!("{PLAIN}# one more comment\n")).sha256);
    assert_eq!(a.len(), 64);
    assert!(a.bytes().all(|byte| byte.is_ascii_digit() || (b'a'..=b'f').contains(&byte)));
    assert_ne!(a, b);
}
