//! What the scene that is built in promises to whoever plays it, asked as a client would ask: over the receiver's
//! commands, against the true currents.

#![expect(clippy::expect_used, clippy::panic, reason = "a test that cannot go on says why and ends")]

use std::path::Path;
use std::time::{Duration, Instant};

use hushwatch_config::scene::{self, Scene, SourceKind};
use hushwatch_quantity::{Span, Time};
use hushwatch_scene::{Cabinet, Device, Grid};

/// Noise bandwidth over the 6 dB width of a Gaussian filter, sqrt(pi / (8 ln 2)).
const NOISE_PER_6DB: f64 = 0.752_698;

/// The bands that the scene is meant for: limits and resolution bandwidth, Hz.
const BANDS: [(&str, f64, f64, f64); 3] =
    [("low", 0.5e6, 2e6, 100e3), ("ringing", 2e6, 10e6, 100e3), ("high", 10e6, 30e6, 400e3)];

fn built_in() -> Scene {
    let text = scene::builtin("bottling-hall").expect("built in");
    scene::parse(text, Path::new("bottling-hall.toml")).unwrap_or_else(|faults| panic!("{}", faults.render(false)))
}

/// Without chance, and without what comes and goes.
fn still() -> Scene {
    let mut scene = built_in();
    scene.receiver.fluctuation_db = 0.0;
    scene.temperature.swing_k = 0.0;
    scene.sources.retain(|source| !matches!(source.kind, SourceKind::Bursts { .. } | SourceKind::Broadcast { .. }));
    for source in &mut scene.sources {
        source.fluctuation_db = 0.0;
    }
    scene
}

fn day(scene: &Scene, days: f64) -> Time {
    scene.start + Span::from_secs_f64(days * 86_400.0)
}

fn points(from: f64, to: f64, rbw: f64) -> usize {
    ((to - from) / (rbw / 2.0)).ceil() as usize + 1
}

/// A table read off over the logarithm of frequency.
fn read_off(table: &[(f64, f64)], hz: f64) -> f64 {
    let Some(pair) = table.windows(2).find(|pair| hz >= pair[0].0 && hz <= pair[1].0) else {
        return if hz < table[0].0 { table[0].1 } else { table[table.len() - 1].1 };
    };
    pair[0].1 + (pair[1].1 - pair[0].1) * (hz / pair[0].0).ln() / (pair[1].0 / pair[0].0).ln()
}

/// dB(uV) of every point as a client gets them: in dBm, as a block.
fn swept(scene: &Scene, input: u32, (from, to, rbw): (f64, f64, f64)) -> Vec<f64> {
    let mut device = Device::new(Cabinet::new(scene.clone()));
    device.skip(Span::from_secs_f64(2.5 * 86_400.0));
    let count = points(from, to, rbw);
    let set = format!(
        "INIT:CONT OFF;:ROUT:CLOS (@{input});:FREQ:STAR {from};STOP {to};:SWE:POIN {count};:BAND {rbw};\
         :INP:ATT 0;:DET RMS;:UNIT:POW DBM;:FORM REAL,32;:FORM:BORD NORM;:INIT\n"
    );
    assert!(device.receive(set.as_bytes(), Duration::ZERO).is_empty());
    let errors = device.receive(b"SYST:ERR?\n", Duration::ZERO).remove(0).bytes;
    assert!(errors.starts_with(b"0,"), "{}", String::from_utf8_lossy(&errors));
    let bytes = device.receive(b"TRAC? TRACE1\n", Duration::ZERO).remove(0).bytes;
    let digits = usize::from(bytes[1] - b'0');
    let payload = &bytes[2 + digits..bytes.len() - 1];
    let values = payload.chunks(4).map(|four| f64::from(f32::from_be_bytes(four.try_into().expect("four bytes"))));
    let values: Vec<f64> = values.map(|dbm| dbm + 106.990).collect();
    assert_eq!(values.len(), count);
    values
}

