//! What all commands share: the site file, the record, the service.

use std::io::Write;
use std::path::PathBuf;

use hushwatch_config::site::{self, Clock, Site};
use hushwatch_control::{Client, ControlError, Request};
use hushwatch_quantity::Time;
use hushwatch_record::{Read, Reader, RecordError};
use serde::Serialize;

use crate::failure::Failure;

/// Where the site file is looked for if nobody says.
const PLACES: [&str; 2] = ["site.toml", "/etc/hushwatch/site.toml"];

/// How the command was called.
#[derive(Debug)]
pub(crate) struct Context {
    /// The site file, if it was named.
    pub(crate) site: Option<PathBuf>,
    /// For programs.
    pub(crate) json: bool,
}

/// A site, its record, and the service if it answers.
pub(crate) struct Opened {
    pub(crate) site: Site,
    pub(crate) reader: Reader,
    pub(crate) service: Result<Client, ControlError>,
}

impl Context {
    /// The path of the site file.
    pub(crate) fn site_path(&self) -> Result<PathBuf, Failure> {
        if let Some(path) = &self.site {
            return Ok(path.clone());
        }
        let found = PLACES.iter().map(PathBuf::from).find(|path| path.exists());
        found.ok_or_else(|| {
            Failure::could_not(format!(
                "no site file: neither {} nor {} is there; name it with --site FILE",
                PLACES[0], PLACES[1]
            ))
        })
    }

    /// The site file, read; its faults are told in full.
    pub(crate) fn site(&self) -> Result<Site, Failure> {
        site::load(&self.site_path()?).map_err(|faults| {
            let text = faults.render(colored());
            Failure::could_not(format!("the site file is refused\n{text}"))
        })
    }

    /// The site with its record, which shows all that was measured so far: a service that runs is asked to write it down
    /// first.
    pub(crate) fn open(&self) -> Result<Opened, Failure> {
        let site = self.site()?;
        let mut service = Client::connect(&site.control_socket);
        if let Ok(client) = &mut service {
            // Without it one sees what is at most `commit_every` old.
            let _ = client.ask(&Request::Flush);
        }
        let reader = Reader::open(&site.record.path)?;
        Ok(Opened { site, reader, service })
    }
}

impl Opened {
    /// What the record holds at this moment.
    pub(crate) fn at_once<T>(&self, ask: impl FnOnce(Read<'_>) -> Result<T, RecordError>) -> Result<T, Failure> {
        Ok(self.reader.at_once(ask)?)
    }

    /// The present plant time: the system's, or that of the newest level where the instruments keep the time.
    pub(crate) fn plant_now(&self, read: Read<'_>) -> Result<Time, RecordError> {
        if self.site.instruments.iter().any(|one| one.clock == Clock::System) {
            return Ok(system_now());
        }
        let mut latest = None;
        for series in read.series()? {
            latest = latest.max(read.latest_level(series.id)?.map(|level| level.time));
        }
        Ok(latest.unwrap_or_else(system_now))
    }
}

/// The system's clock.
pub(crate) fn system_now() -> Time {
    Time::from_micros(jiff::Timestamp::now().as_microsecond())
}

/// Are errors shown in colour?
pub(crate) fn colored() -> bool {
    !matches!(anstream::AutoStream::choice(&std::io::stderr()), anstream::ColorChoice::Never)
}

/// A JSON document or line on the standard output.
pub(crate) fn print_json(value: &impl Serialize) -> Result<(), Failure> {
    let text = serde_json::to_string(value)?;
    writeln!(anstream::stdout(), "{text}")?;
    Ok(())
}

/// The width of the terminal, 100 where there is none.
pub(crate) fn width() -> u16 {
    rustix::termios::tcgetwinsize(std::io::stdout())
        .map_or(100, |size| if size.ws_col == 0 { 100 } else { size.ws_col })
}

/// The height of the terminal, 30 where there is none.
pub(crate) fn height() -> u16 {
    rustix::termios::tcgetwinsize(std::io::stdout()).map_or(30, |size| if size.ws_row == 0 { 30 } else { size.ws_row })
}
