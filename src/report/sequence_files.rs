//! Sequences as files: csv, hex words for a test bench, npy; written and read here, so that both agree.

use crate::modulator::{ModulatorConfig, output_range};

/// First words of every text form we write.
const MARK: &str = "thornmap sequence 1";

/// The form of a sequence file.
#[derive(Debug, Clone, Copy, PartialEq, Eq)]
pub enum SequenceForm {
    /// Settings in `#` lines, then `index,output`.
    Csv,
    /// Settings in `//` lines, then one two's-complement word a line.
    Hex,
    /// The array format of numpy, version 1.0, little-endian.
    Npy,
}

impl SequenceForm {
    /// Returns the form that a file name's ending asks for.
    #[must_use]
    pub fn of(name: &str) -> Option<Self> {
        match name.rsplit_once('.')?.1.to_ascii_lowercase().as_str() {
            "csv" => Some(Self::Csv),
            "hex" => Some(Self::Hex),
            "npy" => Some(Self::Npy),
            _ => None,
        }
    }
}

/// Why a captured sequence cannot be read.
#[derive(Debug, Clone, PartialEq, Eq, thiserror::Error)]
pub enum CaptureError {
    /// A line holds no integer where one is due.
    #[error("line {line}: found \"{found}\", expected {expected}")]
    Line {
        /// Line from 1.
        line: usize,
        /// What stands there.
        found: String,
        /// What is due.
        expected: String,
    },
    /// The file holds no output.
    #[error("no output in it")]
    Empty,
    /// The file is no text and no array.
    #[error("neither text nor a numpy array")]
    NoText,
    /// The array cannot be used.
    #[error("numpy array: {0}")]
    Npy(String),
}

/// Returns the settings as lines `key = value`.
fn settings(config: &ModulatorConfig) -> Vec<String> {
    let seeds: Vec<String> = config.seeds().iter().map(u64::to_string).collect();
    let filter: Vec<String> = config.error_filter().iter().map(i64::to_string).collect();
    let mut lines = vec![
        MARK.to_owned(),
        format!("structure = {}", config.structure().word()),
        format!("order = {}", config.order()),
        format!("k = {}", config.k()),
        format!("m = {}", config.modulus().get()),
        format!("seeds = {}", seeds.join(" ")),
        format!("dither = {}", config.dither().words()),
    ];
    if !filter.is_empty() {
        lines.push(format!("error filter h_1 … = {}", filter.join(" ")));
    }
    lines.push("outputs y[n] from n = 0, one for each PFD cycle".to_owned());
    lines
}

/// Returns the bytes of a sequence file.
#[must_use]
pub fn sequence_bytes(form: SequenceForm, config: &ModulatorConfig, outputs: &[i32]) -> Vec<u8> {
    match form {
        SequenceForm::Csv => {
            let mut text: String = settings(config).iter().map(|line| format!("# {line}\n")).collect();
            text.push_str("index,output\n");
            for (index, output) in outputs.iter().enumerate() {
                text.push_str(&format!("{index},{output}\n"));
            }
            text.into_bytes()
        }
        SequenceForm::Hex => {
            let width = word_bits(config);
            let digits = width.div_ceil(4) as usize;
            let mask = (1u64 << width) - 1;
            let mut text: String = settings(config).iter().map(|line| format!("// {line}\n")).collect();
            text.push_str(&format!("// two's complement, {width} bits a word\n"));
            for output in outputs {
                #[allow(clippy::cast_sign_loss, reason = "two's complement is what the file holds")]
                let word = i64::from(*output) as u64 & mask;
                text.push_str(&format!("{word:0digits$x}\n"));
            }
            text.into_bytes()
        }
        SequenceForm::Npy => npy(outputs),
    }
}

/// Returns the bits of a two's-complement word that holds every output.
fn word_bits(config: &ModulatorConfig) -> u32 {
    let (low, high) = output_range(config);
    let magnitude = high.max(-low - 1).unsigned_abs().max(1);
    (u64::BITS - magnitude.leading_zeros() + 1).min(63)
}

