//! The verdict on the plan: a sentence, its cause, the shares.

use super::rows::mark_of;
use crate::assess::Verdict;
use crate::report::figures::{count, significant};
use crate::survey::{Summary, SurveyResult};

/// One verdict with its count and its part of the bar of 1000 units.
pub(crate) struct Share {
    pub word: &'static str,
    pub mark: &'static str,
    pub count: String,
    /// Share of the plan, with a percent sign.
    pub percent: String,
    pub start: u64,
    pub width: u64,
}

/// Returns the verdict on the plan in one sentence with its counts.
pub(super) fn sentence(summary: &Summary) -> String {
    let all = count(summary.channels);
    match (summary.bad, summary.marginal) {
        (0, 0) if summary.channels == 1 => "The one channel of this plan is clear.".to_owned(),
        (0, 0) => format!("All {all} channels are clear."),
        (0, marginal) => {
            format!(
                "No channel is bad; of {all} channels {} are clear and {} marginal.",
                count(summary.clear),
                count(marginal)
            )
        }
        (bad, marginal) => format!(
            "Of {all} channels {} {} bad, {} marginal and {} clear.",
            count(bad),
            if bad == 1 { "is" } else { "are" },
            count(marginal),
            count(summary.clear)
        ),
    }
}

/// Returns what makes most channels bad, or marginal where none is bad.
pub(super) fn cause(summary: &Summary) -> Option<String> {
    let worst = if summary.bad > 0 { Verdict::Bad } else { Verdict::Marginal };
    let fired = summary.reasons.iter().filter(|(rule, number)| rule.verdict() == worst && **number > 0);
    // Of equal counts the first rule: `max_by_key` would take the last.
    let (rule, number) = fired.rev().max_by_key(|(_, number)| **number)?;
    let channels = if *number == 1 { "channel" } else { "channels" };
    Some(format!(
        "The most frequent reason for {} is {}: {} ({} {channels}).",
        worst.word(),
        rule.name(),
        rule.sentence(),
        count(*number)
    ))
}

pub(super) fn shares(summary: &Summary) -> Vec<Share> {
    let total = summary.channels.max(1);
    let mut start = 0;
    let mut before = 0;
    [(Verdict::Bad, summary.bad), (Verdict::Marginal, summary.marginal), (Verdict::Clear, summary.clear)]
        .into_iter()
        .map(|(verdict, number)| {
            before += number;
            let end = before.saturating_mul(1000) / total;
            // One channel among many still shows.
            let end = if number > 0 { end.max(start + 4) } else { end.max(start) };
            let share = Share {
                word: verdict.word(),
                mark: mark_of(verdict),
                count: count(number),
                percent: percent(number, total),
                start,
                width: end - start,
            };
            start = end;
            share
        })
        .collect()
}

/// Returns a share in percent; what is not nothing is not shown as 0, what is not all not as 100.
fn percent(number: u64, total: u64) -> String {
    let share = 100.0 * number as f64 / total as f64;
    match number {
        0 => "0 %".to_owned(),
        _ if share < 0.1 => "< 0.1 %".to_owned(),
        _ if number < total && share > 99.9 => "> 99.9 %".to_owned(),
        _ => format!("{} %", significant(share, 3)),
    }
}

/// Returns how many channels carry doubts of their own.
pub(super) fn doubtful(result: &SurveyResult) -> Option<String> {
    let number = result.channels.iter().filter(|channel| !channel.warnings.is_empty()).count();
    let carry = if number == 1 { "channel carries a doubt of its own" } else { "channels carry doubts of their own" };
    (number > 0).then(|| format!("{} {carry}: see “warnings” in channels.csv.", count(number as u64)))
}

#[cfg(test)]
mod tests {
    use super::percent;

    #[test]
    fn shares_are_never_rounded_to_nothing_or_all() {
        let cases = [(0, 10), (1, 10), (1, 3), (1, 5000), (4999, 5000), (9999, 10000), (7, 7)];
        let want = ["0 %", "10 %", "33.3 %", "< 0.1 %", "> 99.9 %", "> 99.9 %", "100 %"];
        assert_eq!(cases.map(|(number, total)| percent(number, total)), want.map(String::from));
    }
}
