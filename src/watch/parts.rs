//! What else follows mains beside the rails with limits: heaters, core, dissipation, capacitors while the valves are
//! cold, and whether a measured rail still fits its projection.

use crate::alarm::PartFigures;
use crate::config::{Amplifier, ColdStart, OutputStage, Rating, Standby, output_valve};
use crate::quantity::Uncertain;
use crate::supply::{Circuit, Dropper, Loading, Projector, RailCurve};

/// A core that is driven this much over what it was wound for runs hot and hums (rule of this tool; no published
/// source). No dropper in the rail helps it: a tap or a bucking winding does.
const CORE_LIMIT: f64 = 1.06;

/// IEC 60384-4 (from memory): an electrolytic's surge voltage over its rated voltage, for rare and short events.
fn surge_v(rated_v: f64) -> f64 {
    if rated_v <= 315.0 { 1.15 * rated_v } else { 1.10 * rated_v }
}

/// The parts of one amplifier that are watched, and what can be known of them beforehand.
#[derive(Clone, Debug)]
pub struct PartWatch {
    amplifier: String,
    guard_band: f64,
    circuit: Option<Circuit>,
    anode: Option<Anode>,
    capacitors: Vec<CapacitorWatch>,
    bands: Vec<Band>,
    proof: Vec<usize>,
    proof_above_v: f64,
}

/// The anode dissipation of one output valve at idle.
#[derive(Clone, Debug)]
struct Anode {
    stage: OutputStage,
    limit_w: f64,
    type_name: String,
    curve: RailCurve,
}

/// One capacitor that meets the unloaded rail.
#[derive(Clone, Debug)]
pub struct CapacitorWatch {
    /// Its node's name.
    pub node: String,
    /// The most that it may meet, V.
    pub limit_v: f64,
    /// Why that: its working voltage, or its surge voltage for a brief warm-up.
    pub why: &'static str,
    /// The unloaded rail at declared mains, V: over the limit, it is a finding and no alarm.
    pub at_declared: Uncertain,
    curve: RailCurve,
}

/// A measured rail and the projections that it should lie between.
#[derive(Clone, Debug)]
struct Band {
    channel: usize,
    node: String,
    idle: RailCurve,
    full: Option<RailCurve>,
}

impl PartWatch {
    /// What can be watched of `amplifier`. `rails` holds (channel index, node) of its rail channels.
    pub fn new(
        amplifier: &Amplifier,
        projector: Option<&Projector>,
        rails: &[(usize, &str)],
        declared_v: f64,
        guard_band: f64,
    ) -> Self {
        let curve = |node: &str, loading| projector?.curve(node, loading).cloned();
        let anode = amplifier.output.as_ref().and_then(|stage| {
            let sheet = output_valve(stage.type_name.as_deref()?)?;
            // A design-centre figure already allows for mains 10 % over: see the rail's own limit.
            let limit_w =
                if sheet.rating == Rating::DesignCentre { 1.10 * sheet.anode_w } else { sheet.anode_w };
            let curve = curve(&stage.node, Loading::Idle)?;
            Some(Anode { stage: stage.clone(), limit_w, type_name: sheet.type_name.clone(), curve })
        });
        let capacitors = amplifier
            .circuit
            .iter()
            .flat_map(|circuit| cold_capacitors(circuit, amplifier.cold.as_ref()))
            .filter_map(|(node, limit_v, why)| {
                let curve = curve(&node, Loading::Unloaded)?;
                let at_declared = curve.project(Uncertain::new(declared_v, 0.0));
                Some(CapacitorWatch { node, limit_v, why, at_declared, curve })
            })
            .collect();
        let bands = rails
            .iter()
            .filter_map(|&(channel, node)| {
                let idle = curve(node, Loading::Idle)?;
                Some(Band { channel, node: node.to_owned(), idle, full: curve(node, Loading::Full) })
            })
            .collect();
        let lowest_limit = amplifier.limits.iter().map(|l| l.max_v).fold(f64::INFINITY, f64::min);
        PartWatch {
            amplifier: amplifier.name.clone(),
            guard_band,
            circuit: amplifier.circuit.clone(),
            anode,
            capacitors,
            bands,
            proof: rails.iter().map(|&(channel, _)| channel).collect(),
            proof_above_v: if lowest_limit.is_finite() { lowest_limit / 3.0 } else { 60.0 },
        }
    }

    /// The capacitors that meet the unloaded rail.
    pub fn capacitors(&self) -> &[CapacitorWatch] {
        &self.capacitors
    }

