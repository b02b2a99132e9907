//! The supply as a circuit: what the solver is given. Plain SI values, already checked; the names of nodes are the
//! config's.

/// How the amplifier is loaded.
#[derive(Clone, Copy, Debug, PartialEq, Eq, PartialOrd, Ord, Hash, serde::Serialize, serde::Deserialize)]
#[serde(rename_all = "snake_case")]
pub enum Loading {
    /// Valves cold or in standby: bleeders alone draw.
    Unloaded,
    /// At rest: every load's idle current by its law.
    Idle,
    /// Driven to full output.
    Full,
}

impl Loading {
    /// All three, lightest first.
    pub const ALL: [Loading; 3] = [Loading::Unloaded, Loading::Idle, Loading::Full];

    /// The word of the config file and of every listing.
    pub fn word(self) -> &'static str {
        match self {
            Loading::Unloaded => "unloaded",
            Loading::Idle => "idle",
            Loading::Full => "full",
        }
    }

    /// The loading that `word` names.
    pub fn from_word(word: &str) -> Option<Self> {
        Self::ALL.into_iter().find(|l| l.word() == word)
    }
}

/// The mains wave's shape at unit fundamental: e ∝ sin ωt + Σ aₙ·sin nωt, scaled to the r.m.s. that is asked for.
#[derive(Clone, Debug, PartialEq, Default)]
pub struct MainsWave {
    /// (n, aₙ): the harmonic's order and its signed amplitude in sine phase as a fraction of the fundamental.
    pub harmonics: Vec<(u32, f64)>,
    /// Whether the owner gave it; a sine that was only assumed predicts up to 4 % too much and is said.
    pub known: bool,
}

/// How the secondary feeds the rectifier.
#[derive(Clone, Copy, Debug, PartialEq, Eq)]
pub enum Winding {
    /// One winding, two ends.
    Single,
    /// Two halves about a centre tap; voltages and resistances are of one half.
    CentreTapped,
}

/// A figure with the half-width of the range it may lie in (rectangular, JCGM 100 4.3.7), in the figure's unit.
#[derive(Clone, Copy, Debug, PartialEq)]
pub struct Doubtful {
    /// The best estimate.
    pub value: f64,
    /// Half the width of the range.
    pub half_width: f64,
}

/// The transformer as the rectifier sees it.
#[derive(Clone, Debug, PartialEq)]
pub struct Transformer {
    /// Mains r.m.s. that the tap in use was made for, V.
    pub wound_for_v: f64,
    /// Mains frequency it was made for, Hz.
    pub wound_for_hz: f64,
    /// The primary taps that exist, V; the one in use is `wound_for_v`.
    pub taps_v: Vec<f64>,
    /// Open-circuit secondary r.m.s. at `wound_for_v`, heaters connected, V (per half if centre-tapped).
    pub secondary_v: Doubtful,
    /// Winding form.
    pub winding: Winding,
    /// Resistance in one conducting path, primary referred, Ω.
    pub source_ohm: Doubtful,
    /// Leakage inductance in one conducting path, referred to the secondary, H.
    pub leakage_h: f64,
}

/// How the rectifier is wired.
#[derive(Clone, Copy, Debug, PartialEq, Eq)]
pub enum RectifierCircuit {
    /// Four devices, both half-waves, two in series in each path.
    Bridge,
    /// Two devices on a centre-tapped winding.
    FullWave,
    /// One device.
    HalfWave,
    /// Full-wave doubler: two devices, two capacitors in series across the first node.
    Doubler,
}

/// One rectifying device.
#[derive(Clone, Debug, PartialEq)]
pub enum Device {
    /// v = forward_v + on_ohm·i while conducting.
    Silicon {
        /// Offset, V.
        forward_v: f64,
        /// Slope, Ω.
        on_ohm: f64,
    },
    /// Child–Langmuir: i = k·v^1.5, k in A/V^1.5.
    Valve {
        /// Perveance, A/V^1.5.
        perveance: f64,
        /// Type designation, when it came from the table.
        type_name: Option<String>,
    },
}

/// The series part ahead of a filter section's capacitor.
#[derive(Clone, Copy, Debug, PartialEq)]
pub enum SeriesPart {
    /// None: only the first section may have none.
    None,
    /// A resistor, Ω.
    Resistor(f64),
    /// A choke: inductance in H, winding resistance in Ω.
    Choke {
        /// H.
        henry: f64,
        /// Ω.
        ohm: f64,
    },
}

