//! Supply rules as data: what a supplier must keep to. Ours are in `config/supply-rules.toml`; an owner's `[[rule]]`
//! has the same form.

use std::sync::LazyLock;
use std::time::Duration;

use serde::{Deserialize, Serialize};

/// One rule, checked: it has at least one clause, and every clause at least one limit.
#[derive(Clone, Debug, PartialEq, Deserialize)]
#[serde(try_from = "RawRule")]
pub struct SupplyRule {
    /// The key that a config names it by.
    pub name: String,
    /// The declared voltage that it is for, V; `None` if it is for any.
    pub declared_v: Option<f64>,
    /// The shortest stretch on which "held" can be said.
    pub period: Period,
    /// Share of the period's intervals that must be there before "held" is said, %.
    pub enough_pct: f64,
    /// What becomes of flagged intervals.
    pub flagged: Flagged,
    /// Where the figures come from.
    pub source: String,
    /// How sure we are of them.
    pub status: Status,
    /// What a reader should know besides.
    pub note: Option<String>,
    /// What must hold, each by itself.
    pub clauses: Vec<Clause>,
}

/// One demand of a rule.
#[derive(Clone, Copy, Debug, PartialEq)]
pub struct Clause {
    /// What is asked of the 10-minute means.
    pub statistic: Statistic,
    /// The lower limit; a value on it is within.
    pub low: Option<Bound>,
    /// The upper limit; a value on it is within.
    pub high: Option<Bound>,
}

/// What a clause asks of the 10-minute means.
#[derive(Clone, Copy, Debug, PartialEq)]
pub enum Statistic {
    /// At least `required_pct` % of them lie within the limits.
    ShareWithin {
        /// 0 to 100, %.
        required_pct: f64,
    },
    /// Every one lies within the limits.
    All,
    /// Their percentile `pct` (linear, type 7) lies within the limits.
    Percentile {
        /// 0 to 100.
        pct: f64,
    },
}

impl Statistic {
    /// The word used in the config file and shown to people and programs.
    pub fn word(self) -> &'static str {
        match self {
            Statistic::ShareWithin { .. } => "share within",
            Statistic::All => "all",
            Statistic::Percentile { .. } => "percentile",
        }
    }
}

/// A limit of a clause.
#[derive(Clone, Copy, Debug, PartialEq)]
pub enum Bound {
    /// Deviation from the declared voltage, %.
    Deviation(f64),
    /// V.
    Volts(f64),
}

impl Bound {
    /// The limit where the declared voltage is `declared_v`, V, to the nearest millivolt (so that 230 V −6 % is
    /// 216.2 V and a value of 216.2 V lies on it).
    pub fn volts(self, declared_v: f64) -> f64 {
        match self {
            Bound::Volts(volts) => volts,
            Bound::Deviation(pct) => (declared_v * (1000.0 + 10.0 * pct)).round() / 1000.0,
        }
    }
}

/// The shortest stretch on which a rule can be said to hold.
#[derive(Clone, Copy, Debug, PartialEq, Eq, Serialize, Deserialize)]
#[serde(rename_all = "lowercase")]
pub enum Period {
    /// Seven days.
    Week,
    /// A day.
    Day,
}

impl Period {
    /// Its usual length.
    pub fn length(self) -> Duration {
        match self {
            Period::Week => Duration::from_secs(7 * 24 * 3600),
            Period::Day => Duration::from_secs(24 * 3600),
        }
    }
}

/// What a rule does with flagged intervals.
#[derive(Clone, Copy, Debug, Default, PartialEq, Eq, Serialize, Deserialize)]
pub enum Flagged {
    /// They count as missing.
    #[default]
    #[serde(rename = "left out")]
    LeftOut,
    /// They count like any other.
    #[serde(rename = "counted")]
    Counted,
}

/// How sure a rule's figures are.
#[derive(Clone, Copy, Debug, PartialEq, Eq, Serialize, Deserialize)]
pub enum Status {
    /// Read in the source itself.
    #[serde(rename = "confirmed")]
    Confirmed,
    /// Read in a text that quotes the source.
    #[serde(rename = "secondary")]
    Secondary,
    /// Not looked up.
    #[serde(rename = "from memory")]
    FromMemory,
    /// An owner's own rule, which needs no source.
    #[serde(rename = "own")]
    Own,
}

