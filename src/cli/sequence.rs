//! `sequence`: one modulator run, written or captured.

use std::fs;
use std::path::Path;

use crate::assess::{
    Capture, CaptureTone, Search, SequenceFacts, Setup, best_seeds, captured_tones, edge_of, place, recognise,
    sequence_facts,
};
use crate::base::Frequency;
use crate::modulator::{Dither, ModulatorConfig, ModulatorSettings, Modulus, ModulusRule, Structure, start};
use crate::plan::Plan;
use crate::report::{
    OffsetScale, SequenceForm, capture_json, capture_text, read_capture, seeds_text, sequence_bytes, sequence_json,
    sequence_plot, sequence_text,
};
use crate::spectrum::FftStage;

use super::arguments::SequenceArguments;
use super::channel::{frequency, not_held};
use super::failure::Failure;
use super::modulator_words::{dither, modulus, structure};
use super::output::{self, Voice};
use super::plan_file;
use super::progress::Bar;
use super::survey::{assess_failure, report_failure};

/// A modulator to run, and what is known around it.
struct Subject {
    settings: ModulatorSettings,
    modulus: Modulus,
    k: u64,
    rate_hz: Option<f64>,
    edge_hz: Option<f64>,
}

/// A plan's channel.
struct Placed {
    plan: Plan,
    group: usize,
    channel: Frequency,
}

/// Runs `sequence`.
///
/// # Errors
/// `Failure` with the exit status that fits.
pub fn run(arguments: &SequenceArguments) -> Result<(), Failure> {
    let placed = placed(arguments)?;
    match &arguments.read {
        Some(path) => run_capture(path, placed.as_ref(), arguments),
        None => run_modulator(placed.as_ref(), arguments),
    }
}

fn placed(arguments: &SequenceArguments) -> Result<Option<Placed>, Failure> {
    let (Some(path), Some(typed)) = (&arguments.plan, &arguments.frequency) else { return Ok(None) };
    let plan = plan_file::read(path)?;
    let channel = frequency("FREQUENCY", typed)?;
    let group = arguments.group.as_deref();
    match plan.locate(channel, group) {
        Some((group, _)) => Ok(Some(Placed { plan, group, channel })),
        None => Err(Failure::Content(not_held(&plan, channel, group))),
    }
}

fn refused(error: impl std::fmt::Display) -> Failure {
    Failure::Content(format!("error: {error}"))
}

fn run_modulator(placed: Option<&Placed>, arguments: &SequenceArguments) -> Result<(), Failure> {
    let subject = subject(placed, arguments)?;
    // The whole form is checked before any work.
    let form = arguments.write.as_ref().map(|path| form_of(path)).transpose()?;
    let config = ModulatorConfig::new(&subject.settings, subject.modulus, subject.k, true).map_err(refused)?;
    let voice = Voice::from_quiet(arguments.quiet);
    let fft = FftStage::new();
    let facts = sequence_facts(&config, arguments.length, &fft).map_err(refused)?;
    let seeds = match arguments.best_seed {
        None => Vec::new(),
        Some(count) => {
            let within_hz = match &arguments.within {
                Some(typed) => Some(frequency("--within", typed)?.to_f64_hz()),
                None => subject.edge_hz,
            };
            let edge_share = match (within_hz, subject.rate_hz) {
                (Some(within_hz), Some(rate_hz)) => within_hz / rate_hz,
                (Some(_), None) => {
                    return Err(refused("--within needs --rate: offsets are shares of the PFD frequency"));
                }
                (None, _) => 0.5,
            };
            let bar = Bar::new(count.min(subject.modulus.get()), "seeds", voice);
            let tried =
                best_seeds(&subject.settings, subject.modulus, subject.k, (count, edge_share), &|| bar.advance(1))
                    .map_err(refused)?;
            bar.finish();
            tried
        }
    };
    if let (Some(path), Some(form)) = (&arguments.write, form) {
        write_outputs(path, form, &facts)?;
        voice.say(&format!("{} outputs written to {}", facts.samples, path.display()));
    }
    if let Some(path) = &arguments.plot {
        match sequence_plot(&facts, subject.rate_hz).map_err(report_failure)? {
            Some(picture) => save(path, picture.as_bytes())?,
            None => voice.say("no spectrum to draw: the modulator stands still"),
        }
    }
    let scale = OffsetScale { rate_hz: subject.rate_hz, edge_hz: subject.edge_hz };
    if arguments.json {
        return output::print(&sequence_json(&facts, scale, &seeds).map_err(report_failure)?);
    }
    let mut text = sequence_text(&facts, scale);
    if !seeds.is_empty() {
        text.push_str(&seeds_text(&seeds, subject.rate_hz));
    }
    output::print(&text)
}

/// Returns the modulator of the word or the channel, with the options on top.
fn subject(placed: Option<&Placed>, arguments: &SequenceArguments) -> Result<Subject, Failure> {
    let base = match placed {
        Some(placed) => from_plan(placed)?,
        None => from_word(arguments)?,
    };
    let mut settings = base.settings;
    if let Some(name) = &arguments.structure {
        settings.structure = structure(name)?;
        settings.noise_transfer = None;
    }
    if let Some(order) = arguments.order {
        settings.order = order;
        settings.seeds.truncate(usize::from(order));
    } else if settings.structure == Structure::Integer {
        settings.order = 0;
        settings.seeds.clear();
    }
    if let Some(seeds) = &arguments.seeds {
        settings.seeds.clone_from(seeds);
    }
    if let Some(typed) = &arguments.dither {
        settings.dither = dither(typed)?;
    }
    if let Some(coefficients) = &arguments.ntf {
        settings.noise_transfer = Some(coefficients.clone());
    }
    settings.check().map_err(refused)?;
    let rule = ModulusRule::Fixed(base.modulus).working(settings.structure).map_err(refused)?;
    let ModulusRule::Fixed(modulus) = rule else { return Err(refused("the modulus is not fixed")) };
    let rate_hz = match &arguments.rate {
        Some(typed) => Some(frequency("--rate", typed)?.to_f64_hz()),
        None => base.rate_hz,
    };
    Ok(Subject { settings, modulus, rate_hz, ..base })
}

