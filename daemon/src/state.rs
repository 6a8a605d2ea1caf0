//! What the machine is doing: by the site file's calendar, or by a file that the machine's controller writes.

use hushwatch_config::site::{OperatingStates, Site};
use hushwatch_quantity::Time;

/// The operating state at a time (plant time).
pub(crate) fn at(site: &Site, time: Time) -> String {
    if let Some(state) = site.scheduled_state(time) {
        return state.to_owned();
    }
    match &site.operating_states {
        OperatingStates::File { path, otherwise, .. } => {
            let content = std::fs::read_to_string(path).unwrap_or_default();
            site.operating_states.state_in_file(&content).unwrap_or(otherwise).to_owned()
        }
        OperatingStates::Manual { states } => {
            states.first().map_or(OperatingStates::UNKNOWN, String::as_str).to_owned()
        }
        OperatingStates::Untold | OperatingStates::Calendar { .. } => OperatingStates::UNKNOWN.to_owned(),
    }
}
