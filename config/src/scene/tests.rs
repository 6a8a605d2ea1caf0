use std::path::Path;

use super::*;

fn parsed(text: &str) -> Result<Scene, String> {
    parse(text, Path::new("scene.toml")).map_err(|faults| faults.render(false))
}

#[test]
fn the_scene_that_is_built_in_is_right() {
    let text = builtin("bottling-hall").expect("it is there");
    let scene = parsed(text).unwrap_or_else(|faults| panic!("{faults}"));
    assert_eq!((scene.sources.len(), scene.cables.len(), scene.events.len()), (4, 3, 4));
    assert!(matches!(&scene.events[3].what, What::ClipOpened { cable, gap_m } if cable == "W12" && *gap_m == 0.5e-3));
    assert!(builtin("nowhere").is_none());
}

#[test]
fn all_that_is_wrong_is_told() {
    let text = builtin("bottling-hall").expect("it is there");
    for (from, to, expected) in [
        ("kind        = \"drive\"", "kind        = \"driver\"", "did you mean `drive`"),
        ("material = \"nizn-800\"", "material = \"nizn-80\"", "no material is named `nizn-80`"),
        ("cable = \"W12\"\ngap", "cable = \"W13\"\ngap", "no cable is named `W13`"),
        ("source = \"drive-1\"", "source = \"drive-2\"", "no source is named `drive-2`"),
        ("what  = \"clip-opened\"", "what  = \"clip-open\"", "did you mean `clip-opened`"),
        ("inner = \"13 mm\"", "inner = \"30 mm\"", "the hole is not smaller"),
        ("start    = \"2026-08-31T22:00:00Z\"", "start    = \"yesterday\"", "is no time"),
        ("input       = 3", "input       = 1", "the same tag or input"),
        ("impedance   = \"18 ohm\"", "impedance   = \"18 V\"", "ohm"),
        ("step        = \"3.6 V\"", "stepp       = \"3.6 V\"", "did you mean `step`"),
        ("rise        = \"30 ns\"", "rise        = \"30 ns\"\nnode = \"rack\"", "no cable and no link begins"),
        ("format = 1", "format = 9", "of format 9"),
    ] {
        assert!(text.contains(from), "{from}");
        let faults = parsed(&text.replacen(from, to, 1)).expect_err(to);
        assert!(faults.contains(expected), "{to}: {expected}\n{faults}");
    }
    // Two faults are told at once.
    let both = text.replacen("mu         = 800", "mu = 0.5", 1).replacen("by     = \"2 dB\"", "by = \"2 V\"", 1);
    let faults = parsed(&both).expect_err("two faults");
    assert!(faults.contains("0.5") && faults.contains("`2 V`"), "{faults}");
}
