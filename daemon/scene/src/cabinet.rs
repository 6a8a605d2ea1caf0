//! The cabinet: what flows through each cable at a time, and what a receiver would see of it.

use std::collections::HashMap;

use hushwatch_config::scene::{Cable, Scene, SourceKind, What};
use hushwatch_quantity::Time;

use crate::network::{Gaps, Nodes, gaps_at, transfer};
use crate::random::Random;
use crate::spectrum::{lines, noise_bandwidth_hz, through_filter};

/// Thermal noise at 290 K, dBm/Hz (k T0).
const THERMAL_DBM_PER_HZ: f64 = -173.975;

/// From dBm to dB(uV) in 50 ohm.
const DBM_TO_DBUV: f64 = 106.990;

/// So many sets of spectra are kept; a scene has few.
const MOST_KEPT: usize = 2048;

/// What a receiver is set to.
#[derive(Clone, Copy, Debug, PartialEq)]
pub struct Grid {
    /// First frequency, Hz.
    pub start_hz: f64,
    /// Last frequency, Hz.
    pub stop_hz: f64,
    /// Points, both ends included.
    pub points: usize,
    /// Width of its Gaussian filter at 6 dB, Hz.
    pub rbw_hz: f64,
    /// Attenuation at its input, dB: it raises the floor.
    pub attenuation_db: f64,
}

impl Grid {
    fn hz(&self, point: usize) -> f64 {
        let steps = self.points.saturating_sub(1).max(1) as f64;
        self.start_hz + (self.stop_hz - self.start_hz) * point as f64 / steps
    }
}

/// The cabinet of a scene.
#[derive(Debug)]
pub struct Cabinet {
    scene: Scene,
    nodes: Nodes,
    /// How far each source is off its mean at present, in standard deviations.
    wander: Vec<f64>,
    random: Random,
    spectra: HashMap<Key, Vec<Vec<f64>>>,
}

/// What a set of spectra depends on.
#[derive(Debug, PartialEq, Eq, Hash)]
struct Key {
    cable: usize,
    grid: [u64; 4],
    gaps: Vec<Option<u64>>,
    celsius: i64,
}

impl Cabinet {
    /// The cabinet at the beginning of its scene.
    pub fn new(scene: Scene) -> Self {
        let nodes = Nodes::of(&scene);
        let random = Random::new(scene.seed);
        Self { wander: vec![0.0; scene.sources.len()], nodes, random, scene, spectra: HashMap::new() }
    }

    /// The scene.
    pub fn scene(&self) -> &Scene {
        &self.scene
    }

    /// What the machine is doing.
    pub fn state(&self, time: Time) -> &str {
        let local = jiff_time(&self.scene, time);
        self.scene.operating_states.state_at(local.weekday(), local.time()).unwrap_or("any")
    }

    /// One sweep of an input: dB(uV) at the receiver for each point.
    pub fn sweep(&mut self, input: u32, grid: &Grid, time: Time) -> Vec<f64> {
        self.let_sources_wander();
        let gains = self.gains(time);
        let burst = self.bursts();
        let floor = 10f64.powf(self.floor_dbuv(grid) / 10.0);
        let gain_db = self.scene.temperature.gain_db_per_k * (self.celsius(time) - self.scene.temperature.mean_c);
        let mut powers = vec![0.0; grid.points];
        if let Some(cable) = self.scene.cables.iter().position(|cable| cable.input == input) {
            for (source, of_source) in self.spectra(cable, grid, time).iter().enumerate() {
                let is_burst = matches!(self.scene.sources[source].kind, SourceKind::Bursts { .. });
                let weight = if is_burst && !burst[source] { 0.0 } else { gains[source] };
                for (power, one) in powers.iter_mut().zip(of_source) {
                    *power += weight * one;
                }
            }
        }
        let sigma = self.scene.receiver.fluctuation_db;
        powers
            .into_iter()
            .map(|power| 10.0 * (power + floor).log10() + gain_db + sigma * self.random.normal())
            .collect()
    }

    /// The true level of a band on a cable: the power of all lines in it, without the receiver's noise and without
    /// chance, dB(uA). Bursts are left out. `None` if there is no such cable.
    pub fn level_dbua(&self, tag: &str, from_hz: f64, to_hz: f64, exclude: &[(f64, f64)], time: Time) -> Option<f64> {
        let cable = self.scene.cables.iter().position(|cable| cable.tag == tag)?;
        let gaps = gaps_at(&self.scene, self.since_start(time));
        let celsius = self.celsius(time);
        let counts = |hz: f64| !exclude.iter().any(|(from, to)| (*from..=*to).contains(&hz));
        let mut power = 0.0;
        for (index, source) in self.scene.sources.iter().enumerate() {
            let gain = self.gain_db(index, time);
            for line in lines(source, from_hz, to_hz).into_iter().filter(|line| counts(line.hz)) {
                let amps = transfer(&self.scene, &self.nodes, &gaps, line.hz, celsius)[index][cable];
                power += amps.norm_sqr() * line.volt_squared * 10f64.powf(gain / 10.0);
            }
        }
        Some(10.0 * (power * 1e12).log10())
    }

