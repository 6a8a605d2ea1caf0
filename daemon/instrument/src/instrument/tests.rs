use std::os::unix::fs::symlink;
use std::path::{Path, PathBuf};
use std::sync::{Arc, Mutex, MutexGuard};

use hushwatch_config::dialect;
use hushwatch_quantity::{FilterShape, ReceiverUnit, Span};
use tokio::io::{AsyncReadExt, AsyncWriteExt};
use tokio::task::JoinHandle;
use tokio::time::{Instant, timeout};
use tokio_serial::{SerialPort, SerialStream};

use super::*;
use crate::bench::{Bench, IDENTITY, Manner, plan};
use crate::error::ErrorClass;

fn described(port: PathBuf) -> site::Instrument {
    site::Instrument {
        name: "rx1".to_owned(),
        port,
        baud: 3_000_000,
        parity: Parity::None,
        stop_bits: 1,
        flow: Flow::None,
        dtr_on_open: None,
        dialect: dialect::builtin("scpi-swept").expect("it is built in"),
        identity: Some("RX-0".to_owned()),
        timeout: Span::from_micros(400_000),
        dwell: Span::from_micros(100),
        settle: Span::ZERO,
        attenuation_db: None,
        unit: ReceiverUnit::Dbm,
        shape: FilterShape::Gaussian6dB,
        format: Coding::Real32,
        clock: Clock::System,
        floor: None,
        overload_dbuv: None,
        uncertainty_db: None,
        place: 0..0,
    }
}

/// A device on a pseudo-terminal, found under a link in a folder of its own.
struct Device {
    bench: Arc<Mutex<Bench>>,
    folder: tempfile::TempDir,
    task: Option<JoinHandle<()>>,
}

impl Device {
    fn plug_in(bench: Bench) -> Self {
        let folder = tempfile::tempdir().expect("a folder");
        let mut device = Self { bench: Arc::new(Mutex::new(bench)), folder, task: None };
        device.replug();
        device
    }

    fn port(&self) -> PathBuf {
        self.folder.path().join("rx")
    }

    fn turn(&self) -> MutexGuard<'_, Bench> {
        self.bench.lock().expect("the device runs")
    }

    async fn unplug(&mut self) {
        if let Some(task) = self.task.take() {
            task.abort();
            let _ = task.await;
        }
        std::fs::remove_file(self.port()).expect("the link is there");
    }

    fn replug(&mut self) {
        let (far, near) = SerialStream::pair().expect("a pseudo-terminal");
        symlink(Path::new(&near.name().expect("its path")), self.port()).expect("a link");
        self.task = Some(tokio::spawn(serve(far, near, Arc::clone(&self.bench))));
    }
}

async fn serve(mut far: SerialStream, _near: SerialStream, bench: Arc<Mutex<Bench>>) {
    let mut piece = [0; 256];
    let mut heard = Vec::new();
    while let Ok(count @ 1..) = far.read(&mut piece).await {
        heard.extend_from_slice(&piece[..count]);
        while let Some(end) = heard.iter().position(|byte| *byte == b'\n') {
            let line: Vec<u8> = heard.drain(..=end).collect();
            let answer = bench.lock().expect("the tests run").hear(String::from_utf8_lossy(&line).trim());
            if let Some(answer) = answer
                && far.write_all(&answer).await.is_err()
            {
                return;
            }
        }
    }
}

async fn swept(instrument: &mut Instrument, device: &Device) -> SweepAnswer {
    let answer = instrument.sweep(&plan(1001)).await.expect("a sweep");
    assert_eq!(answer.segments[0].len(), 1001);
    assert!(device.turn().sent(&answer.segments[0]), "{:?}", &answer.segments[0][..4]);
    answer
}

#[tokio::test]
async fn both_codings_and_the_first_sweep_comes_soon() {
    for format in Coding::ALL {
        for bench in [Bench::default(), Bench::sparse()] {
            let device = Device::plug_in(bench);
            let begun = Instant::now();
            let mut instrument = Instrument::new(&site::Instrument { format, ..described(device.port()) });
            assert_eq!((instrument.identity(), instrument.most_points()), (None, 1001));
            instrument.probe_port().expect("it is free");
            swept(&mut instrument, &device).await;
            assert!(begun.elapsed() < Duration::from_millis(1200), "{:?}", begun.elapsed());
            assert_eq!(instrument.identity(), Some(IDENTITY));
            let real = device.turn().settings["FORM"].starts_with("REAL");
            assert_eq!(real, format == Coding::Real32);
            device.turn().level = -12.5;
            swept(&mut instrument, &device).await;
        }
    }
}

