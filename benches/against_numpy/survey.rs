//! The same survey through the library.

use std::f64::consts::TAU;
use std::sync::Arc;
use std::time::Instant;

use num_complex::Complex64;
use rayon::prelude::*;
use realfft::{RealFftPlanner, RealToComplex};
use serde_json::{Value, json};
use thornmap::modulator::{Dither, ModulatorConfig, ModulatorError, ModulatorSettings, Modulus, PhaseRun, Structure};
use thornmap::spectrum::{BandPlan, FftScratch, FftStage, RecordWindow, Window, sideband_dbc};
use thornmap::tones::{Charge, PhaseDensity, settle};

/// Samples of a record, as a survey takes by default.
const RECORD: usize = 131_072;
const MODULUS: u64 = 1 << 24;
const SEED: u64 = 1;
const MISMATCH: f64 = 0.02;
const HARMONICS: usize = 10;
const PFD_HZ: u64 = 26_000_000;
/// Highest offset of interest: a few loop bandwidths.
const BAND_HZ: u64 = 200_000;
/// Lowest bin whose noise is read: the window smears the mean over those below.
const FIRST_BIN: usize = 5;

/// One channel: its word and where the loop rests.
pub struct Channel {
    word: u64,
    offset_cycles: f64,
}

/// What is found in one channel.
#[derive(Debug, Clone, Copy)]
pub struct Surveyed {
    /// Level of each harmonic that lies in the band.
    pub levels_dbc: [Option<f64>; HARMONICS],
    /// Rms noise in the band.
    pub noise_rad: f64,
}

/// The channels and what they share.
pub struct Job {
    channels: Vec<Channel>,
    modulus: Modulus,
    settings: ModulatorSettings,
    stage: FftStage,
    window: RecordWindow,
    band: BandPlan,
    last_bin: usize,
    /// How a record becomes a spectrum.
    pub engine: Engine,
}

/// The ways of the library from a record to the low part of its spectrum.
#[derive(Debug, Clone, Copy, PartialEq, Eq)]
pub enum Engine {
    /// One real FFT of the whole record.
    Exact,
    /// Decimated on the fly, then a short FFT.
    Band,
}

impl Job {
    /// Returns channels near low fractions of the PFD frequency, each with lines in the band.
    pub fn new(count: usize) -> Self {
        let density = PhaseDensity::mash(3).unwrap();
        let mismatch = |p: f64| p + MISMATCH / 2.0 * p.abs();
        let charge = Charge::new(&mismatch, &[0.0]);
        let channels = (0..count as u64)
            .map(|index| {
                let q = 1 + index % 7;
                let p = (1 + index % 11) % q;
                // 3 kHz and more, an odd number of residues.
                let away = (MODULUS * (3000 + 211 * index) / PFD_HZ) | 1;
                let target = 0.02 + 1e-4 * index as f64;
                Channel {
                    word: MODULUS * p / q + away,
                    offset_cycles: settle(&density, charge, target).unwrap().offset_cycles,
                }
            })
            .collect();
        let last_bin = usize::try_from(BAND_HZ * RECORD as u64 / PFD_HZ).unwrap();
        let settings = ModulatorSettings {
            structure: Structure::Mash,
            order: 3,
            seeds: vec![SEED],
            dither: Dither::None,
            noise_transfer: None,
            runs_at_zero: false,
        };
        Self {
            channels,
            modulus: Modulus::new(MODULUS).unwrap(),
            settings,
            stage: FftStage::new(),
            window: RecordWindow::new(Window::FourTerm, RECORD),
            band: BandPlan::new(Window::FourTerm, RECORD, last_bin).expect("the band is narrow"),
            last_bin,
            engine: Engine::Exact,
        }
    }

    /// Returns what is measured, in one line.
    pub fn describe(&self) -> String {
        format!(
            "exact path: order 3, M = 2^24, record {RECORD}, four-term window, {HARMONICS} harmonics, noise in bins {FIRST_BIN} … {}",
            self.last_bin
        )
    }

    /// Returns the job as the script reads it.
    pub fn to_json(&self) -> Value {
        let channels: Vec<_> = self.channels.iter().map(|channel| (channel.word, channel.offset_cycles)).collect();
        json!({
            "record": RECORD, "modulus": MODULUS, "seed": SEED, "mismatch": MISMATCH, "harmonics": HARMONICS,
            "last_bin": self.last_bin, "cores": self.cores(), "channels": channels,
        })
    }

    /// Returns the cores that both sides use.
    pub fn cores(&self) -> usize {
        rayon::current_num_threads()
    }