    /// For each source what the cable's probe gives to the receiver in each point, uV^2. Kept, since only chokes,
    /// temperature and settings change it.
    fn spectra(&mut self, cable: usize, grid: &Grid, time: Time) -> Vec<Vec<f64>> {
        let gaps = gaps_at(&self.scene, self.since_start(time));
        let celsius = self.celsius(time).round();
        let key = Key {
            cable,
            grid: [grid.start_hz.to_bits(), grid.stop_hz.to_bits(), grid.points as u64, grid.rbw_hz.to_bits()],
            gaps: gaps.iter().map(|gap| gap.map(f64::to_bits)).collect(),
            celsius: celsius as i64,
        };
        if let Some(known) = self.spectra.get(&key) {
            return known.clone();
        }
        let made = self.make_spectra(cable, grid, &gaps, celsius);
        if self.spectra.len() >= MOST_KEPT {
            self.spectra.clear();
        }
        self.spectra.insert(key, made.clone());
        made
    }

    fn make_spectra(&self, cable: usize, grid: &Grid, gaps: &Gaps, celsius: f64) -> Vec<Vec<f64>> {
        let mut spectra = vec![Vec::with_capacity(grid.points); self.scene.sources.len()];
        for point in 0..grid.points {
            let hz = grid.hz(point);
            let amps = transfer(&self.scene, &self.nodes, gaps, hz, celsius);
            let probe = probe_gain(&self.scene.cables[cable], hz);
            for ((source, spectrum), amps) in self.scene.sources.iter().zip(&mut spectra).zip(&amps) {
                let volts = through_filter(source, hz, grid.rbw_hz);
                spectrum.push(amps[cable].norm_sqr() * volts * probe * 1e12);
            }
        }
        spectra
    }

    /// The power gain of each source at this moment, with its wander.
    fn gains(&self, time: Time) -> Vec<f64> {
        let of_source = |(index, wander): (usize, &f64)| {
            let db = self.gain_db(index, time) + self.scene.sources[index].fluctuation_db * wander;
            10f64.powf(db / 10.0)
        };
        self.wander.iter().enumerate().map(of_source).collect()
    }

    /// By how much a source is louder than written, for its operating state and events, dB.
    fn gain_db(&self, source: usize, time: Time) -> f64 {
        let one = &self.scene.sources[source];
        let state = self.state(time);
        let of_state = one.states.iter().find(|(name, _)| name == state).map_or(0.0, |(_, db)| *db);
        let now = self.since_start(time);
        let louder = self.scene.events.iter().map(|event| match &event.what {
            What::SourceLouder { source, db, lasts } if *source == one.name => {
                let from = event.at.as_micros();
                let until = lasts.map_or(i64::MAX, |lasts| from.saturating_add(lasts.as_micros()));
                if (from..until).contains(&now) { *db } else { 0.0 }
            }
            _ => 0.0,
        });
        of_state + louder.sum::<f64>()
    }

    fn let_sources_wander(&mut self) {
        for (wander, source) in self.wander.iter_mut().zip(&self.scene.sources) {
            let memory = source.memory;
            *wander = memory * *wander + (1.0 - memory * memory).sqrt() * self.random.normal();
        }
    }

    /// Which bursts are on during this sweep.
    fn bursts(&mut self) -> Vec<bool> {
        let random = &mut self.random;
        self.scene
            .sources
            .iter()
            .map(|source| match source.kind {
                SourceKind::Bursts { per_hour, length_s, .. } => random.uniform() < per_hour * length_s / 3600.0,
                _ => false,
            })
            .collect()
    }

    fn floor_dbuv(&self, grid: &Grid) -> f64 {
        let noise = noise_bandwidth_hz(grid.rbw_hz);
        THERMAL_DBM_PER_HZ
            + DBM_TO_DBUV
            + 10.0 * noise.log10()
            + self.scene.receiver.noise_figure_db
            + grid.attenuation_db
    }

    fn celsius(&self, time: Time) -> f64 {
        let local = jiff_time(&self.scene, time);
        let hours = f64::from(local.hour()) + f64::from(local.minute()) / 60.0;
        // Warmest in the middle of the afternoon.
        let swing = self.scene.temperature.swing_k * (core::f64::consts::TAU * (hours - 9.0) / 24.0).sin();
        self.scene.temperature.mean_c + swing
    }

    fn since_start(&self, time: Time) -> i64 {
        (time - self.scene.start).as_micros()
    }
}

fn jiff_time(scene: &Scene, time: Time) -> hushwatch_config::LocalTime {
    hushwatch_config::local_time(&scene.zone, time)
}

/// Power gain from the cable's current to the receiver: (V/A)^2 of the probe, less the loss of the path.
fn probe_gain(cable: &Cable, hz: f64) -> f64 {
    10f64.powf((at(&cable.factor, hz) - at(&cable.path_loss, hz)) / 10.0)
}

