//! The fit against synthetic records whose truth is known, and what it refuses.

use std::sync::OnceLock;

use super::super::circuit::Doubtful;
use super::super::findings::tests::plain;
use super::*;

const ACCURACY: Accuracy = Accuracy { mains: 0.005, rail: 0.005 };

/// A source of normal and uniform numbers that is the same everywhere: SplitMix64 (G. L. Steele et al., "Fast
/// splittable pseudorandom number generators", OOPSLA 2014) and the Box–Muller transform.
struct Dice(u64);

impl Dice {
    fn next(&mut self) -> u64 {
        self.0 = self.0.wrapping_add(0x9E37_79B9_7F4A_7C15);
        let mut z = self.0;
        z = (z ^ (z >> 30)).wrapping_mul(0xBF58_476D_1CE4_E5B9);
        z = (z ^ (z >> 27)).wrapping_mul(0x94D0_49BB_1331_11EB);
        z ^ (z >> 31)
    }

    /// Uniform in 0 to 1.
    fn share(&mut self) -> f64 {
        (self.next() >> 11) as f64 / (1u64 << 53) as f64
    }

    fn normal(&mut self) -> f64 {
        (-2.0 * (1.0 - self.share()).ln()).sqrt() * (std::f64::consts::TAU * self.share()).cos()
    }
}

/// A supply with much source resistance, so that unloaded and idle stand far apart.
fn soft() -> Circuit {
    let mut circuit = plain();
    circuit.transformer.source_ohm = Doubtful { value: 90.0, half_width: 30.0 };
    circuit
}

fn surfaces() -> &'static Surfaces {
    static SURFACES: OnceLock<Surfaces> = OnceLock::new();
    SURFACES.get_or_init(|| {
        let circuit = soft();
        let span = [210.0, 250.0].map(|mains_v| Pair { at_ms: 0, mains_v, rail_v: 0.0 });
        let second = Second::SourceResistance;
        Surfaces::solve(&circuit, 0, second, second.prior_u(&circuit), &span).unwrap()
    })
}

/// What is true of a synthetic record: relative errors of nameplate and channels.
#[derive(Clone, Copy, Debug)]
struct Truth {
    secondary: f64,
    second: f64,
    mains_gain: f64,
    rail_gain: f64,
    crest: f64,
}

impl Truth {
    /// As the priors have it: of their standard uncertainties.
    fn draw(dice: &mut Dice, circuit: &Circuit) -> Self {
        let mut of = |half_width: f64| standard(half_width) * dice.normal();
        let doubt = |d: Doubtful| d.half_width / d.value;
        Truth {
            secondary: of(doubt(circuit.transformer.secondary_v)),
            second: of(doubt(circuit.transformer.source_ohm)),
            mains_gain: of(ACCURACY.mains),
            rail_gain: of(ACCURACY.rail),
            crest: of(least_squares::CREST_HALF_WIDTH),
        }
    }

    fn rail_v(&self, loading: Loading, mains_v: f64) -> f64 {
        surfaces().rail_v(loading, mains_v * (1.0 + self.secondary), 1.0 + self.second).unwrap()
    }

    /// Two days of minutes: the mains wanders and dips in the evening; each evening the amplifier is off, stands by
    /// for `standby_min`, warms up, plays with loud passages, and is switched off.
    fn record(&self, dice: &mut Dice, standby_min: i64, swing_v: f64) -> Vec<Pair> {
        let (mut wander, mut drift) = (0.0, 0.0);
        let mut pairs = Vec::new();
        for minute in 0..2 * 24 * 60 {
            wander = 0.98 * wander + 0.2 * swing_v * 0.2 * dice.normal();
            drift = 0.9 * drift + 0.3 * 0.43 * dice.normal();
            let hour = (minute % 1440) as f64 / 60.0;
            let mains_v =
                231.0 + swing_v / 2.0 * (std::f64::consts::TAU * (hour - 2.0) / 24.0).cos() + wander;
            // The crest moves with the mains over its swing.
            let crest = 1.0 + self.crest * ((mains_v - 231.0) / (swing_v / 2.0)).clamp(-1.0, 1.0);
            let evening = minute % 1440 - 17 * 60;
            let loud = dice.share() < 0.15;
            let rail_v = match evening {
                0.. if evening < standby_min => self.rail_v(Loading::Unloaded, mains_v),
                0..330 => {
                    let idle_v = self.rail_v(Loading::Idle, mains_v);
                    let full_v = self.rail_v(Loading::Full, mains_v);
                    let since = (evening - standby_min) as f64;
                    let warming = 1.0 + 0.02 * (-since / 4.0).exp();
                    if loud { idle_v - dice.share() * (idle_v - full_v) } else { idle_v * warming }
                }
                330..333 => 200.0 - 60.0 * (evening - 330) as f64,
                _ => 0.3,
            };
            let rail_v = rail_v * crest + if rail_v > 100.0 { drift + 0.3 * dice.normal() } else { 0.0 };
            pairs.push(Pair {
                at_ms: i64::from(minute as i32) * 60_000,
                mains_v: mains_v * (1.0 + self.mains_gain),
                rail_v: rail_v * (1.0 + self.rail_gain),
            });
        }
        pairs
    }
}

