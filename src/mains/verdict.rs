//! Verdicts: whether a stretch of intervals keeps a supply rule, by its clauses.

use serde::Serialize;

use super::interval::{INTERVAL, Interval};
use super::percentile::Distribution;
use super::rules::{Bound, Clause, Flagged, Period, Statistic, SupplyRule};
use crate::quantity::Utc;

/// What can be said of a clause.
#[derive(Clone, Copy, Debug, PartialEq, Eq, Serialize)]
#[serde(rename_all = "snake_case")]
pub enum Verdict {
    /// It was kept, and enough was recorded to say so.
    Held,
    /// It was not kept.
    Broken,
    /// Too little was recorded to say.
    NotEnoughData,
}

impl Verdict {
    /// The words shown to people.
    pub fn words(self) -> &'static str {
        match self {
            Verdict::Held => "held",
            Verdict::Broken => "broken",
            Verdict::NotEnoughData => "not enough data",
        }
    }

    /// The same for programs: true, false, or `None` for not enough data.
    pub fn held(self) -> Option<bool> {
        match self {
            Verdict::Held => Some(true),
            Verdict::Broken => Some(false),
            Verdict::NotEnoughData => None,
        }
    }
}

/// One clause's verdict with the figures that it rests on.
#[derive(Clone, Debug, PartialEq)]
pub struct ClauseVerdict<'a> {
    /// The rule that the clause is of.
    pub rule: &'a SupplyRule,
    /// What is asked.
    pub statistic: Statistic,
    /// The lower limit, V.
    pub low_v: Option<f64>,
    /// The upper limit, V.
    pub high_v: Option<f64>,
    /// How many intervals the stretch has.
    pub expected: usize,
    /// How many of them were judged: there, and not flagged unless the rule counts those.
    pub judged: usize,
    /// How many of the judged lie outside the limits.
    pub outside: usize,
    /// The percentile that is asked for, V; `None` for other statistics, or when nothing was judged.
    pub percentile_v: Option<f64>,
    /// What can be said.
    pub verdict: Verdict,
}

impl ClauseVerdict<'_> {
    /// Share of the judged intervals that lie within the limits, %; `None` when nothing was judged.
    pub fn share_pct(&self) -> Option<f64> {
        (self.judged > 0).then(|| 100.0 * (self.judged - self.outside) as f64 / self.judged as f64)
    }

    /// Share that must lie within, %; `None` for a percentile.
    pub fn required_pct(&self) -> Option<f64> {
        required_pct(self.statistic)
    }
}

