//! What can be typed.

use std::path::PathBuf;

use clap::{Args, Parser, Subcommand, ValueEnum, ValueHint};

/// Maps the thorns, the spurious tones, in a fractional-N channel plan.
///
/// Exit status: 0 done; 1 a file or folder cannot be read or written; 2 arguments or plan unusable;
/// 3 everything written and --fail-on met.
#[derive(Debug, Parser)]
#[command(name = "thornmap", version, max_term_width = 100, arg_required_else_help = true)]
pub struct Arguments {
    /// What to do.
    #[command(subcommand)]
    pub command: Command,
}

/// The commands.
#[derive(Debug, Subcommand)]
pub enum Command {
    /// Survey a whole plan: words, tones, noise, verdicts; write the report set
    Survey(SurveyArguments),
    /// Show one channel in full, with the proof of its verdict
    Channel(ChannelArguments),
    /// Run one modulator: exact period, mean, range, histogram, spectrum; write the sequence, or read a captured one
    Sequence(Box<SequenceArguments>),
    /// Weigh modulators on a plan: structures, orders, dithers, seeds, moduli; ranked with reasons
    Compare(CompareArguments),
    /// Find the cheapest cure of each bad channel, and the smallest set of PFD frequencies that leaves none bad
    Remedy(RemedyArguments),
    /// Simulate a channel in time beside its prediction; with --step its settling
    Simulate(SimulateArguments),
    /// Rank the mechanisms that put a tone at an offset, and name the experiment that tells them apart
    Identify(IdentifyArguments),
    /// List the fewest channels to measure that show everything the verdicts rely on
    Measure(MeasureArguments),
    /// Feed measured tones back: residuals, fitted anchors and mismatch with intervals, a plan with them
    Calibrate(CalibrateArguments),
    /// Write words, avoided ranges and driver test vectors for firmware
    Export(ExportArguments),
    /// Show what changed between two surveys, and which inputs changed with it
    Diff(DiffArguments),
    /// Validate a plan and say what it holds
    Check(PlanArgument),
    /// Print a commented starter plan
    Example,
    /// Print the JSON Schema of plan files, for editors
    Schema,
    /// Print shell completions
    Completions {
        /// The shell
        shell: clap_complete::Shell,
    },
    /// Print the manual page
    Man,
}

/// Options that every working command takes.
#[derive(Debug, Args)]
pub struct CommonOptions {
    /// Print the result as JSON on standard output, and nothing else there
    #[arg(long)]
    pub json: bool,
    /// Threads to use [default: all cores]
    #[arg(long, value_name = "N", value_parser = clap::value_parser!(u16).range(1..=1024))]
    pub jobs: Option<u16>,
    /// No messages on standard error unless something fails
    #[arg(long, short)]
    pub quiet: bool,
    /// Exit with status 3 when a channel is bad, or marginal or worse
    #[arg(long, value_name = "VERDICT")]
    pub fail_on: Option<FailOn>,
}

/// The state from which a run counts as failed.
#[derive(Debug, Clone, Copy, PartialEq, Eq, ValueEnum)]
pub enum FailOn {
    /// Any bad channel
    Bad,
    /// Any marginal or bad channel
    Marginal,
}

/// How many channels the outputs hold.
#[derive(Debug, Clone, Copy, PartialEq, Eq, ValueEnum)]
pub enum DetailChoice {
    /// Every channel
    All,
    /// Bad and marginal channels only
    Flagged,
}

/// When the report of a survey holds cures, measurements and options.
#[derive(Debug, Clone, Copy, PartialEq, Eq, ValueEnum)]
pub enum CuresChoice {
    /// For plans of up to 2,000 channels
    Auto,
    /// For every plan
    Always,
    /// Never: the survey alone
    Never,
}

/// A plan file.
#[derive(Debug, Args)]
pub struct PlanArgument {
    /// Plan file (TOML)
    #[arg(value_name = "PLAN", value_hint = ValueHint::FilePath)]
    pub plan: PathBuf,
}

