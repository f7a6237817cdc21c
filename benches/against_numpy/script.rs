//! The running Python script.

use std::env;
use std::io::{BufRead, BufReader, Write};
use std::path::Path;
use std::process::{Child, ChildStdin, ChildStdout, Command, Stdio};

use serde_json::Value;

use crate::survey::Job;

/// A Python process that answers one line for each command.
pub struct Script {
    process: Child,
    input: Option<ChildStdin>,
    output: BufReader<ChildStdout>,
    /// Versions of numpy and scipy.
    pub versions: String,
}

/// What the script found in one channel.
pub struct Found {
    /// Harmonic and level of each line in the band \[dBc\].
    pub levels: Vec<(usize, f64)>,
    /// Rms noise in the band.
    pub noise_rad: f64,
}

impl Script {
    /// Starts the script and waits until its pool is up; what is missing comes back as words.
    pub fn start(job: &Job) -> Result<Self, String> {
        let python = env::var("THORNMAP_PYTHON").unwrap_or_else(|_| "python3".to_owned());
        let path = Path::new(env!("CARGO_MANIFEST_DIR")).join("benches/against_numpy/exact_survey.py");
        let mut process =
            Command::new(&python).arg(path).stdin(Stdio::piped()).stdout(Stdio::piped()).spawn().map_err(|error| {
                format!("{python} does not start ({error}); install Python 3, or name one in THORNMAP_PYTHON")
            })?;
        let input = process.stdin.take();
        let output = BufReader::new(process.stdout.take().expect("standard output is piped"));
        let mut script = Self { process, input, output, versions: String::new() };
        let missing = || {
            format!(
                "{python} runs, but not the script: numpy or scipy is missing? `{python} -m pip install numpy scipy`"
            )
        };
        script.send(&job.to_json().to_string()).map_err(|_| missing())?;
        let hello: Value = serde_json::from_str(&script.receive()).map_err(|_| missing())?;
        let version = |name: &str| hello[name].as_str().unwrap_or("?").to_owned();
        script.versions = format!("numpy {} and scipy {}", version("numpy"), version("scipy"));
        Ok(script)
    }

    fn send(&mut self, line: &str) -> std::io::Result<()> {
        let input = self.input.as_mut().expect("standard input is piped and open");
        writeln!(input, "{line}")?;
        input.flush()
    }

    fn receive(&mut self) -> String {
        let mut line = String::new();
        self.output.read_line(&mut line).expect("the script answers in text");
        line
    }

    fn ask(&mut self, command: &str) -> String {
        self.send(command).expect("the script takes commands");
        self.receive()
    }

    /// Returns the seconds of one survey.
    pub fn time(&mut self, route: &str) -> f64 {
        self.ask(&format!("time {route}")).trim().parse().expect("seconds")
    }

    /// Returns the seconds of scipy's real FFT of the record.
    pub fn transform_s(&mut self) -> f64 {
        self.ask("fft").trim().parse().expect("seconds")
    }

    /// Returns what a survey finds.
    pub fn show(&mut self, route: &str) -> Vec<Found> {
        let found: Vec<(Vec<(usize, f64)>, f64)> =
            serde_json::from_str(&self.ask(&format!("show {route}"))).expect("levels and noise of each channel");
        found.into_iter().map(|(levels, noise_rad)| Found { levels, noise_rad }).collect()
    }
}

impl Drop for Script {
    fn drop(&mut self) {
        // The script and its pool end with their input.
        drop(self.input.take());
        let _ = self.process.wait();
    }
}
