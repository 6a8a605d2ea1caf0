//! The engine as its users see it: levels in, findings out.

#![expect(clippy::expect_used, reason = "a test fails by a panic that tells what was expected")]

use hushwatch_drift::{
    Block, Engine, EngineSettings, FalseAlarms, Finding, Outcome, Reading, ReferenceError, ReferenceKind,
    SeriesSettings, Verdict, VerdictInput, reference_figure, standing, suppression, verdict,
};
use hushwatch_quantity::{Grade, Quality, Reason, Span, Time};
use proptest::prelude::*;

const BLOCK: Span = Span::from_mins(10);
const SERIES: u32 = 1;
const STATE: u32 = 1;

/// A fixed generator of nearly normal numbers.
struct Noise(u64);

impl Noise {
    fn uniform(&mut self) -> f64 {
        self.0 ^= self.0 << 13;
        self.0 ^= self.0 >> 7;
        self.0 ^= self.0 << 17;
        (self.0 >> 11) as f64 / (1u64 << 53) as f64
    }

    fn normal(&mut self) -> f64 {
        (0..12).map(|_| self.uniform()).sum::<f64>() - 6.0
    }
}

fn settings() -> EngineSettings {
    EngineSettings { block: BLOCK, false_alarms: FalseAlarms { count: 1.0, per: Span::from_days(1826) } }
}

fn at(block: i64) -> Time {
    Time::from_secs(1_790_000_400) + Span::from_mins(10 * block)
}

fn reading(time: Time, level_db: f64) -> Reading {
    Reading { series: SERIES, state: STATE, time, level_db, quality: Quality::GOOD }
}

/// Levels of blocks: three in each, about a mean that the closure tells, with this much noise.
fn levels(blocks: std::ops::Range<i64>, sigma_db: f64, seed: u64, mean: impl Fn(i64) -> f64) -> Vec<Reading> {
    let mut noise = Noise(seed);
    blocks
        .flat_map(|block| (0..3).map(move |turn| (block, turn)))
        .map(|(block, turn)| reading(at(block) + Span::from_secs(180 * turn), mean(block) + sigma_db * noise.normal()))
        .collect()
}

fn feed(engine: &mut Engine, readings: &[Reading]) -> Vec<Outcome> {
    readings.iter().flat_map(|reading| engine.observe(*reading)).collect()
}

fn blocks_of(outcomes: &[Outcome]) -> Vec<Block> {
    let block = |outcome: &Outcome| match outcome {
        Outcome::BlockClosed { block, .. } => Some(*block),
        _ => None,
    };
    outcomes.iter().filter_map(block).collect()
}

fn raised(outcomes: &[Outcome]) -> Option<&Finding> {
    outcomes.iter().find_map(|outcome| match outcome {
        Outcome::Raised(finding) => Some(finding),
        _ => None,
    })
}

fn cleared(outcomes: &[Outcome]) -> Option<&Finding> {
    outcomes.iter().find_map(|outcome| match outcome {
        Outcome::Cleared(finding) => Some(finding),
        _ => None,
    })
}

/// An engine with two days of `after` at 40 dB, sigma 0.5 dB of a level, charted from there on.
fn engine_with_reference(max_rise_db: f64) -> Engine {
    let mut engine = Engine::new(settings());
    engine.watch(SERIES, SeriesSettings { max_rise_db: Some(max_rise_db), min_suppression_db: None });
    let outcomes = feed(&mut engine, &levels(0..289, 0.5, 7, |_| 40.0));
    let figure = reference_figure(&blocks_of(&outcomes), BLOCK).expect("a figure");
    assert!(!figure.provisional);
    engine.set_reference(SERIES, STATE, ReferenceKind::After, figure, at(289));
    engine
}