/// Arguments of `survey`.
#[derive(Debug, Args)]
pub struct SurveyArguments {
    /// Plan file (TOML) [default: the built-in demonstration plan]
    #[arg(value_name = "PLAN", value_hint = ValueHint::FilePath)]
    pub plan: Option<PathBuf>,
    /// Folder for the report set; absent, empty or an earlier report set [default: reports/<plan stem>]
    #[arg(long, value_name = "DIR", value_hint = ValueHint::DirPath)]
    pub out: Option<PathBuf>,
    /// Another plan on the same board; may stand several times: beats.csv and beats.json tell where their channels beat
    #[arg(long, value_name = "PLAN", value_hint = ValueHint::FilePath)]
    pub beside: Vec<PathBuf>,
    /// Channels written in full [default: all up to 20,000 channels, flagged beyond]
    #[arg(long)]
    pub detail: Option<DetailChoice>,
    /// Cures, measurements and modulators compared in the report
    #[arg(long, value_name = "WHEN", default_value = "auto")]
    pub cures: CuresChoice,
    /// The report as Markdown too, report.md
    #[arg(long)]
    pub markdown: bool,
    /// The report as PDF too, report.pdf, printed by a Chromium of this machine (THORNMAP_CHROMIUM names one)
    #[arg(long)]
    pub pdf: bool,
    /// Each plot as PNG too
    #[arg(long)]
    pub png: bool,
    #[command(flatten)]
    #[allow(missing_docs, reason = "clap shows the options of the group itself")]
    pub common: CommonOptions,
}

/// Arguments of `channel`.
#[derive(Debug, Args)]
pub struct ChannelArguments {
    /// Plan file (TOML)
    #[arg(value_name = "PLAN", value_hint = ValueHint::FilePath)]
    pub plan: PathBuf,
    /// Channel frequency with unit, before injection, for example "433.2 MHz"
    #[arg(value_name = "FREQUENCY")]
    pub frequency: String,
    /// Channel group [default: the first whose range holds the frequency]
    #[arg(long, value_name = "NAME")]
    pub group: Option<String>,
    /// Folder for the pictures (noise budget with tones, tone against offset current) and channel.json
    #[arg(long, value_name = "DIR", value_hint = ValueHint::DirPath)]
    pub out: Option<PathBuf>,
    #[command(flatten)]
    #[allow(missing_docs, reason = "clap shows the options of the group itself")]
    pub common: CommonOptions,
}

/// Arguments of `identify`.
#[derive(Debug, Args)]
pub struct IdentifyArguments {
    /// Plan file (TOML)
    #[arg(value_name = "PLAN", value_hint = ValueHint::FilePath)]
    pub plan: PathBuf,
    /// Channel frequency with unit, before injection
    #[arg(value_name = "FREQUENCY")]
    pub frequency: String,
    /// Offset of the observed tone from the carrier, with unit
    #[arg(value_name = "OFFSET")]
    pub offset: String,
    /// Half width of the search window, with unit [default: 1 % of OFFSET, at least 100 Hz]
    #[arg(long, value_name = "HZ")]
    pub within: Option<String>,
    /// Channel group [default: the first whose range holds the frequency]
    #[arg(long, value_name = "NAME")]
    pub group: Option<String>,
    /// Print the result as JSON
    #[arg(long)]
    pub json: bool,
}

/// Arguments of `compare`.
#[derive(Debug, Args)]
pub struct CompareArguments {
    /// Plan file (TOML)
    #[arg(value_name = "PLAN", value_hint = ValueHint::FilePath)]
    pub plan: PathBuf,
    /// Structures: mash, prime-mash, output-fed, error-feedback, integer [default: a set of its own]
    #[arg(long, value_name = "NAME", value_delimiter = ',')]
    pub structures: Vec<String>,
    /// Orders
    #[arg(long, value_name = "N", value_delimiter = ',', value_parser = clap::value_parser!(u8).range(0..=5))]
    pub orders: Vec<u8>,
    /// Dithers: none or STAGE:REGISTER:SEED
    #[arg(long, value_name = "DITHER", value_delimiter = ',')]
    pub dithers: Vec<String>,
    /// First seeds
    #[arg(long, value_name = "SEED", value_delimiter = ',')]
    pub seeds: Vec<u64>,
    /// Moduli: whole numbers or 2^b
    #[arg(long, value_name = "M", value_delimiter = ',')]
    pub moduli: Vec<String>,
    /// Channels tried per option at most; a larger plan is thinned evenly, and the output says so
    #[arg(long, value_name = "N", default_value_t = 200, value_parser = clap::value_parser!(u64).range(1..))]
    pub sample: u64,
    /// Folder for compare.html, compare.csv and compare.json [default: reports/<plan stem>]
    #[arg(long, value_name = "DIR", value_hint = ValueHint::DirPath)]
    pub out: Option<PathBuf>,
    #[command(flatten)]
    #[allow(missing_docs, reason = "clap shows the options of the group itself")]
    pub common: CommonOptions,
}

