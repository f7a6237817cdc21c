//! What a remedy may change, and what a change costs.

use serde::Serialize;

use crate::base::Frequency;
use crate::modulator::{Dither, Modulus, ModulusRule};
use crate::plan::Plan;

use super::settings::{PfdSetting, pfd_settings};

/// One change.
#[derive(Debug, Clone, PartialEq, Serialize)]
#[serde(tag = "change", content = "to", rename_all = "kebab-case")]
pub enum Change {
    /// Another way to make the PFD frequency.
    Pfd(PfdSetting),
    /// Another injection: the other side, or another intermediate frequency.
    Injection(Frequency),
    /// Another output divider.
    OutputDivider(u64),
    /// Another modulator order.
    Order(u8),
    /// Another dither.
    Dither(Dither),
    /// Another first seed.
    Seed(u64),
    /// Another fixed modulus.
    Modulus(Modulus),
    /// Another offset current \[A\].
    OffsetCurrent(f64),
    /// The channel shifted by so much.
    Nudge(Frequency),
}

/// The kinds of change, as the user names them where costs are set.
#[derive(Debug, Clone, Copy, PartialEq, Eq, PartialOrd, Ord, Serialize)]
#[serde(rename_all = "kebab-case")]
pub enum Kind {
    /// First seed.
    Seed,
    /// Dither.
    Dither,
    /// Modulator order.
    Order,
    /// Modulus.
    Modulus,
    /// Offset current.
    OffsetCurrent,
    /// Injection.
    Injection,
    /// Shifted channel.
    Nudge,
    /// Output divider.
    OutputDivider,
    /// Doubler or reference divider with the same reference.
    Divider,
    /// Another reference frequency.
    Reference,
}

impl Kind {
    /// Every kind, in the default order of cost.
    pub const ALL: [Self; 10] = [
        Self::Seed,
        Self::Dither,
        Self::Order,
        Self::Modulus,
        Self::OffsetCurrent,
        Self::Injection,
        Self::Nudge,
        Self::OutputDivider,
        Self::Divider,
        Self::Reference,
    ];

    /// Returns the word for a user.
    #[must_use]
    pub fn word(self) -> &'static str {
        match self {
            Self::Seed => "seed",
            Self::Dither => "dither",
            Self::Order => "order",
            Self::Modulus => "modulus",
            Self::OffsetCurrent => "offset-current",
            Self::Injection => "injection",
            Self::Nudge => "nudge",
            Self::OutputDivider => "output-divider",
            Self::Divider => "divider",
            Self::Reference => "reference",
        }
    }
}

/// Cost of each kind of change; a remedy costs the sum of its changes.
#[derive(Debug, Clone, PartialEq)]
pub struct Costs([f64; 10]);

impl Default for Costs {
    /// Words in firmware first, then settings with side effects, then parts on the board.
    fn default() -> Self {
        Self([1.0, 1.0, 2.0, 2.0, 3.0, 4.0, 5.0, 6.0, 8.0, 20.0])
    }
}

impl Costs {
    /// Returns the cost of a kind.
    #[must_use]
    pub fn of(&self, kind: Kind) -> f64 {
        self.0[kind as usize]
    }

    /// Returns the costs with another value for one kind.
    #[must_use]
    pub fn with(mut self, kind: Kind, cost: f64) -> Self {
        self.0[kind as usize] = cost;
        self
    }
}

impl Change {
    /// Returns the kind, given the plan it is made to.
    #[must_use]
    pub fn kind(&self, plan: &Plan) -> Kind {
        match self {
            Self::Pfd(setting) if setting.reference != plan.reference.frequency => Kind::Reference,
            Self::Pfd(_) => Kind::Divider,
            Self::Injection(_) => Kind::Injection,
            Self::OutputDivider(_) => Kind::OutputDivider,
            Self::Order(_) => Kind::Order,
            Self::Dither(_) => Kind::Dither,
            Self::Seed(_) => Kind::Seed,
            Self::Modulus(_) => Kind::Modulus,
            Self::OffsetCurrent(_) => Kind::OffsetCurrent,
            Self::Nudge(_) => Kind::Nudge,
        }
    }

