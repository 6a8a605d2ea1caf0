//! `hushwatch replay`: what would these settings have alarmed on? The service's own engine, offline.

use std::collections::{BTreeMap, BTreeSet, HashMap};
use std::io::{BufWriter, Write};
use std::path::PathBuf;
use std::process::ExitCode;

use clap::Args;
use hushwatch_config::site::Site;
use hushwatch_config::walk::suggestion;
use hushwatch_drift::engine::FalseAlarms;
use hushwatch_drift::{
    Block, Engine, EngineSettings, Finding, Outcome, Reading, ReferenceKind, SeriesId, SeriesSettings, StateId,
    reference_figure,
};
use hushwatch_quantity::{Interval, Span, Time};
use serde::Serialize;

use crate::context::{Context, system_now};
use crate::failure::{Failure, Outcome as Ended};
use crate::levels_csv::{CsvLevel, LevelsFile};
use crate::times::time;
use crate::written::hundredths;

/// Takes levels from a file through the charts of the service and prints each alarm as a JSON object, one a line, with
/// the plant time at which it would have been raised. Exit code 0 whether or not there are any.
#[derive(Args)]
pub(crate) struct Arguments {
    /// Levels as `hushwatch export levels` writes them; time,cable,band,level are enough
    #[arg(value_name = "FILE.csv")]
    file: PathBuf,
    /// The interval before the fix, for all cables: two times with a stroke between
    #[arg(long, value_name = "TIME/TIME")]
    before: Option<String>,
    /// The interval after the fix, for all cables: what is to be held from its end on
    #[arg(long, value_name = "TIME/TIME")]
    after: Option<String>,
}

/// Replays a file.
pub(crate) fn run(context: &Context, arguments: &Arguments) -> Ended {
    let site = context.site()?;
    let interval = |text: &Option<String>| text.as_deref().map(|text| interval(text, &site)).transpose();
    let (before, after) = (interval(&arguments.before)?, interval(&arguments.after)?);
    if after.is_none() {
        writeln!(anstream::stderr(), "without --after nothing is charted, so that nothing can be alarmed on")?;
    }
    let mut file = LevelsFile::open(&arguments.file)?;
    let mut replay = Replay::new(&site, before, after);
    let mut out = BufWriter::new(std::io::stdout().lock());
    while let Some(level) = file.next()? {
        let reading = replay.reading(&level, &arguments.file)?;
        for alarm in replay.take(reading) {
            writeln!(out, "{}", serde_json::to_string(&alarm)?)?;
        }
    }
    for alarm in replay.finish() {
        writeln!(out, "{}", serde_json::to_string(&alarm)?)?;
    }
    out.flush()?;
    replay.tell()?;
    Ok(ExitCode::SUCCESS)
}

fn interval(text: &str, site: &Site) -> Result<Interval, Failure> {
    let (from, to) = text.split_once('/').ok_or_else(|| {
        Failure::wrong_call(format!("`{text}` is no interval: write two times with a stroke between, TIME/TIME"))
    })?;
    let (from, to) = (time(from.trim(), system_now(), site)?, time(to.trim(), system_now(), site)?);
    if from >= to {
        return Err(Failure::wrong_call(format!("the interval `{text}` ends before it begins")));
    }
    Ok(Interval::new(from, to))
}

/// An alarm, as a line of the output.
#[derive(Serialize)]
struct Alarm {
    time: String,
    cable: String,
    band: String,
    kind: &'static str,
    state: String,
    shift: f64,
    since: String,
    evidence: Evidence,
}

/// What speaks for it.
#[derive(Serialize)]
struct Evidence {
    statistic: f64,
    threshold: f64,
    max_rise_db: f64,
    reference_db: f64,
}

/// A reference that is being gathered: its interval, and the blocks in it by series and operating state.
struct Gathering {
    kind: ReferenceKind,
    interval: Interval,
    blocks: BTreeMap<(SeriesId, StateId), Vec<Block>>,
    /// The series for which it was laid.
    laid: BTreeSet<SeriesId>,
}

