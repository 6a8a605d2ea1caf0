use proptest::prelude::*;

use super::*;
use crate::{AlarmKind, Place};

fn key(subject: &str) -> AlarmKey {
    AlarmKey::new(AlarmKind::Regression, subject)
}

fn detail(rise_db: f64) -> Detail {
    let since = Time::from_secs(90);
    let place = Place { band: "ringing".into(), state: "running".into(), rise_db, since };
    Detail { text: format!("up by {rise_db} dB"), since: Some(since), places: vec![place] }
}

fn occurs(subject: &str, rise_db: f64) -> Event {
    Event::Occurs { key: key(subject), time: Time::from_secs(100), detail: detail(rise_db) }
}

fn clears(subject: &str) -> Event {
    Event::Clears { key: key(subject), time: Time::from_secs(200), text: "back".into() }
}

fn acknowledges(occurrence: u64) -> Event {
    let time = Time::from_secs(150);
    let by = Acknowledged { time, who: "the shift".into(), note: "latch open".into(), cause: Cause::Choke };
    Event::Acknowledge { occurrence, by }
}

/// Runs events on an empty board; what came of each as `transition:state` with `!` if recipients are told, `-` for
/// nothing, `x` for a refusal.
fn run(events: &[Event]) -> String {
    let mut board = Board::default();
    let mut told = Vec::new();
    for event in events {
        told.push(match board.handle(event.clone()) {
            Ok(None) => "-".to_owned(),
            Ok(Some(action)) => {
                let mark = if action.notify == Notify::Yes { "!" } else { "" };
                format!("{}:{}#{}{mark}", action.transition, action.alarm.state, action.alarm.occurrence)
            }
            Err(_) => "x".to_owned(),
        });
    }
    told.join(" ")
}

#[test]
fn each_cell_of_the_table() {
    for (events, expected) in [
        (vec![clears("W12")], "-"),
        (vec![acknowledges(1)], "x"),
        (vec![occurs("W12", 6.0), occurs("W12", 6.2)], "occurred:unacknowledged#1! -"),
        (vec![occurs("W12", 6.0), occurs("W12", 9.0)], "occurred:unacknowledged#1! updated:unacknowledged#1"),
        (vec![occurs("W12", 6.0), clears("W12")], "occurred:unacknowledged#1! cleared:returned#1!"),
        (
            vec![occurs("W12", 6.0), clears("W12"), clears("W12"), acknowledges(1), acknowledges(1)],
            "occurred:unacknowledged#1! cleared:returned#1! - acknowledged:normal#1 x",
        ),
        (
            vec![
                occurs("W12", 6.0),
                acknowledges(1),
                acknowledges(1),
                occurs("W12", 3.0),
                clears("W12"),
                clears("W12"),
            ],
            "occurred:unacknowledged#1! acknowledged:acknowledged#1 x updated:acknowledged#1 cleared:normal#1! -",
        ),
        (
            vec![occurs("W12", 6.0), clears("W12"), occurs("W12", 6.0), acknowledges(2)],
            "occurred:unacknowledged#1! cleared:returned#1! occurred:unacknowledged#2! acknowledged:acknowledged#2",
        ),
        (
            vec![occurs("W12", 6.0), occurs("W14", 6.0), acknowledges(2)],
            "occurred:unacknowledged#1! occurred:unacknowledged#2! acknowledged:acknowledged#2",
        ),
    ] {
        assert_eq!(run(&events), expected, "{events:?}");
    }
}

#[test]
fn a_refusal_tells_what_could_be_meant() {
    let mut board = Board::default();
    let nothing = board.handle(acknowledges(7)).expect_err("nothing is open");
    assert_eq!(nothing.to_string(), "no open alarm has the number 7; none is open");
    board.handle(occurs("W12", 6.0)).expect("taken");
    let other = board.handle(acknowledges(7)).expect_err("another one is open");
    assert_eq!(other.to_string(), "no open alarm has the number 7; open: 1");
    board.handle(acknowledges(1)).expect("taken");
    let twice = board.handle(acknowledges(1)).expect_err("taken up already");
    assert_eq!(twice.to_string(), "alarm 1 was acknowledged by the shift already");
}

#[test]
fn a_restored_board_goes_on_and_never_gives_a_number_twice() {
    let mut board = Board::default();
    board.handle(occurs("W12", 6.0)).expect("taken");
    board.handle(occurs("W14", 6.0)).expect("taken");
    board.handle(clears("W14")).expect("taken");
    board.handle(acknowledges(2)).expect("taken");
    let open: Vec<Alarm> = board.open().cloned().collect();
    let text = serde_json::to_string(&open).expect("JSON");
    let open: Vec<Alarm> = serde_json::from_str(&text).expect("the same");
    let mut board = Board::restore(open, 2);
    assert!(board.is_active(&key("W12")) && !board.is_active(&key("W14")));
    assert_eq!(board.handle(occurs("W12", 6.0)), Ok(None));
    let action = board.handle(occurs("W14", 6.0)).expect("taken").expect("an action");
    assert_eq!(action.alarm.occurrence, 3);
}

proptest! {
    /// Whatever happens: numbers rise, `normal` alarms are off the board, and an acknowledged alarm knows by whom.
    #[test]
    fn invariants(steps in proptest::collection::vec((0..3u8, 0..3usize, 1..6u64), 0..60)) {
        let subjects = ["W12", "W14", "rx1"];
        let (mut board, mut last) = (Board::default(), 0);
        for (what, subject, number) in steps {
            let event = match what {
                0 => occurs(subjects[subject], number as f64),
                1 => clears(subjects[subject]),
                _ => acknowledges(number),
            };
            if let Ok(Some(action)) = board.handle(event)
                && action.transition == Transition::Occurred
            {
                prop_assert!(action.alarm.occurrence == last + 1);
                last += 1;
            }
            for alarm in board.open() {
                prop_assert!(alarm.state != AlarmState::Normal);
                prop_assert_eq!(alarm.state == AlarmState::Acknowledged, alarm.acknowledged.is_some());
            }
        }
    }
}
