//! `hushwatch sweep`: one live sweep of an instrument, for those who set one up or write a dialect for it.

use std::io::Write;
use std::process::ExitCode;
use std::sync::mpsc;
use std::time::{Duration, Instant};

use clap::Args;
use hushwatch_config::site::Site;
use hushwatch_config::walk::suggestion;
use hushwatch_instrument::{Instrument, InstrumentError, Reading, SweepAnswer, Way};
use hushwatch_plan::CablePlan;
use hushwatch_quantity::LevelUnit;
use hushwatch_report::{Cell, Size, Spectrum, table};
use hushwatch_signal::{BandLevel, BandwidthLaw, Character};
use serde::Serialize;

use crate::context::{Context, height, print_json, width};
use crate::failure::{COULD_NOT, Failure, Outcome};
use crate::written::hundredths;

/// Of an answer longer than this a transcript shows the beginning and the end, bytes.
const LONG: usize = 96;

/// How often the port is tried if the instrument sweeps fewer points than the dialect says.
const ATTEMPTS: u32 = 3;

/// Sweeps once, as the service would, and shows what came of it. The service must not hold the port meanwhile.
#[derive(Args)]
pub(crate) struct Arguments {
    /// The instrument's name in the site file
    instrument: String,
    /// As for this cable [default: the first one on the instrument]
    #[arg(long, value_name = "CABLE")]
    cable: Option<String>,
    /// Show every byte both ways, with the time since the start
    #[arg(long)]
    transcript: bool,
    /// Print the trace as the instrument gave it: frequency in Hz and level, a line for each point
    #[arg(long)]
    raw: bool,
}

/// Sweeps and shows.
pub(crate) fn run(context: &Context, arguments: &Arguments) -> Outcome {
    let site = context.site()?;
    let cable = cable(&site, arguments)?;
    let (told, log) = mpsc::channel();
    let outcome = sweep(&site, cable, arguments.transcript.then_some(told));
    if arguments.transcript {
        transcript(&log)?;
    }
    let (plan, answer) = match outcome {
        Ok(swept) => swept,
        Err(error) => {
            let hint = match error {
                InstrumentError::Held { .. } => " (stop the service first: a serial line is one conversation)",
                _ if !arguments.transcript => " (--transcript shows every byte)",
                _ => "",
            };
            return Err(Failure::could_not(format!("{}: {error}{hint}", arguments.instrument)));
        }
    };
    if arguments.raw {
        return raw(&plan, &answer);
    }
    let levels = plan.levels(&answer);
    let characters = plan.characters(&answer);
    if context.json {
        print_json(&written(&site, cable, &answer, (&levels, &characters)))?;
    } else {
        tell(&site, cable, &plan, &answer, (&levels, &characters))?;
    }
    let usable = levels.iter().flatten().any(|level| level.quality.is_usable());
    Ok(if usable { ExitCode::SUCCESS } else { ExitCode::from(COULD_NOT) })
}

/// The cable as for which is swept, by index.
fn cable(site: &Site, arguments: &Arguments) -> Result<usize, Failure> {
    let wanted = &arguments.instrument;
    let names = || site.instruments.iter().map(|one| one.name.as_str());
    let Some(instrument) = names().position(|name| name == wanted) else {
        return Err(Failure::wrong_call(format!("there is no instrument `{wanted}`; {}", suggestion(wanted, names()))));
    };
    let of_this = || site.cables.iter().enumerate().filter(|(_, cable)| cable.instrument == instrument);
    let found = match &arguments.cable {
        None => of_this().next(),
        Some(tag) => of_this().find(|(_, cable)| cable.tag == *tag),
    };
    found.map(|(index, _)| index).ok_or_else(|| {
        let tags: Vec<&str> = of_this().map(|(_, cable)| cable.tag.as_str()).collect();
        Failure::wrong_call(format!("no such cable is on {wanted}; on it are: {}", tags.join(", ")))
    })
}

type Told = (Duration, Way, Vec<u8>);

fn sweep(
    site: &Site,
    cable: usize,
    told: Option<mpsc::Sender<Told>>,
) -> Result<(CablePlan, SweepAnswer), InstrumentError> {
    let mut instrument = Instrument::new(&site.instruments[site.cables[cable].instrument]);
    let begun = Instant::now();
    if let Some(told) = told {
        instrument.listen(Box::new(move |way, bytes| {
            // The other end reads when all is over; it lives as long.
            let _ = told.send((begun.elapsed(), way, bytes.to_vec()));
        }));
    }
    instrument.probe_port()?;
    let runtime = tokio::runtime::Builder::new_current_thread().enable_all().build();
    let runtime = runtime.map_err(|error| InstrumentError::Plan(error.to_string()))?;
    runtime.block_on(async {
        let mut attempts = 0;
        loop {
            let most = usize::try_from(instrument.most_points()).unwrap_or(usize::MAX);
            let plan = CablePlan::new(site, cable, most).map_err(|error| InstrumentError::Plan(error.to_string()))?;
            attempts += 1;
            match instrument.sweep(&plan.sweep).await {
                Err(InstrumentError::TooManyPoints { .. }) if attempts < ATTEMPTS => {}
                outcome => return outcome.map(|answer| (plan, answer)),
            }
        }
    })
}