impl SupplyRule {
    /// Every rule that comes with the program, in the order of the file.
    pub fn table() -> &'static [SupplyRule] {
        &TABLE
    }

    /// The rule of the table with that name, small and capital letters alike.
    pub fn named(name: &str) -> Option<&'static SupplyRule> {
        SupplyRule::table().iter().find(|rule| rule.name.eq_ignore_ascii_case(name.trim()))
    }

    /// Whether the rule is meant for a supply of `declared_v`.
    pub fn is_for(&self, declared_v: f64) -> bool {
        self.declared_v.is_none_or(|for_v| (for_v - declared_v).abs() < 0.5)
    }
}

static TABLE: LazyLock<Vec<SupplyRule>> = LazyLock::new(|| {
    parse_rules(include_str!("../../config/supply-rules.toml"))
        .expect("the table of rules is checked by a test")
});

/// The `[[rule]]`s of a TOML text.
///
/// # Errors
/// What the first bad rule lacks, with its line, as `toml` says it; see [`RuleError`].
pub fn parse_rules(text: &str) -> Result<Vec<SupplyRule>, toml::de::Error> {
    #[derive(Deserialize)]
    #[serde(deny_unknown_fields)]
    struct File {
        #[serde(default)]
        rule: Vec<SupplyRule>,
    }
    toml::from_str::<File>(text).map(|file| file.rule)
}

/// Why a `[[rule]]` was refused; the owner who wrote it can put it right.
#[derive(Clone, Debug, PartialEq, thiserror::Error)]
pub enum RuleError {
    /// It has no clause, so nothing can be judged.
    #[error("rule \"{rule}\" has no clause: add a [[rule.clause]] with a statistic and a limit")]
    NoClause {
        /// The rule's name.
        rule: String,
    },
    /// A clause has neither a lower nor an upper limit.
    #[error(
        "a clause of rule \"{rule}\" has no limit: give low_v or high_v in volts, or low_pct or high_pct in % of the declared voltage"
    )]
    NoLimit {
        /// The rule's name.
        rule: String,
    },
    /// A limit is given both ways.
    #[error("a clause of rule \"{rule}\" gives {side}_v and {side}_pct: keep one of them")]
    LimitTwice {
        /// The rule's name.
        rule: String,
        /// `low` or `high`.
        side: &'static str,
    },
    /// No value can satisfy the limits.
    #[error("a clause of rule \"{rule}\" has its lower limit above its upper limit: exchange them")]
    LimitsCrossed {
        /// The rule's name.
        rule: String,
    },
    /// A figure that the statistic needs is missing, or one is given that it has no use for.
    #[error("a clause of rule \"{rule}\" with statistic \"{statistic}\" must {needs}")]
    WrongFigure {
        /// The rule's name.
        rule: String,
        /// The statistic's word.
        statistic: &'static str,
        /// What would be right.
        needs: &'static str,
    },
    /// A percentage lies outside 0 to 100, or a voltage isn't above zero.
    #[error("rule \"{rule}\": {key} = {value} makes no sense: {needs}")]
    OutOfRange {
        /// The rule's name.
        rule: String,
        /// The key.
        key: &'static str,
        /// What was given.
        value: f64,
        /// What would be right.
        needs: &'static str,
    },
}

/// A rule as it is written.
#[derive(Deserialize)]
#[serde(deny_unknown_fields)]
struct RawRule {
    name: String,
    declared_v: Option<f64>,
    period: Period,
    #[serde(default = "usual_enough_pct")]
    enough_pct: f64,
    #[serde(default)]
    flagged: Flagged,
    #[serde(default)]
    source: String,
    #[serde(default = "own_status")]
    status: Status,
    note: Option<String>,
    #[serde(default)]
    clause: Vec<RawClause>,
}

fn usual_enough_pct() -> f64 {
    90.0
}

fn own_status() -> Status {
    Status::Own
}

/// A clause as it is written.
#[derive(Deserialize)]
#[serde(deny_unknown_fields)]
struct RawClause {
    statistic: StatisticWord,
    required_pct: Option<f64>,
    pct: Option<f64>,
    low_pct: Option<f64>,
    high_pct: Option<f64>,
    low_v: Option<f64>,
    high_v: Option<f64>,
}

#[derive(Clone, Copy, Deserialize)]
enum StatisticWord {
    #[serde(rename = "share within")]
    ShareWithin,
    #[serde(rename = "all")]
    All,
    #[serde(rename = "percentile")]
    Percentile,
}

impl TryFrom<RawRule> for SupplyRule {
    type Error = RuleError;