/// Version 1.0: magic, length of the header, header padded to 64, data.
fn npy(outputs: &[i32]) -> Vec<u8> {
    let mut header = format!("{{'descr': '<i4', 'fortran_order': False, 'shape': ({},), }}", outputs.len());
    while (10 + header.len() + 1) % 64 != 0 {
        header.push(' ');
    }
    header.push('\n');
    let mut bytes = b"\x93NUMPY\x01\x00".to_vec();
    bytes.extend(u16::try_from(header.len()).unwrap_or(u16::MAX).to_le_bytes());
    bytes.extend(header.as_bytes());
    for output in outputs {
        bytes.extend(output.to_le_bytes());
    }
    bytes
}

/// Returns the outputs of a captured file: one integer a line, a csv column, hex words with our head, or an npy array.
///
/// # Errors
/// `CaptureError` with the line.
pub fn read_capture(bytes: &[u8], column: Option<&str>) -> Result<Vec<i64>, CaptureError> {
    let outputs = if bytes.starts_with(b"\x93NUMPY") {
        read_npy(bytes)?
    } else {
        let text = std::str::from_utf8(bytes).map_err(|_| CaptureError::NoText)?;
        let text = text.strip_prefix('\u{feff}').unwrap_or(text);
        let first = text.lines().map(str::trim).find(|line| !line.is_empty()).unwrap_or_default();
        if first.starts_with("//") { read_hex(text)? } else { read_lines(text, column)? }
    };
    if outputs.is_empty() { Err(CaptureError::Empty) } else { Ok(outputs) }
}

fn read_lines(text: &str, column: Option<&str>) -> Result<Vec<i64>, CaptureError> {
    let mut outputs = Vec::new();
    let mut chosen: Option<usize> = None;
    for (number, line) in text.lines().enumerate() {
        let line = line.trim();
        if line.is_empty() || line.starts_with('#') {
            continue;
        }
        let separator = if line.contains(';') { ';' } else { ',' };
        let cells: Vec<&str> = line.split(separator).map(|cell| cell.trim().trim_matches('"')).collect();
        let wrong = |found: &str, expected: &str| CaptureError::Line {
            line: number + 1,
            found: found.to_owned(),
            expected: expected.to_owned(),
        };
        let place = match chosen {
            Some(place) => place,
            None => {
                let is_head = cells.iter().any(|cell| cell.parse::<i64>().is_err());
                let wanted = column.unwrap_or("output");
                let named = cells.iter().position(|cell| *cell == wanted);
                let place = match (is_head, named) {
                    (true, Some(place)) => place,
                    (_, None) if cells.len() == 1 && (column.is_none() || is_head) => 0,
                    (true, None) => return Err(wrong(line, &format!("a column \"{wanted}\"; --column names another"))),
                    (false, _) => return Err(wrong(line, "one integer, or a head that names the columns")),
                };
                chosen = Some(place);
                if is_head {
                    continue;
                }
                place
            }
        };
        let cell = cells.get(place).copied().unwrap_or_default();
        outputs.push(cell.parse().map_err(|_| wrong(cell, "an integer"))?);
    }
    Ok(outputs)
}

fn read_hex(text: &str) -> Result<Vec<i64>, CaptureError> {
    let bits = text
        .lines()
        .filter_map(|line| line.trim().strip_prefix("// two's complement, ")?.strip_suffix(" bits a word"))
        .find_map(|bits| bits.parse::<u32>().ok());
    let mut outputs = Vec::new();
    for (number, line) in text.lines().enumerate() {
        let line = line.trim();
        if line.is_empty() || line.starts_with("//") {
            continue;
        }
        let wrong = |expected: &str| CaptureError::Line {
            line: number + 1,
            found: line.to_owned(),
            expected: expected.to_owned(),
        };
        let Some(bits) = bits.filter(|bits| (2..=63).contains(bits)) else {
            return Err(wrong("a head line before it: // two's complement, N bits a word"));
        };
        let word = i64::from_str_radix(line, 16).map_err(|_| wrong("a hexadecimal word"))?;
        if word >> bits != 0 {
            return Err(wrong(&format!("at most {bits} bits")));
        }
        outputs.push(if word >> (bits - 1) == 1 { word - (1 << bits) } else { word });
    }
    Ok(outputs)
}

