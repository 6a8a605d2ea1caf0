//! `hushwatch check`: what a site file means, in plain words, and whether the line keeps up.

mod budget;
mod physics;

use std::io::Write;
use std::path::PathBuf;
use std::process::ExitCode;

use clap::Args;
use hushwatch_config::site::{
    self, Cable, ChokeMake, Clock, Instrument, OperatingStates, ProbeKind, RecipientKind, Site,
};
use hushwatch_quantity::Span;
use serde::Serialize;

use crate::context::{Context, colored, print_json, system_now};
use crate::failure::Outcome;
use crate::written::hundredths;
use budget::Budget;

/// A check failed.
const FAILED: u8 = 1;

/// A period of 50 Hz; that of 60 Hz is shorter.
const MAINS_PERIOD: Span = Span::from_millis(20);

/// So many days before a calibration is due, it is told.
const SOON_DAYS: i32 = 60;

/// Reads the site file as the service would, tells what it means, and does the sums.
#[derive(Args)]
pub(crate) struct Arguments {
    /// The site file [default: as for all commands]
    #[arg(value_name = "SITE")]
    file: Option<PathBuf>,
}

/// Checks a site file; 1 if it is refused.
pub(crate) fn run(context: &Context, arguments: &Arguments) -> Outcome {
    let path = match &arguments.file {
        Some(path) => path.clone(),
        None => context.site_path()?,
    };
    let site = match site::load(&path) {
        Ok(site) => site,
        Err(faults) => return refused(context, &faults),
    };
    let mut faults = physics::faults(&site);
    faults.absorb(site.warnings.clone());
    let faults = faults.sorted();
    if faults.refuses() {
        return refused(context, &faults);
    }
    let budgets: Vec<Budget> = (0..site.cables.len()).map(|cable| Budget::of(&site, cable)).collect();
    if context.json {
        print_json(&written(&site, &budgets))?;
        return Ok(ExitCode::SUCCESS);
    }
    if !faults.is_empty() {
        writeln!(anstream::stderr(), "{}", faults.render(colored()))?;
    }
    anstream::stdout().lock().write_all(in_words(&site, &budgets).as_bytes())?;
    Ok(ExitCode::SUCCESS)
}

fn refused(context: &Context, faults: &hushwatch_config::faults::Faults) -> Outcome {
    if context.json {
        let all: Vec<String> = faults.iter().map(|(_, fault)| fault.what.clone()).collect();
        print_json(&serde_json::json!({ "ok": false, "faults": all }))?;
    }
    writeln!(anstream::stderr(), "{}", faults.render(colored()))?;
    let count = faults.len();
    let all = if count == 1 { String::from("one fault") } else { format!("{count} faults") };
    writeln!(anstream::stderr(), "{}: refused, {all}", faults.path().display())?;
    Ok(ExitCode::from(FAILED))
}

/// The whole page.
fn in_words(site: &Site, budgets: &[Budget]) -> String {
    let mut text = format!("{}: right\n\n{}\n", site.path.display(), site.name);
    text.push_str(&format!(
        "  record     {}, committed every {}, levels kept {}\n",
        site.record.path.display(),
        site.record.commit_every,
        site.record.keep_levels
    ));
    text.push_str(&format!("  states     {}\n", states(site)));
    text.push_str(&format!(
        "  alarms     {} false in {} for the whole site; blocks of {}\n",
        site.drift.false_alarms_count, site.drift.false_alarms_per, site.drift.block
    ));
    for recipient in &site.recipients {
        let RecipientKind::Command { run, timeout } = &recipient.kind;
        text.push_str(&format!("  tells      {}: runs `{}`, for {timeout} at most\n", recipient.name, run.join(" ")));
    }
    for (index, instrument) in site.instruments.iter().enumerate() {
        text.push_str(&in_words_instrument(site, index, instrument, budgets));
    }
    for (cable, budget) in site.cables.iter().zip(budgets) {
        text.push_str(&in_words_cable(site, cable, budget));
    }
    text.push_str(&format!("\nRecord: {}\n", budget::record(site, budgets)));
    for remark in remarks(site) {
        text.push_str(&format!("Mind: {remark}\n"));
    }
    text.push_str("Levels are for comparison with themselves; they are no compliance measurement.\n");
    text
}

fn states(site: &Site) -> String {
    match &site.operating_states {
        OperatingStates::Untold => String::from("not told: all levels are compared with each other"),
        OperatingStates::Calendar { .. } => {
            let zone = site.timezone.as_deref().unwrap_or("the system's zone");
            format!("{}, by calendar in {zone}", site.operating_states.names().join(", "))
        }
        OperatingStates::File { path, .. } => format!("as {} says", path.display()),
        OperatingStates::Manual { states } => format!("{}, told by people", states.join(", ")),
    }
}

