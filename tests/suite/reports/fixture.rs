//! An invented survey that shows every verdict, origin and gap; its figures are made up, not computed.

use std::collections::BTreeMap;

use num_bigint::BigUint;
use thornmap::assess::{
    BoundaryNear, ChannelResult, Contributions, Illegal, Method, Origin, Reason, Rule, Tone, Verdict,
};
use thornmap::base::{Assumption, Basis, Exact, Frequency};
use thornmap::loop_model::{FilterComponents, FilterDesign, NoisePoints};
use thornmap::modulator::{Dither, ModulatorSettings, Modulus, ModulusRule, Structure};
use thornmap::plan::{
    Alternatives, Analysis, Anchor, AnchorPlace, Boundary, ChannelGroup, ChannelList, Clock, Detector, Divider, Gain,
    Guard, Identity, Limits, LoopEdge, LoopPlan, Mask, Mechanism, MismatchPoints, ModulatorPlan, Oscillator,
    OscillatorNoise, Plan, Reference,
};
use thornmap::survey::{LoopSummary, MethodCheck, Range3, SpectrumView, Summary, SurveyResult};

/// Text that tries to leave its cell: markup, quotes, right-to-left marks, emoji, a formula.
pub const HOSTILE: &str = "=cmd|' /C calc'!A1 <script>alert(\"x\")</script> </style><img src=x onerror=alert(1)> & \u{202e}drow \u{1f335} {{ 7*7 }}";

/// PFD frequency of the fixture.
const PFD_HZ: f64 = 19_200_000.0;

/// A small deterministic source of fractions in 0 … 1.
struct Dice(u64);

impl Dice {
    fn roll(&mut self) -> f64 {
        self.0 = self.0.wrapping_mul(6_364_136_223_846_793_005).wrapping_add(1_442_695_040_888_963_407);
        (self.0 >> 11) as f64 / (1u64 << 53) as f64
    }
}

fn whole(hz: i128) -> Frequency {
    Frequency::from_whole_hz(hz)
}

fn limits() -> Limits {
    Limits {
        spur: Some(Mask { points: vec![(1e3, -45.0), (1e4, -60.0), (1e6, -75.0)] }),
        margin_db: 6.0,
        phase_error_deg: Some(1.5),
        integration_hz: (100.0, 1e7),
    }
}

fn groups(count: u64) -> Vec<ChannelGroup> {
    let raster = ChannelList::Raster { first: whole(433_075_000), spacing: whole(12_500), count };
    let odd = ChannelList::List(vec![Frequency::from_hz(Exact::new(1_300_000_000, 3).expect("not zero"))]);
    vec![
        ChannelGroup {
            name: "uplink".into(),
            channels: raster,
            injection: whole(-10_700_000),
            output_dividers: vec![4],
            limits: limits(),
        },
        ChannelGroup {
            name: HOSTILE.into(),
            channels: odd,
            injection: whole(0),
            output_dividers: vec![4, 8],
            limits: Limits { spur: None, margin_db: 3.0, phase_error_deg: None, integration_hz: (1e3, 9.6e6) },
        },
    ]
}

fn detector() -> Detector {
    Detector {
        current_a: 2.5e-3,
        mismatch: Some(MismatchPoints::Constant(0.02)),
        offset_current_a: 0.0,
        leakage_a: None,
        dead_zone_s: 0.0,
        quadratic_per_cycle: 0.0,
        cubic_per_cycle2: 0.0,
        table: None,
        reset_delay_s: None,
        offset_noise_a_per_rthz: None,
        pump_noise_a_per_rthz: None,
        floor_dbc_per_hz: Some(-226.0),
        flicker_dbc_per_hz: Some(-118.0),
        maximum_frequency: Some(whole(100_000_000)),
    }
}