fn fit_of(pairs: &[Pair], word: Option<Loading>) -> Result<Fit, FitError> {
    fit_surfaces(&soft(), "reservoir", surfaces(), Second::SourceResistance, pairs, ACCURACY, word)
}

/// How many of 200 seeds have the truth within U: (secondary, source, idle rail at 245 V).
fn covered(standby_min: i64, swing_v: f64) -> ([usize; 3], usize) {
    let mut covered = [0; 3];
    let mut told = 0;
    for seed in 0..200 {
        let mut dice = Dice(1_000 + seed);
        let truth = Truth::draw(&mut dice, &soft());
        let fit = fit_of(&truth.record(&mut dice, standby_min, swing_v), None).unwrap();
        told += usize::from(fit.told_apart);
        let within = |parameter: Parameter, truth: f64| {
            (parameter.fitted - parameter.nameplate * (1.0 + truth)).abs() <= parameter.fitted_u
        };
        covered[0] += usize::from(within(fit.secondary_v, truth.secondary));
        covered[1] += usize::from(within(fit.second_value, truth.second));
        let [s, p] = fit.factors();
        let slopes = surfaces().slopes(Loading::Idle, 245.0 * s, p).unwrap();
        let rail_v = surfaces().rail_v(Loading::Idle, 245.0 * s, p).unwrap();
        let u = fit.rail_u([slopes[0] * 245.0, slopes[1]]);
        covered[2] += usize::from((rail_v - truth.rail_v(Loading::Idle, 245.0)).abs() <= u);
    }
    (covered, told)
}

/// 90 to 99 % of 200.
fn is_fair(covered: usize) -> bool {
    (180..=198).contains(&covered)
}

#[test]
fn u_covers_the_truth_in_90_to_99_per_cent_of_200_records_with_standby_and_music() {
    let (covered, told) = covered(40, 14.0);
    assert!(covered.into_iter().all(is_fair), "{covered:?} of 200, {told} told apart");
    assert_eq!(told, 200, "standby and idle in one record tell the parameters apart");
}

#[test]
fn u_covers_the_truth_too_where_a_quiet_mains_and_idle_alone_cannot_tell_the_parameters_apart() {
    let (covered, told) = covered(0, 6.0);
    // The second parameter stands at its nameplate, with a doubt that is wide enough for the whole rectangle to lie
    // within two standard uncertainties but for its ends.
    assert!(
        is_fair(covered[0]) && covered[1] >= 180 && is_fair(covered[2]),
        "{covered:?}, {told} told apart"
    );
    assert_eq!(told, 0);
}

#[test]
fn where_it_cannot_tell_them_apart_the_nameplate_of_the_second_stands_and_the_level_is_still_right() {
    let mut dice = Dice(7);
    let truth = Truth { secondary: 0.015, second: 0.2, mains_gain: 0.0, rail_gain: 0.0, crest: 0.0 };
    let fit = fit_of(&truth.record(&mut dice, 0, 6.0), None).unwrap();
    assert!(!fit.told_apart);
    assert_eq!(fit.second_value.fitted, fit.second_value.nameplate);
    let [s, p] = fit.factors();
    let rail_v = surfaces().rail_v(Loading::Idle, 231.0 * s, p).unwrap();
    assert!((rail_v - truth.rail_v(Loading::Idle, 231.0)).abs() < 0.5, "{rail_v}");
}