/// What counts as bad where sets of PFD settings are weighed.
#[derive(Debug, Clone, Copy, PartialEq, Eq, ValueEnum)]
pub enum ByChoice {
    /// The verdict of each channel, assessed in full
    Verdict,
    /// Position alone: no legal word, or a tone inside the guard
    Guard,
}

/// Arguments of `remedy`.
#[derive(Debug, Args)]
pub struct RemedyArguments {
    /// Plan file (TOML); its [alternatives] say what may change
    #[arg(value_name = "PLAN", value_hint = ValueHint::FilePath)]
    pub plan: PathBuf,
    /// What counts as bad where sets of PFD settings are weighed [default: verdict up to 40,000 channel-setting pairs]
    #[arg(long, value_name = "WHAT")]
    pub by: Option<ByChoice>,
    /// Cost of one kind of change, for example order=5; a cure costs the sum (kinds: seed, dither, order, modulus,
    /// offset-current, injection, nudge, output-divider, divider, reference)
    #[arg(long, value_name = "KIND=COST")]
    pub cost: Vec<String>,
    /// Try reference frequencies by position: "10 MHz..52 MHz" with --step, or a list "19.2 MHz, 20 MHz"
    #[arg(long, value_name = "RANGE", conflicts_with_all = ["intervals", "by", "cost"])]
    pub hunt: Option<String>,
    /// Step of the hunt, with unit
    #[arg(long, value_name = "HZ", requires = "hunt")]
    pub step: Option<String>,
    /// Show what is lost to each fraction p/q as intervals; enumerates no channel, so a raster may be as dense as it likes
    #[arg(long, conflicts_with_all = ["by", "cost"])]
    pub intervals: bool,
    /// Folder for remedy.html, remedy.csv and remedy.json [default: reports/<plan stem>]
    #[arg(long, value_name = "DIR", value_hint = ValueHint::DirPath)]
    pub out: Option<PathBuf>,
    #[command(flatten)]
    #[allow(missing_docs, reason = "clap shows the options of the group itself")]
    pub common: CommonOptions,
}

