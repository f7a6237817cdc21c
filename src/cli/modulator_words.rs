//! Modulator settings as they are typed on the command line.

use crate::modulator::{Dither, Modulus, Structure};

use super::failure::Failure;

/// Reads a structure's name.
///
/// # Errors
/// `Content` with the names that are known.
pub fn structure(typed: &str) -> Result<Structure, Failure> {
    const KNOWN: [Structure; 5] =
        [Structure::Mash, Structure::PrimeMash, Structure::OutputFed, Structure::ErrorFeedback, Structure::Integer];
    KNOWN.into_iter().find(|structure| structure.word() == typed).ok_or_else(|| {
        let words = KNOWN.map(Structure::word).join(", ");
        Failure::Content(format!("error: structure \"{typed}\": known are {words}"))
    })
}

/// Reads `none`, `STAGE:REGISTER:SEED[:WEIGHT]` or `white:STAGE:SEED`.
///
/// # Errors
/// `Content` with the form that is expected.
pub fn dither(typed: &str) -> Result<Dither, Failure> {
    if typed == "none" {
        return Ok(Dither::None);
    }
    if let Some(rest) = typed.strip_prefix("white:") {
        let found = rest.split_once(':').and_then(|(stage, seed)| Some((stage.parse().ok()?, seed.parse().ok()?)));
        return found.map(|(stage, seed)| Dither::White { stage, seed, weight: 1 }).ok_or_else(|| {
            Failure::Content(format!("error: dither \"{typed}\": expected white:STAGE:SEED, as in white:1:7"))
        });
    }
    let wrong = || {
        Failure::Content(format!(
            "error: dither \"{typed}\": expected none, STAGE:REGISTER:SEED as in 2:23:1, or white:STAGE:SEED"
        ))
    };
    let parts: Vec<u64> = typed.split(':').map(str::parse).collect::<Result<_, _>>().map_err(|_| wrong())?;
    let (stage, register, seed, weight) = match parts.as_slice() {
        [stage, register, seed] => (*stage, *register, *seed, 1),
        [stage, register, seed, weight] => (*stage, *register, *seed, *weight),
        _ => return Err(wrong()),
    };
    Ok(Dither::Register {
        stage: u8::try_from(stage).map_err(|_| wrong())?,
        register: u8::try_from(register).map_err(|_| wrong())?,
        seed,
        weight,
    })
}

/// Reads a modulus, a whole number or `2^b`; `argument` names it in messages.
///
/// # Errors
/// `Content` with what is allowed.
pub fn modulus(argument: &str, typed: &str) -> Result<Modulus, Failure> {
    let number = match typed.trim().strip_prefix("2^") {
        Some(bits) => bits.parse::<u32>().ok().filter(|bits| (1..=48).contains(bits)).map(|bits| 1u64 << bits),
        None => typed.trim().parse::<u64>().ok().filter(|number| *number >= 2),
    };
    number.and_then(|number| Modulus::new(number).ok()).ok_or_else(|| {
        Failure::Content(format!("error: {argument} \"{typed}\": expected a whole number from 2 to 2^48, or 2^b"))
    })
}