fn in_words_instrument(site: &Site, index: usize, instrument: &Instrument, budgets: &[Budget]) -> String {
    let mut text = format!(
        "\nInstrument {} on {}, {} Bd, dialect {}\n",
        instrument.name,
        instrument.port.display(),
        instrument.baud,
        instrument.dialect.name
    );
    let attenuation = instrument
        .attenuation_db
        .map_or_else(|| String::from("attenuation as the instrument has it"), |db| format!("attenuation {db} dB"));
    text.push_str(&format!(
        "  dwell {} a point, {attenuation}, answers in {}, patience {}\n",
        instrument.dwell, instrument.unit, instrument.timeout
    ));
    let of_this = || site.cables.iter().zip(budgets).filter(|(cable, _)| cable.instrument == index);
    let busy: f64 = of_this().map(|(_, budget)| budget.whole_s()).sum();
    let asked: f64 = of_this().map(|(_, budget)| budget.whole_s() / budget.every_s).sum();
    let round = Span::from_millis((busy * 1e3).round() as i64);
    if instrument.clock == Clock::Instrument {
        text.push_str("  it keeps the time itself: cables come in turn, as fast as it answers\n");
    } else if asked <= 1.0 {
        text.push_str(&format!("  once round all cables takes {round}: it keeps up ({:.0} % busy)\n", 100.0 * asked));
    } else {
        text.push_str(&format!(
            "  IT DOES NOT KEEP UP: `every` asks for {asked:.1} times what the line can do; each cable comes every {round} instead\n"
        ));
        text.push_str(&proposals(asked, busy));
    }
    text
}

/// What would make the line keep up: one of these, whichever costs least.
fn proposals(asked: f64, busy: f64) -> String {
    // A tenth to spare: retries and other people's clocks take some of it.
    let every = Span::from_secs((1.1 * busy).ceil() as i64);
    format!(
        "    either  every = \"{every}\" on each of its cables\n    or      an `rbw` {:.1} times as wide (so many fewer \
         points; levels of another bandwidth are another series)\n    or      bands that are narrower by as much\n",
        1.1 * asked
    )
}

/// What is hardly meant, or will soon be wrong, without being a fault.
fn remarks(site: &Site) -> Vec<String> {
    let mut remarks = Vec::new();
    for instrument in site.instruments.iter().filter(|one| one.dwell < MAINS_PERIOD) {
        remarks.push(format!(
            "{}: a dwell of {} is shorter than a mains period (20 ms): the noise of drives comes in pulses, and a point may \
             look away just then",
            instrument.name, instrument.dwell
        ));
    }
    let today = site.local(system_now()).date();
    for cable in &site.cables {
        if let Some(due) = cable.probe.due {
            let days = today.until(due).map_or(0, |span| span.get_days());
            if days < 0 {
                remarks.push(format!("{}: the calibration of its probe was due on {due}", cable.tag));
            } else if days <= SOON_DAYS {
                remarks.push(format!("{}: the calibration of its probe is due in {days} days, on {due}", cable.tag));
            }
        }
        if cable.max_rise_db.is_some_and(|rise| rise < 1.0) {
            remarks.push(format!(
                "{}: a `max_rise` under 1 dB is hardly more than the same clamp differs from day to day (common practice)",
                cable.tag
            ));
        }
    }
    remarks
}

fn in_words_cable(site: &Site, cable: &Cable, budget: &Budget) -> String {
    let name =
        if cable.description.is_empty() { cable.tag.clone() } else { format!("{} ({})", cable.tag, cable.description) };
    let mut text = format!("\nCable {name}, input {} of {}\n", cable.input, site.instruments[cable.instrument].name);
    text.push_str(&format!("  probe      {}\n", probe(cable)));
    for (band, points) in cable.bands.iter().zip(&budget.points) {
        text.push_str(&format!(
            "  band       {}: {} to {}, {} {}, {points} points{}\n",
            band.name,
            hertz(band.from_hz),
            hertz(band.to_hz),
            hertz(band.rbw_hz),
            band.detector,
            if band.exclude.is_empty() { String::new() } else { format!(", {} excluded", ranges(&band.exclude)) }
        ));
    }
    text.push_str(&format!("  choke      {}\n", choke(cable)));
    for line in physics::expected(cable) {
        text.push_str(&format!("             {line}\n"));
    }
    if let Some(required) = cable.min_suppression_db {
        text.push_str(&format!("  required   {required} dB of suppression\n"));
    }
    let rise = cable.max_rise_db.map_or_else(
        || String::from("of half the achieved suppression (3 dB without a `before` reference)"),
        |db| format!("of {db} dB"),
    );
    text.push_str(&format!("  alarm at   a rise {rise}\n"));
    text.push_str(&format!("  sweep      {budget}\n"));
    text.push_str(&format!(
        "  a level is known to {}\n",
        uncertainty(&hushwatch_plan::uncertainty(cable, &site.instruments[cable.instrument]))
    ));
    text
}