/// Arguments of `sequence`.
#[derive(Debug, Args)]
#[command(group(clap::ArgGroup::new("source").required(true).multiple(true).args(["plan", "word", "read"])))]
pub struct SequenceArguments {
    /// Plan file (TOML); the word and the modulator are those of its channel
    #[arg(value_name = "PLAN", value_hint = ValueHint::FilePath, requires = "frequency", conflicts_with = "word")]
    pub plan: Option<PathBuf>,
    /// Channel frequency with unit, before injection
    #[arg(value_name = "FREQUENCY", requires = "plan")]
    pub frequency: Option<String>,
    /// Channel group [default: the first whose range holds the frequency]
    #[arg(long, value_name = "NAME", requires = "plan")]
    pub group: Option<String>,
    /// Numerator and modulus; the modulus may be 2^b
    #[arg(long, value_name = "K/M")]
    pub word: Option<String>,
    /// Order [default: 3, or the plan's]
    #[arg(long, value_name = "N", value_parser = clap::value_parser!(u8).range(0..=5))]
    pub order: Option<u8>,
    /// mash, prime-mash, output-fed, error-feedback or integer [default: mash, or the plan's]
    #[arg(long, value_name = "NAME")]
    pub structure: Option<String>,
    /// Start values of the stages, first stage first [default: zeros, or the plan's]
    #[arg(long, value_name = "A,B,C", value_delimiter = ',')]
    pub seeds: Option<Vec<u64>>,
    /// none, STAGE:REGISTER:SEED or white:STAGE:SEED [default: none, or the plan's]
    #[arg(long, value_name = "DITHER")]
    pub dither: Option<String>,
    /// Coefficients h_1,h_2,... of an error filter (error-feedback): noise transfer 1 - h_1 z^-1 - ...
    #[arg(long, value_name = "H,H", value_delimiter = ',', allow_hyphen_values = true)]
    pub ntf: Option<Vec<i64>>,
    /// Outputs looked at and written [default: one period where it fits, else 131072]
    #[arg(long, value_name = "N", value_parser = clap::value_parser!(u64).range(1..=1 << 26))]
    pub length: Option<u64>,
    /// PFD frequency with unit: offsets in Hz instead of shares of it [default: the plan's]
    #[arg(long, value_name = "HZ")]
    pub rate: Option<String>,
    /// Write the outputs: the ending .csv, .hex or .npy decides the form
    #[arg(long, value_name = "FILE", value_hint = ValueHint::FilePath, conflicts_with = "read")]
    pub write: Option<PathBuf>,
    /// Draw the spectrum (SVG)
    #[arg(long, value_name = "FILE", value_hint = ValueHint::FilePath, conflicts_with = "read")]
    pub plot: Option<PathBuf>,
    /// Analyse a captured divider sequence: one integer a line, a csv column, hex words with head, npy
    #[arg(long, value_name = "FILE", value_hint = ValueHint::FilePath)]
    pub read: Option<PathBuf>,
    /// Column of a captured csv [default: output]
    #[arg(long, value_name = "NAME", requires = "read")]
    pub column: Option<String>,
    /// Modulus of the captured run, where it is known: 2^b or a whole number
    #[arg(long, value_name = "M", requires = "read")]
    pub modulus: Option<String>,
    /// Try so many first seeds and rank them: longest sequence, then lowest strongest line
    #[arg(long, value_name = "COUNT", value_parser = clap::value_parser!(u64).range(1..=1 << 16), conflicts_with = "read")]
    pub best_seed: Option<u64>,
    /// Lines up to this offset count for --best-seed, with unit [default: the plan's loop edge, or all]
    #[arg(long, value_name = "HZ", requires = "best_seed")]
    pub within: Option<String>,
    /// Print the result as JSON on standard output, and nothing else there
    #[arg(long)]
    pub json: bool,
    /// No messages on standard error unless something fails
    #[arg(long, short)]
    pub quiet: bool,
}

/// Formats of `export`.
#[derive(Debug, Clone, Copy, PartialEq, Eq, ValueEnum)]
pub enum ExportFormat {
    /// A C99 header with static const arrays
    CHeader,
    /// One CSV table
    Csv,
    /// JSON
    Json,
}

/// Arguments of `export`.
#[derive(Debug, Args)]
pub struct ExportArguments {
    /// Plan file (TOML)
    #[arg(value_name = "PLAN", value_hint = ValueHint::FilePath)]
    pub plan: PathBuf,
    /// Format
    #[arg(long = "as", value_name = "FORMAT")]
    pub format: ExportFormat,
    /// File to write [default: standard output]
    #[arg(long, value_name = "FILE", value_hint = ValueHint::FilePath)]
    pub out: Option<PathBuf>,
    /// Register map of your own (TOML: [[register]] name, width, address, base; [[field]] name, register, msb, lsb, low)
    #[arg(long, value_name = "BITS.toml", value_hint = ValueHint::FilePath)]
    pub map: Option<PathBuf>,
    /// One channel group only
    #[arg(long, value_name = "NAME")]
    pub group: Option<String>,
    /// Threads to use [default: all cores]
    #[arg(long, value_name = "N", value_parser = clap::value_parser!(u16).range(1..=1024))]
    pub jobs: Option<u16>,
    /// No messages on standard error unless something fails
    #[arg(long, short)]
    pub quiet: bool,
}

