//! Which projector an amplifier gets: a fit before a model, a model before one measured pair.

use chrono_tz::Tz;

use crate::config::Amplifier;
use crate::mains::start_of;
use crate::supply::fit::RecordedFit;
use crate::supply::{Grid, Projector, SolveError, SolveOptions};

/// What an amplifier's rails are projected by.
#[derive(Clone, Debug, Default)]
pub struct Projecting {
    /// The best there is; `None` where nothing is known.
    pub projector: Option<Projector>,
    /// Why its circuit couldn't be solved, so that something less stands in for it.
    pub trouble: Option<SolveError>,
}

/// The projector of `amplifier`: its circuit with the fit's parameters, its circuit as the config states it, or its
/// measured pair. `fit` must be valid, see [`valid_fit`].
pub fn projecting(amplifier: &Amplifier, fit: Option<&RecordedFit>) -> Projecting {
    let measured =
        || amplifier.measured.as_ref().map(|m| Projector::from_measured(&m.node, m.loading, m.pair.clone()));
    let Some(circuit) = &amplifier.circuit else {
        return Projecting { projector: measured(), trouble: None };
    };
    let grid = Grid::about(circuit.transformer.wound_for_v);
    let options = SolveOptions::default();
    let solved = match fit {
        Some(recorded) => Projector::from_fit(circuit, &recorded.fit, grid, &options)
            .or_else(|_| Projector::from_circuit(circuit, grid, &options)),
        None => Projector::from_circuit(circuit, grid, &options),
    };
    match solved {
        Ok(projector) => Projecting { projector: Some(projector), trouble: None },
        Err(trouble) => Projecting { projector: measured(), trouble: Some(trouble) },
    }
}

/// The newest of `fits` (newest first) that still holds: made of the circuit as the config states it now, and with no
/// entry of the service log on one of its days or after it.
pub fn valid_fit<'f>(
    amplifier: &Amplifier,
    fits: &'f [RecordedFit],
    time_zone: Tz,
) -> Option<&'f RecordedFit> {
    let circuit = amplifier.circuit.as_ref()?;
    // An entry names a day, and nobody knows the hour: its whole day counts as change.
    let changed = |from| {
        amplifier
            .events
            .iter()
            .any(|event| event.on.succ_opt().is_none_or(|next| start_of(next, time_zone) > from))
    };
    fits.iter().find(|recorded| recorded.fit.is_of(circuit) && !changed(recorded.from))
}

#[cfg(test)]
mod tests {
    use super::super::tests::full_site;
    use super::*;
    use crate::quantity::Utc;
    use crate::supply::fit::{Accuracy, Pair, fit};
    use crate::supply::{Basis, Loading};

    fn recorded(amplifier: &Amplifier, from: Utc) -> RecordedFit {
        let circuit = amplifier.circuit.as_ref().unwrap();
        let model = projecting(amplifier, None).projector.unwrap();
        let curve = model.curve("reservoir", Loading::Idle).unwrap();
        // A rail 1 % above what the config gives, with a little noise.
        let pairs: Vec<Pair> = (0..300)
            .map(|i| {
                let mains_v = 230.0 + 8.0 * (f64::from(i) / 40.0).sin();
                let noise_v = 0.4 * (f64::from(i) * 2.3).sin();
                Pair {
                    at_ms: from.0 + i64::from(i) * 60_000,
                    mains_v,
                    rail_v: 1.01 * curve.rail_v(mains_v) + noise_v,
                }
            })
            .collect();
        let accuracy = Accuracy { mains: 0.002, rail: 0.002 };
        let fit = fit(circuit, "reservoir", &pairs, accuracy, Some(Loading::Idle)).unwrap();
        RecordedFit { made_at: Utc(from.0 + 400 * 60_000), from, to: Utc(from.0 + 300 * 60_000), fit }
    }

    #[test]
    fn a_fit_is_better_than_the_model_and_the_model_better_than_a_pair() {
        let site = full_site("");
        let hall = &site.amplifiers[0];
        let made = recorded(hall, Utc(1_790_000_000_000));
        let model = projecting(hall, None).projector.unwrap();
        let fitted = projecting(hall, Some(&made)).projector.unwrap();
        assert_eq!((model.basis(), fitted.basis()), (Basis::Model, Basis::Fit));
        let at = |p: &Projector| {
            let curve = p.curve("reservoir", Loading::Idle).unwrap();
            (curve.rail_v(236.0), curve.model_u(236.0))
        };
        let ((model_v, model_u), (fitted_v, fitted_u)) = (at(&model), at(&fitted));
        assert!((fitted_v / model_v - 1.01).abs() < 0.002, "{model_v} {fitted_v}");
        assert!(fitted_u < 0.5 * model_u, "{model_u} {fitted_u}");
    }

    #[test]
    fn a_fit_no_longer_holds_after_a_change_of_the_circuit_or_an_entry_of_the_service_log() {
        let site = full_site("");
        let hall = &site.amplifiers[0];
        // 2026-09-21T13:46:40Z
        let fits = [recorded(hall, Utc(1_790_000_000_000))];
        assert!(valid_fit(hall, &fits, site.time_zone).is_some());
        for (day, holds) in [("2026-09-20", true), ("2026-09-21", false), ("2026-10-02", false)] {
            let event = format!("[[amplifier.event]]\non = {day}\nwhat = \"output valves changed\"\n");
            let site = full_site(&event);
            let found = valid_fit(&site.amplifiers[0], &fits, site.time_zone);
            assert_eq!(found.is_some(), holds, "{day}");
        }
        let mut changed = hall.clone();
        changed.circuit.as_mut().unwrap().transformer.secondary_v.value += 1.0;
        assert!(valid_fit(&changed, &fits, site.time_zone).is_none());
    }
}
