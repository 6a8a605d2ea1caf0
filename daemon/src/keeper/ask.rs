//! Requests on the control socket.

use hushwatch_alarm::{Acknowledged, Cause, Event};
use hushwatch_config::site::OperatingStates;
use hushwatch_config::walk::suggestion;
use hushwatch_control::{Acknowledge, Hello, InstrumentStatus, PROTOCOL, Peer, Reply, Request, SetState, Status};
use hushwatch_record::RecordError;

use super::{Keeper, start};
use crate::users;

/// What status says of a site file that was saved with faults.
const REFUSED: &str = "the site file was saved with faults; the one before stays in force:";

impl Keeper {
    pub(super) fn asked(&mut self, request: Request, peer: Peer) -> Result<Reply, RecordError> {
        match request {
            Request::Hello => Ok(Reply::Hello(Hello {
                protocol: PROTOCOL,
                version: env!("CARGO_PKG_VERSION").to_owned(),
                site: self.site.name.clone(),
                record: self.site.record.path.display().to_string(),
            })),
            Request::Status => Ok(Reply::Status(self.status())),
            Request::Flush => {
                self.urgent = true;
                Ok(Reply::Done)
            }
            Request::State(ask) => self.set_state(ask, peer),
            Request::Acknowledge(ask) => self.acknowledge(ask, peer),
            Request::Reference(mark) => self.mark_reference(mark, peer),
        }
    }

    fn status(&self) -> Status {
        let described = self.site.instruments.iter().zip(&self.instruments);
        let instruments = described.map(|(described, known)| InstrumentStatus {
            name: described.name.clone(),
            identity: known.identity.clone(),
            sweeps: known.sweeps,
            assumed: known.assumed.iter().map(|&name| name.to_owned()).collect(),
            trouble: known.trouble.clone(),
        });
        let waiting: usize = self.recipients.iter().map(|one| one.waiting.len() + usize::from(one.busy)).sum();
        Status {
            up_us: i64::try_from(self.started.elapsed().as_micros()).unwrap_or(i64::MAX),
            instruments: instruments.collect(),
            waiting_notices: waiting as u64,
            troubles: self.refused_site.iter().map(|faults| format!("{REFUSED}\n{faults}")).collect(),
        }
    }

    fn set_state(&mut self, ask: SetState, peer: Peer) -> Result<Reply, RecordError> {
        let OperatingStates::Manual { states } = &self.site.operating_states else {
            let why = "the site file does not leave the operating state to people: `[operating_states]` needs \
                       `source = \"manual\"` and its `states`";
            return Ok(Reply::Refused { why: why.to_owned() });
        };
        if !states.contains(&ask.state) {
            let near = suggestion(&ask.state, states.iter().map(String::as_str));
            return Ok(Reply::Refused { why: format!("there is no operating state `{}`; {near}", ask.state) });
        }
        self.writer.remember(start::TOLD_STATE, Some(&ask.state))?;
        self.urgent = true;
        tracing::info!(state = ask.state, by = who(None, peer), "operating state");
        self.told_state.send_replace(ask.state);
        Ok(Reply::Done)
    }

    fn acknowledge(&mut self, ask: Acknowledge, peer: Peer) -> Result<Reply, RecordError> {
        let Some(cause) = Cause::from_label(&ask.cause) else {
            let known: Vec<&str> = Cause::ALL.iter().map(|cause| cause.label()).collect();
            return Ok(Reply::Refused {
                why: format!("`{}` is no cause; take one of: {}", ask.cause, known.join(", ")),
            });
        };
        let by = Acknowledged { time: self.plant_now(), who: who(ask.who, peer), note: ask.note, cause };
        match self.board.handle(Event::Acknowledge { occurrence: ask.occurrence, by }) {
            Ok(Some(action)) => {
                self.perform(&action)?;
                Ok(Reply::Done)
            }
            Ok(None) => Ok(Reply::Done),
            Err(error) => Ok(Reply::Refused { why: error.to_string() }),
        }
    }
}

/// Who asks: the name that was given with the user that the kernel knows, or that user alone.
pub(super) fn who(given: Option<String>, peer: Peer) -> String {
    let user = users::name(peer.user);
    match given.map(|given| given.trim().to_owned()).filter(|given| !given.is_empty() && *given != user) {
        Some(given) => format!("{given} ({user})"),
        None => user,
    }
}
