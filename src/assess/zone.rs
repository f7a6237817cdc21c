//! Guard and loop edge of a channel.

use crate::base::Frequency;
use crate::loop_model::LoopResponse;
use crate::plan::{Guard, LoopEdge, Plan};

/// Returns the loop edge of a response \[Hz\]; `None` where it has none.
#[must_use]
pub fn edge_of(edge: LoopEdge, response: &LoopResponse) -> Option<f64> {
    match edge {
        LoopEdge::UnityGain => response.unity_gain_hz(),
        LoopEdge::ThreeDb => response.closed_loop_3db_hz(),
    }
    // A measured response has no unity-gain frequency: its 3 dB frequency stands in, as the outputs say.
    .or(response.closed_loop_3db_hz())
}

/// Guard and loop edge of one channel, both inclusive.
#[derive(Debug, Clone, Copy)]
pub struct Zone {
    /// Loop edge \[Hz\]; `None` where the response has none.
    pub edge_hz: Option<f64>,
    /// Exact guard; `None` is the loop edge.
    guard: Option<Frequency>,
}

impl Zone {
    /// Returns guard and loop edge of a channel with this loop.
    pub fn of(plan: &Plan, pfd: Frequency, response: &LoopResponse) -> Self {
        let guard = match plan.boundary.guard {
            Guard::LoopEdge => None,
            Guard::Offset(offset) => Some(offset),
            Guard::ShareOfPfd(share) => share.times(&pfd.hz()).ok().map(Frequency::from_hz),
        };
        Self { edge_hz: edge_of(plan.boundary.edge, response), guard }
    }

    /// Returns the guard \[Hz\].
    pub fn guard_hz(&self) -> Option<f64> {
        self.guard.map(|guard| guard.to_f64_hz()).or(self.edge_hz)
    }

    /// Returns whether an offset lies inside the guard, inclusive; exact where the guard is.
    pub fn in_guard(&self, offset: Frequency) -> bool {
        match self.guard {
            Some(guard) => offset <= guard,
            None => self.in_loop(offset),
        }
    }

    /// Returns whether an offset lies inside the loop edge, inclusive.
    pub fn in_loop(&self, offset: Frequency) -> bool {
        self.edge_hz.is_some_and(|edge| offset.to_f64_hz() <= edge)
    }
}
