//! `hushwatch state`: what the machine is doing, where the site file leaves that to people.

use std::io::Write;
use std::process::ExitCode;

use clap::Args;
use hushwatch_control::{Client, Request, SetState};

use crate::context::Context;
use crate::failure::Outcome;

/// Tells the service that the machine is in another operating state from now on.
#[derive(Args)]
pub(crate) struct Arguments {
    /// The state, one of those in the site file
    state: String,
}

/// Tells the operating state.
pub(crate) fn run(context: &Context, arguments: &Arguments) -> Outcome {
    let site = context.site()?;
    let mut service = Client::connect(&site.control_socket)?;
    service.ask(&Request::State(SetState { state: arguments.state.clone() }))?;
    writeln!(anstream::stderr(), "operating state: {}", arguments.state)?;
    Ok(ExitCode::SUCCESS)
}