/// Everything that went over the line, as people can read it: a line for each piece that went one way.
fn transcript(log: &mpsc::Receiver<Told>) -> Result<(), Failure> {
    let mut out = anstream::stderr();
    let mut pieces: Vec<Told> = Vec::new();
    for (at, way, bytes) in log.try_iter() {
        match pieces.last_mut() {
            Some((_, last, all)) if *last == way => all.extend(bytes),
            _ => pieces.push((at, way, bytes)),
        }
    }
    for (at, way, bytes) in pieces {
        let arrow = match way {
            Way::Sent => '>',
            Way::Received => '<',
        };
        // What is sent is a line for each command; an answer is one thing, even if it is a block.
        let lines = if way == Way::Sent { lines_of(&bytes) } else { vec![bytes.as_slice()] };
        for line in lines {
            writeln!(out, "{:9.3} {arrow} {}", at.as_secs_f64(), readable(line))?;
        }
    }
    Ok(())
}

/// Cuts behind each line end, be it CR, LF or both.
fn lines_of(bytes: &[u8]) -> Vec<&[u8]> {
    let mut lines = Vec::new();
    let mut start = 0;
    for (at, byte) in bytes.iter().enumerate() {
        let ends = *byte == b'\n' || (*byte == b'\r' && bytes.get(at + 1) != Some(&b'\n'));
        if ends || at + 1 == bytes.len() {
            lines.push(&bytes[start..=at]);
            start = at + 1;
        }
    }
    lines
}

/// Printable characters as they are, all others escaped; of a long answer the beginning and the end.
fn readable(bytes: &[u8]) -> String {
    let escaped = |bytes: &[u8]| {
        let one = |byte: &u8| match byte {
            b' '..=b'~' if *byte != b'\\' => char::from(*byte).to_string(),
            other => other.escape_ascii().to_string(),
        };
        bytes.iter().map(one).collect::<String>()
    };
    if bytes.len() <= LONG {
        return escaped(bytes);
    }
    let (head, tail) = (&bytes[..LONG / 2], &bytes[bytes.len() - LONG / 4..]);
    let left_out = bytes.len() - head.len() - tail.len();
    format!("{} ... {left_out} bytes ... {}", escaped(head), escaped(tail))
}

/// Frequency and level of each point as the instrument gave them.
fn points(plan: &CablePlan, answer: &SweepAnswer) -> Vec<(f64, f64)> {
    let mut points = Vec::new();
    for (segment, values) in plan.sweep.segments.iter().zip(&answer.segments) {
        let steps = values.len().saturating_sub(1).max(1) as f64;
        let width = segment.stop_hz - segment.start_hz;
        points
            .extend(values.iter().enumerate().map(|(n, value)| (segment.start_hz + width * n as f64 / steps, *value)));
    }
    points
}

fn raw(plan: &CablePlan, answer: &SweepAnswer) -> Outcome {
    let mut out = std::io::BufWriter::new(std::io::stdout().lock());
    writeln!(out, "hz,{}", answer.unit.label())?;
    for (hz, value) in points(plan, answer) {
        writeln!(out, "{hz:.0},{value}")?;
    }
    out.flush()?;
    Ok(ExitCode::SUCCESS)
}

fn tell(
    site: &Site,
    cable: usize,
    plan: &CablePlan,
    answer: &SweepAnswer,
    (levels, characters): (&[Option<BandLevel>], &[Option<Character>]),
) -> Result<(), Failure> {
    let described = &site.cables[cable];
    let spectrum = Spectrum {
        title: format!("{}, input {}: {}", described.tag, described.input, answer.settings.identity),
        unit: answer.unit.label().to_owned(),
        points: points(plan, answer),
        marks: described.bands.iter().flat_map(|band| [band.from_hz, band.to_hz]).collect(),
    };
    let mut out = anstream::stdout().lock();
    out.write_all(spectrum.to_text(Size { width: width(), height: height().min(24) }).as_bytes())?;
    writeln!(out)?;
    let row =
        |((band, level), character): ((&hushwatch_config::site::Band, &Option<BandLevel>), &Option<Character>)| {
            match level {
                Some(level) => vec![
                    Cell::new(&band.name),
                    Cell::number(format!("{:.2} {}", level.level_db, unit(site, cable))),
                    Cell::number(format!("{:.2}", level.peak_db)),
                    Cell::number(format!("{:.3} MHz", level.peak_hz / 1e6)),
                    Cell::new(character.as_ref().map_or_else(String::new, carried_by)),
                    Cell::new(level.quality.to_string()),
                ],
                None => vec![Cell::new(&band.name), Cell::number("nothing was measured")],
            }
        };
    let rows: Vec<Vec<Cell>> = described.bands.iter().zip(levels).zip(characters).map(row).collect();
    out.write_all(table(&["band", "level", "peak", "at", "carried by", "quality"], &rows, width()).as_bytes())?;
    writeln!(out)?;
    out.write_all(settings(answer).as_bytes())?;
    writeln!(out, "\nA level is known to +- {:.1} dB (k = 2).", plan.uncertainty.expanded_db)?;
    Ok(())
}