#[test]
fn a_block_is_the_median_of_its_levels_and_closes_with_the_next() {
    let mut engine = Engine::new(settings());
    for (secs, db) in [(0, 40.0), (10, 41.0), (20, 99.0)] {
        assert_eq!(engine.observe(reading(at(0) + Span::from_secs(secs), db)), []);
    }
    let bad = Reading { quality: Quality::bad(Reason::Overload), ..reading(at(0) + Span::from_secs(30), 120.0) };
    assert_eq!(engine.observe(bad), []);
    let outcomes = engine.observe(reading(at(1), 40.0));
    let expected = Block { start: at(0), median_db: 41.0, count: 3, worst: Quality::GOOD };
    assert_eq!(outcomes, [Outcome::BlockClosed { series: SERIES, state: STATE, block: expected }]);
    assert_eq!(engine.observe(reading(at(0), 40.0)), [], "too late for its block");
    assert_eq!(engine.late_readings(SERIES), 1);
    assert_eq!(engine.next_end(), Some(at(2)));
    assert_eq!(blocks_of(&engine.advance(at(2))).len(), 1);
}

#[test]
fn a_rise_is_found_sized_and_dated_and_its_return_too() {
    let mut engine = engine_with_reference(3.0);
    let outcomes = feed(&mut engine, &levels(289..700, 0.5, 8, |_| 40.0));
    assert_eq!(raised(&outcomes), None, "nothing has risen");
    let outcomes = feed(&mut engine, &levels(700..900, 0.5, 9, |_| 45.0));
    let finding = raised(&outcomes).expect("a finding").clone();
    assert!((finding.rise_db - 5.0).abs() < 0.5, "{finding:?}");
    assert_eq!(finding.since, at(700), "{finding:?}");
    assert!(finding.time <= at(705), "three to five blocks are enough: {finding:?}");
    let outcomes = feed(&mut engine, &levels(900..1000, 0.5, 10, |_| 40.0));
    let back = cleared(&outcomes).expect("it is over");
    assert!(back.time <= at(910) && back.rise_db.abs() < 0.5 && back.epoch == finding.epoch, "{back:?}");
}

#[test]
fn a_rise_of_half_of_what_is_one_too_much_is_none() {
    let mut engine = engine_with_reference(4.0);
    let outcomes = feed(&mut engine, &levels(289..5000, 0.5, 11, |_| 41.8));
    assert_eq!(raised(&outcomes), None);
}

#[test]
fn a_burst_within_one_block_is_no_rise() {
    let mut engine = engine_with_reference(3.0);
    let outcomes = feed(&mut engine, &levels(289..400, 0.5, 12, |block| if block == 300 { 70.0 } else { 40.0 }));
    assert_eq!(raised(&outcomes), None);
}

#[test]
fn operating_states_are_never_mixed() {
    let mut engine = engine_with_reference(3.0);
    // The machine goes to another state in which it is 12 dB louder: there is no reference for it, so nothing is said.
    let louder = |reading: Reading| Reading { state: 2, level_db: reading.level_db + 12.0, ..reading };
    let readings: Vec<Reading> = levels(289..500, 0.5, 13, |_| 40.0).into_iter().map(louder).collect();
    let outcomes = feed(&mut engine, &readings);
    assert_eq!(raised(&outcomes), None);
    assert_eq!(engine.recent(SERIES, 2).count(), 210);
}

#[test]
fn a_new_reference_starts_a_new_epoch_and_ends_what_stood() {
    let mut engine = engine_with_reference(3.0);
    let outcomes = feed(&mut engine, &levels(289..400, 0.5, 14, |_| 46.0));
    assert!(raised(&outcomes).is_some());
    let figure = reference_figure(&blocks_of(&outcomes), BLOCK).expect("a figure");
    let outcomes = engine.set_reference(SERIES, STATE, ReferenceKind::After, figure, at(400));
    let ended = cleared(&outcomes).expect("what stood is over");
    let chart = engine.chart(SERIES, STATE).expect("a chart");
    assert!(chart.epoch > ended.epoch && chart.active.is_none(), "{chart:?}");
    assert_eq!(raised(&feed(&mut engine, &levels(400..600, 0.5, 15, |_| 46.0))), None);
}