/// Arguments of `diff`.
#[derive(Debug, Args)]
pub struct DiffArguments {
    /// The survey.json before
    #[arg(value_name = "OLD.json", value_hint = ValueHint::FilePath)]
    pub old: PathBuf,
    /// The survey.json after
    #[arg(value_name = "NEW.json", value_hint = ValueHint::FilePath)]
    pub new: PathBuf,
    /// Print the result as JSON
    #[arg(long)]
    pub json: bool,
    /// Write a page as well
    #[arg(long, value_name = "FILE", value_hint = ValueHint::FilePath)]
    pub html: Option<PathBuf>,
    /// Exit with status 3 when a channel of both surveys got worse and is now bad, or marginal or worse
    #[arg(long, value_name = "VERDICT")]
    pub fail_on: Option<FailOn>,
    /// No messages on standard error unless something fails
    #[arg(long, short)]
    pub quiet: bool,
}

/// What `measure` counts as one boundary class.
#[derive(Debug, Clone, Copy, PartialEq, Eq, ValueEnum)]
pub enum ClassChoice {
    /// Each fraction p/q
    Fraction,
    /// Each denominator q: fewer channels on a wide plan
    Denominator,
}

/// Arguments of `measure`.
#[derive(Debug, Args)]
pub struct MeasureArguments {
    /// Plan file (TOML)
    #[arg(value_name = "PLAN", value_hint = ValueHint::FilePath)]
    pub plan: PathBuf,
    /// What counts as one boundary class
    #[arg(long, value_name = "CLASS", default_value = "fraction")]
    pub each: ClassChoice,
    /// Folder for measure.html, measure.csv and measure.json [default: reports/<plan stem>]
    #[arg(long, value_name = "DIR", value_hint = ValueHint::DirPath)]
    pub out: Option<PathBuf>,
    #[command(flatten)]
    #[allow(missing_docs, reason = "clap shows the options of the group itself")]
    pub common: CommonOptions,
}

/// Arguments of `simulate`.
#[derive(Debug, Args)]
pub struct SimulateArguments {
    /// Plan file (TOML)
    #[arg(value_name = "PLAN", value_hint = ValueHint::FilePath)]
    pub plan: PathBuf,
    /// Channel frequency with unit, before injection
    #[arg(value_name = "FREQUENCY")]
    pub frequency: String,
    /// Channel group [default: the first whose range holds the frequency]
    #[arg(long, value_name = "NAME")]
    pub group: Option<String>,
    /// Reference cycles simulated [default: 1048576; with --step 30 over the loop bandwidth]
    #[arg(long, value_name = "N", value_parser = clap::value_parser!(u64).range(1024..=1 << 28))]
    pub cycles: Option<u64>,
    /// Simulate settling: the channel is reached from so far below (signed, at the output, with unit)
    #[arg(long, value_name = "HZ", allow_hyphen_values = true)]
    pub step: Option<String>,
    /// Tolerance of settling, at the output, with unit [default: a ten-thousandth of the step]
    #[arg(long, value_name = "HZ", requires = "step")]
    pub tolerance: Option<String>,
    /// Folder for the picture and the figures
    #[arg(long, value_name = "DIR", value_hint = ValueHint::DirPath)]
    pub out: Option<PathBuf>,
    /// Print the result as JSON on standard output, and nothing else there
    #[arg(long)]
    pub json: bool,
    /// No messages on standard error unless something fails
    #[arg(long, short)]
    pub quiet: bool,
}

/// Arguments of `calibrate`.
#[derive(Debug, Args)]
pub struct CalibrateArguments {
    /// Plan file (TOML)
    #[arg(value_name = "PLAN", value_hint = ValueHint::FilePath)]
    pub plan: PathBuf,
    /// Measured tones (csv with a head: channel, offset, level, rbw, note, group; the first three required). Cells carry
    /// units: 433.2 MHz, 7.5 kHz, -52 dBc; "< -80 dBc" is an upper bound, an empty level was not measured; with ; between
    /// the cells decimal commas are accepted. `measure` writes such a table to be filled in
    #[arg(value_name = "MEASURED", value_hint = ValueHint::FilePath)]
    pub measured: PathBuf,
    /// Write the plan with the fitted figures, basis "measured"; all else stays as typed
    #[arg(long, value_name = "FILE", value_hint = ValueHint::FilePath)]
    pub write_plan: Option<PathBuf>,
    /// Print the result as JSON on standard output, and nothing else there
    #[arg(long)]
    pub json: bool,
    /// No messages on standard error unless something fails
    #[arg(long, short)]
    pub quiet: bool,
}