fn from_plan(placed: &Placed) -> Result<Subject, Failure> {
    let Placed { plan, group, channel } = placed;
    let setup = Setup::new(plan).map_err(|error| assess_failure(plan, &error))?;
    let placement = place(plan, &plan.groups[*group], *channel).map_err(refused)?;
    if let Some(miss) = placement.illegal.first() {
        return Err(refused(format!("channel {channel} has no legal word: {}", miss.limit)));
    }
    let response = setup.response(&placement).map_err(refused)?;
    Ok(Subject {
        settings: ModulatorSettings { seeds: placement.modulator.seeds().to_vec(), ..plan.modulator.settings.clone() },
        modulus: placement.word.modulus,
        k: placement.word.k,
        rate_hz: Some(setup.pfd().to_f64_hz()),
        edge_hz: edge_of(plan.boundary.edge, &response),
    })
}

fn from_word(arguments: &SequenceArguments) -> Result<Subject, Failure> {
    let typed = arguments.word.as_deref().unwrap_or_default();
    let wrong = || refused(format!("--word \"{typed}\": expected K/M, as in 77/512 or 77/2^9"));
    let (k, m) = typed.split_once('/').ok_or_else(wrong)?;
    let k: u64 = k.trim().parse().map_err(|_| wrong())?;
    let modulus = modulus("--word", m)?;
    if k >= modulus.get() {
        return Err(refused(format!("--word \"{typed}\": K must be below M, 0 to {}", modulus.get() - 1)));
    }
    Ok(Subject {
        settings: ModulatorSettings {
            structure: Structure::Mash,
            order: 3,
            seeds: Vec::new(),
            dither: Dither::None,
            noise_transfer: None,
            runs_at_zero: false,
        },
        modulus,
        k,
        rate_hz: None,
        edge_hz: None,
    })
}

fn form_of(path: &Path) -> Result<SequenceForm, Failure> {
    SequenceForm::of(&path.to_string_lossy())
        .ok_or_else(|| refused(format!("--write {}: the ending must be .csv, .hex or .npy", path.display())))
}

/// Writes the outputs that the facts are about.
fn write_outputs(path: &Path, form: SequenceForm, facts: &SequenceFacts) -> Result<(), Failure> {
    let count = usize::try_from(facts.samples).map_err(refused)?;
    let mut outputs = vec![0; count];
    start(&facts.config).fill(&mut outputs);
    save(path, &sequence_bytes(form, &facts.config, &outputs))
}

fn save(path: &Path, bytes: &[u8]) -> Result<(), Failure> {
    fs::write(path, bytes)
        .map_err(|error| Failure::InputOutput(format!("error: {} cannot be written: {error}", path.display())))
}

fn run_capture(path: &Path, placed: Option<&Placed>, arguments: &SequenceArguments) -> Result<(), Failure> {
    let bytes = fs::read(path)
        .map_err(|error| Failure::InputOutput(format!("error: {} cannot be read: {error}", path.display())))?;
    let captured = read_capture(&bytes, arguments.column.as_deref())
        .map_err(|error| refused(format!("{}: {error}", path.display())))?;
    let own = placed.map(from_plan).transpose()?;
    let known = match (&arguments.modulus, &arguments.word, &own) {
        (Some(typed), ..) => Some(modulus("--modulus", typed)?.get()),
        (None, Some(_), _) => Some(from_word(arguments)?.modulus.get()),
        (None, None, Some(own)) => Some(own.modulus.get()),
        (None, None, None) => None,
    };
    let seeds = arguments.seeds.clone().or_else(|| own.as_ref().map(|own| own.settings.seeds.clone()));
    let given = arguments.dither.as_deref().map(dither).transpose()?;
    let search = Search {
        modulus: known,
        seeds: seeds.unwrap_or_default(),
        dither: given.or(own.map(|own| own.settings.dither)).filter(|dither| *dither != Dither::None),
        noise_transfer: arguments.ntf.clone(),
    };
    let capture = Capture::of(&captured, &FftStage::new()).map_err(refused)?;
    let recognition = recognise(&captured, &search);
    let tones: Option<Vec<CaptureTone>> = match placed {
        None => None,
        Some(Placed { plan, group, channel }) => {
            let failed = |error| assess_failure(plan, &error);
            let setup = Setup::new(plan).map_err(failed)?;
            let tones = captured_tones(&setup, *group, *channel, &captured).map_err(failed)?;
            if tones.is_none() {
                Voice::from_quiet(arguments.quiet)
                    .say("warning: the capture's mean is not that of the channel's word: no tones through the loop");
            }
            tones
        }
    };
    if arguments.json {
        output::print(&capture_json(&capture, &recognition, tones.as_deref()).map_err(report_failure)?)
    } else {
        output::print(&capture_text(&capture, &recognition, tones.as_deref()))
    }
}
