//! Tones before they are judged: parts that fall on one exact offset are gathered, then summed.

use std::fmt;

use crate::base::{Basis, Frequency};
use crate::tones::worst_case_sum_dbc;

use super::result::{Contributions, Origin, Tone};

/// One part of a tone's level at the output.
#[derive(Debug, Clone, PartialEq)]
pub enum Part {
    /// The cause does not act on this tone, or too weakly to have a level.
    Absent,
    /// A level \[dBc\] and the weakest basis behind it.
    Known(f64, Basis),
    /// The cause acts, but how strongly is not known; the reason in words.
    Unknown(String),
    /// The cause acts, its level is not claimed, and the other parts stand for the whole; the reason in words.
    NotClaimed(String),
}

impl Part {
    fn level(&self) -> Option<f64> {
        match self {
            Self::Known(level, _) => Some(*level),
            Self::Absent | Self::Unknown(_) | Self::NotClaimed(_) => None,
        }
    }

    /// Returns the part for two causes of the same kind on one offset: voltages add, unknown stays unknown.
    fn joined(self, other: Self) -> Self {
        match (self, other) {
            (Self::Unknown(why), _) | (_, Self::Unknown(why)) => Self::Unknown(why),
            (Self::NotClaimed(why), Self::Absent) | (Self::Absent, Self::NotClaimed(why)) => Self::NotClaimed(why),
            (Self::Known(a, basis_a), Self::Known(b, basis_b)) => match worst_case_sum_dbc([a, b]) {
                Some(sum) => Self::Known(sum, basis_a.max(basis_b)),
                None => Self::Absent,
            },
            (Self::Absent | Self::NotClaimed(_), part) | (part, Self::Absent | Self::NotClaimed(_)) => part,
        }
    }
}

/// Short name of a tone for a reader; most tones lie below the floor and are never named, so it is written when asked.
#[derive(Debug, Clone, PartialEq)]
pub enum Label {
    /// Boundary p/q of the PFD frequency.
    Boundary(i128, u64),
    /// Multiple of K/M.
    Multiple(u64),
    /// Boundary p/q of the reference.
    ReferenceBoundary(i128, u64),
    /// Harmonic of the PFD frequency.
    Pfd(u64),
    /// Any other text.
    Text(String),
}

impl From<String> for Label {
    fn from(text: String) -> Self {
        Self::Text(text)
    }
}

impl fmt::Display for Label {
    fn fmt(&self, f: &mut fmt::Formatter<'_>) -> fmt::Result {
        match self {
            Self::Boundary(p, q) => write!(f, "boundary {p}/{q}"),
            Self::Multiple(harmonic) => write!(f, "{harmonic} × K/M"),
            Self::ReferenceBoundary(p, q) => write!(f, "reference boundary {p}/{q}"),
            Self::Pfd(harmonic) => write!(f, "PFD frequency × {harmonic}"),
            Self::Text(text) => f.write_str(text),
        }
    }
}

/// A tone at one exact offset, with its parts side by side.
#[derive(Debug, Clone, PartialEq)]
pub struct Candidate {
    /// What makes it.
    pub origin: Origin,
    /// Short name for a reader.
    pub label: Label,
    /// Smallest harmonic of its family.
    pub harmonic: Option<u64>,
    /// Exact offset, positive.
    pub offset: Frequency,
    /// Boundary p/q.
    pub boundary: Option<(i128, u64)>,
    /// `h·K mod± M`.
    pub residue: Option<i64>,
    /// Made after the loop.
    pub after_loop: bool,
    /// A boundary or multiple of K/M on this offset has a known part of its own.
    pub family_known: bool,
    /// Half width of the uncertainty of the computed lines \[dB\].
    pub level_uncertainty_db: Option<f64>,
    /// Coupling from an anchor.
    pub coupling: Part,
    /// Detector nonlinearity.
    pub nonlinearity: Part,
    /// Modulator line.
    pub modulator: Part,
    /// Leakage and offset current.
    pub leakage: Part,
    /// Other clock.
    pub clock: Part,
}

impl Candidate {
    /// Returns a candidate without any part.
    #[must_use]
    pub fn new(origin: Origin, label: impl Into<Label>, offset: Frequency) -> Self {
        Self {
            origin,
            label: label.into(),
            harmonic: None,
            offset,
            boundary: None,
            residue: None,
            after_loop: false,
            family_known: false,
            level_uncertainty_db: None,
            coupling: Part::Absent,
            nonlinearity: Part::Absent,
            modulator: Part::Absent,
            leakage: Part::Absent,
            clock: Part::Absent,
        }
    }