/// A shunt capacitor, as the node sees it (a series string already folded into one value).
#[derive(Clone, Copy, Debug, PartialEq)]
pub struct Capacitor {
    /// F.
    pub farad: f64,
    /// Working voltage of the whole string, V.
    pub rated_v: Option<f64>,
    /// Equivalent series resistance, Ω.
    pub esr_ohm: f64,
    /// How many in series.
    pub in_series: u32,
    /// Balance resistor across each of a string, Ω; together they are also a bleeder.
    pub balance_ohm: Option<f64>,
}

/// One section of the filter: series part, then a node with its shunt capacitor.
#[derive(Clone, Debug, PartialEq)]
pub struct Section {
    /// The node's name, for example `reservoir`.
    pub node: String,
    /// What leads to it.
    pub series: SeriesPart,
    /// What stands from it to 0 V; `None` only where a doubler's own pair stands there.
    pub capacitor: Option<Capacitor>,
}

/// What draws current from a node.
#[derive(Clone, Debug, PartialEq)]
pub enum Load {
    /// I = I0·(V/at_v)^law.
    Law {
        /// Node index into [`Circuit::filter`].
        node: usize,
        /// I0 at idle, A.
        idle_a: f64,
        /// I0 at full output, A; `None` where nobody said.
        full_a: Option<f64>,
        /// The voltage at which I0 flows, V.
        at_v: f64,
        /// Exponent: 0 constant current, 1 a resistor.
        law: f64,
    },
    /// A resistor that draws in every loading.
    Bleeder {
        /// Node index into [`Circuit::filter`].
        node: usize,
        /// Ω.
        ohm: f64,
    },
}

/// A dropper that is fitted already.
#[derive(Clone, Debug, PartialEq)]
pub enum Dropper {
    /// Zener-biased MOSFET in the rectifier's return: drop = zener + threshold + √(i/k) while i > 0.
    ReturnMosfet {
        /// Sum of the zeners, V.
        zener_v: f64,
        /// Gate threshold, V.
        threshold_v: f64,
        /// k of i = k·(v_gs − threshold)², A/V².
        k_a_per_v2: f64,
        /// Half-width of the doubt of the whole drop, V.
        half_width_v: f64,
    },
    /// Power zener in the return: drop = zener_v + zener_ohm·i while i > 0.
    ReturnZener {
        /// Sum of the zeners, V.
        zener_v: f64,
        /// Dynamic resistance, Ω.
        zener_ohm: f64,
    },
    /// Resistor in the return: carries the charging pulses, Ω.
    ReturnResistor(f64),
    /// Resistor after the reservoir: carries direct current and does nothing for the reservoir itself, Ω.
    LineResistor(f64),
}

/// The heater winding, by what a meter showed or else by its label.
#[derive(Clone, Copy, Debug, PartialEq)]
pub struct Heater {
    /// What the heaters want, V.
    pub nominal_v: f64,
    /// Allowed either way, %.
    pub tolerance_pct: f64,
    /// Heater volts per volt of mains.
    pub per_mains_v: f64,
}

/// Everything between the socket and the last node.
#[derive(Clone, Debug, PartialEq)]
pub struct Circuit {
    /// The amplifier's name, for messages.
    pub amplifier: String,
    /// Mains frequency at the site, Hz.
    pub frequency_hz: f64,
    /// Shape of the mains.
    pub wave: MainsWave,
    /// Transformer.
    pub transformer: Transformer,
    /// Rectifier wiring.
    pub rectifier: RectifierCircuit,
    /// Rectifying device.
    pub device: Device,
    /// The doubler's two capacitors, F, when the rectifier is one.
    pub doubler_f: Option<[f64; 2]>,
    /// Filter sections in order from the rectifier; never empty.
    pub filter: Vec<Section>,
    /// Loads and bleeders.
    pub loads: Vec<Load>,
    /// A fitted dropper.
    pub dropper: Option<Dropper>,
    /// Heater winding.
    pub heater: Option<Heater>,
}

impl Circuit {
    /// Index of the node called `name`.
    pub fn node(&self, name: &str) -> Option<usize> {
        self.filter.iter().position(|section| section.node == name)
    }
}