struct Replay<'a> {
    site: &'a Site,
    engine: Engine,
    /// Cable, by index, and band of each series.
    series: Vec<(usize, String)>,
    numbers: HashMap<String, HashMap<String, SeriesId>>,
    states: Vec<String>,
    references: Vec<Gathering>,
    /// The findings that stand on each cable: one alarm stands as long as there is one.
    standing: BTreeMap<usize, BTreeSet<(SeriesId, StateId)>>,
    /// Intervals in which there were too few blocks, in sentences.
    left_out: Vec<String>,
    alarms: u64,
}

impl<'a> Replay<'a> {
    fn new(site: &'a Site, before: Option<Interval>, after: Option<Interval>) -> Self {
        let false_alarms = FalseAlarms { count: site.drift.false_alarms_count, per: site.drift.false_alarms_per };
        let mut engine = Engine::new(EngineSettings { block: site.drift.block, false_alarms });
        let mut series = Vec::new();
        let mut numbers: HashMap<String, HashMap<String, SeriesId>> = HashMap::new();
        for (index, cable) in site.cables.iter().enumerate() {
            for band in &cable.bands {
                let id = series.len() as SeriesId;
                let settings =
                    SeriesSettings { max_rise_db: cable.max_rise_db, min_suppression_db: cable.min_suppression_db };
                // Nothing is charted yet.
                engine.watch(id, settings);
                series.push((index, band.name.clone()));
                numbers.entry(cable.tag.clone()).or_default().insert(band.name.clone(), id);
            }
        }
        let gathering = |kind, interval: Option<Interval>| {
            interval.map(|interval| Gathering { kind, interval, blocks: BTreeMap::new(), laid: BTreeSet::new() })
        };
        let references = [gathering(ReferenceKind::Before, before), gathering(ReferenceKind::After, after)];
        Self {
            site,
            engine,
            series,
            numbers,
            states: Vec::new(),
            references: references.into_iter().flatten().collect(),
            standing: BTreeMap::new(),
            left_out: Vec::new(),
            alarms: 0,
        }
    }

    /// A level of the file as the engine knows it.
    fn reading(&mut self, level: &CsvLevel<'_>, file: &std::path::Path) -> Result<Reading, Failure> {
        let place = || format!("{}:{}", file.display(), level.line);
        let Some(bands) = self.numbers.get(level.cable) else {
            let near = suggestion(level.cable, self.numbers.keys().map(String::as_str));
            return Err(Failure::could_not(format!(
                "{}: the site file has no cable `{}`; {near}",
                place(),
                level.cable
            )));
        };
        let Some(&series) = bands.get(level.band) else {
            let near = suggestion(level.band, bands.keys().map(String::as_str));
            return Err(Failure::could_not(format!(
                "{}: {} has no band `{}`; {near}",
                place(),
                level.cable,
                level.band
            )));
        };
        let state = self.state(level.state);
        Ok(Reading { series, state, time: level.time, level_db: level.level_db, quality: level.quality })
    }

    fn state(&mut self, name: &str) -> StateId {
        let known = self.states.iter().position(|state| state == name);
        known.unwrap_or_else(|| {
            self.states.push(name.to_owned());
            self.states.len() - 1
        }) as StateId
    }

    fn take(&mut self, reading: Reading) -> Vec<Alarm> {
        let outcomes = self.engine.observe(reading);
        let mut alarms = self.outcomes(outcomes);
        alarms.extend(self.lay_references(reading.series, reading.time));
        alarms
    }

    /// What is still open at the end of the file.
    fn finish(&mut self) -> Vec<Alarm> {
        let mut alarms = Vec::new();
        while let Some(end) = self.engine.next_end() {
            let outcomes = self.engine.advance(end);
            alarms.extend(self.outcomes(outcomes));
            for series in 0..self.series.len() as SeriesId {
                alarms.extend(self.lay_references(series, end));
            }
        }
        alarms
    }