/// Returns the invented plan.
pub fn plan(count: u64) -> Plan {
    let anchor = Anchor {
        mechanism: Mechanism::Detector,
        level_dbc: -52.0,
        place: AnchorPlace::Channel(whole(433_200_000)),
        q: 1,
        roll_off_db: 0.0,
        basis: Basis::Measured,
    };
    Plan {
        identity: Identity {
            title: "Petrel river gauges".into(),
            revision: Some("A".into()),
            prepared_by: Some(HOSTILE.into()),
            checked_by: None,
            approved_by: None,
            date: Some("2031-05-04".into()),
            notes: Some("Field trial of telemetry on the lower river; one radio per gauge.".into()),
        },
        reference: Reference {
            frequency: whole(19_200_000),
            doubler: false,
            divider: 1,
            tolerance: Some(2e-6),
            noise: NoisePoints::new(vec![(10.0, -95.0), (1e3, -145.0)]).ok(),
        },
        oscillator: Oscillator {
            range: (whole(1_650_000_000), whole(1_850_000_000)),
            gain: Gain::Constant(32e6),
            noise: NoisePoints::new(vec![(1e4, -88.0), (1e6, -133.0)]).ok().map(OscillatorNoise::Points),
            tuning: None,
            tuning_range_v: None,
        },
        divider: Divider { minimum: 24, maximum: Some(4095), output: vec![4], floor_dbc_per_hz: None },
        modulator: ModulatorPlan {
            settings: ModulatorSettings {
                structure: Structure::Mash,
                order: 3,
                seeds: vec![1, 0, 0],
                dither: Dither::None,
                noise_transfer: None,
                runs_at_zero: false,
            },
            modulus: ModulusRule::Fixed(Modulus::new(1 << 24).expect("in range")),
        },
        detector: detector(),
        loop_plan: LoopPlan::Designed(FilterDesign {
            bandwidth_hz: 60e3,
            phase_margin_deg: 50.0,
            design_divider: None,
            pole_ratios: (None, None),
        }),
        boundary: Boundary {
            edge: LoopEdge::UnityGain,
            guard: Guard::Offset(whole(100_000)),
            largest_q: 3,
            harmonics: 5,
        },
        anchors: vec![anchor],
        clocks: vec![Clock { name: "processor".into(), frequency: whole(48_000_000), anchor: None }],
        victims: Vec::new(),
        limits: limits(),
        groups: groups(count),
        alternatives: Alternatives {
            references: vec![whole(19_200_000)],
            dividers: vec![1],
            doubler: vec![false],
            orders: vec![3],
            dithers: vec![Dither::None],
            injections: Vec::new(),
            output_dividers: Vec::new(),
            seeds: Vec::new(),
            moduli: Vec::new(),
            offset_currents_a: Vec::new(),
            nudge: whole(0),
        },
        analysis: Analysis { record: 131_072, span_hz: 9.6e6, tone_floor_dbc: -120.0, level_uncertainty_db: 0.0 },
        assumptions: Vec::new(),
        basis: BTreeMap::new(),
        required: Vec::new(),
        warnings: Vec::new(),
        sha256: "5f3c9a".repeat(10) + "0123",
        stem: "petrel".into(),
    }
}

fn loop_shape(offset_hz: f64) -> f64 {
    -20.0 * (1.0 + (offset_hz / 7e4).powi(2)).log10()
}

fn coupled(harmonic: u64, offset_hz: f64, mask: &Limits, known: bool, dice: &mut Dice) -> Tone {
    let level = -52.0 + loop_shape(offset_hz) - 1.3 * dice.roll();
    let limit = mask.spur.as_ref().map(|mask| mask.limit_dbc(offset_hz));
    let part = level - 9.0 - 2.0 * dice.roll();
    let judged = if known { level } else { part };
    Tone {
        origin: if harmonic <= 3 { Origin::Boundary } else { Origin::Fractional },
        label: if harmonic <= 3 { format!("boundary, q = {harmonic}") } else { format!("fraction × {harmonic}") },
        harmonic: Some(harmonic),
        offset_hz,
        level_dbc: known.then_some(level),
        level_uncertainty_db: known.then_some(0.02),
        known_level_dbc: Some(judged),
        basis: if known { Basis::Measured } else { Basis::Assumed },
        p: (harmonic <= 3).then_some(90),
        q: (harmonic <= 3).then_some(harmonic),
        contributions: Contributions {
            coupling_dbc: known.then_some(level - 0.4),
            nonlinearity_dbc: Some(part),
            modulator_dbc: Some(part - 31.0),
            leakage_dbc: None,
            clock_dbc: None,
        },
        limit_dbc: limit,
        margin_db: limit.map(|limit| limit - judged),
        inside_loop: offset_hz <= 61e3,
        inside_guard: offset_hz <= 1e5,
        after_loop: false,
        family_known: true,
        residue: None,
        victims: Vec::new(),
        unknown: if known { Vec::new() } else { vec![format!("coupling: no anchor for q = {harmonic}")] },
    }
}

