//! The supply as one way of bringing its rail down would leave it.

use super::bucking::Bucking;
use crate::supply::{Circuit, Device, Dropper, RectifierCircuit};

/// One of the ways, by the word of every listing.
#[derive(Clone, Copy, Debug, PartialEq, Eq, serde::Serialize)]
#[serde(rename_all = "kebab-case")]
pub enum Way {
    /// Another primary tap.
    Tap,
    /// A bucking winding on the primary side.
    Bucking,
    /// A zener-biased MOSFET in the rectifier's return.
    ReturnMosfet,
    /// A power zener in the same place.
    ReturnZener,
    /// A resistor before or after the reservoir.
    SeriesResistor,
    /// A valve rectifier of higher drop.
    Rectifier,
}

/// What is changed, with its value.
#[derive(Clone, Debug, PartialEq)]
pub enum Change {
    /// The tap that the mains is moved to, V.
    Tap(f64),
    /// A winding against the mains.
    Bucking(Bucking),
    /// A dropper in the return or after the reservoir.
    Dropper(Dropper),
    /// Another valve in the rectifier's socket.
    Rectifier(Device),
}

/// Why a change can't be made to this supply.
#[derive(Clone, Debug, PartialEq, Eq, thiserror::Error)]
pub enum Unfit {
    /// The transformer has no such tap.
    #[error("the transformer has no tap for {0} V; give those it has as taps_v")]
    NoTap(String),
    /// A dropper is fitted already.
    #[error("a dropper is fitted already; take [amplifier.dropper] out of the config to size another")]
    DropperFitted,
    /// The bias is fed from the rail's winding, or nobody said.
    #[error(
        "a part in the rectifier's return pushes the bias by up to its drop unless the bias has a winding of its own; \
         state bias_from"
    )]
    MovesBias,
    /// A doubler's return belongs to one half alone.
    #[error("a part in a doubler's return acts on one of its halves alone")]
    Doubler,
    /// There is no valve rectifier.
    #[error("the rectifier is no valve, so no valve of higher drop fits its socket")]
    NoValve,
}

impl Change {
    /// Which way it belongs to.
    pub fn way(&self) -> Way {
        match self {
            Change::Tap(_) => Way::Tap,
            Change::Bucking(_) => Way::Bucking,
            Change::Dropper(Dropper::ReturnMosfet { .. }) => Way::ReturnMosfet,
            Change::Dropper(Dropper::ReturnZener { .. }) => Way::ReturnZener,
            Change::Dropper(Dropper::ReturnResistor(_) | Dropper::LineResistor(_)) => Way::SeriesResistor,
            Change::Rectifier(_) => Way::Rectifier,
        }
    }

    /// What of the mains at the socket is left for the transformer, as a factor.
    pub fn mains_factor(&self) -> f64 {
        match self {
            Change::Bucking(bucking) => bucking.factor(),
            _ => 1.0,
        }
    }

    /// The changed supply. `bias_stays`: the bias is fed from a winding of its own or there is none.
    ///
    /// Another tap keeps the secondary's resistance; the part of it that the primary lends changes by less than the
    /// tap's own ratio.
    ///
    /// # Errors
    /// Where this supply can't be changed so.
    pub fn apply(&self, circuit: &Circuit, bias_stays: bool) -> Result<Circuit, Unfit> {
        let mut changed = circuit.clone();
        match self {
            Change::Tap(tap_v) => {
                if !circuit.transformer.taps_v.iter().any(|t| (t - tap_v).abs() < 1e-6) {
                    return Err(Unfit::NoTap(tap_v.to_string()));
                }
                let ratio = circuit.transformer.wound_for_v / tap_v;
                changed.transformer.wound_for_v = *tap_v;
                if let Some(heater) = &mut changed.heater {
                    heater.per_mains_v *= ratio;
                }
            }
            Change::Bucking(_) => {}
            Change::Dropper(dropper) => {
                if circuit.dropper.is_some() {
                    return Err(Unfit::DropperFitted);
                }
                if !matches!(dropper, Dropper::LineResistor(_)) {
                    if circuit.rectifier == RectifierCircuit::Doubler {
                        return Err(Unfit::Doubler);
                    }
                    if !bias_stays {
                        return Err(Unfit::MovesBias);
                    }
                }
                changed.dropper = Some(dropper.clone());
            }
            Change::Rectifier(device) => {
                if !matches!(circuit.device, Device::Valve { .. }) {
                    return Err(Unfit::NoValve);
                }
                changed.device = device.clone();
            }
        }
        Ok(changed)
    }
}
