//! Checks of one part of the site file against another.

use hushwatch_quantity::Span;

use super::cable::Cable;
use super::settings::PlacedDrift;
use crate::faults::Fault;
use crate::walk::Collector;

/// A cable that does not say how often it is looked at is looked at this often at most.
const EVERY_AT_LEAST: Span = Span::from_secs(10);

/// A block without a level in it says nothing: no cable may be looked at less often than once a block.
pub(super) fn cadence(cables: &[Cable], drift: &PlacedDrift, collector: &Collector) {
    let block = drift.drift.block;
    for cable in cables {
        let Some((every, place)) = cable.every.zip(cable.places.every.clone()) else { continue };
        if every > block {
            let what = format!("a level every {every}, but a block of levels is {block}");
            let mut fault =
                Fault::new(place, what).with_help("look at the cable more often, or write a longer `block` in [drift]");
            fault.related.extend(drift.block_place.clone().map(|place| (place, String::from("the block"))));
            collector.push(fault);
        }
    }
    if let Some(place) = drift.block_place.clone()
        && block < EVERY_AT_LEAST
        && let Some(cable) = cables.iter().find(|cable| cable.every.is_none())
    {
        let what = format!("a block of {block} is shorter than the time between levels of cable `{}`", cable.tag);
        let fault = Fault::warning(place, what);
        let help = format!(
            "a cable without `every` is looked at every {EVERY_AT_LEAST} or less often: write its `every`, or a longer block"
        );
        collector.push(fault.with_help(help));
    }
}

/// Two cables cannot be on the same input.
pub(super) fn inputs(cables: &[Cable], collector: &Collector) {
    for (index, cable) in cables.iter().enumerate() {
        let same = |other: &&Cable| (other.instrument, other.input) == (cable.instrument, cable.input);
        if let Some(other) = cables[..index].iter().find(same) {
            let what = format!("cable `{}` is on input {} as cable `{}` is", cable.tag, cable.input, other.tag);
            let fault = Fault::new(cable.places.tag.clone(), what)
                .with_related(other.places.tag.clone(), "the other one")
                .with_help("write `input = ...` with the input of the instrument to which its probe goes");
            collector.push(fault);
        }
    }
}