/// What carries a band, in words.
fn carried_by(character: &Character) -> String {
    let lines = match character.lines {
        1 => String::from("1 line"),
        more => format!("{more} lines"),
    };
    match character.law() {
        Some(BandwidthLaw::Tone) => lines,
        Some(_) if character.lines == 0 => String::from("noise"),
        Some(_) => format!("noise ({lines} in it)"),
        None => format!("noise and {lines} ({:.0} % of the power)", 100.0 * character.line_share),
    }
}

/// What the instrument was set to, and how that is known.
fn settings(answer: &SweepAnswer) -> String {
    let names = answer.settings.segments.first().into_iter().flatten().map(|(name, _)| *name);
    let row = |name: &str| {
        let of_segments: Vec<String> = answer
            .settings
            .segments
            .iter()
            .filter_map(|segment| segment.get(name))
            .map(|reading| match reading {
                Reading::Told(value) | Reading::Assumed(value) => value.to_string(),
            })
            .collect();
        let assumed = answer.settings.assumed().contains(&name);
        let mut same = of_segments.clone();
        same.dedup();
        let text = if same.len() == 1 { same.concat() } else { of_segments.join(", ") };
        vec![
            Cell::new(name),
            Cell::new(text),
            Cell::new(if assumed { "assumed: it cannot tell" } else { "told by it" }),
        ]
    };
    let rows: Vec<Vec<Cell>> = names.map(row).collect();
    table(&["setting", "value", "how it is known"], &rows, width())
}

fn unit(site: &Site, cable: usize) -> &'static str {
    let unit = match site.cables[cable].probe.kind {
        hushwatch_config::site::ProbeKind::Current => LevelUnit::DbMicroamp,
        hushwatch_config::site::ProbeKind::Loop => LevelUnit::DbMicroampPerMetre,
        hushwatch_config::site::ProbeKind::Direct => LevelUnit::DbMicrovolt,
    };
    unit.label()
}

#[derive(Serialize)]
struct Written<'a> {
    cable: &'a str,
    unit: &'static str,
    bands: Vec<WrittenBand<'a>>,
    settings: &'a hushwatch_instrument::Settings,
    trace_unit: &'static str,
    trace: &'a [Vec<f64>],
}

#[derive(Serialize)]
struct WrittenBand<'a> {
    band: &'a str,
    level_db: Option<f64>,
    peak_db: Option<f64>,
    peak_hz: Option<f64>,
    lines: Option<usize>,
    line_share: Option<f64>,
    crest_db: Option<f64>,
    quality: Option<String>,
}

/// A band with what a sweep made of it.
type OfBand<'a, 'b> = ((&'a hushwatch_config::site::Band, &'b Option<BandLevel>), &'b Option<Character>);

fn written<'a>(
    site: &'a Site,
    cable: usize,
    answer: &'a SweepAnswer,
    (levels, characters): (&[Option<BandLevel>], &[Option<Character>]),
) -> Written<'a> {
    let described = &site.cables[cable];
    let band = |((band, level), character): OfBand<'a, '_>| WrittenBand {
        band: &band.name,
        level_db: level.as_ref().map(|level| hundredths(level.level_db)),
        peak_db: level.as_ref().map(|level| hundredths(level.peak_db)),
        peak_hz: level.as_ref().map(|level| level.peak_hz.round()),
        lines: character.as_ref().map(|character| character.lines),
        line_share: character.as_ref().map(|character| hundredths(character.line_share)),
        crest_db: character.as_ref().map(|character| hundredths(character.crest_db)),
        quality: level.as_ref().map(|level| level.quality.to_string()),
    };
    Written {
        cable: &described.tag,
        unit: unit(site, cable),
        bands: described.bands.iter().zip(levels).zip(characters).map(band).collect(),
        settings: &answer.settings,
        trace_unit: answer.unit.label(),
        trace: &answer.segments,
    }
}

#[cfg(test)]
mod tests {
    use super::*;

    #[test]
    fn transcripts_can_be_read() {
        assert_eq!(readable(b"*IDN?\n"), "*IDN?\\n");
        assert_eq!(readable(b"0,\"No error\"\r\n"), "0,\"No error\"\\r\\n");
        assert_eq!(readable(&[b'#', 0, 0xff]), "#\\x00\\xff");
        assert_eq!(lines_of(b"A\rB\r\nC\nD"), [&b"A\r"[..], b"B\r\n", b"C\n", b"D"]);
        let long = readable(&[b'a'; 500]);
        assert!(long.contains("428 bytes") && long.len() < 120, "{long}");
    }
}
