//! `hushwatch demo`: the real service against the simulated receiver, from before the fix to the lost one.
//!
//! Nothing in it is played back: the service is the program of every day, on a real terminal and a real record. The demo
//! marks the references as an engineer would, waits for the end of the scene, and then compares what the service said
//! with what the physics of the scene did.

mod service;
mod truth;

use std::fs::File;
use std::io::{BufWriter, IsTerminal, Write};
use std::path::{Path, PathBuf};
use std::process::ExitCode;
use std::time::{Duration, Instant};

use clap::Args;
use hushwatch_config::scene::Scene;
use hushwatch_control::{MarkReference, Reply, Request, When};
use hushwatch_quantity::{Span, Time};
use hushwatch_report::Size;
use hushwatch_scene::{SimulatedReceiver, site_file};

use crate::context::{Context, width};
use crate::failure::{Failure, Outcome};
use crate::{alarms, export, simulate, status, trend};
use service::Service;

/// The scene ended otherwise than the service said.
const WRONG: u8 = 1;

/// When the cores are fitted in the scene, and when the service has seen enough of them, days.
const FITTED: i64 = 5;
const PROVEN: i64 = 10;

/// A service that makes no progress for so long is stuck.
const STUCK: Duration = Duration::from_mins(1);

/// Plays a scene with everything in it: service, record, references, alarm.
#[derive(Args)]
pub(crate) struct Arguments {
    /// Where to leave record, site file, scene and CSV [default: ./hushwatch-demo, with a number if it is there]
    #[arg(long, value_name = "DIR")]
    dir: Option<PathBuf>,
}

/// Plays the scene; 1 if the service said something else than what happened.
pub(crate) fn run(arguments: &Arguments) -> Outcome {
    let folder = folder(arguments.dir.as_deref())?;
    let scene = simulate::load("bottling-hall")?;
    let context = write_files(&folder, &scene)?;
    let begun = Instant::now();
    say(&format!("{}: 30 days in about a minute; everything is left in {}", scene.name, folder.display()))?;

    // Started first: a receiver that is plugged in later is found, and its terminal belongs to this process alone.
    let mut service = Service::start(&folder)?;
    let receiver = simulate::plug_in(scene.clone(), folder.join("rx1"), false)?;
    play(&context, &scene, &receiver, &mut service)?;

    let opened = context.open()?;
    say(&format!("\nThe scene is over after {:.0} s. What the service has to say:\n", begun.elapsed().as_secs_f64()))?;
    alarms::list(&context, false)?;
    writeln!(anstream::stdout())?;
    status::run(&context, &status::Arguments::default())?;
    writeln!(anstream::stdout())?;
    let suspect = truth::regressed(&opened)?;
    let cable = suspect.first().map_or_else(|| scene.cables[0].tag.clone(), |found| found.cable.clone());
    let picture = trend::of_cable(&opened, &cable)?;
    let size = Size { width: width(), height: 26 };
    anstream::stdout().lock().write_all(picture.to_text(size).as_bytes())?;
    std::fs::write(folder.join(format!("{cable}.svg")), picture.to_svg())?;
    export::levels_csv(&opened, BufWriter::new(File::create(folder.join("levels.csv"))?))?;
    // A reader that looks on would keep the log beside the record from being cleared away.
    drop(opened);
    service.stop()?;
    drop(receiver);
    conclude(&context.open()?, &scene, &suspect, &folder)
}

/// A folder that is not there yet.
fn folder(asked: Option<&Path>) -> Result<PathBuf, Failure> {
    let folder = match asked {
        Some(folder) if folder.exists() => {
            return Err(Failure::could_not(format!("{} is there already; it was not touched", folder.display())));
        }
        Some(folder) => folder.to_owned(),
        None => {
            let name = |number: u32| match number {
                1 => PathBuf::from("hushwatch-demo"),
                more => PathBuf::from(format!("hushwatch-demo-{more}")),
            };
            let free = (1..1000).map(name).find(|folder| !folder.exists());
            free.ok_or_else(|| Failure::could_not("there are too many hushwatch-demo folders here: use --dir"))?
        }
    };
    let folder = std::path::absolute(folder)?;
    std::fs::create_dir_all(&folder)?;
    Ok(folder)
}

fn write_files(folder: &Path, scene: &Scene) -> Result<Context, Failure> {
    std::fs::write(folder.join("scene.toml"), &scene.text)?;
    let site = folder.join("site.toml");
    std::fs::write(&site, site_file(scene, &folder.join("rx1")))?;
    Ok(Context { site: Some(site), json: false })
}