    fn try_from(raw: RawRule) -> Result<Self, RuleError> {
        let rule = &raw.name;
        in_percent(rule, "enough_pct", raw.enough_pct)?;
        if let Some(declared_v) = raw.declared_v {
            above_zero(rule, "declared_v", declared_v)?;
        }
        if raw.clause.is_empty() {
            return Err(RuleError::NoClause { rule: rule.clone() });
        }
        let clauses = raw.clause.iter().map(|c| c.check(rule)).collect::<Result<_, _>>()?;
        Ok(SupplyRule {
            name: raw.name,
            declared_v: raw.declared_v,
            period: raw.period,
            enough_pct: raw.enough_pct,
            flagged: raw.flagged,
            source: raw.source,
            status: raw.status,
            note: raw.note,
            clauses,
        })
    }
}

impl RawClause {
    fn check(&self, rule: &str) -> Result<Clause, RuleError> {
        let low = bound(rule, "low", self.low_v, self.low_pct)?;
        let high = bound(rule, "high", self.high_v, self.high_pct)?;
        match (low, high) {
            (None, None) => return Err(RuleError::NoLimit { rule: rule.to_owned() }),
            (Some(Bound::Volts(l)), Some(Bound::Volts(h))) if l > h => {
                return Err(RuleError::LimitsCrossed { rule: rule.to_owned() });
            }
            (Some(Bound::Deviation(l)), Some(Bound::Deviation(h))) if l > h => {
                return Err(RuleError::LimitsCrossed { rule: rule.to_owned() });
            }
            _ => {}
        }
        Ok(Clause { statistic: self.statistic(rule)?, low, high })
    }

    fn statistic(&self, rule: &str) -> Result<Statistic, RuleError> {
        let wrong =
            |statistic, needs| Err(RuleError::WrongFigure { rule: rule.to_owned(), statistic, needs });
        match (self.statistic, self.required_pct, self.pct) {
            (StatisticWord::ShareWithin, Some(required_pct), None) => {
                in_percent(rule, "required_pct", required_pct)?;
                Ok(Statistic::ShareWithin { required_pct })
            }
            (StatisticWord::ShareWithin, _, _) => {
                wrong("share within", "give required_pct, the share asked for, and no pct")
            }
            (StatisticWord::Percentile, None, Some(pct)) => {
                in_percent(rule, "pct", pct)?;
                Ok(Statistic::Percentile { pct })
            }
            (StatisticWord::Percentile, _, _) => {
                wrong("percentile", "give pct, which percentile it is, and no required_pct")
            }
            (StatisticWord::All, None, None) => Ok(Statistic::All),
            (StatisticWord::All, _, _) => wrong("all", "give neither required_pct nor pct"),
        }
    }
}

fn bound(
    rule: &str,
    side: &'static str,
    volts: Option<f64>,
    pct: Option<f64>,
) -> Result<Option<Bound>, RuleError> {
    let key = if side == "low" { "low_v" } else { "high_v" };
    match (volts, pct) {
        (Some(_), Some(_)) => Err(RuleError::LimitTwice { rule: rule.to_owned(), side }),
        (Some(volts), None) => above_zero(rule, key, volts).map(|()| Some(Bound::Volts(volts))),
        (None, Some(pct)) if pct.is_finite() && pct > -100.0 => Ok(Some(Bound::Deviation(pct))),
        (None, Some(value)) => Err(RuleError::OutOfRange {
            rule: rule.to_owned(),
            key: if side == "low" { "low_pct" } else { "high_pct" },
            value,
            needs: "a deviation in %, above -100, is right, like -10 or 6",
        }),
        (None, None) => Ok(None),
    }
}

fn in_percent(rule: &str, key: &'static str, value: f64) -> Result<(), RuleError> {
    if (0.0..=100.0).contains(&value) {
        return Ok(());
    }
    Err(RuleError::OutOfRange {
        rule: rule.to_owned(),
        key,
        value,
        needs: "a share from 0 to 100 % is right",
    })
}

fn above_zero(rule: &str, key: &'static str, value: f64) -> Result<(), RuleError> {
    if value.is_finite() && value > 0.0 {
        return Ok(());
    }
    Err(RuleError::OutOfRange { rule: rule.to_owned(), key, value, needs: "volts above zero are right" })
}

#[cfg(test)]
mod tests {
    use super::*;

    /// Limits of a rule's clause in volts at the voltage it is for.
    fn limits(name: &str, clause: usize) -> (Option<f64>, Option<f64>) {
        let rule = SupplyRule::named(name).unwrap_or_else(|| panic!("no rule {name}"));
        let at = rule.declared_v.unwrap();
        let clause = rule.clauses[clause];
        (clause.low.map(|b| b.volts(at)), clause.high.map(|b| b.volts(at)))
    }