#[test]
fn a_gross_rise_is_found_at_once_even_by_a_poor_reference() {
    // Seven blocks that happen to rise slowly: they look as correlated as can be, so that the CUSUM is slow.
    let mut engine = Engine::new(settings());
    engine.watch(SERIES, SeriesSettings::default());
    let outcomes = feed(&mut engine, &levels(0..8, 0.0, 1, |block| 40.0 + 0.02 * block as f64));
    let figure = reference_figure(&blocks_of(&outcomes), BLOCK).expect("a figure");
    assert!(figure.rho > 0.6 && figure.blocks == 7, "{figure:?}");
    engine.set_reference(SERIES, STATE, ReferenceKind::After, figure, at(8));
    let outcomes = feed(&mut engine, &levels(8..40, 0.05, 2, |_| 40.1));
    assert_eq!(raised(&outcomes), None);
    let outcomes = feed(&mut engine, &levels(40..60, 0.05, 3, |_| 46.1));
    let finding = raised(&outcomes).expect("a finding");
    assert_eq!((finding.since, finding.time), (at(40), at(43)), "{finding:?}");
    assert!(finding.statistic > finding.threshold);
}

#[test]
fn false_alarms_are_no_more_frequent_than_asked_for() {
    // At the edge of the null, one block a reading, at a rate that can be counted: one in a day, 144 blocks.
    for rho in [0.0, 0.5, 0.9] {
        let asked = EngineSettings { block: BLOCK, false_alarms: FalseAlarms { count: 1.0, per: Span::from_days(1) } };
        let mut engine = Engine::new(asked);
        engine.watch(SERIES, SeriesSettings { max_rise_db: Some(2.0), min_suppression_db: None });
        let mut noise = Noise(0x1234_5678_9abc_def1);
        let mut state = 0.0;
        let mut next = move || {
            state = rho * state + (1.0f64 - rho * rho).sqrt() * noise.normal();
            state
        };
        let (reference, charted) = (4_000, 60_000);
        let readings: Vec<Reading> = (0..reference).map(|n| reading(at(n), 40.0 + next())).collect();
        let figure = reference_figure(&blocks_of(&feed(&mut engine, &readings)), BLOCK).expect("a figure");
        engine.set_reference(SERIES, STATE, ReferenceKind::After, figure, at(reference));
        let mut raised = 0;
        for n in reference..reference + charted {
            let outcomes = engine.observe(reading(at(n), 41.0 + next()));
            raised += outcomes.iter().filter(|outcome| matches!(outcome, Outcome::Raised(_))).count();
        }
        let asked = charted as f64 / 144.0;
        assert!((raised as f64) < 2.0 * asked, "rho {rho}: {raised} instead of {asked:.0}");
        // And the chart is not asleep: at its alternative it speaks.
        assert!(raised > 0, "rho {rho}");
    }
}

#[test]
fn what_cannot_be_compared_is_never_charted_together() {
    let mut engine = engine_with_reference(3.0);
    let outcomes = feed(&mut engine, &levels(289..400, 0.5, 24, |_| 46.0));
    let epoch = raised(&outcomes).expect("a finding").epoch;
    // Half of a block, then another attenuator.
    let half = reading(at(400), 46.0);
    engine.observe(half);
    let outcomes = engine.set_aside(SERIES);
    assert_eq!(blocks_of(&outcomes), [Block { start: at(400), median_db: 46.0, count: 1, worst: Quality::GOOD }]);
    assert_eq!(cleared(&outcomes).expect("what stood is over").epoch, epoch);
    assert!(engine.chart(SERIES, STATE).is_none());
    assert_eq!(engine.recent(SERIES, STATE).count(), 0);
    assert_eq!(engine.observe(reading(at(400) + Span::from_secs(300), 56.0)), [], "the block is closed");
    let outcomes = feed(&mut engine, &levels(401..600, 0.5, 25, |_| 56.0));
    assert_eq!(raised(&outcomes), None);
    let blocks = blocks_of(&outcomes);
    assert_eq!(blocks.first().map(|block| block.start), Some(at(401)));
    let figure = reference_figure(&blocks, BLOCK).expect("a figure");
    engine.set_reference(SERIES, STATE, ReferenceKind::After, figure, at(600));
    assert!(engine.chart(SERIES, STATE).expect("a chart").epoch > epoch);
}