impl SupplyRule {
    /// Judges one period, the time from `from` until just before `to`, by the 10-minute `intervals` (those outside
    /// it are left aside), for a supply declared at `declared_v`. One verdict a clause, in their order.
    ///
    /// Held is said only if the stretch is as long as the rule's period and `enough_pct` of its intervals could be
    /// judged. Broken is said then, and also earlier, when so many lie outside that no missing interval could mend it.
    pub fn judge(
        &self,
        declared_v: f64,
        from: Utc,
        to: Utc,
        intervals: &[Interval],
    ) -> Vec<ClauseVerdict<'_>> {
        let step_ms = INTERVAL.as_millis() as i64;
        let first = -(-from.0).div_euclid(step_ms);
        let expected = (-(-to.0).div_euclid(step_ms) - first).max(0) as usize;
        let values: Vec<f64> = intervals
            .iter()
            .filter(|i| (from..to).contains(&i.start))
            .filter(|i| self.flagged == Flagged::Counted || !i.flagged)
            .map(|i| i.rms_v)
            .collect();
        let clauses = self.clauses.iter();
        clauses.map(|clause| self.judge_clause(clause, declared_v, expected, &values)).collect()
    }

    fn judge_clause(
        &self,
        clause: &Clause,
        declared_v: f64,
        expected: usize,
        values: &[f64],
    ) -> ClauseVerdict<'_> {
        let in_volts = |bound: Option<Bound>| bound.map(|b| b.volts(declared_v));
        let (low_v, high_v) = (in_volts(clause.low), in_volts(clause.high));
        let is_within = |v: f64| low_v.is_none_or(|low| v >= low) && high_v.is_none_or(|high| v <= high);
        let outside = values.iter().filter(|v| !is_within(**v)).count();
        let percentile_v = match clause.statistic {
            Statistic::Percentile { pct } => Distribution::new(values.iter().copied()).percentile(pct),
            Statistic::ShareWithin { .. } | Statistic::All => None,
        };
        let is_enough = self.is_enough(expected, values.len());
        let whole = expected.max(self.intervals_in_period());
        let (is_broken, beyond_mending) = match required_pct(clause.statistic) {
            Some(pct) => {
                (outside > allowed_outside(pct, values.len()), outside > allowed_outside(pct, whole))
            }
            None => (percentile_v.is_some_and(|v| !is_within(v)), false),
        };
        let verdict = match (is_enough, is_broken) {
            _ if beyond_mending => Verdict::Broken,
            (false, _) => Verdict::NotEnoughData,
            (true, true) => Verdict::Broken,
            (true, false) => Verdict::Held,
        };
        ClauseVerdict {
            rule: self,
            statistic: clause.statistic,
            low_v,
            high_v,
            expected,
            judged: values.len(),
            outside,
            percentile_v,
            verdict,
        }
    }

    fn intervals_in_period(&self) -> usize {
        (self.period.length().as_secs() / INTERVAL.as_secs()) as usize
    }

    fn is_enough(&self, expected: usize, judged: usize) -> bool {
        expected >= shortest(self.period)
            && judged as f64 * 100.0 >= self.enough_pct * expected as f64
            && judged > 0
    }
}

/// How many of `count` values may lie outside where `required_pct` % must lie within: the whole number at or below
/// their share. Of 1008 that is 50 at 95 % and 10 at 99 %.
fn allowed_outside(required_pct: f64, count: usize) -> usize {
    // The small addition keeps a share that is a whole number from being rounded below it.
    ((100.0 - required_pct) * count as f64 / 100.0 + 1e-9).floor() as usize
}

fn required_pct(statistic: Statistic) -> Option<f64> {
    match statistic {
        Statistic::ShareWithin { required_pct } => Some(required_pct),
        Statistic::All => Some(100.0),
        Statistic::Percentile { .. } => None,
    }
}

/// The fewest intervals of a period in local time: clocks put forward take an hour from a day or a week.
fn shortest(period: Period) -> usize {
    ((period.length().as_secs() - 3600) / INTERVAL.as_secs()) as usize
}

#[cfg(test)]
mod tests {
    use super::*;
    use crate::mains::rules::parse_rules;

    const WEEK: usize = 1008;
    const STEP_MS: i64 = 600_000;

    /// Intervals from time zero: `count` of each voltage, in turn.
    fn run(parts: &[(usize, f64)]) -> Vec<Interval> {
        let values = parts.iter().flat_map(|(count, v)| std::iter::repeat_n(*v, *count));
        values
            .enumerate()
            .map(|(i, v)| Interval {
                start: Utc(STEP_MS * i as i64),
                rms_v: v,
                min_v: v,
                max_v: v,
                count: 600,
                covered: 1.0,
                flagged: false,
            })
            .collect()
    }

    /// Verdicts on a stretch of `expected` intervals.
    fn judge(rule: &str, expected: usize, intervals: &[Interval]) -> Vec<Verdict> {
        let rule = SupplyRule::named(rule).unwrap();
        let to = Utc(STEP_MS * expected as i64);
        let verdicts = rule.judge(rule.declared_v.unwrap(), Utc(0), to, intervals);
        assert!(verdicts.iter().all(|v| v.expected == expected));
        verdicts.iter().map(|v| v.verdict).collect()
    }

    fn week(rule: &str, parts: &[(usize, f64)]) -> Vec<Verdict> {
        let intervals = run(parts);
        assert_eq!(intervals.len(), WEEK);
        judge(rule, WEEK, &intervals)
    }

