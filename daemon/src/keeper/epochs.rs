//! Levels that were measured with other settings are never compared: a change starts a new epoch, with its reason.

use hushwatch_record::RecordError;

use super::Keeper;
use crate::message::Swept;

/// So many differences are told; the rest is counted.
const TOLD: usize = 4;

/// Under this name the record remembers what bore on the last level of a cable.
pub(super) fn key(tag: &str) -> String {
    format!("bearing/{tag}")
}

impl Keeper {
    /// Holds what bears on a level against what bore on the one before.
    pub(super) fn compare_settings(&mut self, swept: &Swept) -> Result<(), RecordError> {
        let now = swept.bearing.join("\n");
        let before = self.cables[swept.cable].bearing.replace(now.clone());
        if before.as_deref() == Some(now.as_str()) {
            return Ok(());
        }
        let tag = self.site.cables[swept.cable].tag.clone();
        self.writer.remember(&key(&tag), Some(&now))?;
        let Some(before) = before else { return Ok(()) };
        let reason = difference(&before, &now);
        tracing::warn!(cable = tag, "measured otherwise from now on, so that references no longer count: {reason}");
        self.cables[swept.cable].comparable_from = Some(swept.time);
        self.urgent = true;
        let bands: Vec<u32> = self.cables[swept.cable].bands.iter().map(|series| series.id).collect();
        for series in bands {
            let outcomes = self.engine.set_aside(series);
            self.take_outcomes(outcomes)?;
        }
        // Last, since blocks that were closed just now saved the charts once more.
        self.writer.epoch(self.cables[swept.cable].id, swept.time, &reason)
    }
}

/// What is new, and what was instead.
fn difference(before: &str, now: &str) -> String {
    let split = |line: &str| line.split_once(" = ").map(|(name, value)| (name.to_owned(), value.to_owned()));
    let known: Vec<(String, String)> = before.lines().filter_map(split).collect();
    let mut changes = Vec::new();
    for (name, value) in now.lines().filter_map(split) {
        match known.iter().find(|(other, _)| *other == name) {
            Some((_, former)) if *former == value => {}
            Some((_, former)) => changes.push(format!("{name} is {value}, not {former}")),
            None => changes.push(format!("{name} is {value} now")),
        }
    }
    let gone = known.iter().filter(|(name, _)| !now.lines().filter_map(split).any(|(other, _)| other == *name));
    changes.extend(gone.map(|(name, former)| format!("{name} is no longer {former}")));
    let more = changes.len().saturating_sub(TOLD);
    changes.truncate(TOLD);
    if more > 0 {
        changes.push(format!("and {more} more"));
    }
    changes.join("; ")
}

#[cfg(test)]
mod tests {
    use super::*;

    #[test]
    fn differences_are_told_by_name() {
        let before = "instrument = A\n1 rbw_hz = 9000\n1 attenuation_db = 10\n2 rbw_hz = 9000";
        let now = "instrument = A\n1 rbw_hz = 9000\n1 attenuation_db = 20\n1 unit = DBM";
        let told = difference(before, now);
        assert_eq!(told, "1 attenuation_db is 20, not 10; 1 unit is DBM now; 2 rbw_hz is no longer 9000");
        let many: Vec<String> = (0..9).map(|n| format!("{n} x = 1")).collect();
        assert!(difference("", &many.join("\n")).ends_with("and 5 more"));
    }
}
