//! What the physics of the chokes has to say about a site file.

use hushwatch_config::faults::{Fault, Faults};
use hushwatch_config::site::{Cable, ChokeMake, ImpedanceTable, Site};
use hushwatch_config::walk::suggestion;
use hushwatch_ferrite::{Choke, Complex, Core, Material, band_insertion_loss_db};
use serde::Serialize;

/// What a choke should do in a band of a cable.
#[derive(Clone, Debug, Serialize)]
pub(super) struct Expected {
    band: String,
    /// For noise that is spread evenly over the band, dB.
    insertion_loss_db: f64,
    /// At the frequency where it does most, dB.
    best_db: f64,
}

/// What is wrong with the site file by physics: unknown materials, and requirements that no choke of this kind can meet.
pub(super) fn faults(site: &Site) -> Faults {
    let mut faults = site.faults();
    let mut told = Vec::new();
    for cable in &site.cables {
        match choke(cable) {
            Ok(None) => {}
            Ok(Some(_)) => faults_of_requirement(cable, &mut faults),
            Err(Wrong::Material { name, place }) => {
                // Several cables may share a choke: once is enough.
                if !told.contains(&place) {
                    let help = suggestion(&name, Material::names());
                    let what = format!("there is no material `{name}`");
                    faults.push(Fault::new(place.clone(), what).with_help(help));
                    told.push(place);
                }
            }
            Err(Wrong::Choke(why)) => {
                let place = cable.places.choke.clone().unwrap_or_else(|| cable.places.tag.clone());
                if !told.contains(&place) {
                    faults.push(Fault::new(place.clone(), format!("this is no choke: {why}")));
                    told.push(place);
                }
            }
        }
    }
    faults
}

fn faults_of_requirement(cable: &Cable, faults: &mut Faults) {
    let (Some(required), Some(place)) = (cable.min_suppression_db, cable.places.min_suppression.clone()) else {
        return;
    };
    let best = figures(cable).into_iter().max_by(|a, b| a.best_db.total_cmp(&b.best_db));
    let Some(best) = best.filter(|best| best.best_db < required) else { return };
    let what = format!("{required} dB cannot be had from this choke on this cable");
    let help = format!(
        "at the best frequency of its best band ({}) it gives {:.1} dB in a loop of {} + {} ohm: ask for less, take more \
         cores or turns, or correct the `loop`",
        best.band, best.best_db, cable.source_ohm, cable.load_ohm
    );
    let mut fault = Fault::new(place, what).with_help(help);
    if let Some(choke) = &cable.places.choke {
        fault = fault.with_related(choke.clone(), "this choke");
    }
    faults.push(fault);
}

/// What the choke should do in each band; nothing if none is described.
pub(super) fn figures(cable: &Cable) -> Vec<Expected> {
    let Ok(Some(choke)) = choke(cable) else { return Vec::new() };
    let ohm = cable.source_ohm + cable.load_ohm;
    let band = |band: &hushwatch_config::site::Band| Expected {
        band: band.name.clone(),
        insertion_loss_db: band_insertion_loss_db(&choke, Complex::new(ohm, 0.0), band.from_hz, band.to_hz),
        best_db: choke.best_insertion_loss_db(ohm, band.from_hz, band.to_hz),
    };
    cable.bands.iter().map(band).collect()
}

/// The same in words.
pub(super) fn expected(cable: &Cable) -> Vec<String> {
    let line = |one: Expected| {
        format!(
            "{}: {:.1} dB expected in a loop of {} + {} ohm, {:.1} dB at best",
            one.band, one.insertion_loss_db, cable.source_ohm, cable.load_ohm, one.best_db
        )
    };
    figures(cable).into_iter().map(line).collect()
}

enum Wrong {
    Material { name: String, place: std::ops::Range<usize> },
    Choke(String),
}

/// The choke of a cable as the physics knows it.
fn choke(cable: &Cable) -> Result<Option<Choke>, Wrong> {
    let Some(described) = &cable.choke else { return Ok(None) };
    let made = match &described.make {
        ChokeMake::Cores { core, turns, cores } => {
            let material = Material::by_name(&core.material)
                .ok_or_else(|| Wrong::Material { name: core.material.clone(), place: core.material_place.clone() })?;
            let shape =
                Core { outer_m: core.outer_m, inner_m: core.inner_m, length_m: core.length_m, gap_m: core.gap_m };
            Choke::cores(material, shape, *turns, *cores)
        }
        ChokeMake::Impedance(ImpedanceTable::Magnitude(rows)) => Choke::magnitude_table(rows),
        ChokeMake::Impedance(ImpedanceTable::Complex(rows)) => Choke::complex_table(rows),
    };
    made.map(Some).map_err(|error| Wrong::Choke(error.to_string()))
}