    use Verdict::{Broken, Held, NotEnoughData};

    #[test]
    fn en_50160_lets_50_of_1008_lie_outside_ten_percent_and_not_51() {
        // Handbook oracle O2 and its counting aid: 50/1008 = 4.96 %, 51/1008 = 5.06 %.
        assert_eq!(week("EN 50160", &[(50, 206.9), (958, 230.0)]), [Held, Held]);
        assert_eq!(week("EN 50160", &[(51, 206.9), (957, 230.0)]), [Broken, Held]);
        // On the limit is within.
        assert_eq!(week("EN 50160", &[(500, 207.0), (508, 253.0)]), [Held, Held]);
    }

    #[test]
    fn one_interval_beyond_en_50160s_outer_limits_breaks_its_second_clause() {
        // O2: one at 253.1 V, one at 195.4 V; 195.5 V is on the limit.
        assert_eq!(week("EN 50160", &[(1, 253.1), (1007, 230.0)]), [Held, Broken]);
        assert_eq!(week("EN 50160", &[(1, 195.4), (1007, 230.0)]), [Held, Broken]);
        assert_eq!(week("EN 50160", &[(1, 195.5), (1007, 230.0)]), [Held, Held]);
    }

    #[test]
    fn as_61000_3_100_lets_10_of_1008_lie_on_each_side_and_not_11() {
        // O3 and the counting aid: 10/1008 = 0.99 %, 11/1008 = 1.09 %, each side by itself.
        assert_eq!(week("AS 61000.3.100", &[(10, 215.9), (10, 253.1), (988, 230.0)]), [Held, Held]);
        assert_eq!(week("AS 61000.3.100", &[(11, 253.1), (997, 230.0)]), [Held, Broken]);
        assert_eq!(week("AS 61000.3.100", &[(11, 215.9), (997, 230.0)]), [Broken, Held]);
        assert_eq!(week("AS 61000.3.100", &[(500, 216.0), (508, 253.0)]), [Held, Held]);
    }

    #[test]
    fn rules_for_every_interval_hold_on_the_limit_and_break_just_outside() {
        // O3, O4 and handbook section 1; the status of each is in the table.
        for (rule, low, high) in [
            ("IEC 60038", 207.0, 253.0),
            ("UK ESQCR", 216.2, 253.0),
            ("AS 60038", 216.2, 253.0),
            ("New Zealand", 216.2, 243.8),
            ("ANSI C84.1 range A service", 114.0, 126.0),
            ("ANSI C84.1 range B service", 110.0, 127.0),
            ("ANSI C84.1 range A utilization", 108.0, 126.0),
            ("ANSI C84.1 range B utilization", 104.0, 127.0),
            ("CSA C235 normal", 110.0, 125.0),
            ("Japan 100 V", 95.0, 107.0),
            ("Japan 200 V", 182.0, 222.0),
            ("India 230 V", 216.2, 243.8),
            ("India 240 V", 225.6, 254.4),
        ] {
            assert_eq!(week(rule, &[(504, low), (504, high)]), [Held], "{rule} on its limits");
            assert_eq!(week(rule, &[(504, low + 0.001), (504, high - 0.001)]), [Held], "{rule} just inside");
            assert_eq!(week(rule, &[(1, low - 0.001), (1007, high)]), [Broken], "{rule} just below");
            assert_eq!(week(rule, &[(1007, low), (1, high + 0.001)]), [Broken], "{rule} just above");
        }
    }

    #[test]
    fn a_percentile_clause_looks_at_the_percentile_alone() {
        // AS 61000.3.100 preferred V50% (from memory): 225 to 244 V.
        let rule = "AS 61000.3.100 preferred";
        assert_eq!(week(rule, &[(503, 260.0), (505, 244.0)]), [Held]);
        assert_eq!(week(rule, &[(505, 244.1), (503, 230.0)]), [Broken]);
        assert_eq!(week(rule, &[(503, 200.0), (505, 225.0)]), [Held]);
        assert_eq!(week(rule, &[(505, 224.9), (503, 230.0)]), [Broken]);
        assert_eq!(judge(rule, WEEK, &run(&[(900, 230.0)])), [NotEnoughData]);
    }

