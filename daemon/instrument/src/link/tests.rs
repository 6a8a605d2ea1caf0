use tokio::task::JoinHandle;

use super::*;

fn line(port: String) -> Line {
    Line { port, baud: 3_000_000, parity: Parity::Even, stop_bits: 2, flow: Flow::None, dtr_on_open: Some(true) }
}

/// A port with its far end, and the near one that keeps the terminal raw.
fn pair() -> (Link, SerialStream, SerialStream) {
    let (far, near) = SerialStream::pair().expect("a pseudo-terminal");
    let link = Link::new(line(near.name().expect("its path")));
    (link, far, near)
}

async fn opened() -> (Link, SerialStream, SerialStream) {
    let (mut link, far, near) = pair();
    assert_eq!(link.perform(&Action::Open { after: Duration::ZERO }).await, Event::Opened);
    (link, far, near)
}

fn ask(question: &str, longest: usize) -> Action {
    let first = Duration::from_millis(300);
    Action::Ask {
        bytes: question.as_bytes().to_vec(),
        expected: Expected { block: true, line_end: b'\n', longest },
        patience: Patience { first, between: Duration::from_millis(100), whole: Duration::from_millis(400) },
    }
}

fn drain() -> Action {
    Action::Drain { quiet: Duration::from_millis(30), at_most: Duration::from_millis(300) }
}

/// Sends, and waits until it has come through: the kernel hands it over when it finds the time.
async fn send(far: &mut SerialStream, bytes: &[u8]) {
    far.write_all(bytes).await.expect("written");
    sleep(Duration::from_millis(30)).await;
}

/// Answers one question with these pieces, a pause before each.
fn answering(mut far: SerialStream, pieces: Vec<(u64, Vec<u8>)>) -> JoinHandle<SerialStream> {
    tokio::spawn(async move {
        let mut question = [0; 64];
        let count = far.read(&mut question).await.expect("a question");
        assert!(count > 0);
        for (pause, piece) in pieces {
            sleep(Duration::from_millis(pause)).await;
            far.write_all(&piece).await.expect("written");
        }
        far
    })
}

#[tokio::test]
async fn a_block_in_pieces_comes_back_whole() {
    let (mut link, far, _near) = opened().await;
    let payload: Vec<u8> = (0..20_000u32).map(|index| index as u8).collect();
    let header = b"#520000".to_vec();
    let far = answering(far, vec![(0, header), (50, payload.clone()), (0, b"\n".to_vec())]);
    assert_eq!(link.perform(&ask("TRAC?\n", 20_000)).await, Event::Answered(Answer::Block(payload)));
    drop(far.await);
}

#[tokio::test]
async fn silence_before_and_within_an_answer_ends() {
    let (mut link, far, _near) = opened().await;
    let begun = Instant::now();
    assert_eq!(link.perform(&ask("A?\n", 100)).await, Event::TimedOut);
    assert!(begun.elapsed() >= Duration::from_millis(300));
    let far = answering(far, vec![(0, b"#250half".to_vec())]);
    let begun = Instant::now();
    assert_eq!(link.perform(&ask("B?\n", 100)).await, Event::TimedOut);
    assert!(begun.elapsed() < Duration::from_millis(290), "between two bytes less is waited");
    // Byte after byte, never silent for long, and still not in time as a whole.
    let far = answering(far.await.expect("its task"), (0..40).map(|_| (20, b"x".to_vec())).collect());
    let begun = Instant::now();
    assert_eq!(link.perform(&ask("C?\n", 100)).await, Event::TimedOut);
    assert!(begun.elapsed() < Duration::from_millis(700), "{:?}", begun.elapsed());
    drop(far.await);
}

#[tokio::test]
async fn what_waits_is_told_and_drained_but_for_line_ends() {
    let (mut link, mut far, _near) = opened().await;
    send(&mut far, b"\r\n").await;
    assert_eq!(link.perform(&Action::Tell { bytes: b"A\n".to_vec() }).await, Event::Done);
    send(&mut far, b"-1.5\n").await;
    let unasked = Event::Garbled(Garbage::Unasked("-1.5\\n".to_owned()));
    assert_eq!(link.perform(&Action::Tell { bytes: b"B\n".to_vec() }).await, unasked);
    send(&mut far, b"more\n").await;
    assert_eq!(link.perform(&drain()).await, Event::Quiet);
    assert_eq!(link.perform(&Action::Tell { bytes: b"C\n".to_vec() }).await, Event::Done);
    let mut heard = [0; 4];
    far.read_exact(&mut heard).await.expect("read");
    assert_eq!(&heard, b"A\nC\n", "nothing is written while something waits");
}

