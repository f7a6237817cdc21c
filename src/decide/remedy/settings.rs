//! The PFD settings a remedy may use: reference, doubler, reference divider.

use serde::Serialize;

use crate::base::Frequency;
use crate::plan::{Plan, Reference};

/// One way to make the PFD frequency.
#[derive(Debug, Clone, Copy, PartialEq, Eq, Serialize)]
pub struct PfdSetting {
    /// Reference frequency.
    #[serde(rename = "reference_exact")]
    pub reference: Frequency,
    /// Whether the reference is doubled.
    pub doubler: bool,
    /// Reference divider R.
    pub divider: u64,
}

impl PfdSetting {
    /// Returns the plan's own setting.
    #[must_use]
    pub fn of(plan: &Plan) -> Self {
        let reference = &plan.reference;
        Self { reference: reference.frequency, doubler: reference.doubler, divider: reference.divider }
    }

    /// Returns a short name, PFD frequency last.
    #[must_use]
    pub fn name(&self) -> String {
        let doubled = if self.doubler { ", doubled" } else { "" };
        let divided = if self.divider == 1 { String::new() } else { format!(", R = {}", self.divider) };
        format!("reference {}{doubled}{divided}", self.reference)
    }

    /// Returns the plan with this setting.
    #[must_use]
    pub fn applied(&self, plan: &Plan) -> Plan {
        let reference = Reference {
            frequency: self.reference,
            doubler: self.doubler,
            divider: self.divider,
            ..plan.reference.clone()
        };
        Plan { reference, ..plan.clone() }
    }
}

/// Returns the settings of the plan's alternatives, the plan's own first, each once.
#[must_use]
pub fn pfd_settings(plan: &Plan) -> Vec<PfdSetting> {
    let mut settings = vec![PfdSetting::of(plan)];
    for reference in &plan.alternatives.references {
        for doubler in &plan.alternatives.doubler {
            for divider in &plan.alternatives.dividers {
                let setting = PfdSetting { reference: *reference, doubler: *doubler, divider: *divider };
                if !settings.contains(&setting) {
                    settings.push(setting);
                }
            }
        }
    }
    settings
}
