//! Who drives how much current through which cable: the network of nodes, solved.

use core::f64::consts::TAU;
use std::collections::BTreeMap;

use hushwatch_config::scene::{Scene, What};
use num_complex::Complex;

use crate::choke;

/// The nodes of a scene by name; earth is none of them.
#[derive(Clone, Debug)]
pub(crate) struct Nodes(BTreeMap<String, usize>);

impl Nodes {
    pub(crate) fn of(scene: &Scene) -> Self {
        let cables = scene.cables.iter().map(|cable| &cable.node);
        let links = scene.links.iter().flat_map(|link| [&link.from, &link.to]);
        let names: Vec<&String> = cables.chain(links).chain(scene.sources.iter().map(|source| &source.node)).collect();
        let mut nodes = BTreeMap::new();
        for name in names {
            let next = nodes.len();
            nodes.entry(name.clone()).or_insert(next);
        }
        Self(nodes)
    }

    fn of_name(&self, name: &str) -> usize {
        self.0.get(name).copied().unwrap_or(0)
    }
}

/// The air in the cores of each cable (m, both gaps together); none where there is no choke.
pub(crate) type Gaps = Vec<Option<f64>>;

/// How the chokes are at a time (microseconds since the start of the scene).
pub(crate) fn gaps_at(scene: &Scene, since_start: i64) -> Gaps {
    let mut gaps: Gaps =
        scene.cables.iter().map(|cable| cable.choke.as_ref().filter(|choke| choke.fitted).map(|c| c.gap_m)).collect();
    for event in scene.events.iter().filter(|event| event.at.as_micros() <= since_start) {
        let (tag, to_closed, gap) = match &event.what {
            What::CoresFitted { cable } => (cable, true, None),
            What::CoresRemoved { cable } => (cable, false, None),
            What::ClipOpened { cable, gap_m } => (cable, false, Some(*gap_m)),
            What::SourceLouder { .. } | What::ReceiverSilent { .. } | What::Unplugged { .. } => continue,
        };
        let Some(index) = scene.cables.iter().position(|cable| cable.tag == *tag) else { continue };
        let closed = scene.cables[index].choke.as_ref().map(|choke| choke.gap_m);
        gaps[index] = if to_closed { closed } else { gap.filter(|_| closed.is_some()) };
    }
    gaps
}

/// Current through each cable per volt of each source, A/V, as `[source][cable]`.
pub(crate) fn transfer(scene: &Scene, nodes: &Nodes, gaps: &Gaps, hz: f64, celsius: f64) -> Vec<Vec<Complex<f64>>> {
    let omega = Complex::new(0.0, TAU * hz);
    let count = nodes.0.len();
    let mut admittance = vec![vec![Complex::new(0.0, 0.0); count]; count];
    let cables: Vec<Complex<f64>> = scene
        .cables
        .iter()
        .zip(gaps)
        .map(|(cable, gap)| {
            let material = |name: &str| scene.materials.iter().find(|material| material.name == name);
            let choke = gap
                .zip(cable.choke.as_ref())
                .and_then(|(gap, one)| Some(choke::impedance(one, material(&one.material)?, gap, hz, celsius)));
            (omega * cable.henry + cable.far_ohm + choke.unwrap_or_default()).inv()
        })
        .collect();
    for (cable, y) in scene.cables.iter().zip(&cables) {
        let node = nodes.of_name(&cable.node);
        admittance[node][node] += y;
    }
    for source in &scene.sources {
        let node = nodes.of_name(&source.node);
        admittance[node][node] += 1.0 / source.impedance_ohm;
    }
    for link in &scene.links {
        let (from, to) = (nodes.of_name(&link.from), nodes.of_name(&link.to));
        let y = (omega * link.henry + link.ohm).inv();
        admittance[from][from] += y;
        admittance[to][to] += y;
        admittance[from][to] -= y;
        admittance[to][from] -= y;
    }
    let of_source = |source: &hushwatch_config::scene::Source| {
        let mut current = vec![Complex::new(0.0, 0.0); count];
        current[nodes.of_name(&source.node)] = Complex::new(1.0 / source.impedance_ohm, 0.0);
        let volts = solve(admittance.clone(), current);
        scene.cables.iter().zip(&cables).map(|(cable, y)| volts[nodes.of_name(&cable.node)] * y).collect()
    };
    scene.sources.iter().map(of_source).collect()
}

