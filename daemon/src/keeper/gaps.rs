//! Intervals without levels, each with its reason, and the trouble with instruments that makes them.

use hushwatch_alarm::{AlarmKey, AlarmKind, Detail, Event};
use hushwatch_instrument::ErrorClass;
use hushwatch_quantity::Time;
use hushwatch_record::RecordError;

use super::{Keeper, start};
use crate::message::{Swept, Trouble};
use crate::outage::Consequence;

impl Keeper {
    /// Between the last level and the start of the service nothing was measured.
    pub(super) fn resume_gaps(&mut self) -> Result<(), RecordError> {
        let stopped = self.writer.read().remembered(start::STOPPED)?;
        let reason = match stopped.as_deref() {
            // No cable misses its turn by that.
            Some(start::AGAIN) => None,
            Some(_) => Some("the service was stopped"),
            None => Some("the service ended without notice"),
        };
        let open = self.writer.read().open_gaps()?;
        for (index, cable) in self.site.cables.iter().enumerate() {
            let known = &mut self.cables[index];
            known.gap = open.iter().find(|gap| gap.cable == cable.tag).map(|gap| gap.id);
            if let (None, Some(latest), Some(reason)) = (known.gap, known.latest, reason) {
                known.gap = Some(self.writer.begin_gap(known.id, latest, reason)?);
            }
        }
        Ok(())
    }

    pub(super) fn end_gap(&mut self, cable: usize, time: Time) -> Result<(), RecordError> {
        if let Some(gap) = self.cables[cable].gap.take() {
            self.writer.end_gap(gap, time)?;
            self.urgent = true;
        }
        Ok(())
    }

    /// An instrument gave no answer: its cables have no levels from their last one on.
    pub(super) fn trouble(&mut self, trouble: &Trouble) -> Result<(), RecordError> {
        let index = trouble.instrument;
        let reason = format!("{}: {}", trouble.class.label(), trouble.text);
        self.instruments[index].trouble = Some(reason.clone());
        let now = self.plant_now();
        for (cable, known) in self.site.cables.iter().zip(&mut self.cables) {
            if cable.instrument == index && known.gap.is_none() {
                let from = known.latest.unwrap_or(now);
                known.gap = Some(self.writer.begin_gap(known.id, from, &reason)?);
                self.urgent = true;
            }
        }
        let at_once = matches!(trouble.class, ErrorClass::WrongIdentity | ErrorClass::Settings | ErrorClass::Device);
        let wire = self.started.elapsed();
        if self.instruments[index].outage.failed(wire, at_once) == Consequence::Raise {
            let name = &self.site.instruments[index].name;
            let detail = Detail {
                text: format!("{name} gives no levels: {}", trouble.text),
                since: self.last_level_of(index),
                places: Vec::new(),
            };
            let key = AlarmKey::new(AlarmKind::Instrument, name.clone());
            self.happened(Event::Occurs { key, time: now, detail })?;
        }
        Ok(())
    }

    /// An instrument answered.
    pub(super) fn answered(&mut self, index: usize, swept: &Swept) -> Result<(), RecordError> {
        let known = &mut self.instruments[index];
        known.sweeps += 1;
        known.trouble = None;
        known.assumed.clone_from(&swept.assumed);
        if known.identity.as_deref() != Some(swept.identity.as_str()) {
            known.identity = Some(swept.identity.clone());
        }
        if known.outage.succeeded() == Consequence::Clear {
            let name = self.site.instruments[index].name.clone();
            let text = format!("{name} answers again");
            let key = AlarmKey::new(AlarmKind::Instrument, name);
            self.happened(Event::Clears { key, time: swept.time, text })?;
        }
        Ok(())
    }

    /// When the cables of an instrument were swept last.
    fn last_level_of(&self, instrument: usize) -> Option<Time> {
        let of_this = self.site.cables.iter().zip(&self.cables).filter(|(cable, _)| cable.instrument == instrument);
        of_this.filter_map(|(_, known)| known.latest).max()
    }
}