#[test]
fn the_default_of_max_rise_is_half_of_what_was_achieved() {
    let mut engine = Engine::new(settings());
    engine.watch(SERIES, SeriesSettings::default());
    let before = blocks_of(&feed(&mut engine, &levels(0..150, 0.5, 16, |_| 50.0)));
    let after = blocks_of(&feed(&mut engine, &levels(150..300, 0.5, 17, |_| 40.0)));
    let figure = |blocks: &[Block]| reference_figure(blocks, BLOCK).expect("a figure");
    engine.set_reference(SERIES, STATE, ReferenceKind::Before, figure(&before), at(150));
    engine.set_reference(SERIES, STATE, ReferenceKind::After, figure(&after[1..]), at(300));
    let chart = engine.chart(SERIES, STATE).expect("a chart");
    assert!((chart.max_rise_db - 5.0).abs() < 0.2, "{chart:?}");
}

#[test]
fn references_tell_what_they_are_worth() {
    let blocks = |range, seed| {
        let mut engine = Engine::new(settings());
        blocks_of(&feed(&mut engine, &levels(range, 0.5, seed, |_| 40.0)))
    };
    let short = reference_figure(&blocks(0..30, 18), BLOCK).expect("a figure");
    assert!(short.provisional && short.blocks == 29, "{short:?}");
    let day = reference_figure(&blocks(0..145, 19), BLOCK).expect("a figure");
    assert!(!day.provisional && day.standard_error_db < short.standard_error_db, "{day:?}");
    assert!((day.median_db - 40.0).abs() < 4.0 * day.standard_error_db, "{day:?}");
    assert_eq!(reference_figure(&blocks(0..5, 20), BLOCK), Err(ReferenceError::TooFewBlocks { have: 4, need: 5 }));
}

#[test]
fn the_interval_of_a_suppression_covers_the_truth_as_often_as_it_says() {
    let mut covered = 0;
    let trials = 400;
    for seed in 0..trials {
        let blocks = |mean: f64, seed: u64| {
            let mut engine = Engine::new(settings());
            let readings = levels(0..60, 1.0, seed.wrapping_mul(0x9e37_79b9_7f4a_7c15) | 1, |_| mean);
            reference_figure(&blocks_of(&feed(&mut engine, &readings)), BLOCK).expect("a figure")
        };
        let one = suppression(&blocks(50.0, 2 * seed + 1), &blocks(41.0, 2 * seed + 2));
        covered += u32::from(one.low_db <= 9.0 && 9.0 <= one.high_db);
    }
    // 95 % of 400 is 380, give or take 13 (three standard errors); wider than it says is no fault.
    assert!(covered >= 367, "{covered} of {trials}");
}