    /// The amplifier's name.
    pub fn amplifier(&self) -> &str {
        &self.amplifier
    }

    /// Adds this amplifier's figures of one moment.
    pub(super) fn add_figures(
        &self,
        mains: Option<Uncertain>,
        fresh: impl Fn(usize) -> Option<Uncertain>,
        figures: &mut crate::alarm::Figures,
    ) {
        let off = self
            .proof
            .iter()
            .filter_map(|&channel| fresh(channel))
            .map(|rail| rail.volts <= self.proof_above_v)
            .reduce(|a, b| a && b)
            .unwrap_or(false);
        self.add_heater(mains, off, figures);
        self.add_core(mains, off, figures);
        figures.dissipations.extend(self.anode.as_ref().map(|anode| self.dissipation(anode, mains, off)));
        for capacitor in self.capacitors.iter().filter(|c| c.at_declared.volts < c.limit_v) {
            let rail = mains.map(|mains| capacitor.curve.project(mains));
            figures.unloaded.push(PartFigures {
                subject: format!("{}.{}", self.amplifier, capacitor.node),
                value: rail.map(|r| r.volts),
                u: rail.map(|r| r.u),
                setpoint: capacitor.limit_v - self.guard_band * capacitor.at_declared.u,
                limit: Some(capacitor.limit_v),
                suppressed: false,
                note: capacitor.why.to_owned(),
            });
        }
        for band in &self.bands {
            figures.apart.extend(self.apart(band, mains, fresh(band.channel), off));
        }
    }

    fn add_heater(&self, mains: Option<Uncertain>, off: bool, figures: &mut crate::alarm::Figures) {
        let Some(heater) = self.circuit.as_ref().and_then(|c| c.heater) else { return };
        let volts = mains.map(|m| heater.per_mains_v * m.volts);
        let u = mains.map(|m| heater.per_mains_v * m.u);
        let guard = self.guard_band * u.unwrap_or(0.0);
        let share = heater.tolerance_pct / 100.0;
        let part = |limit: f64, setpoint: f64, note: &str| PartFigures {
            subject: self.amplifier.clone(),
            value: volts,
            u,
            setpoint,
            limit: Some(limit),
            suppressed: off,
            note: note.to_owned(),
        };
        let (high, low) = (heater.nominal_v * (1.0 + share), heater.nominal_v * (1.0 - share));
        let nominal = format!("nominal {} V, ±{} %", heater.nominal_v, heater.tolerance_pct);
        figures.heaters.push(part(high, high - guard, &nominal));
        figures.heaters_low.push(part(low, low + guard, &nominal));
    }

    fn add_core(&self, mains: Option<Uncertain>, off: bool, figures: &mut crate::alarm::Figures) {
        let Some(circuit) = &self.circuit else { return };
        let transformer = &circuit.transformer;
        let per_volt = transformer.wound_for_hz / circuit.frequency_hz / transformer.wound_for_v;
        figures.cores.push(PartFigures {
            subject: self.amplifier.clone(),
            value: mains.map(|m| m.volts * per_volt),
            u: mains.map(|m| m.u * per_volt),
            setpoint: CORE_LIMIT,
            limit: None,
            suppressed: off,
            note: format!(
                "wound for {} V at {} Hz, mains at {} Hz",
                transformer.wound_for_v, transformer.wound_for_hz, circuit.frequency_hz
            ),
        });
    }

    fn dissipation(&self, anode: &Anode, mains: Option<Uncertain>, off: bool) -> PartFigures {
        let rail = mains.map(|mains| anode.curve.project(mains));
        let watts = rail.map(|rail| anode_w(&anode.stage, rail.volts));
        // First order (JCGM 100 5.1.2): dP/dV of P = (V − Vk)·I0·(V/V0)^law, by the difference over the rail's own U.
        let u =
            rail.map(|rail| anode_w(&anode.stage, rail.volts + rail.u) - anode_w(&anode.stage, rail.volts));
        PartFigures {
            subject: self.amplifier.clone(),
            value: watts,
            u,
            setpoint: anode.limit_w - self.guard_band * u.unwrap_or(0.0),
            limit: Some(anode.limit_w),
            suppressed: off,
            note: format!("one {} at idle, by the law of its bias", anode.type_name),
        }
    }