    #[test]
    fn a_week_in_which_the_clocks_change_is_judged_by_its_own_count() {
        // 167 h and 169 h: 1002 and 1014 intervals, of which 5 % are 50.1 and 50.7.
        for count in [1002, 1014] {
            assert_eq!(judge("EN 50160", count, &run(&[(50, 206.9), (count - 50, 230.0)])), [Held, Held]);
            assert_eq!(judge("EN 50160", count, &run(&[(51, 206.9), (count - 51, 230.0)])), [Broken, Held]);
        }
    }

    #[test]
    fn a_small_gap_is_left_out_of_the_count_and_a_large_one_leaves_no_verdict() {
        // 90 % of 1008 is 907.2.
        assert_eq!(judge("EN 50160", WEEK, &run(&[(45, 206.9), (863, 230.0)])), [Held, Held]);
        // 5 % of the 908 that were recorded is 45.4.
        assert_eq!(judge("EN 50160", WEEK, &run(&[(46, 206.9), (862, 230.0)])), [Broken, Held]);
        assert_eq!(judge("EN 50160", WEEK, &run(&[(907, 230.0)])), [NotEnoughData, NotEnoughData]);
        assert_eq!(judge("EN 50160", WEEK, &[]), [NotEnoughData, NotEnoughData]);
        assert_eq!(judge("EN 50160", 6, &run(&[(6, 230.0)])), [NotEnoughData, NotEnoughData]);
        assert_eq!(judge("EN 50160", 0, &[]), [NotEnoughData, NotEnoughData]);
    }

    #[test]
    fn what_no_missing_interval_can_mend_is_broken_however_little_was_recorded() {
        assert_eq!(judge("EN 50160", 6, &run(&[(1, 253.1), (5, 230.0)])), [NotEnoughData, Broken]);
        assert_eq!(judge("EN 50160", 51, &run(&[(51, 206.9)])), [Broken, NotEnoughData]);
        assert_eq!(judge("EN 50160", 50, &run(&[(50, 206.9)])), [NotEnoughData, NotEnoughData]);
    }

    #[test]
    fn flagged_intervals_are_left_out_unless_the_rule_counts_them() {
        let mut intervals = run(&[(1, 260.0), (1007, 230.0)]);
        intervals[0].flagged = true;
        assert_eq!(judge("IEC 60038", WEEK, &intervals), [Held]);
        let mut rule = SupplyRule::named("IEC 60038").unwrap().clone();
        rule.flagged = Flagged::Counted;
        let verdicts = rule.judge(230.0, Utc(0), Utc(STEP_MS * WEEK as i64), &intervals);
        assert_eq!((verdicts[0].verdict, verdicts[0].outside, verdicts[0].judged), (Broken, 1, WEEK));
    }

    #[test]
    fn intervals_outside_the_stretch_are_left_aside_and_the_figures_are_told() {
        let rules = parse_rules(
            "[[rule]]\nname = \"mine\"\nperiod = \"day\"\n\
             [[rule.clause]]\nstatistic = \"share within\"\nrequired_pct = 75\nhigh_v = 240\n",
        )
        .unwrap();
        // Two of 144 high within the stretch, 10 more before it.
        let intervals = run(&[(12, 250.0), (142, 230.0), (20, 250.0)]);
        let from = Utc(10 * STEP_MS - 1);
        let verdict = &rules[0].judge(230.0, from, Utc(from.0 + 144 * STEP_MS), &intervals)[0];
        assert_eq!((verdict.expected, verdict.judged, verdict.outside), (144, 144, 2));
        assert_eq!(verdict.share_pct(), Some(100.0 * 142.0 / 144.0));
        assert_eq!((verdict.required_pct(), verdict.low_v, verdict.high_v), (Some(75.0), None, Some(240.0)));
        assert_eq!((verdict.verdict.held(), verdict.verdict.words()), (Some(true), "held"));
    }
}