/// Solves `matrix * x = right` by elimination with pivots. A node that nothing leads away from stays at zero.
fn solve(mut matrix: Vec<Vec<Complex<f64>>>, mut right: Vec<Complex<f64>>) -> Vec<Complex<f64>> {
    let count = right.len();
    for column in 0..count {
        let pivot = (column..count).max_by(|a, b| matrix[*a][column].norm().total_cmp(&matrix[*b][column].norm()));
        let pivot = pivot.unwrap_or(column);
        matrix.swap(column, pivot);
        right.swap(column, pivot);
        if matrix[column][column].norm() == 0.0 {
            continue;
        }
        for row in column + 1..count {
            let factor = matrix[row][column] / matrix[column][column];
            let (above, below) = matrix.split_at_mut(row);
            for (value, above) in below[0].iter_mut().zip(&above[column]).skip(column) {
                *value -= factor * above;
            }
            let above = right[column];
            right[row] -= factor * above;
        }
    }
    let mut x = vec![Complex::new(0.0, 0.0); count];
    for row in (0..count).rev() {
        let known: Complex<f64> = (row + 1..count).map(|k| matrix[row][k] * x[k]).sum();
        if matrix[row][row].norm() > 0.0 {
            x[row] = (right[row] - known) / matrix[row][row];
        }
    }
    x
}

#[cfg(test)]
mod tests {
    use super::*;
    use crate::cabinet::tests::scene;

    #[test]
    fn currents_divide_as_ohm_and_kirchhoff_say() {
        let scene = scene();
        let nodes = Nodes::of(&scene);
        let gaps = vec![None; scene.cables.len()];
        let hz = 3e6;
        let by_source = transfer(&scene, &nodes, &gaps, hz, 25.0);
        // All of the drive's current goes through the cables and the inner impedances of the other sources.
        let currents = &by_source[0];
        let volt = currents[0] * (Complex::new(0.0, TAU * hz * scene.cables[0].henry) + scene.cables[0].far_ohm);
        let into_sources: f64 = scene.sources[1..].iter().map(|source| 1.0 / source.impedance_ohm).sum();
        let total: Complex<f64> = currents.iter().sum::<Complex<f64>>() + volt * into_sources;
        let driven = (Complex::new(1.0, 0.0) - volt) / scene.sources[0].impedance_ohm;
        assert!((total - driven).norm() < 1e-12, "{total} {driven}");
    }

    #[test]
    fn a_choke_on_one_cable_pushes_current_into_its_neighbours() {
        let scene = scene();
        let nodes = Nodes::of(&scene);
        let mut gaps = vec![None; scene.cables.len()];
        let without = transfer(&scene, &nodes, &gaps, 5e6, 25.0);
        gaps[0] = Some(1e-5);
        let with = transfer(&scene, &nodes, &gaps, 5e6, 25.0);
        let change = |cable: usize| 20.0 * (with[0][cable].norm() / without[0][cable].norm()).log10();
        assert!(change(0) < -8.0, "the choke quiets its own cable: {}", change(0));
        assert!(change(1) > 0.5 && change(2) > 0.5, "its neighbours get louder: {} {}", change(1), change(2));
    }

    #[test]
    fn two_nodes_with_a_link() {
        // 1 A into node 0, 2 ohm to earth there, 3 ohm to node 1, 5 ohm to earth there.
        let g = |ohm: f64| Complex::new(1.0 / ohm, 0.0);
        let matrix = vec![vec![g(2.0) + g(3.0), -g(3.0)], vec![-g(3.0), g(3.0) + g(5.0)]];
        let volts = solve(matrix, vec![Complex::new(1.0, 0.0), Complex::new(0.0, 0.0)]);
        // 2 ohm beside 8 ohm: 1.6 V; 5/8 of it at node 1.
        assert!((volts[0].re - 1.6).abs() < 1e-12 && (volts[1].re - 1.0).abs() < 1e-12);
    }
}