fn bare(origin: Origin, label: &str, offset_hz: f64, level_dbc: Option<f64>, mask: &Limits) -> Tone {
    let limit = mask.spur.as_ref().map(|mask| mask.limit_dbc(offset_hz));
    Tone {
        origin,
        label: label.into(),
        harmonic: (origin != Origin::SubFractional).then_some(1),
        offset_hz,
        level_dbc,
        level_uncertainty_db: None,
        known_level_dbc: level_dbc,
        basis: Basis::Default,
        p: None,
        q: None,
        contributions: Contributions { modulator_dbc: level_dbc, ..Contributions::default() },
        limit_dbc: limit,
        margin_db: limit.zip(level_dbc).map(|(limit, level)| limit - level),
        inside_loop: offset_hz <= 61e3,
        inside_guard: offset_hz <= 1e5,
        after_loop: false,
        family_known: true,
        residue: None,
        victims: Vec::new(),
        unknown: if level_dbc.is_none() { vec!["leakage: not given".into()] } else { Vec::new() },
    }
}

fn tones(k: u64, m: u64, mask: &Limits, dice: &mut Dice) -> Vec<Tone> {
    let mut tones = Vec::new();
    for harmonic in 1..=5u64 {
        let residue = (harmonic * k) % m;
        let offset_hz = residue.min(m - residue) as f64 / m as f64 * PFD_HZ;
        if offset_hz > 0.0 {
            tones.push(coupled(harmonic, offset_hz, mask, harmonic == 1, dice));
        }
    }
    tones.push(bare(Origin::SubFractional, "period line 17", 156.0 + 900.0 * dice.roll(), Some(-104.5), mask));
    tones.push(bare(Origin::Reference, "PFD frequency × 1", PFD_HZ, None, mask));
    tones.push(bare(Origin::Clock, "processor × 36", 4e5 + 1e6 * dice.roll(), None, mask));
    tones.sort_by(|a, b| a.offset_hz.total_cmp(&b.offset_hz));
    tones
}

fn nearest(k: u64, m: u64, q: u64) -> BoundaryNear {
    let residue = (q * k) % m;
    let tone_offset_hz = residue.min(m - residue) as f64 / m as f64 * PFD_HZ;
    BoundaryNear {
        family: "comparison",
        p: 90,
        q,
        tone_offset_hz,
        vco_distance_hz: tone_offset_hz / q as f64,
        inside_guard: tone_offset_hz <= 1e5,
        inside_loop: tone_offset_hz <= 61e3,
    }
}

/// Returns the rules that fire on these tones; simplified on purpose, the page only prints them.
fn reasons(tones: &[Tone], k: u64, m: u64, margin_db: f64) -> Vec<Reason> {
    let mut reasons = Vec::new();
    for tone in tones {
        let rule = match (tone.level_dbc, tone.margin_db) {
            (_, Some(margin)) if margin < 0.0 => Rule::B2,
            (None, _) if tone.offset_hz <= 1e5 => Rule::B3,
            (Some(_), Some(margin)) if margin < margin_db => Rule::M1,
            (Some(_), Some(_)) if tone.inside_loop && tone.origin == Origin::Boundary => Rule::M3,
            _ => continue,
        };
        reasons.push(Reason {
            rule,
            text: format!("{} at {:.1} kHz: {}", tone.label, tone.offset_hz / 1e3, rule.sentence()),
            k: Some(k),
            m: Some(m),
            q: tone.q,
            residue: Some(-1),
            offset_hz: Some(tone.offset_hz),
        });
    }
    reasons.sort_by_key(|reason| reason.rule);
    reasons
}