/// A table read off at a frequency: straight over the logarithm of frequency, held at its ends.
fn at(table: &[(f64, f64)], hz: f64) -> f64 {
    let (Some(first), Some(last)) = (table.first(), table.last()) else { return 0.0 };
    let Some(upper) = table.iter().position(|(at, _)| *at >= hz) else { return last.1 };
    if upper == 0 {
        return first.1;
    }
    let ((f0, y0), (f1, y1)) = (table[upper - 1], table[upper]);
    y0 + (y1 - y0) * (hz / f0).ln() / (f1 / f0).ln()
}

#[cfg(test)]
pub(crate) mod tests {
    use std::path::Path;

    use hushwatch_config::scene;
    use hushwatch_quantity::Span;

    use super::*;

    pub(crate) fn scene() -> Scene {
        let text = scene::builtin("bottling-hall").expect("built in");
        scene::parse(text, Path::new("bottling-hall.toml")).unwrap_or_else(|faults| panic!("{}", faults.render(false)))
    }

    fn at_day(scene: &Scene, days: f64) -> Time {
        scene.start + Span::from_secs_f64(days * 86_400.0)
    }

    /// The ringing band without the broadcast line.
    fn ringing(cabinet: &Cabinet, tag: &str, days: f64) -> f64 {
        let time = at_day(cabinet.scene(), days);
        cabinet.level_dbua(tag, 2e6, 10e6, &[(5.9e6, 6.25e6)], time).expect("a cable")
    }

    #[test]
    fn the_scene_plays_as_it_is_meant_to() {
        let cabinet = Cabinet::new(scene());
        // Tuesdays to Thursdays at noon, when the machine runs.
        let (before, after, louder) = (ringing(&cabinet, "W12", 2.5), ringing(&cabinet, "W12", 8.5), 14.6);
        assert!(before - after > 8.0, "the cores help: {before} {after}");
        let opened = ringing(&cabinet, "W12", 21.5);
        assert!(opened - after > 5.0 && before - opened > 0.5, "the open clip: {opened}");
        assert!((ringing(&cabinet, "W12", louder) - after - 2.0).abs() < 0.1, "a source is louder");
        let sound = ringing(&cabinet, "W14", 21.5) - ringing(&cabinet, "W14", 8.5);
        assert!(sound.abs() < 1.5, "the other cable stays as it is, but for what its neighbour does: {sound}");
        assert!(ringing(&cabinet, "W03", 8.5) > ringing(&cabinet, "W03", 2.5), "current went into the sensor's cable");
        let idle = ringing(&cabinet, "W12", 2.1);
        assert!((before - idle - 9.0).abs() < 0.5, "it is quieter at night: {idle}");
    }

    #[test]
    fn what_the_receiver_sees_adds_up_to_the_truth() {
        let mut scene = scene();
        scene.receiver.fluctuation_db = 0.0;
        scene.temperature.swing_k = 0.0;
        for source in &mut scene.sources {
            source.fluctuation_db = 0.0;
        }
        scene.sources.retain(|source| !matches!(source.kind, SourceKind::Bursts { .. }));
        let mut cabinet = Cabinet::new(scene);
        let time = at_day(cabinet.scene(), 2.5);
        let grid = Grid { start_hz: 7e6, stop_hz: 10e6, points: 61, rbw_hz: 100e3, attenuation_db: 0.0 };
        let seen = cabinet.sweep(1, &grid, time);
        let cable = cabinet.scene().cables[0].clone();
        // Each point at the cable, spread over its step by the noise bandwidth of the filter.
        let step = 3e6 / 60.0;
        let power: f64 = seen
            .iter()
            .enumerate()
            .map(|(point, db)| {
                let hz = grid.hz(point);
                let edge = if point == 0 || point == 60 { 0.5 } else { 1.0 };
                edge * 10f64.powf(db / 10.0) / probe_gain(&cable, hz) * step / noise_bandwidth_hz(100e3)
            })
            .sum();
        let truth = cabinet.level_dbua("W12", 7e6, 10e6, &[], time).expect("a cable");
        assert!((10.0 * power.log10() - truth).abs() < 0.2, "{} {truth}", 10.0 * power.log10());
    }

    #[test]
    fn the_same_seed_gives_the_same_sweeps() {
        let grid = Grid { start_hz: 2e6, stop_hz: 10e6, points: 81, rbw_hz: 100e3, attenuation_db: 0.0 };
        let run = |seed: u64| {
            let mut scene = scene();
            scene.seed = seed;
            let time = at_day(&scene, 1.0);
            let mut cabinet = Cabinet::new(scene);
            (0..5).map(|_| cabinet.sweep(2, &grid, time)).collect::<Vec<_>>()
        };
        assert_eq!(run(7), run(7));
        assert_ne!(run(7), run(8));
    }
}
