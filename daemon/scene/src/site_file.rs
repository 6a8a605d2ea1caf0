//! The site file that fits a scene: what an engineer would write who knows this cabinet.

use std::fmt::Write as _;
use std::path::Path;

use hushwatch_config::scene::{Cable, Scene};

/// Common-mode impedance that an engineer would assume on the side of the drive, ohm (common practice for motor cables).
const SOURCE_OHM: f64 = 25.0;

/// The site file for a receiver at this port. The record lies beside the file.
pub fn site_file(scene: &Scene, port: &Path) -> String {
    let mut text = format!(
        "# Written for the scene \"{}\".\n\nformat = 1\n\n[site]\nname     = {}\ntimezone = {}\n",
        scene.name,
        quoted(&scene.name),
        quoted(&scene.timezone)
    );
    let clock = if scene.step.is_some() {
        "\nclock       = \"instrument\"     # plant time comes from the receiver"
    } else {
        ""
    };
    let every = if scene.step.is_some() { "50 ms" } else { "10 s" };
    let _ = write!(
        text,
        "\n[record]\npath         = \"cabinet.db\"\ncommit_every = \"1 s\"\n\n\
         [[instrument]]\nname        = \"rx1\"\nport        = {}\nbaud        = {}\ndialect     = \"scpi-swept\"\n\
         identity    = {}\ntimeout     = \"2 s\"\nattenuation = \"10 dB\"\nfloor       = \"{} dB\"{clock}\n",
        quoted(&port.display().to_string()),
        scene.receiver.baud,
        quoted(scene.receiver.identity.split(',').nth(1).unwrap_or(&scene.receiver.identity)),
        scene.receiver.noise_figure_db + 10.0,
    );
    if let Some(cable) = scene.cables.first() {
        let _ = write!(
            text,
            "\n[[probe]]\nname      = \"clamp-a\"\nkind      = \"current-probe\"\nfactor    = {}\npath_loss = {}\n",
            table(&cable.factor),
            table(&cable.path_loss)
        );
    }
    for (name, from, to, rbw) in [
        ("low", "500 kHz", "2 MHz", "100 kHz"),
        ("ringing", "2 MHz", "10 MHz", "100 kHz"),
        ("high", "10 MHz", "30 MHz", "400 kHz"),
    ] {
        let exclude =
            if name == "ringing" { "\nexclude  = [[\"5.9 MHz\", \"6.25 MHz\"]]     # a broadcast band" } else { "" };
        let _ = write!(
            text,
            "\n[[band]]\nname     = \"{name}\"\nfrom     = \"{from}\"\nto       = \"{to}\"\nrbw      = \"{rbw}\"\
             \ndetector = \"rms\"{exclude}\n"
        );
    }
    for cable in &scene.cables {
        write_cable(&mut text, cable, every);
    }
    text.push_str("\n[drift]\nfalse_alarms = \"1 per 5 years\"\nblock        = \"2 h\"\n");
    text.push_str(&operating_states(scene));
    text
}

fn write_cable(text: &mut String, cable: &Cable, every: &str) {
    let _ = write!(
        text,
        "\n[[cable]]\ntag         = {}\ndescription = {}\ninput       = {}\nprobe       = \"clamp-a\"\n",
        quoted(&cable.tag),
        quoted(&cable.description),
        cable.input
    );
    if let Some(choke) = &cable.choke {
        let mm = |m: f64| format!("{} mm", (m * 1e6).round() / 1e3);
        let _ = writeln!(
            text,
            "choke       = {{ name = \"clips-{}\", core = {{ material = {}, outer = \"{}\", inner = \"{}\", length = \"{}\", \
             split = true, gap = \"{}\" }}, turns = {}, cores = {} }}",
            cable.tag.to_lowercase(),
            quoted(&choke.material),
            mm(choke.outer_m),
            mm(choke.inner_m),
            mm(choke.length_m),
            mm(choke.gap_m),
            choke.turns,
            choke.cores
        );
    }
    let _ = write!(
        text,
        "loop        = {{ source = \"{SOURCE_OHM} ohm\", load = \"{} ohm\" }}\nmax_rise    = \"5 dB\"\nevery       = \
         \"{every}\"\n",
        cable.far_ohm
    );
}

/// The table of the scene file as it stands there: both files know the same words.
fn operating_states(scene: &Scene) -> String {
    let lines: Vec<&str> = scene.text.lines().collect();
    let Some(from) = lines.iter().position(|line| line.trim() == "[operating_states]") else { return String::new() };
    let ends = |line: &&str| line.starts_with('[');
    let to = lines.iter().skip(from + 1).position(ends).map_or(lines.len(), |length| from + 1 + length);
    format!("\n{}\n", lines[from..to].join("\n").trim_end())
}

fn table(points: &[(f64, f64)]) -> String {
    let rows: Vec<String> = points.iter().map(|(hz, db)| format!("[\"{hz} Hz\", {db:?}]")).collect();
    format!("[{}]", rows.join(", "))
}

/// A text as TOML writes it.
fn quoted(text: &str) -> String {
    let escaped: String =
        text.chars().flat_map(|c| if matches!(c, '"' | '\\') { vec!['\\', c] } else { vec![c] }).collect();
    format!("\"{escaped}\"")
}

#[cfg(test)]
mod tests {
    use hushwatch_config::site;

    use super::*;
    use crate::cabinet::tests::scene;

    #[test]
    fn the_site_file_is_right_and_means_the_same_cabinet() {
        let scene = scene();
        let text = site_file(&scene, Path::new("/tmp/rx1"));
        let site =
            site::parse(&text, Path::new("/tmp/site.toml")).unwrap_or_else(|f| panic!("{}\n{text}", f.render(false)));
        assert!(site.warnings.is_empty(), "{}\n{text}", site.warnings.render(false));
        assert_eq!(site.cables.len(), scene.cables.len());
        for (here, there) in site.cables.iter().zip(&scene.cables) {
            assert_eq!((&here.tag, here.input, here.load_ohm), (&there.tag, there.input, there.far_ohm));
            assert_eq!(here.probe.factor, there.factor);
        }
        assert_eq!(site.operating_states, scene.operating_states);
    }
}
