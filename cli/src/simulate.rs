//! `hushwatch simulate`: the simulated receiver alone, for who wants to try the service or another program on it.

use std::io::Write;
use std::path::{Path, PathBuf};
use std::process::ExitCode;

use clap::Args;
use hushwatch_config::scene::{self, Scene};
use hushwatch_scene::{Options, SimulatedReceiver, site_file};

use crate::context::colored;
use crate::failure::{Failure, Outcome};

/// Plugs a simulated receiver in and answers until it is interrupted.
#[derive(Args)]
pub(crate) struct Arguments {
    /// A scene file, or the name of one that is built in: bottling-hall
    #[arg(value_name = "SCENE")]
    scene: String,
    /// The path of its port
    #[arg(long, value_name = "PATH", default_value = "hushwatch-rx1")]
    port: PathBuf,
    /// Answer as fast as possible instead of at the scene's baud rate
    #[arg(long)]
    no_pacing: bool,
    /// Write a site file that fits the scene
    #[arg(long, value_name = "FILE")]
    write_site: Option<PathBuf>,
}

/// Simulates until interrupted.
pub(crate) fn run(arguments: &Arguments) -> Outcome {
    let scene = load(&arguments.scene)?;
    let port = std::path::absolute(&arguments.port)?;
    if let Some(path) = &arguments.write_site {
        if path.exists() {
            return Err(Failure::could_not(format!("{} is there already; it was not touched", path.display())));
        }
        std::fs::write(path, site_file(&scene, &port))?;
    }
    let name = scene.name.clone();
    let receiver = plug_in(scene, port, !arguments.no_pacing)?;
    writeln!(anstream::stdout(), "{}", receiver.port_path().display())?;
    writeln!(anstream::stderr(), "simulating \"{name}\"; stop it with Ctrl-C")?;
    let runtime = tokio::runtime::Builder::new_current_thread().enable_all().build()?;
    runtime.block_on(async {
        let mut terminate = tokio::signal::unix::signal(tokio::signal::unix::SignalKind::terminate())?;
        tokio::select! {
            interrupted = tokio::signal::ctrl_c() => interrupted,
            _ = terminate.recv() => Ok(()),
        }
    })?;
    Ok(ExitCode::SUCCESS)
}

/// Reads a scene: a file, or one that is built in.
pub(crate) fn load(name: &str) -> Result<Scene, Failure> {
    let read = match scene::builtin(name) {
        Some(text) => scene::parse(text, Path::new(name)),
        None => scene::load(Path::new(name)),
    };
    read.map_err(|faults| Failure::could_not(format!("the scene is refused\n{}", faults.render(colored()))))
}

/// Plugs the receiver of a scene in.
pub(crate) fn plug_in(scene: Scene, link: PathBuf, pace: bool) -> Result<SimulatedReceiver, Failure> {
    SimulatedReceiver::start(scene, Options { link, pace }).map_err(|error| Failure::could_not(error.to_string()))
}