#[tokio::test]
async fn what_was_sent_before_it_was_opened_is_thrown_away() {
    let (mut link, mut far, _near) = pair();
    send(&mut far, b"old\n").await;
    assert_eq!(link.perform(&Action::Open { after: Duration::ZERO }).await, Event::Opened);
    assert_eq!(link.perform(&Action::Tell { bytes: b"A\n".to_vec() }).await, Event::Done);
}

#[tokio::test]
async fn a_line_that_never_falls_silent_is_told() {
    let (mut link, mut far, _near) = opened().await;
    let chatter = tokio::spawn(async move {
        loop {
            if far.write_all(b"and so on ").await.is_err() {
                return;
            }
            sleep(Duration::from_millis(5)).await;
        }
    });
    assert_eq!(link.perform(&drain()).await, Event::Restless);
    assert!(matches!(link.perform(&ask("A?\n", 100)).await, Event::Garbled(_)));
    chatter.abort();
}

#[tokio::test]
async fn a_device_that_reads_nothing_blocks_nobody() {
    let (mut link, _far, _near) = opened().await;
    let begun = Instant::now();
    // More than a terminal buffers.
    assert_eq!(link.perform(&Action::Tell { bytes: vec![b'A'; 60_000] }).await, Event::TimedOut);
    drop(link);
    assert!(begun.elapsed() < Duration::from_secs(4));
}

#[tokio::test]
async fn a_hang_up_is_gone_at_once_and_for_every_action() {
    for action in [Action::Tell { bytes: b"A\n".to_vec() }, ask("A?\n", 100), drain()] {
        let (mut link, far, near) = opened().await;
        drop((far, near));
        let begun = Instant::now();
        let event = link.perform(&action).await;
        assert!(matches!(event, Event::Gone(_)), "{action:?}: {event:?}");
        assert!(begun.elapsed() < Duration::from_millis(250));
        // It was closed: nothing is read from it any more.
        assert!(link.port.is_none());
        assert!(matches!(link.perform(&action).await, Event::Gone(_)));
    }
}

#[tokio::test]
async fn a_hang_up_while_an_answer_is_waited_for_is_gone() {
    let (mut link, far, near) = opened().await;
    let far = answering(far, vec![(50, b"#250half".to_vec())]);
    let leaving = tokio::spawn(async move { drop((far.await, near)) });
    assert!(matches!(link.perform(&ask("A?\n", 100)).await, Event::Gone(_)));
    leaving.await.expect("its task");
}

#[tokio::test]
async fn a_port_is_held_by_one_at_a_time() {
    let (mut link, _far, near) = pair();
    assert_eq!(link.probe(), Probe::Free);
    let mut other = Link::new(line(near.name().expect("its path")));
    assert_eq!(other.perform(&Action::Open { after: Duration::ZERO }).await, Event::Opened);
    assert_eq!(other.probe(), Probe::Free, "it is its own");
    assert_eq!(link.probe(), Probe::Held);
    assert_eq!(link.perform(&Action::Open { after: Duration::ZERO }).await, Event::Held);
    drop(other);
    assert_eq!(link.probe(), Probe::Free);
    assert_eq!(link.perform(&Action::Open { after: Duration::ZERO }).await, Event::Opened);
}

#[tokio::test]
async fn what_is_no_port_is_told() {
    let folder = tempfile::tempdir().expect("a folder");
    let at = |name: &str| Link::new(line(folder.path().join(name).display().to_string()));
    let mut absent = at("absent");
    assert_eq!(absent.probe(), Probe::Absent);
    assert!(matches!(absent.perform(&Action::Open { after: Duration::ZERO }).await, Event::Gone(_)));
    std::fs::write(folder.path().join("file"), "text").expect("written");
    assert!(matches!(at("file").probe(), Probe::Refused(_)));
}
