//! What the service manager is told: readiness, that all is alive, the stop.

use std::os::unix::net::UnixDatagram;
use std::time::Duration;

use hushwatch_tests::plant::Plant;

/// Receives until a line is told.
fn wait_for(socket: &UnixDatagram, wanted: &str) -> Vec<String> {
    let mut told = Vec::new();
    let mut buffer = [0; 4096];
    while !told.iter().any(|line: &String| line == wanted) {
        let count = socket.recv(&mut buffer).unwrap_or_else(|error| panic!("{wanted} was not told: {error}; {told:?}"));
        told.extend(String::from_utf8_lossy(&buffer[..count]).lines().map(str::to_owned));
    }
    told
}

#[test]
fn readiness_life_and_stop_are_told() {
    let mut plant = Plant::new("");
    let path = plant.folder().join("notify");
    let socket = UnixDatagram::bind(&path).expect("a socket");
    socket.set_read_timeout(Some(Duration::from_secs(30))).expect("a limit");
    let path = path.to_str().expect("UTF-8").to_owned();
    plant.start_with(&[("NOTIFY_SOCKET", &path), ("WATCHDOG_USEC", "600000")]);
    wait_for(&socket, "READY=1");
    for _ in 0..3 {
        wait_for(&socket, "WATCHDOG=1");
    }
    // An instrument that is gone is tried again in order: no reason for a new start.
    plant.device.unplug();
    plant.wait_for("the gap", |plant| plant.count("SELECT count(*) FROM gaps") > 0);
    for _ in 0..5 {
        wait_for(&socket, "WATCHDOG=1");
    }
    let stopped = std::thread::spawn(move || wait_for(&socket, "STOPPING=1"));
    assert!(plant.stop().success(), "{}", plant.log());
    stopped.join().expect("told");
}