fn channel(group_index: usize, group: &ChannelGroup, index: u64, dice: &mut Dice) -> ChannelResult {
    let channel = group.channels.get(index).expect("inside the group");
    let output = Frequency::from_hz(channel.hz().plus(&group.injection.hz()).expect("small"));
    let divider = group.output_dividers[0];
    let vco_hz = output.to_f64_hz() * divider as f64;
    let m = 1u64 << 24;
    let cycles = Exact::new(i128::from(divider), 19_200_000).expect("not zero");
    let ratio = output.hz().times(&cycles).expect("small");
    let n = u64::try_from(ratio.floor()).expect("positive");
    let rest = ratio.minus(&Exact::from_integer(ratio.floor())).expect("small");
    let k = rest.times(&Exact::from_integer(i128::from(m))).expect("small").round_half_even();
    let k = u64::try_from(k).expect("positive");
    let tones = tones(k, m, &group.limits, dice);
    let reasons = reasons(&tones, k, m, group.limits.margin_db);
    let verdict = reasons.iter().map(|reason| reason.rule.verdict()).max().unwrap_or(Verdict::Clear);
    let boundaries: Vec<_> = (1..=3).map(|q| nearest(k, m, q)).filter(|b| b.inside_guard).collect();
    let boundary = (1..=3).map(|q| nearest(k, m, q)).min_by(|a, b| a.tone_offset_hz.total_cmp(&b.tone_offset_hz));
    let error = dice.roll() - 0.5;
    ChannelResult {
        group: group.name.clone(),
        group_index,
        index,
        channel_hz: channel.to_f64_hz(),
        channel,
        injection_hz: group.injection.to_f64_hz(),
        output_hz: output.to_f64_hz(),
        output,
        achieved_hz: Some(output.to_f64_hz() + error),
        error_hz: Some(error),
        error_ppb: Some(error / output.to_f64_hz() * 1e9),
        vco_hz: Some(vco_hz),
        reference_hz: PFD_HZ,
        doubler: false,
        reference_divider: 1,
        pfd_hz: PFD_HZ,
        output_divider: Some(divider),
        legal: true,
        illegal: Vec::new(),
        n: Some(n),
        k: Some(k),
        m: Some(m),
        k_reduced: Some(k),
        m_reduced: Some(m),
        period: "4700000000000000000001".parse::<BigUint>().ok(),
        period_is_exact: true,
        structure: Structure::Mash,
        order: 3,
        seeds: vec![1, 0, 0],
        seeds_reduced: false,
        unity_gain_hz: Some(60e3 + 900.0 * dice.roll()),
        phase_margin_deg: Some(49.9),
        closed_loop_3db_hz: Some(98_765.432_109_876),
        peaking_db: Some(2.7),
        tuning_v: None,
        guard_hz: Some(1e5),
        loop_edge_hz: Some(60e3 + 900.0 * dice.roll()),
        boundary,
        boundaries,
        unknown_tones: tones.iter().filter(|tone| tone.level_dbc.is_none()).count(),
        tones,
        tones_below_floor: 2,
        method: Method::SharedCurve,
        phase_error_deg: Some(0.61),
        phase_error_with_tones_deg: None,
        phase_error_known_deg: Some(0.74),
        noise_unknown: vec!["leakage".into()],
        jitter_s: Some(4.012_345_678_901_2e-12),
        residual_fm_hz: Some(41.5),
        evm_percent: None,
        verdict,
        verdict_best: None,
        verdict_worst: None,
        reasons,
        warnings: Vec::new(),
    }
}

/// Turns a channel into one without a legal word: nothing is known beyond its frequencies.
fn without_word(channel: &mut ChannelResult) {
    channel.legal = false;
    channel.illegal = vec![Illegal {
        limit: "oscillator range, upper end".into(),
        value: 1_861_600_000.0,
        bound: 1_850_000_000.0,
        missed_by: 11_600_000.0,
        unit: "Hz",
    }];
    (channel.achieved_hz, channel.error_hz, channel.error_ppb, channel.vco_hz) = (None, None, None, None);
    (channel.n, channel.k, channel.m, channel.k_reduced, channel.m_reduced) = (None, None, None, None, None);
    (channel.output_divider, channel.period, channel.period_is_exact) = (None, None, false);
    (channel.unity_gain_hz, channel.phase_margin_deg, channel.closed_loop_3db_hz) = (None, None, None);
    (channel.peaking_db, channel.guard_hz, channel.loop_edge_hz, channel.boundary) = (None, None, None, None);
    (channel.phase_error_deg, channel.phase_error_known_deg, channel.jitter_s) = (None, None, None);
    (channel.residual_fm_hz, channel.unknown_tones, channel.tones_below_floor) = (None, 0, 0);
    channel.boundaries.clear();
    channel.tones.clear();
    channel.verdict = Verdict::Bad;
    channel.reasons = vec![Reason {
        rule: Rule::B1,
        text: "no legal word: oscillator range, upper end, missed by 11.6 MHz".into(),
        k: None,
        m: None,
        q: None,
        residue: None,
        offset_hz: None,
    }];
}