fn read_npy(bytes: &[u8]) -> Result<Vec<i64>, CaptureError> {
    let wrong = |text: &str| CaptureError::Npy(text.to_owned());
    let cut = || wrong("it is cut off");
    let (length, start) = match bytes.get(6).ok_or_else(cut)? {
        1 => (usize::from(u16::from_le_bytes([*bytes.get(8).ok_or_else(cut)?, *bytes.get(9).ok_or_else(cut)?])), 10),
        2 | 3 => {
            let field: [u8; 4] = bytes.get(8..12).ok_or_else(cut)?.try_into().map_err(|_| cut())?;
            (usize::try_from(u32::from_le_bytes(field)).map_err(|_| cut())?, 12)
        }
        version => return Err(CaptureError::Npy(format!("version {version}, expected 1 to 3"))),
    };
    let header = bytes.get(start..start + length).ok_or_else(cut)?;
    let header = std::str::from_utf8(header).map_err(|_| wrong("its head is no text"))?;
    let value = |key: &str| header.split_once(&format!("'{key}':")).map(|(_, rest)| rest.trim_start());
    let form = value("descr").and_then(|rest| rest.split('\'').nth(1)).ok_or_else(|| wrong("no element type"))?;
    let shape =
        value("shape").and_then(|rest| rest.strip_prefix('(')?.split_once(')')).ok_or_else(|| wrong("no shape"))?.0;
    let sizes: Vec<usize> = shape.split(',').filter_map(|size| size.trim().parse().ok()).collect();
    let count = match sizes.as_slice() {
        [count] | [count, 1] => *count,
        _ => return Err(CaptureError::Npy(format!("shape ({shape}), expected one dimension"))),
    };
    let width = match form.trim_start_matches(['<', '|', '=']) {
        "i1" | "u1" => 1,
        "i2" | "u2" => 2,
        "i4" | "u4" => 4,
        "i8" => 8,
        _ => return Err(CaptureError::Npy(format!("elements of type {form}, expected little-endian integers"))),
    };
    let signed = form.contains('i');
    let data = bytes.get(start + length..).ok_or_else(cut)?;
    if data.len() < count.saturating_mul(width) {
        return Err(cut());
    }
    Ok(data
        .chunks_exact(width)
        .take(count)
        .map(|element| {
            let fill = if signed && element[width - 1] & 0x80 != 0 { 0xff } else { 0 };
            let mut wide = [fill; 8];
            wide[..width].copy_from_slice(element);
            i64::from_le_bytes(wide)
        })
        .collect())
}

#[cfg(test)]
mod tests {
    use super::*;
    use crate::modulator::{Dither, ModulatorSettings, Modulus, Structure, start};

    #[test]
    fn every_form_comes_back_as_it_went() {
        let mut cases = 0;
        for order in 1..=5 {
            let settings = ModulatorSettings {
                structure: Structure::Mash,
                order,
                seeds: vec![1],
                dither: Dither::None,
                noise_transfer: None,
                runs_at_zero: false,
            };
            let Ok(modulus) = Modulus::new(509) else { continue };
            let Ok(config) = ModulatorConfig::new(&settings, modulus, 77, true) else { continue };
            let mut outputs = [0; 700];
            start(&config).fill(&mut outputs);
            let wanted: Vec<i64> = outputs.iter().map(|y| i64::from(*y)).collect();
            for form in [SequenceForm::Csv, SequenceForm::Hex, SequenceForm::Npy] {
                assert_eq!(read_capture(&sequence_bytes(form, &config, &outputs), None).as_ref(), Ok(&wanted));
                cases += 1;
            }
        }
        assert_eq!(cases, 15);
    }

    #[test]
    fn faults_name_their_line() {
        let fault = |text: &str, column| read_capture(text.as_bytes(), column).map_err(|error| error.to_string());
        assert_eq!(fault("1\n2\nx\n", None), Err("line 3: found \"x\", expected an integer".to_owned()));
        assert_eq!(fault("", None), Err("no output in it".to_owned()));
        assert_eq!(fault("n,y\n0,1\n", Some("y")), Ok(vec![1]));
        assert!(fault("n,y\n0,1\n", None).is_err_and(|text| text.contains("--column")));
        assert!(fault("0,1\n", None).is_err_and(|text| text.contains("head")));
        assert!(fault("// x\n12\n", None).is_err_and(|text| text.contains("line 2")));
        assert!(fault("// two's complement, 4 bits a word\n1f\n", None).is_err_and(|text| text.contains("4 bits")));
        assert_eq!(
            read_capture(&[0x93, b'N', b'U', b'M', b'P', b'Y', 1], None),
            Err(CaptureError::Npy("it is cut off".into()))
        );
        assert_eq!(read_capture(&[0xff, 0xfe, 0], None), Err(CaptureError::NoText));
    }
}
