//! How long the capacitors stay dangerous after switching off: the filter as a network of capacitors and resistors.

use nalgebra::{DMatrix, DVector, SymmetricEigen};

use super::circuit::{Circuit, Dropper, Load, SeriesPart};

/// Direct voltage below which a charged part is taken as safe to touch in dry conditions, V (the limit of extra-low
/// voltage d.c., from memory).
pub const SAFE_V: f64 = 60.0;

/// A mode that decays more slowly than this, 1/s, does not decay at all as far as a person is concerned: its time
/// constant is over a hundred days.
const STANDS_STILL: f64 = 1e-7;

/// One node's capacitor after switching off with the valves cold: nothing but resistors draws.
#[derive(Clone, Debug, PartialEq)]
pub struct Discharge {
    /// The node's name.
    pub node: String,
    /// Its capacitance, F.
    pub farad: f64,
    /// Voltage at switching off, V.
    pub from_v: f64,
    /// Time until it stands below [`SAFE_V`], s; `None` where no resistor leads its charge away.
    pub seconds: Option<f64>,
    /// What it holds at switching off, ½·C·V², J.
    pub energy_j: f64,
}

/// How each node's capacitor discharges from `from_v` (one for each node) through the resistors that are there:
/// bleeders, balance resistors, and the filter's series parts on the way to them (a choke as its resistance: its own
/// time constant is short).
///
/// The network C·dv/dt = −G·v is symmetric, so it's solved exactly by the eigenvectors of C^(−1/2)·G·C^(−1/2).
/// `open_after`: a standby switch after the node of that index, open.
pub fn discharge(circuit: &Circuit, from_v: &[f64], open_after: Option<usize>) -> Vec<Discharge> {
    let farads: Vec<f64> = (0..circuit.filter.len()).map(|node| capacitance(circuit, node)).collect();
    let roots = DVector::from_iterator(farads.len(), farads.iter().map(|c| c.sqrt()));
    let siemens = conductances(circuit, open_after);
    let scaled = DMatrix::from_fn(farads.len(), farads.len(), |i, j| siemens[(i, j)] / (roots[i] * roots[j]));
    let modes = SymmetricEigen::new(scaled);
    let start = DVector::from_iterator(farads.len(), from_v.iter().zip(roots.iter()).map(|(v, c)| v * c));
    let shares = modes.eigenvectors.transpose() * start;
    circuit
        .filter
        .iter()
        .enumerate()
        .map(|(i, section)| {
            let decays: Vec<(f64, f64)> = (0..farads.len())
                .map(|k| (modes.eigenvectors[(i, k)] * shares[k] / roots[i], modes.eigenvalues[k]))
                .collect();
            Discharge {
                node: section.node.clone(),
                farad: farads[i],
                from_v: from_v[i],
                seconds: time_below(&decays, SAFE_V),
                energy_j: 0.5 * farads[i] * from_v[i] * from_v[i],
            }
        })
        .collect()
}

/// When Σ aₖ·exp(−λₖ·t) has fallen to `level`; `None` if what never decays is above it.
fn time_below(decays: &[(f64, f64)], level: f64) -> Option<f64> {
    let still = |rate: f64| rate < STANDS_STILL;
    let at = |t: f64| {
        decays.iter().map(|&(a, rate)| if still(rate) { a } else { a * (-rate * t).exp() }).sum::<f64>()
    };
    if at(0.0) <= level {
        return Some(0.0);
    }
    let for_ever: f64 = decays.iter().filter(|(_, rate)| still(*rate)).map(|(a, _)| a).sum();
    if for_ever >= level {
        return None;
    }
    let slowest =
        decays.iter().map(|(_, rate)| *rate).filter(|rate| !still(*rate)).fold(f64::INFINITY, f64::min);
    let size: f64 = decays.iter().map(|(a, _)| a.abs()).sum();
    // Past this the sum of all that decays is below the level's distance from what stays.
    let (mut low, mut high) = (0.0, (size / (level - for_ever)).max(1.0).ln() / slowest);
    for _ in 0..80 {
        let middle = (low + high) / 2.0;
        if at(middle) > level { low = middle } else { high = middle }
    }
    Some(high)
}

/// Capacitance from a node to 0 V, a doubler's pair in series included, F.
fn capacitance(circuit: &Circuit, node: usize) -> f64 {
    let own = circuit.filter[node].capacitor.map_or(0.0, |c| c.farad);
    match circuit.doubler_f {
        Some([upper, lower]) if node == 0 => own + upper * lower / (upper + lower),
        _ => own,
    }
}

