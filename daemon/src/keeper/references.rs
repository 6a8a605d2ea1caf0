//! References: labelled intervals of the log, by which everything later is judged.

use hushwatch_config::walk::suggestion;
use hushwatch_control::{LaidReference, MarkReference, Peer, Reply, When};
use hushwatch_drift::{ReferenceFigure, ReferenceKind, SeriesId, StateId, reference_figure};
use hushwatch_quantity::{Interval, Span, Time};
use hushwatch_record::{NewReference, RecordError};

use super::Keeper;
use super::ask::who;

/// What is to be laid, checked.
struct Mark {
    cable: usize,
    kind: ReferenceKind,
    interval: Interval,
    who: String,
    note: String,
}

/// A figure that can be laid: of which series (by index among the cable's bands), in which operating state.
struct Found {
    band: usize,
    state: StateId,
    figure: ReferenceFigure,
}

impl Keeper {
    pub(super) fn mark_reference(&mut self, ask: MarkReference, peer: Peer) -> Result<Reply, RecordError> {
        let mark = match self.understood(ask, peer) {
            Ok(mark) => mark,
            Err(why) => return Ok(Reply::Refused { why }),
        };
        let (found, left_out) = self.figures(&mark)?;
        if found.is_empty() {
            let tag = &self.site.cables[mark.cable].tag;
            let Interval { from, to } = mark.interval;
            let why = if left_out.is_empty() {
                String::from("there are no closed blocks in it")
            } else {
                left_out.join("; ")
            };
            return Ok(Reply::Refused { why: format!("no reference of {tag} from {from} to {to}: {why}") });
        }
        if mark.kind == ReferenceKind::After && mark.note.is_empty() && self.has_after(mark.cable)? {
            let tag = &self.site.cables[mark.cable].tag;
            let why = format!(
                "{tag} has an `after` reference already. Another one makes the present level the one to be held: \
                 say why it may, with --note. The first one is kept, and status shows the drop against it"
            );
            return Ok(Reply::Refused { why });
        }
        let mut laid = Vec::new();
        for one in found {
            laid.push(self.lay(&mark, &one)?);
        }
        self.urgent = true;
        let (cable, kind) = (&self.site.cables[mark.cable].tag, mark.kind.label());
        tracing::info!(cable, kind, by = mark.who, places = laid.len(), "reference");
        Ok(Reply::References { laid, left_out })
    }

    fn understood(&self, ask: MarkReference, peer: Peer) -> Result<Mark, String> {
        let tags = || self.site.cables.iter().map(|cable| cable.tag.as_str());
        let cable = tags()
            .position(|tag| tag == ask.cable)
            .ok_or_else(|| format!("there is no cable `{}`; {}", ask.cable, suggestion(&ask.cable, tags())))?;
        let kind = ReferenceKind::from_label(&ask.kind)
            .ok_or_else(|| format!("`{}` is no kind of reference; take `before` or `after`", ask.kind))?;
        let interval = match ask.when {
            When::Between(from, to) => Interval::new(Time::from_micros(from), Time::from_micros(to)),
            When::Last(span) => {
                let latest = self.cables[cable].latest;
                let latest = latest.ok_or_else(|| format!("there are no levels of {} yet", ask.cable))?;
                Interval::new(latest - Span::from_micros(span), latest)
            }
        };
        if let Some(since) = self.cables[cable].comparable_from
            && interval.from < since
        {
            return Err(format!(
                "until {since} {} was measured with other settings, so that levels from before cannot be compared with \
                 those of now: begin the interval there, or later",
                ask.cable
            ));
        }
        if interval.span() <= Span::ZERO {
            return Err(format!("the interval ends ({}) before it begins ({})", interval.to, interval.from));
        }
        Ok(Mark { cable, kind, interval, who: who(ask.who, peer), note: ask.note.trim().to_owned() })
    }

    /// The figures of all bands and operating states that have levels in the interval, and why others have none.
    fn figures(&self, mark: &Mark) -> Result<(Vec<Found>, Vec<String>), RecordError> {
        let block = self.site.drift.block;
        let (mut found, mut left_out) = (Vec::new(), Vec::new());
        for (band, series) in self.cables[mark.cable].bands.iter().enumerate() {
            for (&state, name) in &self.states {
                let mut blocks = self.writer.read().blocks(series.id, state, mark.interval)?;
                // A block that reaches beyond the interval holds levels that were not meant.
                blocks.retain(|one| one.start + block <= mark.interval.to);
                if blocks.is_empty() {
                    continue;
                }
                match reference_figure(&blocks, block) {
                    Ok(figure) => found.push(Found { band, state, figure }),
                    Err(error) => left_out.push(format!("{} ({name}): {error}", series.band)),
                }
            }
        }
        Ok((found, left_out))
    }

    fn has_after(&self, cable: usize) -> Result<bool, RecordError> {
        let of_cable = |id: SeriesId| self.cables[cable].bands.iter().any(|series| series.id == id);
        let references = self.writer.read().references()?;
        Ok(references.iter().any(|row| row.kind == ReferenceKind::After && of_cable(row.series)))
    }

    fn lay(&mut self, mark: &Mark, found: &Found) -> Result<LaidReference, RecordError> {
        let marked = self.plant_now();
        let series = &self.cables[mark.cable].bands[found.band];
        let (id, band, unit) = (series.id, series.band.clone(), series.unit.label().to_owned());
        let Found { state, figure, .. } = *found;
        self.writer.reference(&NewReference {
            series: id,
            state,
            kind: mark.kind,
            interval: mark.interval,
            marked,
            who: &mark.who,
            note: &mark.note,
            figure,
        })?;
        let outcomes = self.engine.set_reference(id, state, mark.kind, figure, mark.interval.to);
        self.take_outcomes(outcomes)?;
        self.save_chart(id, state)?;
        Ok(LaidReference {
            band,
            state: self.state_name(state),
            level_db: figure.median_db,
            standard_error_db: figure.standard_error_db,
            blocks: figure.blocks,
            effective_blocks: figure.effective_blocks,
            provisional: figure.provisional,
            unit,
            max_rise_db: self.engine.chart(id, state).map(|chart| chart.max_rise_db),
        })
    }
}