#[tokio::test]
async fn silence_in_the_middle_of_a_trace_ends_and_the_next_sweep_is_whole() {
    let device = Device::plug_in(Bench::default());
    let mut instrument = Instrument::new(&described(device.port()));
    swept(&mut instrument, &device).await;
    device.turn().manner = Manner::HangsInTrace;
    let begun = Instant::now();
    let error = instrument.sweep(&plan(1001)).await.expect_err("half a trace");
    assert_eq!(error.class(), ErrorClass::NoAnswer, "{error}");
    assert!(begun.elapsed() < Duration::from_secs(1));
    assert_eq!(instrument.identity(), None);
    device.turn().manner = Manner::Healthy;
    device.turn().level = -55.0;
    swept(&mut instrument, &device).await;
}

#[tokio::test]
async fn garbage_is_no_level_and_is_got_over() {
    let device = Device::plug_in(Bench::default());
    let mut instrument = Instrument::new(&described(device.port()));
    swept(&mut instrument, &device).await;
    device.turn().manner = Manner::Garbles;
    for _ in 0..2 {
        let error = instrument.sweep(&plan(1001)).await.expect_err("garbage");
        assert_eq!(error.class(), ErrorClass::Garbage, "{error}");
    }
    device.turn().manner = Manner::Healthy;
    swept(&mut instrument, &device).await;
}

#[tokio::test]
async fn unplugged_and_plugged_in_again_under_the_same_link() {
    let mut device = Device::plug_in(Bench::default());
    let mut instrument = Instrument::new(&described(device.port()));
    swept(&mut instrument, &device).await;
    device.unplug().await;
    assert_eq!(instrument.sweep(&plan(1001)).await.expect_err("unplugged").class(), ErrorClass::Gone);
    instrument.probe_port().expect("unplugged is not held");
    assert_eq!(instrument.sweep(&plan(1001)).await.expect_err("unplugged").class(), ErrorClass::Gone);
    device.replug();
    // After its power was off it is set anew.
    *device.turn() = Bench::default();
    let begun = Instant::now();
    swept(&mut instrument, &device).await;
    assert!(begun.elapsed() < Duration::from_millis(1500), "{:?}", begun.elapsed());
}

#[tokio::test]
async fn pulled_out_while_it_sweeps() {
    let mut device = Device::plug_in(Bench { mute: vec!["*OPC"], ..Bench::default() });
    let mut instrument =
        Instrument::new(&site::Instrument { timeout: Span::from_secs(20), ..described(device.port()) });
    let begun = Instant::now();
    let sweeping = async { instrument.sweep(&plan(1001)).await.expect_err("pulled out").class() };
    let pulling = async {
        tokio::time::sleep(Duration::from_millis(300)).await;
        device.unplug().await;
    };
    let (class, ()) = tokio::join!(sweeping, pulling);
    assert_eq!(class, ErrorClass::Gone);
    assert!(begun.elapsed() < Duration::from_secs(2));
}

#[tokio::test]
async fn a_sweep_that_is_dropped_does_not_spoil_the_next() {
    let device = Device::plug_in(Bench { mute: vec!["*OPC"], ..Bench::default() });
    let mut instrument = Instrument::new(&described(device.port()));
    for pause in [0, 1, 3, 10, 40, 150] {
        let dropped = timeout(Duration::from_millis(pause), instrument.sweep(&plan(501))).await;
        assert!(dropped.is_err(), "it waits for the end of the sweep");
    }
    device.turn().mute.clear();
    swept(&mut instrument, &device).await;
}

#[tokio::test]
async fn a_port_that_another_holds_is_told() {
    let device = Device::plug_in(Bench::default());
    let mut first = Instrument::new(&described(device.port()));
    let mut second = Instrument::new(&described(device.port()));
    swept(&mut first, &device).await;
    let held = InstrumentError::Held { port: device.port().display().to_string() };
    assert_eq!(second.probe_port(), Err(held.clone()));
    assert_eq!(second.sweep(&plan(1001)).await, Err(held));
    first.probe_port().expect("its own");
    swept(&mut first, &device).await;
    drop(first);
    second.probe_port().expect("let go");
    swept(&mut second, &device).await;
}

#[test]
fn software_flow_control_takes_no_binary_answers() {
    let mut site = described(PathBuf::from("/dev/rx"));
    let codings = |site: &site::Instrument| dialect_for(site).formats.iter().map(|f| f.coding).collect::<Vec<_>>();
    assert_eq!(codings(&site), [Coding::Real32, Coding::Ascii]);
    site.format = Coding::Ascii;
    assert_eq!(codings(&site), [Coding::Ascii, Coding::Real32]);
    site.flow = Flow::Software;
    assert_eq!(codings(&site), [Coding::Ascii]);
}

#[test]
fn a_byte_takes_its_bits() {
    let line = |baud, parity, stop_bits| Line {
        port: String::new(),
        baud,
        parity,
        stop_bits,
        flow: Flow::None,
        dtr_on_open: None,
    };
    assert_eq!(line(9600, Parity::None, 1).byte_time(), Duration::from_nanos(1_041_666));
    assert_eq!(line(1200, Parity::Even, 2).byte_time(), Duration::from_millis(10));
}