/// How far a level may be off, with its parts.
fn uncertainty(of: &hushwatch_signal::Uncertainty) -> String {
    format!(
        "+- {:.1} dB (k = 2: probe {:.1}, receiver {:.1}, mismatch {:.1}, repeating it {:.1} dB, standard uncertainties); \
         against itself, to +- {:.1} dB",
        of.expanded_db,
        of.probe_db,
        of.receiver_db,
        of.mismatch_db,
        of.repeatability_db,
        2.0 * of.repeatability_db
    )
}

fn probe(cable: &Cable) -> String {
    let kind = match cable.probe.kind {
        ProbeKind::Current => "current probe, levels in dB(uA)",
        ProbeKind::Loop => "loop probe, levels in dB(uA/m): relative verdicts only",
        ProbeKind::Direct => "direct, levels in dB(uV)",
    };
    let table = match (cable.probe.factor.first(), cable.probe.factor.last()) {
        (Some(first), Some(last)) => format!(", factor from {} to {}", hertz(first.0), hertz(last.0)),
        _ => String::new(),
    };
    let due = cable.probe.due.map_or_else(String::new, |due| format!(", calibration due {due}"));
    format!("{kind}{table}{due}")
}

fn choke(cable: &Cable) -> String {
    let Some(choke) = &cable.choke else { return String::from("none described") };
    match &choke.make {
        ChokeMake::Cores { core, turns, cores } => format!(
            "{}: {cores} x {} core {:.0}/{:.0}/{:.0} mm of {}, {turns} turn{}",
            choke.name,
            if core.split { "split" } else { "solid" },
            1e3 * core.outer_m,
            1e3 * core.inner_m,
            1e3 * core.length_m,
            core.material,
            if *turns == 1 { "" } else { "s" }
        ),
        ChokeMake::Impedance(_) => format!("{}: by its impedance table", choke.name),
    }
}

fn ranges(ranges: &[(f64, f64)]) -> String {
    let all: Vec<String> = ranges.iter().map(|(from, to)| format!("{} to {}", hertz(*from), hertz(*to))).collect();
    all.join(", ")
}

/// A frequency as people write it.
fn hertz(hz: f64) -> String {
    match hz {
        1e6.. => format!("{} MHz", hz / 1e6),
        1e3.. => format!("{} kHz", hz / 1e3),
        _ => format!("{hz} Hz"),
    }
}

#[derive(Serialize)]
struct Written<'a> {
    ok: bool,
    site: &'a str,
    remarks: Vec<String>,
    cables: Vec<WrittenCable<'a>>,
    bytes_a_day: f64,
    commits_a_day: f64,
}

#[derive(Serialize)]
struct WrittenCable<'a> {
    cable: &'a str,
    points: usize,
    scan_s: f64,
    transfer_s: f64,
    settle_s: f64,
    every_s: f64,
    reached_s: f64,
    uncertainty_db: f64,
    expected: Vec<physics::Expected>,
}

fn written<'a>(site: &'a Site, budgets: &[Budget]) -> Written<'a> {
    let cable = |(cable, budget): (&'a Cable, &Budget)| WrittenCable {
        cable: &cable.tag,
        points: budget.points.iter().sum(),
        scan_s: budget.scan_s,
        transfer_s: budget.transfer_s,
        settle_s: budget.settle_s,
        every_s: budget.every_s,
        reached_s: budget::reached_s(site, budgets, cable.instrument).max(budget.every_s),
        uncertainty_db: hundredths(hushwatch_plan::uncertainty(cable, &site.instruments[cable.instrument]).expanded_db),
        expected: physics::figures(cable),
    };
    Written {
        ok: true,
        site: &site.name,
        remarks: remarks(site),
        cables: site.cables.iter().zip(budgets).map(cable).collect(),
        bytes_a_day: budget::bytes_a_day(site, budgets),
        commits_a_day: budget::commits_a_day(site),
    }
}