/// The resistors that lead a node's charge to 0 V by themselves, Ω: bleeders, then a string's balance resistors.
pub(super) fn drains(circuit: &Circuit, node: usize) -> Vec<f64> {
    let bleeders = circuit.loads.iter().filter_map(|load| match load {
        Load::Bleeder { node: at, ohm } if *at == node => Some(*ohm),
        _ => None,
    });
    let balance =
        circuit.filter[node].capacitor.and_then(|c| c.balance_ohm.map(|ohm| ohm * f64::from(c.in_series)));
    bleeders.chain(balance).collect()
}

fn conductances(circuit: &Circuit, open_after: Option<usize>) -> DMatrix<f64> {
    let count = circuit.filter.len();
    let mut g = DMatrix::zeros(count, count);
    for node in 0..count {
        g[(node, node)] += drains(circuit, node).iter().map(|ohm| 1.0 / ohm).sum::<f64>();
    }
    for node in 1..count {
        if open_after == Some(node - 1) {
            continue;
        }
        let own_ohm = match circuit.filter[node].series {
            SeriesPart::None => 0.0,
            SeriesPart::Resistor(ohm) | SeriesPart::Choke { ohm, .. } => ohm,
        };
        let dropper_ohm = match circuit.dropper {
            Some(Dropper::LineResistor(ohm)) if node == 1 => ohm,
            _ => 0.0,
        };
        // Without any resistance the two capacitors are one; a milliohm stands for the wire.
        let siemens = 1.0 / (own_ohm + dropper_ohm).max(1e-3);
        g[(node, node)] += siemens;
        g[(node - 1, node - 1)] += siemens;
        g[(node - 1, node)] -= siemens;
        g[(node, node - 1)] -= siemens;
    }
    g
}

#[cfg(test)]
mod tests {
    use super::super::findings::tests::{plain, section};
    use super::*;

    #[test]
    fn one_capacitor_and_one_bleeder_discharge_by_the_exponential() {
        // Handbook oracle O30, computed: 47 µF, 100 kΩ, 450 V to 60 V in 9.470 s; 4.759 J.
        let mut circuit = plain();
        circuit.filter = vec![section("reservoir", SeriesPart::None, 47e-6)];
        circuit.loads = vec![Load::Bleeder { node: 0, ohm: 100e3 }];
        let found = &discharge(&circuit, &[450.0], None)[0];
        assert!((found.seconds.unwrap() - 9.470).abs() < 1e-3, "{found:?}");
        assert!((found.energy_j - 4.759).abs() < 1e-3, "{found:?}");
    }

    #[test]
    fn a_bleeder_discharges_every_capacitor_that_a_series_part_joins_to_it() {
        // 220 kΩ on 100 µF + 47 µF behind a choke: 220 kΩ·147 µF·ln(450/60) = 65 s.
        let mut circuit = plain();
        let choke = SeriesPart::Choke { henry: 5.0, ohm: 120.0 };
        circuit.filter =
            vec![section("reservoir", SeriesPart::None, 100e-6), section("screens", choke, 47e-6)];
        circuit.loads = vec![Load::Bleeder { node: 1, ohm: 220e3 }];
        for found in discharge(&circuit, &[450.0, 450.0], None) {
            assert!((found.seconds.unwrap() - 65.16).abs() < 0.1, "{found:?}");
        }
        // A standby switch between them leaves the reservoir without any.
        let apart = discharge(&circuit, &[450.0, 450.0], Some(0));
        assert_eq!(apart[0].seconds, None);
        assert!((apart[1].seconds.unwrap() - 220e3 * 47e-6 * 7.5f64.ln()).abs() < 1e-6);
    }

    #[test]
    fn a_strings_balance_resistors_are_a_bleeder_and_without_any_resistor_it_stays_charged() {
        let mut circuit = plain();
        circuit.filter = vec![section("reservoir", SeriesPart::None, 110e-6)];
        circuit.loads.clear();
        assert_eq!(discharge(&circuit, &[450.0], None)[0].seconds, None);
        let capacitor = circuit.filter[0].capacitor.as_mut().unwrap();
        (capacitor.in_series, capacitor.balance_ohm) = (2, Some(220e3));
        let found = discharge(&circuit, &[450.0], None);
        assert!((found[0].seconds.unwrap() - 440e3 * 110e-6 * 7.5f64.ln()).abs() < 1e-6);
        assert_eq!(discharge(&circuit, &[50.0], None)[0].seconds, Some(0.0));
    }
}