#[test]
fn each_row_of_the_verdict_table() {
    let interval = |low_db: f64, high_db: f64| {
        Some(hushwatch_drift::Suppression { db: f64::midpoint(low_db, high_db), low_db, high_db })
    };
    let proven = VerdictInput {
        regression: false,
        recent: Some(Grade::Good),
        before: true,
        after: true,
        provisional: false,
        achieved: interval(8.0, 9.0),
        held: interval(7.5, 8.5),
        min_suppression_db: Some(6.0),
    };
    for (row, input, expected) in [
        (1, VerdictInput { regression: true, ..VerdictInput::default() }, Verdict::Regressed),
        (2, VerdictInput { recent: None, ..proven }, Verdict::Unproven),
        (2, VerdictInput { recent: Some(Grade::Bad), ..proven }, Verdict::Unproven),
        (3, VerdictInput { after: false, ..proven }, Verdict::Unproven),
        (4, VerdictInput { before: false, ..proven }, Verdict::Unproven),
        (5, VerdictInput { achieved: interval(3.0, 4.0), ..proven }, Verdict::Unproven),
        (6, VerdictInput { achieved: interval(5.0, 7.0), ..proven }, Verdict::Unproven),
        (7, VerdictInput { held: interval(2.0, 5.9), ..proven }, Verdict::Regressed),
        (8, VerdictInput { provisional: true, ..proven }, Verdict::Unproven),
        (9, VerdictInput { held: interval(5.0, 7.0), ..proven }, Verdict::Weakening),
        (10, VerdictInput { recent: Some(Grade::Uncertain), ..proven }, Verdict::Holding),
        (11, proven, Verdict::Holding),
        (11, VerdictInput { min_suppression_db: None, held: interval(0.1, 0.3), ..proven }, Verdict::Holding),
        (9, VerdictInput { min_suppression_db: None, held: interval(0.0, 0.3), ..proven }, Verdict::Weakening),
    ] {
        let (got, why) = verdict(&input);
        assert_eq!(got, expected, "row {row}: {why}");
        assert!(!why.is_empty());
    }
}

#[test]
fn how_a_series_stands() {
    let mut engine = Engine::new(settings());
    let figure = |blocks: &[Block]| reference_figure(blocks, BLOCK).expect("a figure");
    let before = figure(&blocks_of(&feed(&mut engine, &levels(0..150, 0.5, 21, |_| 50.0))));
    let after = figure(&blocks_of(&feed(&mut engine, &levels(150..300, 0.5, 22, |_| 40.0)))[1..]);
    let now = blocks_of(&feed(&mut engine, &levels(300..313, 0.5, 23, |_| 43.0)));
    let standing = standing(Some(&before), Some(&after), &now[1..]);
    let about = |one: Option<hushwatch_drift::Suppression>, db: f64| {
        let one = one.expect("it is known");
        assert!((one.db - db).abs() < 0.5 && one.low_db < one.db && one.db < one.high_db, "{one:?}, not {db}");
    };
    about(standing.achieved, 10.0);
    about(standing.held, 7.0);
    about(standing.drop, 3.0);
}

proptest! {
    #![proptest_config(ProptestConfig::with_cases(24))]

    /// A service that is stopped at any level and started again finds the same as one that was not.
    #[test]
    fn a_restart_changes_nothing(seed in 1u64..1_000_000, stop in 1usize..1200, rise in 0.0f64..8.0) {
        let all = levels(289..700, 0.8, seed, |block| if (500..600).contains(&block) { 40.0 + rise } else { 40.0 });
        let mut whole = engine_with_reference(3.0);
        let expected = feed(&mut whole, &all);

        let mut first = engine_with_reference(3.0);
        let mut figure_engine = Engine::new(settings());
        let reference = blocks_of(&feed(&mut figure_engine, &levels(0..289, 0.5, 7, |_| 40.0)));
        let figure = reference_figure(&reference, BLOCK).expect("a figure");
        let before_stop = feed(&mut first, &all[..stop]);
        let recorded: Vec<Block> = first.recent(SERIES, STATE).copied().collect();
        let chart = first.chart(SERIES, STATE).cloned();
        let text = serde_json::to_string(&chart).expect("JSON");

        let mut second = Engine::new(settings());
        second.watch(SERIES, SeriesSettings { max_rise_db: Some(3.0), min_suppression_db: None });
        second.set_reference(SERIES, STATE, ReferenceKind::After, figure, at(289));
        let chart = serde_json::from_str(&text).expect("a chart");
        prop_assert_eq!(second.restore(SERIES, STATE, chart, &recorded), []);
        // What the record holds of the block that was open is given again.
        let from = second.closed_until(SERIES);
        let again: Vec<Reading> =
            all[..stop].iter().copied().filter(|one| from.is_none_or(|from| one.time >= from)).collect();
        let mut got = before_stop;
        prop_assert_eq!(feed(&mut second, &again), []);
        got.extend(feed(&mut second, &all[stop..]));
        prop_assert_eq!(got, expected);
    }
}