    fn parts(&self) -> [(&'static str, &Part); 5] {
        [
            ("coupling", &self.coupling),
            ("nonlinearity", &self.nonlinearity),
            ("modulator", &self.modulator),
            ("leakage", &self.leakage),
            ("clock", &self.clock),
        ]
    }

    /// Returns whether any cause acts on the tone.
    #[must_use]
    pub fn is_present(&self) -> bool {
        self.parts().iter().any(|(_, part)| matches!(part, Part::Known(..) | Part::Unknown(_)))
    }

    /// Returns the worst-case sum of the known parts \[dBc\].
    fn known_level_dbc(&self) -> Option<f64> {
        worst_case_sum_dbc(self.parts().iter().filter_map(|(_, part)| part.level()))
    }

    /// Returns whether the tone has no cause, or is known to lie below a floor \[dBc\].
    #[must_use]
    pub fn is_below(&self, floor_dbc: f64) -> bool {
        let is_known = !self.parts().iter().any(|(_, part)| matches!(part, Part::Unknown(_)));
        !self.is_present() || (is_known && self.known_level_dbc().is_some_and(|level| level < floor_dbc))
    }

    /// Takes in another candidate on the same offset; the identity stays that of `self`.
    fn absorb(&mut self, other: Self) {
        fn join(into: &mut Part, from: Part) {
            *into = std::mem::replace(into, Part::Absent).joined(from);
        }
        if self.label != other.label {
            self.label = Label::Text(format!("{} + {}", self.label, other.label));
        }
        // One board, one coupling at one offset: an anchor that covers the place in one family covers it in all.
        match (&self.coupling, &other.coupling) {
            (Part::Known(..), Part::Unknown(_)) => {}
            (Part::Unknown(_), Part::Known(..)) => self.coupling = other.coupling,
            _ => join(&mut self.coupling, other.coupling),
        }
        join(&mut self.nonlinearity, other.nonlinearity);
        join(&mut self.modulator, other.modulator);
        join(&mut self.leakage, other.leakage);
        join(&mut self.clock, other.clock);
        self.after_loop &= other.after_loop;
        self.family_known |= other.family_known;
        self.harmonic = self.harmonic.or(other.harmonic);
        self.boundary = self.boundary.or(other.boundary);
        self.residue = self.residue.or(other.residue);
        self.level_uncertainty_db = match (self.level_uncertainty_db, other.level_uncertainty_db) {
            (Some(a), Some(b)) => Some(a.max(b)),
            (a, b) => a.or(b),
        };
    }
}

/// Returns the candidates with one entry per exact offset, sorted by offset; where several meet, the first origin in
/// the order boundary, fractional, sub-fractional, reference, clock names the tone.
#[must_use]
pub fn gather(mut candidates: Vec<Candidate>) -> Vec<Candidate> {
    candidates.sort_by(|a, b| a.offset.cmp(&b.offset).then(a.origin.cmp(&b.origin)));
    let mut gathered: Vec<Candidate> = Vec::with_capacity(candidates.len());
    for mut candidate in candidates {
        let is_family = matches!(candidate.origin, Origin::Boundary | Origin::Fractional);
        candidate.family_known = is_family && candidate.parts().iter().any(|(_, part)| part.level().is_some());
        match gathered.last_mut() {
            Some(last) if last.offset == candidate.offset => last.absorb(candidate),
            _ => gathered.push(candidate),
        }
    }
    gathered
}

/// Where a tone lies against guard and edge, and what limits it.
#[derive(Debug, Clone, Copy, PartialEq)]
pub struct Position {
    /// Offset ≤ guard.
    pub inside_guard: bool,
    /// Offset ≤ loop edge.
    pub inside_loop: bool,
    /// The mask at the offset \[dBc\].
    pub limit_dbc: Option<f64>,
}

/// Returns the tone: worst-case sum of its parts, known part, margin.
#[must_use]
pub fn to_tone(candidate: Candidate, position: Position) -> Tone {
    let known_level_dbc = candidate.known_level_dbc();
    let mut unknown = Vec::new();
    let mut complete = true;
    let mut basis: Option<Basis> = None;
    for (name, part) in candidate.parts() {
        match part {
            Part::Absent => {}
            Part::Known(_, part_basis) => basis = Some(basis.map_or(*part_basis, |b| b.max(*part_basis))),
            Part::Unknown(why) => {
                complete = false;
                unknown.push(format!("{name}: {why}"));
            }
            Part::NotClaimed(why) => unknown.push(format!("{name} not claimed: {why}")),
        }
    }
    Tone {
        origin: candidate.origin,
        harmonic: candidate.harmonic,
        offset_hz: candidate.offset.to_f64_hz(),
        level_dbc: known_level_dbc.filter(|_| complete),
        level_uncertainty_db: candidate.level_uncertainty_db,
        known_level_dbc,
        basis: basis.unwrap_or(Basis::Default),
        p: candidate.boundary.map(|(p, _)| p),
        q: candidate.boundary.map(|(_, q)| q),
        contributions: Contributions {
            coupling_dbc: candidate.coupling.level(),
            nonlinearity_dbc: candidate.nonlinearity.level(),
            modulator_dbc: candidate.modulator.level(),
            leakage_dbc: candidate.leakage.level(),
            clock_dbc: candidate.clock.level(),
        },
        limit_dbc: position.limit_dbc,
        margin_db: known_level_dbc.zip(position.limit_dbc).map(|(level, limit)| limit - level),
        inside_loop: position.inside_loop,
        inside_guard: position.inside_guard,
        after_loop: candidate.after_loop,
        family_known: candidate.family_known,
        residue: candidate.residue,
        victims: Vec::new(),
        unknown,
        label: candidate.label.to_string(),
    }
}

#[cfg(test)]
mod tests {
    use super::*;