#[test]
fn the_power_in_a_band_is_the_true_one() {
    let scene = still();
    let cabinet = Cabinet::new(scene.clone());
    let mut off = Vec::new();
    for cable in &scene.cables {
        for (name, from, to, rbw) in BANDS {
            let values = swept(&scene, cable.input, (from, to, rbw));
            let step = (to - from) / (values.len() - 1) as f64;
            let power: f64 = values
                .iter()
                .enumerate()
                .map(|(point, dbuv)| {
                    let hz = from + step * point as f64;
                    let edge = if point == 0 || point == values.len() - 1 { 0.5 } else { 1.0 };
                    let dbua = dbuv - read_off(&cable.factor, hz) + read_off(&cable.path_loss, hz);
                    edge * 10f64.powf(dbua / 10.0) * step / (NOISE_PER_6DB * rbw)
                })
                .sum();
            let truth = cabinet.level_dbua(&cable.tag, from, to, &[], day(&scene, 2.5)).expect("a cable");
            let seen = 10.0 * power.log10();
            println!("{} {name}: seen {seen:.2} true {truth:.2}", cable.tag);
            if (seen - truth).abs() >= 0.3 {
                off.push(format!("{} {name}: {seen:.2} instead of {truth:.2} dB(uA)", cable.tag));
            }
        }
    }
    assert!(off.is_empty(), "{off:#?}");
}

#[test]
fn every_band_stands_well_above_the_floor_in_both_operating_states() {
    let scene = still();
    let mut silent = scene.clone();
    silent.sources.clear();
    let (mut cabinet, mut floor) = (Cabinet::new(scene.clone()), Cabinet::new(silent));
    let mut low = Vec::new();
    for cable in &scene.cables {
        // Running and idle, with the cores on.
        for days in [8.5, 8.1] {
            for (name, from, to, rbw) in BANDS {
                let grid = Grid {
                    start_hz: from,
                    stop_hz: to,
                    points: points(from, to, rbw),
                    rbw_hz: rbw,
                    attenuation_db: 10.0,
                };
                let time = day(&scene, days);
                let mean = |values: Vec<f64>| {
                    let sum: f64 = values.iter().map(|dbuv| 10f64.powf(dbuv / 10.0)).sum();
                    10.0 * (sum / values.len() as f64).log10()
                };
                let above = mean(cabinet.sweep(cable.input, &grid, time)) - mean(floor.sweep(cable.input, &grid, time));
                println!("{} {name} {}: {above:.1} dB", cable.tag, cabinet.state(time));
                if above <= 10.0 {
                    low.push(format!("{} {name}, {}: {above:.1} dB", cable.tag, cabinet.state(time)));
                }
            }
        }
    }
    assert!(low.is_empty(), "{low:#?}");
}

#[test]
fn the_clip_that_opens_costs_what_the_scene_says_and_no_other_cable_fails() {
    let scene = still();
    let cabinet = Cabinet::new(scene.clone());
    let level = |tag: &str, days: f64| cabinet.level_dbua(tag, 2e6, 10e6, &[], day(&scene, days)).expect("a cable");
    // Noon of working days: without cores, with them, and with the clips open.
    let (before, after, open) = (level("W12", 2.5), level("W12", 8.5), level("W12", 21.5));
    println!("W12 {before:.2} {after:.2} {open:.2}");
    assert!(before - after >= 8.0, "suppression {:.2} dB", before - after);
    assert!(open - after >= 5.0, "lost {:.2} dB", open - after);
    let (sound, later) = (level("W14", 8.5), level("W14", 21.5));
    println!(
        "W14 {:.2} {sound:.2} {later:.2}; W03 {:.2} {:.2} {:.2}",
        level("W14", 2.5),
        level("W03", 2.5),
        level("W03", 8.5),
        level("W03", 21.5)
    );
    // Its share of the current goes back to W12: it may fall, and must not rise.
    assert!(later - sound < 0.5, "{sound} {later}");
}

#[test]
fn a_sweep_costs_little_once_its_spectra_are_known() {
    let mut cabinet = Cabinet::new(built_in());
    let grid = Grid { start_hz: 2e6, stop_hz: 10e6, points: 200, rbw_hz: 100e3, attenuation_db: 10.0 };
    let start = cabinet.scene().start;
    let first = Instant::now();
    cabinet.sweep(1, &grid, start);
    println!("first sweep {:?}", first.elapsed());
    let begun = Instant::now();
    let count = 500;
    for _ in 0..count {
        cabinet.sweep(1, &grid, start);
    }
    let each = begun.elapsed() / count;
    println!("each sweep {each:?}");
    // A tenth of a millisecond or so; the limit leaves room for a busy machine.
    assert!(each < Duration::from_millis(3), "{each:?}");
}
