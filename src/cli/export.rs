//! `export`: words and avoided ranges for firmware.

use crate::decide::export::export;
use crate::plan::{RegisterMapError, read_register_map};
use crate::report::{FirmwareFormat, firmware_bytes, write_file};
use crate::survey::survey;

use super::arguments::{ExportArguments, ExportFormat};
use super::failure::Failure;
use super::output::{self, Voice};
use super::plan_file;
use super::progress::Bar;
use super::survey::{assess_failure, in_pool, report_failure};

/// Runs `export`.
///
/// # Errors
/// `Failure` with the exit status that fits.
pub fn run(arguments: &ExportArguments) -> Result<(), Failure> {
    let plan = plan_file::read(&arguments.plan)?;
    let map = arguments.map.as_deref().map(read_register_map).transpose().map_err(|error| match error {
        RegisterMapError::Io(_) => Failure::InputOutput(format!("error: {error}")),
        RegisterMapError::Content { .. } => Failure::Content(format!("error: register map:\n{error}")),
    })?;
    let voice = Voice::from_quiet(arguments.quiet);
    let bar = Bar::new(plan.channel_count(), "channels", voice);
    let result = in_pool(arguments.jobs, || survey(&plan, &|items| bar.advance(items)))?
        .map_err(|error| assess_failure(&plan, &error))?;
    bar.finish();
    let found = export(&result, arguments.group.as_deref(), map.as_ref())
        .map_err(|error| Failure::Content(format!("error: plan \"{}\": {error}", plan.identity.title)))?;
    let format = match arguments.format {
        ExportFormat::CHeader => FirmwareFormat::CHeader,
        ExportFormat::Csv => FirmwareFormat::Csv,
        ExportFormat::Json => FirmwareFormat::Json,
    };
    let bytes = firmware_bytes(&found, format).map_err(report_failure)?;
    match &arguments.out {
        Some(path) => {
            write_file(path, &bytes).map_err(report_failure)?;
            let legal = found.channels.iter().filter(|channel| channel.legal).count();
            voice.say(&format!(
                "{}: {legal} of {} channels with a word, {} avoided ranges, {} test vectors; in {}",
                plan.identity.title,
                found.channels.len(),
                found.avoided.len(),
                found.vectors.len(),
                path.display()
            ));
            Ok(())
        }
        None => output::print(&String::from_utf8_lossy(&bytes)),
    }
}