fn spectrum(channel: usize) -> SpectrumView {
    let mut dice = Dice(7);
    let mut view = SpectrumView { channel, ..SpectrumView::default() };
    for step in 0..20_000u32 {
        let offset = 1e3 * 9_600f64.powf(f64::from(step) / 19_999.0);
        let shape = (2.0 * (std::f64::consts::PI * offset / PFD_HZ).sin()).powi(4);
        let formula = 10.0 * ((2.0 * std::f64::consts::PI).powi(2) / (12.0 * PFD_HZ) * shape).log10();
        view.offset_hz.push(offset);
        view.formula_dbc_per_hz.push(Some(formula));
        view.sequence_dbc_per_hz.push((step % 97 != 0).then(|| formula + 6.0 * (dice.roll() - 0.6)));
        let after = formula + loop_shape(offset) * 1.6 - 12.04;
        view.modulator_dbc_per_hz.push(Some(after));
        view.total_dbc_per_hz.push(None);
    }
    view
}

fn assumption(key: &str, value: &str, basis: Basis, note: Option<&str>) -> Assumption {
    Assumption { key: key.into(), value: value.into(), basis, note: note.map(Into::into) }
}

fn summary(channels: &[ChannelResult]) -> Summary {
    let count = |verdict| channels.iter().filter(|channel| channel.verdict == verdict).count() as u64;
    let fired = |rule| channels.iter().filter(|c| c.reasons.iter().any(|reason| reason.rule == rule)).count() as u64;
    Summary {
        channels: channels.len() as u64,
        clear: count(Verdict::Clear),
        marginal: count(Verdict::Marginal),
        bad: count(Verdict::Bad),
        illegal: channels.iter().filter(|channel| !channel.legal).count() as u64,
        unknown_tones: channels.iter().map(|channel| channel.unknown_tones as u64).sum(),
        reasons: Rule::ALL.into_iter().map(|rule| (rule, fired(rule))).filter(|(_, fired)| *fired > 0).collect(),
    }
}

/// Returns an invented survey of `count` raster channels and one odd one.
pub fn survey(count: u64) -> SurveyResult {
    let plan = plan(count);
    let mut dice = Dice(1);
    let mut channels = Vec::new();
    for (group_index, group) in plan.groups.iter().enumerate() {
        for index in 0..group.channels.len() {
            channels.push(channel(group_index, group, index, &mut dice));
        }
    }
    let last = channels.len() - 2;
    without_word(&mut channels[last]);
    channels[0].warnings.push("the loop edge is above a twentieth of the PFD frequency".into());
    channels[1].reasons.push(Reason {
        rule: Rule::M5,
        text: HOSTILE.repeat(3),
        k: None,
        m: None,
        q: None,
        residue: None,
        offset_hz: None,
    });
    let worst = channels.iter().position(|c| c.verdict == Verdict::Bad && c.legal).unwrap_or(0);
    SurveyResult {
        assumptions: vec![
            assumption("reference.frequency", "19.2 MHz", Basis::Datasheet, None),
            assumption("anchor.1.level", "-52 dBc", Basis::Measured, Some("433.2 MHz, RBW 100 Hz")),
            assumption("detector.mismatch", "2 %", Basis::Assumed, Some(HOSTILE)),
            assumption("boundary.largest_q", "3", Basis::Default, None),
            assumption("oscillator.noise above 1 MHz", "−20 dB/decade", Basis::Extrapolated, None),
        ],
        conventions: vec![
            ("levels", "dBc at the output, one sideband, relative to the carrier"),
            ("guards", "act on the tone offset and are inclusive"),
        ],
        loop_summary: LoopSummary {
            components: Some(FilterComponents {
                c1_farad: Some(1.2e-9),
                r2_ohm: 512.25,
                c2_farad: 14.7e-9,
                r3_c3: None,
                r4_c4: None,
            }),
            design_divider: Some(88.25),
            unity_gain_hz: Some(Range3 { minimum: 59_800.0, design: 60_000.0, maximum: 60_912.345_678_901_2 }),
            phase_margin_deg: Some(Range3 { minimum: 49.7, design: 50.0, maximum: 50.0 }),
        },
        summary: summary(&channels),
        method_check: MethodCheck { channels: 8, worst_difference_db: Some(0.012_345_6) },
        spectrum: Some(spectrum(worst)),
        warnings: vec!["leakage is unknown: the level of every reference tone is unknown".into()],
        plan,
        channels,
    }
}