    fn apart(
        &self,
        band: &Band,
        mains: Option<Uncertain>,
        measured: Option<Uncertain>,
        off: bool,
    ) -> Option<PartFigures> {
        let both = mains.zip(measured).map(|(mains, measured)| {
            let idle = band.idle.project(mains);
            let full = band.full.as_ref().map(|curve| curve.project(mains));
            let above = measured.volts - idle.volts;
            // With the full loading unknown nobody can say that a rail below idle is too low.
            let below = full.map_or(0.0, |full| full.volts - measured.volts);
            let reference = if above >= below { idle } else { full.unwrap_or(idle) };
            (above.max(below), above, Uncertain::combine([measured.u, reference.u]))
        });
        Some(PartFigures {
            subject: format!("{}.{}", self.amplifier, band.node),
            value: both.map(|(distance, ..)| distance),
            u: both.map(|(.., u)| u),
            setpoint: both.map_or(0.0, |(.., u)| u),
            limit: None,
            suppressed: off,
            note: both.map_or(String::new(), |(_, above, u)| self.suspect(above, u)),
        })
    }

    /// What a rail that stands `above` its projection may tell, where a dropper is fitted.
    fn suspect(&self, above: f64, u: f64) -> String {
        let dropper = self.circuit.as_ref().and_then(|c| c.dropper.as_ref());
        let fits = |jump: f64, doubt: f64| (above - jump).abs() <= u.max(doubt);
        match dropper {
            Some(&Dropper::ReturnMosfet { zener_v, threshold_v, half_width_v, .. }) => {
                let doubt = half_width_v + 2.0;
                if fits(zener_v + threshold_v, doubt) {
                    "it fits a dropper whose MOSFET has shorted: the whole drop is gone".to_owned()
                } else if fits(zener_v, doubt) {
                    "it fits a dropper whose zener has shorted: only about V_GS is left".to_owned()
                } else {
                    String::new()
                }
            }
            Some(&Dropper::ReturnZener { zener_v, .. }) if fits(zener_v, 0.05 * zener_v) => {
                "it fits a dropper whose zener has shorted".to_owned()
            }
            _ => String::new(),
        }
    }
}

/// P = (V − Vk)·I0·(V/V0)^law of one valve, W.
fn anode_w(stage: &OutputStage, rail_v: f64) -> f64 {
    let idle_a = stage.idle_a_each * (rail_v / stage.at_v).powf(stage.law);
    (rail_v - stage.cathode_v) * idle_a
}

/// (node, the most it may meet, why) of each capacitor with a rating that meets the unloaded rail.
fn cold_capacitors(circuit: &Circuit, cold: Option<&ColdStart>) -> Vec<(String, f64, &'static str)> {
    let standby = cold.map_or(&Standby::None, |c| &c.standby);
    let last_waiting = match standby {
        Standby::HtAc => return Vec::new(),
        Standby::None => None,
        Standby::After(node) => circuit.node(node),
    };
    circuit
        .filter
        .iter()
        .enumerate()
        .filter_map(|(i, section)| {
            let rated_v = section.capacitor.as_ref()?.rated_v?;
            Some(match last_waiting {
                Some(last) if i <= last => (
                    section.node.clone(),
                    rated_v,
                    "its working voltage: in standby it waits at the full peak",
                ),
                Some(_) => return None,
                None => (
                    section.node.clone(),
                    surge_v(rated_v),
                    "its surge voltage: the valves' warm-up is brief",
                ),
            })
        })
        .collect()
}

#[cfg(test)]
mod tests {
    use super::*;
    use crate::config::BiasFrom;

    fn stage(law: f64) -> OutputStage {
        OutputStage {
            type_name: None,
            count: 2,
            idle_a_each: 0.04,
            at_v: 500.0,
            cathode_v: 0.0,
            node: "reservoir".into(),
            bias: None,
            bias_from: BiasFrom::Unknown,
            law,
        }
    }

    #[test]
    fn nine_per_cent_more_rail_is_24_per_cent_more_dissipation_at_law_1_5_and_54_at_law_4() {
        // From P = V·I0·(V/V0)^law: 1.09^2.5 = 1.2404, 1.09^5 = 1.5386 (computed).
        for (law, rise) in [(1.5, 1.24), (4.0, 1.54)] {
            let ratio = anode_w(&stage(law), 545.0) / anode_w(&stage(law), 500.0);
            assert!((ratio - rise).abs() < 0.005, "law {law}: {ratio}");
        }
    }

    #[test]
    fn an_electrolytic_bears_its_surge_voltage_for_a_short_while() {
        // IEC 60384-4, from memory: 1.15 times up to 315 V, 1.10 times above.
        assert!((surge_v(300.0) - 345.0).abs() < 1e-9);
        assert!((surge_v(450.0) - 495.0).abs() < 1e-9);
    }
}