    #[test]
    fn the_tables_limits_in_volts_are_those_of_the_standards() {
        // Handbook section 1 and oracles O2, O3, O4; each row's own status is in the file.
        for (name, clause, low, high) in [
            ("EN 50160", 0, 207.0, 253.0),
            ("EN 50160", 1, 195.5, 253.0),
            ("IEC 60038", 0, 207.0, 253.0),
            ("UK ESQCR", 0, 216.2, 253.0),
            ("AS 60038", 0, 216.2, 253.0),
            ("New Zealand", 0, 216.2, 243.8),
            ("ANSI C84.1 range A service", 0, 114.0, 126.0),
            ("ANSI C84.1 range B service", 0, 110.0, 127.0),
            ("Japan 100 V", 0, 95.0, 107.0),
            ("Japan 200 V", 0, 182.0, 222.0),
            ("India 240 V", 0, 225.6, 254.4),
            ("India 230 V", 0, 216.2, 243.8),
        ] {
            assert_eq!(limits(name, clause), (Some(low), Some(high)), "{name}");
        }
        assert_eq!(limits("AS 61000.3.100", 0), (Some(216.0), None));
        assert_eq!(limits("AS 61000.3.100", 1), (None, Some(253.0)));
    }

    #[test]
    fn the_table_holds_at_least_eight_rules_with_names_of_their_own_and_sources() {
        let table = SupplyRule::table();
        assert!(table.len() >= 8);
        for (i, rule) in table.iter().enumerate() {
            assert!(!rule.source.is_empty(), "{}", rule.name);
            assert_ne!(rule.status, Status::Own, "{}", rule.name);
            assert!(
                table[..i].iter().all(|other| !other.name.eq_ignore_ascii_case(&rule.name)),
                "{}",
                rule.name
            );
        }
        assert!(SupplyRule::named("en 50160").is_some_and(|rule| rule.is_for(230.0) && !rule.is_for(240.0)));
        assert_eq!(SupplyRule::named("EN 50161"), None);
    }

    #[test]
    fn an_owners_rule_has_the_same_form() {
        let rules = parse_rules(
            "[[rule]]\nname = \"mine\"\nperiod = \"day\"\nflagged = \"counted\"\n\
             [[rule.clause]]\nstatistic = \"percentile\"\npct = 99\nhigh_pct = 4\n",
        )
        .unwrap();
        assert_eq!(rules[0].status, Status::Own);
        assert_eq!((rules[0].enough_pct, rules[0].period), (90.0, Period::Day));
        assert_eq!(rules[0].clauses[0].high.map(|b| b.volts(230.0)), Some(239.2));
        assert!(rules[0].is_for(117.0));
    }

    #[test]
    fn a_bad_rule_is_refused_and_the_message_says_what_would_be_right() {
        let head = "[[rule]]\nname = \"mine\"\nperiod = \"week\"\n";
        let clause = "[[rule.clause]]\n";
        for (rest, says) in [
            (String::new(), "add a [[rule.clause]]"),
            (format!("{clause}statistic = \"all\"\n"), "has no limit: give low_v or high_v"),
            (
                format!("{clause}statistic = \"all\"\nlow_v = 207\nlow_pct = -10\n"),
                "low_v and low_pct: keep one",
            ),
            (format!("{clause}statistic = \"all\"\nlow_v = 253\nhigh_v = 207\n"), "exchange them"),
            (
                format!("{clause}statistic = \"all\"\nlow_v = 253\npct = 5\n"),
                "give neither required_pct nor pct",
            ),
            (format!("{clause}statistic = \"share within\"\nlow_v = 207\n"), "give required_pct"),
            (format!("{clause}statistic = \"percentile\"\nlow_v = 207\n"), "give pct"),
            (
                format!("{clause}statistic = \"percentile\"\npct = 101\nlow_v = 207\n"),
                "pct = 101 makes no sense",
            ),
            (format!("{clause}statistic = \"all\"\nlow_v = -207\n"), "low_v = -207 makes no sense"),
            (format!("{clause}statistic = \"all\"\nlow_pct = -100\n"), "low_pct = -100 makes no sense"),
            (format!("{clause}statistic = \"most\"\nlow_v = 207\n"), "unknown variant `most`"),
            (format!("{clause}statistic = \"all\"\nlow = 207\n"), "unknown field `low`"),
        ] {
            let error = parse_rules(&format!("{head}{rest}")).unwrap_err().to_string();
            assert!(error.contains(says), "{rest}\ngot: {error}\nexpected: {says}");
        }
    }
}