    fn outcomes(&mut self, outcomes: Vec<Outcome>) -> Vec<Alarm> {
        let mut alarms = Vec::new();
        for outcome in outcomes {
            match outcome {
                Outcome::BlockClosed { series, state, block } => {
                    let end = block.start + self.site.drift.block;
                    for reference in &mut self.references {
                        if reference.interval.contains(block.start) && end <= reference.interval.to {
                            reference.blocks.entry((series, state)).or_default().push(block);
                        }
                    }
                }
                Outcome::Raised(finding) => {
                    let cable = self.series[finding.series as usize].0;
                    let standing = self.standing.entry(cable).or_default();
                    let first = standing.is_empty();
                    standing.insert((finding.series, finding.state));
                    if first {
                        self.alarms += 1;
                        alarms.push(self.alarm(&finding));
                    }
                }
                Outcome::Updated(_) => {}
                Outcome::Cleared(finding) => {
                    let cable = self.series[finding.series as usize].0;
                    self.standing.entry(cable).or_default().remove(&(finding.series, finding.state));
                }
            }
        }
        alarms
    }

    /// Lays the references whose interval a series has left behind, the `before` first.
    fn lay_references(&mut self, series: SeriesId, now: Time) -> Vec<Alarm> {
        let mut alarms = Vec::new();
        for at in 0..self.references.len() {
            let reference = &mut self.references[at];
            if now < reference.interval.to || !reference.laid.insert(series) {
                continue;
            }
            let (kind, to) = (reference.kind, reference.interval.to);
            let of_series: Vec<(StateId, Vec<Block>)> = reference
                .blocks
                .extract_if(.., |(of, _), _| *of == series)
                .map(|((_, state), blocks)| (state, blocks))
                .collect();
            for (state, blocks) in of_series {
                match reference_figure(&blocks, self.site.drift.block) {
                    Ok(figure) => {
                        let outcomes = self.engine.set_reference(series, state, kind, figure, to);
                        alarms.extend(self.outcomes(outcomes));
                    }
                    Err(error) => {
                        let (cable, band) = &self.series[series as usize];
                        let (cable, state) = (&self.site.cables[*cable].tag, &self.states[state as usize]);
                        self.left_out.push(format!("{} of {cable} {band} ({state}): {error}", kind.label()));
                    }
                }
            }
        }
        alarms
    }

    fn alarm(&self, finding: &Finding) -> Alarm {
        let (cable, band) = &self.series[finding.series as usize];
        Alarm {
            time: finding.time.to_string(),
            cable: self.site.cables[*cable].tag.clone(),
            band: band.clone(),
            kind: "regression",
            state: self.states[finding.state as usize].clone(),
            shift: hundredths(finding.rise_db),
            since: finding.since.to_string(),
            evidence: Evidence {
                statistic: hundredths(finding.statistic),
                threshold: hundredths(finding.threshold),
                max_rise_db: hundredths(finding.max_rise_db),
                reference_db: hundredths(finding.target_db),
            },
        }
    }

    /// What came of it, for people.
    fn tell(&self) -> Result<(), Failure> {
        let mut out = anstream::stderr();
        for one in &self.left_out {
            writeln!(out, "left out: {one}")?;
        }
        let late: u64 = (0..self.series.len() as SeriesId).map(|series| self.engine.late_readings(series)).sum();
        if late > 0 {
            let block = self.site.drift.block;
            writeln!(
                out,
                "{late} levels came out of order, after their block of {block} was closed, and were left out"
            )?;
        }
        let alarms = match self.alarms {
            0 => String::from("no alarm"),
            1 => String::from("1 alarm"),
            more => format!("{more} alarms"),
        };
        let rate = Span::from_micros(self.site.drift.false_alarms_per.as_micros());
        writeln!(out, "{alarms}, at {} false ones per {rate} for the whole site", self.site.drift.false_alarms_count)?;
        Ok(())
    }
}
