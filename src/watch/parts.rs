//! What else follows mains beside the rails with limits: heaters, core, dissipation, capacitors while the valves are
//! cold, and whether a measured rail still fits its projection.

use crate::alarm::PartFigures;
use crate::config::{Amplifier, ColdStart, OutputStage, Rating, Standby, output_valve};
use crate::quantity::Uncertain;
use crate::supply::{CORE_LIMIT, Circuit, Finding, Loading, Projector, RailCurve, core_ratio};

use super::faults::{Fault, faults, suspect};

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
    sheet_w: f64,
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
    /// Whether that is its surge voltage, for a brief warm-up, and not its working voltage, for standby.
    pub surge: bool,
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
    /// Where it stands in standby, if a switch can keep it there.
    standby: Option<RailCurve>,
    faults: Vec<Fault>,
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
            let (sheet_w, type_name) = (sheet.anode_w, sheet.type_name.clone());
            Some(Anode { stage: stage.clone(), limit_w, sheet_w, type_name, curve })
        });
        let capacitors = amplifier
            .circuit
            .iter()
            .flat_map(|circuit| cold_capacitors(circuit, amplifier.cold.as_ref()))
            .filter_map(|(node, limit_v, surge)| {
                let curve = curve(&node, Loading::Unloaded)?;
                let at_declared = curve.project(Uncertain::new(declared_v, 0.0));
                Some(CapacitorWatch { node, limit_v, surge, at_declared, curve })
            })
            .collect();
        let bands = rails
            .iter()
            .filter_map(|&(channel, node)| {
                let idle = curve(node, Loading::Idle)?;
                let standby =
                    waits_in_standby(amplifier, node).then(|| curve(node, Loading::Unloaded)).flatten();
                let faults = amplifier.circuit.iter().flat_map(|circuit| faults(circuit, node)).collect();
                Some(Band {
                    channel,
                    node: node.to_owned(),
                    idle,
                    full: curve(node, Loading::Full),
                    standby,
                    faults,
                })
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
                setpoint: capacitor.setpoint_v(self.guard_band),
                limit: Some(capacitor.limit_v),
                suppressed: false,
                note: capacitor.why().to_owned(),
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
        let per_volt = core_ratio(circuit, 1.0);
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
            let in_standby = band.standby.as_ref().is_some_and(|curve| {
                let waits = curve.project(mains);
                (measured.volts - waits.volts).abs() <= Uncertain::combine([measured.u, waits.u])
            });
            let full = band.full.as_ref().map(|curve| curve.project(mains));
            let above = measured.volts - idle.volts;
            // With the full loading unknown nobody can say that a rail below idle is too low.
            let below = full.map_or(0.0, |full| full.volts - measured.volts);
            let reference = if above >= below { idle } else { full.unwrap_or(idle) };
            let u = Uncertain::combine([measured.u, reference.u]);
            let outside = if in_standby { 0.0 } else { above.max(below).max(0.0) };
            let note = if outside > u { suspect(&band.faults, mains, measured) } else { String::new() };
            (outside, u, note)
        });
        Some(PartFigures {
            subject: format!("{}.{}", self.amplifier, band.node),
            value: both.as_ref().map(|(outside, ..)| *outside),
            u: both.as_ref().map(|(_, u, _)| *u),
            setpoint: both.as_ref().map_or(0.0, |(_, u, _)| *u),
            limit: None,
            suppressed: off,
            note: both.map_or(String::new(), |(.., note)| note),
        })
    }

    /// The output valves' dissipation at idle with that mains, against their sheet.
    pub(super) fn dissipation_at(&self, mains_v: f64) -> Option<Finding> {
        let anode = self.anode.as_ref()?;
        Some(Finding::Dissipation {
            valve: anode.type_name.clone(),
            heat_w: anode_w(&anode.stage, anode.curve.rail_v(mains_v)),
            most_w: anode.sheet_w,
        })
    }
}

impl CapacitorWatch {
    /// The limit less the guard band; the limit itself where the unloaded rail is within the guard band at declared
    /// mains already, since an alarm is for what mains adds.
    fn setpoint_v(&self, guard_band: f64) -> f64 {
        let guarded_v = self.limit_v - guard_band * self.at_declared.u;
        if self.at_declared.volts < guarded_v { guarded_v } else { self.limit_v }
    }

    fn why(&self) -> &'static str {
        if self.surge {
            "its surge voltage: the valves' warm-up is brief"
        } else {
            "its working voltage: in standby it waits at the full peak"
        }
    }
}

/// Whether a standby switch leaves this node standing at the unloaded rail.
fn waits_in_standby(amplifier: &Amplifier, node: &str) -> bool {
    let Some(circuit) = &amplifier.circuit else { return false };
    match amplifier.cold.as_ref().map(|cold| &cold.standby) {
        Some(Standby::After(last)) => circuit.node(node) <= circuit.node(last),
        _ => false,
    }
}

/// P = (V − Vk)·I0·(V/V0)^law of one valve, W.
fn anode_w(stage: &OutputStage, rail_v: f64) -> f64 {
    let idle_a = stage.idle_a_each * (rail_v / stage.at_v).powf(stage.law);
    (rail_v - stage.cathode_v) * idle_a
}

/// (node, the most it may meet, whether that is its surge voltage) of each capacitor with a rating that meets the
/// unloaded rail.
fn cold_capacitors(circuit: &Circuit, cold: Option<&ColdStart>) -> Vec<(String, f64, bool)> {
    let last_waiting = match cold.map_or(&Standby::None, |c| &c.standby) {
        // The valves are warm by the time that the rail comes.
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
            match last_waiting {
                Some(last) if i <= last => Some((section.node.clone(), rated_v, false)),
                Some(_) => None,
                None => Some((section.node.clone(), surge_v(rated_v), true)),
            }
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