    /// Returns the level of noise that reads as one line \[dBc\], from that of the whole band.
    pub fn noise_of_a_line_dbc(&self, noise_rad: f64) -> f64 {
        let bins = 2.0 * (self.last_bin - FIRST_BIN + 1) as f64 / Window::FourTerm.noise_bandwidth_bins();
        20.0 * (noise_rad / bins.sqrt()).log10()
    }

    /// Returns the channels.
    pub fn channels(&self) -> &[Channel] {
        &self.channels
    }

    /// Returns the buffers of one worker.
    pub fn worker(&self) -> FftScratch {
        FftScratch::new()
    }

    /// Surveys all channels on all cores.
    pub fn survey(&self) -> Vec<Surveyed> {
        self.channels.par_iter().map_init(|| self.worker(), |scratch, channel| self.channel(channel, scratch)).collect()
    }

    /// Surveys one channel.
    pub fn channel(&self, channel: &Channel, scratch: &mut FftScratch) -> Surveyed {
        let config = ModulatorConfig::new(&self.settings, self.modulus, channel.word, true).unwrap();
        let mut run = PhaseRun::new(&config).unwrap();
        let scale = 1.0 / MODULUS as f64;
        // The mean has a closed form for this order: one pass makes, centres, bends and weights the record.
        let shift = channel.offset_cycles - run.mean_numerator(RECORD as u64).unwrap() * scale;
        let bend = move |numerator: f64| {
            let error = numerator * scale + shift;
            error + MISMATCH / 2.0 * error.abs()
        };
        let source = |part: &mut [f64]| run.fill(part);
        match self.engine {
            Engine::Exact => {
                let found = self.stage.record::<ModulatorError>(&self.window, source, bend, scratch).unwrap();
                let noise = |residues: &[u64]| found.noise_power(FIRST_BIN, self.last_bin, residues, MODULUS);
                self.read(channel.word, &|residue| found.line(residue, MODULUS), &noise)
            }
            Engine::Band => {
                let found = self.stage.band::<ModulatorError>(&self.band, source, bend, scratch).unwrap();
                let noise = |residues: &[u64]| found.noise_power(FIRST_BIN, self.last_bin, residues, MODULUS);
                self.read(channel.word, &|residue| found.line(residue, MODULUS), &noise)
            }
        }
    }

    /// Reads levels and noise off a spectrum.
    fn read(&self, word: u64, line: &dyn Fn(u64) -> Complex64, noise_power: &dyn Fn(&[u64]) -> f64) -> Surveyed {
        let edge = self.last_bin as f64 * MODULUS as f64 / RECORD as f64;
        let (mut residues, mut count) = ([0; HARMONICS], 0);
        let mut levels_dbc = [None; HARMONICS];
        for (harmonic, level_dbc) in (1u64..).zip(&mut levels_dbc) {
            let residue = harmonic * word % MODULUS;
            let residue = residue.min(MODULUS - residue);
            if residue > 0 && residue as f64 <= edge {
                *level_dbc = sideband_dbc(line(residue).norm());
                (residues[count], count) = (residue, count + 1);
            }
        }
        Surveyed { levels_dbc, noise_rad: TAU * noise_power(&residues[..count]).sqrt() }
    }
}

/// The bare real FFT of the record.
pub struct Transform<'a> {
    job: &'a Job,
    plan: Arc<dyn RealToComplex<f64>>,
    input: Vec<f64>,
    output: Vec<Complex64>,
    work: Vec<Complex64>,
}

impl<'a> Transform<'a> {
    /// Returns a planned and warm transform.
    pub fn new(job: &'a Job) -> Self {
        let plan = RealFftPlanner::<f64>::new().plan_fft_forward(RECORD);
        let (input, output, work) = (plan.make_input_vec(), plan.make_output_vec(), plan.make_scratch_vec());
        let mut transform = Self { job, plan, input, output, work };
        transform.seconds();
        transform
    }

    /// Returns the seconds of one transform; its input, which it destroys, is written anew outside the clock.
    pub fn seconds(&mut self) -> f64 {
        self.input.copy_from_slice(self.job.window.weights());
        let begin = Instant::now();
        self.plan.process_with_scratch(&mut self.input, &mut self.output, &mut self.work).unwrap();
        let taken_s = begin.elapsed().as_secs_f64();
        std::hint::black_box(&self.output);
        taken_s
    }

    /// Returns the seconds of the shortest of `count` transforms.
    pub fn shortest_s(&mut self, count: usize) -> f64 {
        (0..count).map(|_| self.seconds()).fold(f64::INFINITY, f64::min)
    }
}
