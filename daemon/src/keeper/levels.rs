//! Levels go into the record and into the charts.

use hushwatch_drift::{Outcome, Reading, SeriesId, StateId};
use hushwatch_record::{NewLevel, NewSweep, RecordError};

use super::Keeper;
use crate::message::Swept;

impl Keeper {
    pub(super) fn swept(&mut self, swept: &Swept) -> Result<(), RecordError> {
        let instrument = self.site.cables[swept.cable].instrument;
        self.answered(instrument, swept)?;
        self.end_gap(swept.cable, swept.time)?;
        self.compare_settings(swept)?;
        let state = self.writer.state(&swept.state)?;
        self.states.entry(state).or_insert_with(|| swept.state.clone());
        let levels: Vec<NewLevel> = self.cables[swept.cable]
            .bands
            .iter()
            .zip(&swept.levels)
            .filter_map(|(series, level)| Some((series, level.as_ref()?)))
            .map(|(series, level)| NewLevel {
                series: series.id,
                level_db: level.level_db,
                peak_db: level.peak_db,
                peak_hz: level.peak_hz,
                quality: level.quality,
            })
            .collect();
        self.record_levels(swept, state, &levels)?;
        for level in levels {
            let NewLevel { series, level_db, quality, .. } = level;
            let reading = Reading { series, state, time: swept.time, level_db, quality };
            let outcomes = self.engine.observe(reading);
            self.take_outcomes(outcomes)?;
        }
        Ok(())
    }

    fn record_levels(&mut self, swept: &Swept, state: StateId, levels: &[NewLevel]) -> Result<(), RecordError> {
        let instrument = &self.site.instruments[self.site.cables[swept.cable].instrument].name;
        let setting = self.writer.setting(instrument, &swept.settings)?;
        let cable = &mut self.cables[swept.cable];
        self.writer.sweep(&NewSweep { time: swept.time, cable: cable.id, state, setting, levels })?;
        cable.latest = cable.latest.max(Some(swept.time));
        // After a start somebody waits to see that it works.
        self.urgent |= std::mem::take(&mut cable.first);
        Ok(())
    }

    /// What readings led to: blocks and charts into the record, findings into alarms.
    pub(super) fn take_outcomes(&mut self, outcomes: Vec<Outcome>) -> Result<(), RecordError> {
        for outcome in outcomes {
            match outcome {
                Outcome::BlockClosed { series, state, block } => {
                    self.writer.block(series, state, &block)?;
                    self.save_chart(series, state)?;
                }
                Outcome::Raised(finding) | Outcome::Updated(finding) => {
                    let key = (finding.series, finding.state);
                    let time = finding.time;
                    self.findings.insert(key, finding);
                    self.save_chart(key.0, key.1)?;
                    self.judge(key.0, time, None)?;
                }
                Outcome::Cleared(finding) => {
                    let (series, state) = (finding.series, finding.state);
                    self.findings.remove(&(series, state));
                    self.save_chart(series, state)?;
                    self.judge(series, finding.time, Some(&finding))?;
                }
            }
        }
        Ok(())
    }

    /// The chart as it is after the last block that it has seen, into the transaction of that block.
    pub(super) fn save_chart(&mut self, series: SeriesId, state: StateId) -> Result<(), RecordError> {
        match self.engine.chart(series, state) {
            Some(chart) => self.writer.chart(series, state, chart),
            None => Ok(()),
        }
    }
}