fn say(text: &str) -> Result<(), Failure> {
    writeln!(anstream::stderr(), "{text}")?;
    Ok(())
}

/// Waits for the end of the scene and marks the references on the way, as an engineer would.
fn play(context: &Context, scene: &Scene, receiver: &SimulatedReceiver, service: &mut Service) -> Result<(), Failure> {
    let day = |days: i64| scene.start + Span::from_days(days);
    let mut marks = vec![
        // An hour for the fitter: then the cores are on.
        (PROVEN, "after", day(FITTED) + Span::from_hours(1), day(PROVEN)),
        (FITTED, "before", day(0), day(FITTED)),
    ];
    let (mut shown, mut moved, mut last) = (-1, Instant::now(), receiver.plant_time());
    while !receiver.is_over() {
        std::thread::sleep(Duration::from_millis(50));
        service.still_runs()?;
        let now = receiver.plant_time();
        if now > last {
            (moved, last) = (Instant::now(), now);
        } else if moved.elapsed() > STUCK {
            return Err(Failure::could_not(format!("the service makes no progress; see {}", service.log().display())));
        }
        let days = (now - scene.start).as_micros() / Span::from_days(1).as_micros();
        // A day later, so that the last block of the interval is surely closed.
        if marks.last().is_some_and(|(due, ..)| now >= day(*due) + Span::from_hours(6))
            && let Some((_, kind, from, to)) = marks.pop()
        {
            mark(context, scene, kind, from, to)?;
        }
        if days != shown {
            shown = days;
            progress(days, scene, now)?;
        }
    }
    if std::io::stderr().is_terminal() {
        say("")?;
    }
    Ok(())
}

/// One line that is written over again on a terminal; elsewhere a line every five days.
fn progress(days: i64, scene: &Scene, now: Time) -> Result<(), Failure> {
    let whole = scene.duration.as_micros() / Span::from_days(1).as_micros();
    let done = usize::try_from(days.clamp(0, whole) * 30 / whole.max(1)).unwrap_or(0);
    let bar = format!("{}{}", "\u{2588}".repeat(done), "\u{2591}".repeat(30 - done));
    let date = hushwatch_config::local_time(&scene.zone, now).strftime("%a %Y-%m-%d").to_string();
    let mut out = anstream::stderr();
    if std::io::stderr().is_terminal() {
        write!(out, "\r{bar} day {days} of {whole}, {date}   ")?;
        out.flush()?;
    } else if days % 5 == 0 {
        writeln!(out, "day {days} of {whole}, {date}")?;
    }
    Ok(())
}

/// Marks a reference on every cable.
fn mark(context: &Context, scene: &Scene, kind: &str, from: Time, to: Time) -> Result<(), Failure> {
    let mut service = context.open()?.service?;
    for cable in &scene.cables {
        let mark = MarkReference {
            cable: cable.tag.clone(),
            kind: kind.to_owned(),
            when: When::Between(from.as_micros(), to.as_micros()),
            who: Some(String::from("demo")),
            note: String::new(),
        };
        if !matches!(service.ask(&Request::Reference(mark))?, Reply::References { .. }) {
            return Err(Failure::could_not("the service gave another answer than references"));
        }
    }
    if std::io::stderr().is_terminal() {
        say("")?;
    }
    let what = if kind == "before" { "before the cores were fitted" } else { "with the cores fitted" };
    say(&format!("reference marked on all cables: {what}"))
}

/// What the service said beside what happened.
fn conclude(opened: &crate::context::Opened, scene: &Scene, said: &[truth::Regression], folder: &Path) -> Outcome {
    let happened = truth::of_scene(scene, &opened.site, FITTED, PROVEN);
    let all = opened.at_once(|read| read.alarms(false))?;
    let others = all.iter().filter(|alarm| alarm.key.kind != hushwatch_alarm::AlarmKind::Regression).count();
    say("")?;
    say(&format!("the service says:   {}", truth::in_words(said, &opened.site)))?;
    say(&format!("what really was:    {}", truth::in_words(&happened, &opened.site)))?;
    if others > 0 {
        say(&format!("and {others} alarms of other kinds, for which there was no reason"))?;
    }
    let right = others == 0 && truth::agree(said, &happened, opened.site.drift.block);
    say(if right { "They agree." } else { "THEY DO NOT AGREE." })?;
    say(&format!(
        "\nTo look around: cd {} && {} status",
        folder.display(),
        std::env::current_exe().map_or_else(|_| String::from("hushwatch"), |path| path.display().to_string())
    ))?;
    Ok(if right { ExitCode::SUCCESS } else { ExitCode::from(WRONG) })
}
