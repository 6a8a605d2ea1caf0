//! How each band of each cable stands, from what the record holds: what `status` and `trend` tell.

use hushwatch_alarm::{Alarm, AlarmKind, AlarmState, Place};
use hushwatch_config::site::{Cable, Clock, Site};
use hushwatch_drift::{ChartState, ReferenceFigure, ReferenceKind, Standing, Verdict, VerdictInput, standing, verdict};
use hushwatch_quantity::{Quality, Span, Time};
use hushwatch_record::{EpochRow, GapRow, LevelRow, Read, RecordError, ReferenceRow, SeriesRow};

/// How many closed blocks make up "now": enough for a median that a burst does not move.
const NOW_BLOCKS: usize = 12;

/// After so many turns without a level the last one is stale, and after a minute at least.
const STALE_TURNS: i64 = 5;

/// Why there is no verdict after the settings changed.
const SET_ASIDE: &str = "the receiver's settings changed, so that the references no longer count: mark new ones";

/// Everything that `status` tells.
pub(crate) struct Picture {
    pub(crate) now: Time,
    pub(crate) cables: Vec<CableStanding>,
    pub(crate) alarms: Vec<Alarm>,
    pub(crate) gaps: Vec<GapRow>,
    /// Cables whose references were set aside, since when and why.
    pub(crate) set_aside: Vec<EpochRow>,
    pub(crate) size: u64,
}

/// How a cable stands.
pub(crate) struct CableStanding {
    pub(crate) tag: String,
    pub(crate) description: String,
    /// Each band in each operating state in which it was measured; the worst first.
    pub(crate) places: Vec<PlaceStanding>,
    /// The newest level of any band.
    pub(crate) latest: Option<LevelRow>,
    /// Is that too old to say anything about now?
    pub(crate) stale: bool,
    /// Is a choke described for it?
    pub(crate) has_choke: bool,
}

/// How a band of a cable stands in an operating state.
pub(crate) struct PlaceStanding {
    pub(crate) series: SeriesRow,
    pub(crate) state: String,
    pub(crate) verdict: Verdict,
    pub(crate) why: &'static str,
    /// By the latest `after` reference.
    pub(crate) standing: Standing,
    /// The drop against the first `after` reference, if that is another one, dB.
    pub(crate) drop_since_commissioning_db: Option<f64>,
    pub(crate) before: Option<ReferenceRow>,
    pub(crate) after: Option<ReferenceRow>,
    pub(crate) chart: Option<ChartState>,
    pub(crate) quality: Option<Quality>,
}

impl CableStanding {
    /// What is to be told of the cable in one line.
    pub(crate) fn worst(&self) -> Option<&PlaceStanding> {
        self.places.first()
    }
}

/// Looks at everything at once.
pub(crate) fn picture(site: &Site, read: Read<'_>, now: Time) -> Result<Picture, RecordError> {
    let looked = Looked {
        series: read.series()?,
        states: read.states()?,
        references: read.references()?,
        alarms: read.alarms(true)?,
        gaps: read.open_gaps()?,
        epochs: read.epochs()?,
    };
    let mut cables = Vec::new();
    for cable in &site.cables {
        // Where the instrument keeps the time, nobody knows how late it is: there a gap alone tells.
        let keeps_time = site.instrument(cable).is_some_and(|one| one.clock == Clock::Instrument);
        cables.push(looked.cable(cable, read, if keeps_time { None } else { Some(now) })?);
    }
    let set_aside = looked.set_aside(&cables);
    Ok(Picture { now, cables, alarms: looked.alarms, gaps: looked.gaps, set_aside, size: read.size()? })
}

/// What is read once for all cables.
struct Looked {
    series: Vec<SeriesRow>,
    states: Vec<(u32, String)>,
    references: Vec<ReferenceRow>,
    alarms: Vec<Alarm>,
    gaps: Vec<GapRow>,
    epochs: Vec<EpochRow>,
}

impl Looked {
    fn cable(&self, cable: &Cable, read: Read<'_>, now: Option<Time>) -> Result<CableStanding, RecordError> {
        let mut latest: Option<LevelRow> = None;
        let mut places = Vec::new();
        for band in &cable.bands {
            let of_band = |row: &&SeriesRow| row.cable == cable.tag && row.band == band.name;
            // A probe of another kind makes another series: the newest one counts.
            let Some(series) = self.series.iter().rfind(of_band) else { continue };
            let newest = read.latest_level(series.id)?;
            let stale = newest.as_ref().is_none_or(|level| self.is_stale(cable, level.time, now));
            for state in read.states_of(series.id)? {
                places.push(self.place(cable, series, state, stale, read)?);
            }
            if newest.as_ref().map(|level| level.time) > latest.as_ref().map(|level| level.time) {
                latest = newest;
            }
        }
        places.sort_by(|a, b| rank(a).cmp(&rank(b)).then(b.lost_db().total_cmp(&a.lost_db())));
        let stale = latest.as_ref().is_none_or(|level| self.is_stale(cable, level.time, now));
        Ok(CableStanding {
            tag: cable.tag.clone(),
            description: cable.description.clone(),
            places,
            latest,
            stale,
            has_choke: cable.choke.is_some(),
        })
    }