    /// Returns the change in words.
    #[must_use]
    pub fn words(&self) -> String {
        match self {
            Self::Pfd(setting) => setting.name(),
            Self::Injection(injection) => format!("injection {injection}"),
            Self::OutputDivider(divider) => format!("output divider {divider}"),
            Self::Order(order) => format!("order {order}"),
            Self::Dither(dither) => dither.words(),
            Self::Seed(seed) => format!("first seed {seed}"),
            Self::Modulus(modulus) => format!("modulus {}", modulus.get()),
            Self::OffsetCurrent(current_a) => format!("offset current {:.4} uA", current_a * 1e6),
            Self::Nudge(shift) => format!("channel moved by {shift}"),
        }
    }

    /// Returns the plan with the change made for all its channels; a nudge is made by the caller, channel by channel.
    #[must_use]
    pub fn applied(&self, plan: &Plan) -> Plan {
        let mut changed = plan.clone();
        match self {
            Self::Pfd(setting) => return setting.applied(plan),
            Self::Injection(injection) => {
                for group in &mut changed.groups {
                    group.injection = *injection;
                }
            }
            Self::OutputDivider(divider) => {
                for group in &mut changed.groups {
                    group.output_dividers = vec![*divider];
                }
            }
            Self::Order(order) => {
                let settings = &mut changed.modulator.settings;
                settings.order = *order;
                settings.seeds.truncate(usize::from(*order));
            }
            Self::Dither(dither) => changed.modulator.settings.dither = *dither,
            Self::Seed(seed) => match changed.modulator.settings.seeds.first_mut() {
                Some(first) => *first = *seed,
                None => changed.modulator.settings.seeds.push(*seed),
            },
            Self::Modulus(modulus) => changed.modulator.modulus = ModulusRule::Fixed(*modulus),
            Self::OffsetCurrent(current_a) => changed.detector.offset_current_a = *current_a,
            Self::Nudge(_) => {}
        }
        changed
    }
}

/// Returns every single change that the plan's alternatives allow, nudges apart, cheapest first; what the plan has
/// already is no change.
#[must_use]
pub fn single_changes(plan: &Plan, costs: &Costs) -> Vec<Change> {
    let other = &plan.alternatives;
    let settings = &plan.modulator.settings;
    let mut changes: Vec<Change> = pfd_settings(plan).into_iter().skip(1).map(Change::Pfd).collect();
    changes.extend(other.injections.iter().map(|injection| Change::Injection(*injection)));
    changes.extend(other.output_dividers.iter().map(|divider| Change::OutputDivider(*divider)));
    changes.extend(other.orders.iter().filter(|order| **order != settings.order).map(|order| Change::Order(*order)));
    changes.extend(other.dithers.iter().filter(|d| **d != settings.dither).map(|dither| Change::Dither(*dither)));
    let first = settings.seeds.first().copied().unwrap_or(0);
    changes.extend(other.seeds.iter().filter(|seed| **seed != first).map(|seed| Change::Seed(*seed)));
    let own = |modulus: &Modulus| plan.modulator.modulus == ModulusRule::Fixed(*modulus);
    changes.extend(other.moduli.iter().filter(|modulus| !own(modulus)).map(|modulus| Change::Modulus(*modulus)));
    let current_a = plan.detector.offset_current_a;
    #[allow(clippy::float_cmp, reason = "the same text gives the same figure")]
    changes.extend(other.offset_currents_a.iter().filter(|a| **a != current_a).map(|a| Change::OffsetCurrent(*a)));
    changes.sort_by(|a, b| costs.of(a.kind(plan)).total_cmp(&costs.of(b.kind(plan))));
    changes
}