#[test]
fn it_says_how_much_it_saw_of_each_and_leaves_out_warming_up_and_loud_passages() {
    let mut dice = Dice(3);
    let truth = Truth { secondary: -0.01, second: 0.1, mains_gain: 0.002, rail_gain: -0.001, crest: 0.0 };
    let fit = fit_of(&truth.record(&mut dice, 40, 14.0), None).unwrap();
    let PairsSeen { all, off, warming_up, unloaded, idle, loaded, .. } = fit.seen;
    assert_eq!(all, 2880);
    assert_eq!(off + warming_up + unloaded + idle + loaded, all);
    // By the way the record was made: 2 × 40 minutes of standby, 2 × 290 of which about 85 % at rest.
    assert!((70..=80).contains(&unloaded), "{:?}", fit.seen);
    assert!((430..=560).contains(&idle) && loaded > 20 && warming_up > 10, "{:?}", fit.seen);
    assert!(fit.residual_v < 1.0, "{}", fit.residual_v);
    assert!(fit.independent_pairs < 500.0, "neighbouring minutes are not independent");
}

#[test]
fn the_owners_word_makes_everything_that_is_on_that_loading() {
    let mut dice = Dice(5);
    let truth = Truth { secondary: 0.01, second: 0.0, mains_gain: 0.0, rail_gain: 0.0, crest: 0.0 };
    let standby: Vec<Pair> = truth
        .record(&mut dice, 300, 10.0)
        .into_iter()
        .filter(|p| p.rail_v > 400.0 || p.rail_v < 1.0)
        .collect();
    let fit = fit_of(&standby, Some(Loading::Unloaded)).unwrap();
    assert!(fit.seen.unloaded > 500 && fit.seen.idle == 0, "{:?}", fit.seen);
    assert!((fit.factors()[0] - 1.01).abs() < 0.006, "{:?}", fit.secondary_v);
}

#[test]
fn too_little_and_what_contradicts_the_supply_are_refused_with_the_figures() {
    let mut dice = Dice(11);
    let truth = Truth { secondary: 0.0, second: 0.0, mains_gain: 0.0, rail_gain: 0.0, crest: 0.0 };
    let record = truth.record(&mut dice, 0, 10.0);
    let off: Vec<Pair> = record.iter().copied().filter(|p| p.rail_v < 1.0).collect();
    let refused = fit_of(&off, None).unwrap_err().to_string();
    assert!(refused.contains("with it off") && refused.contains("the record has 0 of"), "{refused}");
    let halved: Vec<Pair> = record.iter().map(|p| Pair { rail_v: p.rail_v * 0.75, ..*p }).collect();
    assert!(matches!(fit_of(&halved, Some(Loading::Idle)), Err(FitError::Contradiction { .. })));
    let unknown = fit(&soft(), "screens", &record, ACCURACY, None);
    assert!(matches!(unknown, Err(FitError::NoNode { .. })));
}

#[test]
fn it_rests_on_what_moves_the_rail_and_on_nothing_else() {
    let circuit = soft();
    let mut other = circuit.clone();
    other.transformer.taps_v.push(240.0);
    other.filter[0].capacitor.as_mut().unwrap().rated_v = Some(600.0);
    other.heater = None;
    assert_eq!(rests_on(&circuit), rests_on(&other));
    other.transformer.source_ohm.value = 91.0;
    assert_ne!(rests_on(&circuit), rests_on(&other));
}

#[test]
fn the_whole_fit_solves_its_own_model_and_survives_json() {
    let circuit = soft();
    let mut dice = Dice(2);
    let truth = Truth { secondary: 0.012, second: -0.1, mains_gain: 0.0, rail_gain: 0.0, crest: 0.0 };
    let made = fit(&circuit, "reservoir", &truth.record(&mut dice, 40, 12.0), ACCURACY, None).unwrap();
    assert_eq!((made.second, made.told_apart), (Second::SourceResistance, true));
    assert!((made.factors()[0] - 1.012).abs() < made.secondary_v.fitted_u / made.secondary_v.nameplate);
    let json = serde_json::to_string(&made).unwrap();
    let read: Fit = serde_json::from_str(&json).unwrap();
    assert_eq!((read.seen, &read.rests_on, read.told_apart), (made.seen, &made.rests_on, made.told_apart));
    assert!((read.factors()[0] / made.factors()[0] - 1.0).abs() < 1e-12);
    assert!((read.covariance[1][1] / made.covariance[1][1] - 1.0).abs() < 1e-12);
    assert!(made.is_of(&circuit));
    let fitted = made.applied(&circuit);
    assert!((fitted.transformer.secondary_v.value - made.secondary_v.fitted).abs() < 1e-9);
    assert!((fitted.transformer.source_ohm.value - made.second_value.fitted).abs() < 1e-9);
}