    fn place(
        &self,
        cable: &Cable,
        series: &SeriesRow,
        state: u32,
        stale: bool,
        read: Read<'_>,
    ) -> Result<PlaceStanding, RecordError> {
        let name = self.states.iter().find(|(id, _)| *id == state).map_or_else(String::new, |(_, name)| name.clone());
        // What was measured with other settings no longer counts.
        let epoch = self.epochs.iter().rfind(|row| row.cable == cable.tag);
        let comparable = |time: Time| epoch.is_none_or(|epoch| time >= epoch.time);
        let of = |kind| {
            self.references.iter().filter(move |row| {
                row.series == series.id && row.state == state && row.kind == kind && comparable(row.interval.from)
            })
        };
        let before = of(ReferenceKind::Before).next_back().cloned();
        let after = of(ReferenceKind::After).next_back().cloned();
        let commissioning = of(ReferenceKind::After).next();
        let mut recent = read.recent_blocks(series.id, state, NOW_BLOCKS)?;
        recent.retain(|block| comparable(block.start));
        let figure = |row: &Option<ReferenceRow>| row.as_ref().map(|row| row.figure);
        let (before_figure, after_figure) = (figure(&before), figure(&after));
        let standing = standing(before_figure.as_ref(), after_figure.as_ref(), &recent);
        let quality = recent.iter().map(|block| block.worst).reduce(Quality::worse).filter(|_| !stale);
        let first = commissioning.filter(|first| after.as_ref().is_some_and(|after| after.id != first.id));
        let drop_since_commissioning_db = first.zip(standing.now_db).map(|(first, now)| now - first.figure.median_db);
        let provisional = |figure: Option<ReferenceFigure>| figure.is_some_and(|figure| figure.provisional);
        let (verdict, why) = verdict(&VerdictInput {
            regression: self.regression_stands(cable, series, &name),
            recent: quality.map(|quality| quality.grade),
            before: before.is_some(),
            after: after.is_some(),
            provisional: provisional(before_figure) || provisional(after_figure),
            achieved: standing.achieved,
            held: standing.held,
            min_suppression_db: cable.min_suppression_db,
        });
        let set_aside = epoch.is_some() && before.is_none() && after.is_none();
        let chart = read.chart(series.id, state)?;
        let series = series.clone();
        Ok(PlaceStanding {
            series,
            state: name,
            verdict,
            why: if set_aside { SET_ASIDE } else { why },
            standing,
            drop_since_commissioning_db,
            before,
            after,
            chart,
            quality,
        })
    }

    /// The last epoch of each cable that had references before it and has none since.
    fn set_aside(&self, cables: &[CableStanding]) -> Vec<EpochRow> {
        let without = |cable: &&CableStanding| cable.places.iter().all(|place| place.after.is_none());
        let tags = cables.iter().filter(without).map(|cable| cable.tag.as_str());
        let had = |tag: &str| {
            let of_cable = |id| self.series.iter().any(|series| series.id == id && series.cable == tag);
            self.references.iter().any(|row| of_cable(row.series))
        };
        tags.filter(|tag| had(tag))
            .filter_map(|tag| self.epochs.iter().rfind(|row| row.cable == tag).cloned())
            .collect()
    }

    /// Is the last level of a cable too old to say anything about now?
    fn is_stale(&self, cable: &Cable, time: Time, now: Option<Time>) -> bool {
        let every = cable.every.unwrap_or(Span::from_secs(10)).as_micros();
        let patience = Span::from_micros(every.saturating_mul(STALE_TURNS)).max(Span::from_mins(1));
        self.gaps.iter().any(|gap| gap.cable == cable.tag) || now.is_some_and(|now| now - time > patience)
    }

    fn regression_stands(&self, cable: &Cable, series: &SeriesRow, state: &str) -> bool {
        let here = |place: &Place| place.band == series.band && place.state == state;
        self.alarms.iter().any(|alarm| {
            alarm.key.kind == AlarmKind::Regression
                && alarm.key.subject == cable.tag
                && alarm.state != AlarmState::Returned
                && alarm.detail.places.iter().any(here)
        })
    }
}

impl PlaceStanding {
    /// What was lost of the suppression, dB; minus infinity if that is not known.
    fn lost_db(&self) -> f64 {
        self.standing.drop.map_or(f64::NEG_INFINITY, |drop| drop.db)
    }
}

fn rank(place: &PlaceStanding) -> u8 {
    match place.verdict {
        Verdict::Regressed => 0,
        Verdict::Weakening => 1,
        // A choke that helps in one band need not help in another: one band that holds speaks for the cable.
        Verdict::Holding => 2,
        Verdict::Unproven => 3,
    }
}
