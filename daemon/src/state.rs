//! What the machine is doing: by the site file's calendar, by a file that the machine's controller writes, or as people
//! tell.

use hushwatch_config::site::{OperatingStates, Site};
use hushwatch_quantity::Time;

/// The operating state at a time (plant time);
/// `told` is what people told last.
pub(crate) fn at(site: &Site, time: Time, told: &str) -> String {
    if let Some(state) = site.scheduled_state(time) {
        return state.to_owned();
    }
    match &site.operating_states {
        OperatingStates::File { path, otherwise, .. } => {
            let content = std::fs::read_to_string(path).unwrap_or_default();
            site.operating_states.state_in_file(&content).unwrap_or(otherwise).to_owned()
        }
        OperatingStates::Manual { .. } => told.to_owned(),
        OperatingStates::Untold | OperatingStates::Calendar { .. } => OperatingStates::UNKNOWN.to_owned(),
    }
}