    fn at(origin: Origin, hz: i128) -> Candidate {
        Candidate::new(origin, format!("{} {hz}", origin.word()), Frequency::from_whole_hz(hz))
    }

    const POSITION: Position = Position { inside_guard: false, inside_loop: true, limit_dbc: Some(-50.0) };

    #[test]
    fn equal_offsets_become_one_tone_with_voltages_added() {
        let mut boundary = at(Origin::Boundary, 1000);
        boundary.coupling = Part::Known(-60.0, Basis::Measured);
        let mut clock = at(Origin::Clock, 1000);
        clock.clock = Part::Known(-60.0, Basis::Assumed);
        let gathered = gather(vec![clock, boundary, at(Origin::Reference, 5)]);
        assert_eq!(gathered.len(), 2);
        let tone = to_tone(gathered[1].clone(), POSITION);
        assert_eq!(tone.origin, Origin::Boundary);
        assert!((tone.level_dbc.unwrap() + 53.979_4).abs() < 1e-4);
        assert_eq!(tone.basis, Basis::Assumed);
        assert!((tone.margin_db.unwrap() - 3.979_4).abs() < 1e-4);
    }

    #[test]
    fn a_known_part_of_another_origin_does_not_make_a_boundary_known() {
        let mut boundary = at(Origin::Boundary, 1000);
        boundary.coupling = Part::Unknown("no anchor".to_owned());
        let mut line = at(Origin::SubFractional, 1000);
        line.modulator = Part::Known(-76.0, Basis::Assumed);
        let tone = to_tone(gather(vec![boundary.clone(), line]).remove(0), POSITION);
        assert_eq!((tone.origin, tone.family_known), (Origin::Boundary, false));
        assert!(tone.known_level_dbc.is_some());
        boundary.modulator = Part::Known(-80.0, Basis::Assumed);
        assert!(to_tone(gather(vec![boundary]).remove(0), POSITION).family_known);
    }

    #[test]
    fn an_unknown_part_leaves_the_known_part_visible() {
        let mut tone = at(Origin::Boundary, 1000);
        tone.coupling = Part::Unknown("no anchor for q = 2".to_owned());
        tone.modulator = Part::Known(-70.0, Basis::Assumed);
        let tone = to_tone(tone, POSITION);
        assert_eq!(tone.level_dbc, None);
        assert!((tone.known_level_dbc.unwrap() + 70.0).abs() < 1e-9);
        assert_eq!(tone.unknown, ["coupling: no anchor for q = 2"]);
    }

    #[test]
    fn a_part_that_is_not_claimed_leaves_the_level_to_the_others() {
        let mut tone = at(Origin::Fractional, 1000);
        tone.nonlinearity = Part::NotClaimed("the VCO follows the modulator".to_owned());
        tone.modulator = Part::Known(-20.0, Basis::Assumed);
        let tone = to_tone(tone, POSITION);
        assert!((tone.level_dbc.unwrap() + 20.0).abs() < 1e-9);
        assert_eq!(tone.contributions.nonlinearity_dbc, None);
        assert_eq!(tone.unknown.len(), 1);
    }

    #[test]
    fn an_anchor_in_one_family_covers_the_place_in_all() {
        let mut with = at(Origin::Boundary, 1000);
        with.coupling = Part::Known(-60.0, Basis::Measured);
        let mut without = at(Origin::Boundary, 1000);
        without.coupling = Part::Unknown("no anchor".to_owned());
        for order in [vec![with.clone(), without.clone()], vec![without, with]] {
            let tone = to_tone(gather(order).remove(0), POSITION);
            assert!((tone.level_dbc.unwrap() + 60.0).abs() < 1e-9);
        }
    }
}
