//! The profile for people, and its days as CSV.

use std::fmt::{self, Write};

use super::{DayLines, Profile, RailDay, RailProfile, TurnLine, clock};
use crate::mains::Slot;
use crate::report::CAUTION;

/// Writes the profile: the day by the hour, the highest quarter hours, the rails' time above their limits, the turns.
pub fn profile_text(profile: &Profile, out: &mut impl Write) -> fmt::Result {
    if profile.intervals == 0 {
        writeln!(
            out,
            "No mains is recorded between {} and {}; choose another stretch, or look whether the logger is running.",
            profile.from.to_the_minute(),
            profile.to.to_the_minute()
        )?;
    } else {
        days(profile, out)?;
    }
    tide(profile, out)
}

fn days(profile: &Profile, out: &mut impl Write) -> fmt::Result {
    writeln!(
        out,
        "Mains by time of day, {} to {} ({}), V: mean and the band of 5 to 95 % of the 10-minute values\n",
        profile.from.to_the_minute(),
        profile.to.to_the_minute(),
        profile.time_zone
    )?;
    writeln!(out, "hour   working days             weekends")?;
    let said = |slots: &[Slot], minute: u32| match slots.iter().find(|s| s.minute == minute) {
        Some(s) => format!("{:5.1}  ({:5.1} to {:5.1})", s.mean_v, s.low_v, s.high_v),
        None => "-".to_owned(),
    };
    for minute in (0..24).map(|hour| 60 * hour) {
        let working = said(&profile.by_hour.working, minute);
        let weekend = said(&profile.by_hour.weekend, minute);
        writeln!(out, "{}  {working:23}  {weekend}", clock(minute))?;
    }
    if !profile.highest.is_empty() {
        writeln!(out, "\nThe highest quarter hours of the last seven days:")?;
        for quarter in &profile.highest {
            writeln!(out, "  {}  {:.1} V", quarter.at.to_the_minute(), quarter.rms_v)?;
        }
    }
    profile.rails.iter().try_for_each(|rail| self::rail(rail, out))
}

fn rail(rail: &RailProfile, out: &mut impl Write) -> fmt::Result {
    let every = || rail.day.working.iter().chain(&rail.day.weekend);
    let Some(highest) = every().max_by(|a, b| a.high_v.total_cmp(&b.high_v)) else { return Ok(()) };
    let u = rail.u_v.map_or(String::new(), |u| format!(", each ± {u:.0} V"));
    writeln!(
        out,
        "\nRail {} of {} ({}) would stand highest at about {}: {:.0} V, 5 to 95 % {:.0} to {:.0} V{u}.",
        rail.node,
        rail.amplifier,
        rail.loading.word(),
        highest.at,
        highest.mean_v,
        highest.low_v,
        highest.high_v
    )?;
    let (Some(limit_v), Some(setpoint_v)) = (rail.limit_v, rail.setpoint_v) else { return Ok(()) };
    let recorded: Vec<&RailDay> = rail.days.iter().filter(|d| d.recorded_h > 0.0).collect();
    let sum = |of: fn(&RailDay) -> f64| recorded.iter().map(|d| of(d)).sum::<f64>();
    let share = |hours: f64| 100.0 * hours / sum(|d| d.recorded_h);
    let (limit_h, setpoint_h) = (sum(|d| d.over_limit_h), sum(|d| d.over_setpoint_h));
    writeln!(
        out,
        "  above its limit of {limit_v:.0} V: {:.1} % of the recorded time; above its setpoint of {setpoint_v:.0} V: {:.1} %",
        share(limit_h),
        share(setpoint_h)
    )?;
    let worst = recorded.iter().max_by(|a, b| a.over_limit_h.total_cmp(&b.over_limit_h));
    if let Some(worst) = worst.filter(|d| d.over_limit_h > 0.0) {
        writeln!(out, "  longest on {}: {:.1} h above the limit", worst.date, worst.over_limit_h)?;
    }
    Ok(())
}

fn tide(profile: &Profile, out: &mut impl Write) -> fmt::Result {
    writeln!(out, "\nTide table as of {}", profile.as_of.to_the_minute())?;
    if let Some(why) = &profile.no_tide {
        return writeln!(out, "  None: {why}.");
    }
    if profile.turns.is_empty() {
        writeln!(out, "  No high or low stands out in the hours to come.")?;
    }
    for turn in &profile.turns {
        self::turn(turn, out)?;
    }
    writeln!(out, "  Bands: nine of ten 10-minute values are expected within them; seconds go further.")?;
    writeln!(out, "{CAUTION}")
}

fn turn(turn: &TurnLine, out: &mut impl Write) -> fmt::Result {
    writeln!(
        out,
        "  {:4}  {}  mains {:.1} V ({:.1} to {:.1} V)",
        turn.kind,
        turn.at.to_the_minute(),
        turn.mains_v,
        turn.low_v,
        turn.high_v
    )?;
    for rail in &turn.rails {
        writeln!(
            out,
            "        {}.{} {} would stand at {:.0} V ({:.0} to {:.0} V, each ± {:.0} V)",
            rail.amplifier,
            rail.node,
            rail.loading.word(),
            rail.rail_v,
            rail.low_v,
            rail.high_v,
            rail.u_v
        )?;
    }
    Ok(())
}

/// The days as CSV (RFC 4180): one row for each time of day, kind of day, and mains or rail.
pub fn profile_csv(profile: &Profile, out: impl std::io::Write) -> Result<(), csv::Error> {
    let mut rows = csv::WriterBuilder::new().terminator(csv::Terminator::CRLF).from_writer(out);
    rows.write_record(["of", "loading", "days", "time", "mean_v", "low_v", "high_v", "count"])?;
    let mut write = |of: &str, loading: &str, day: &DayLines| {
        for (kind, slots) in [("working", &day.working), ("weekend", &day.weekend)] {
            for slot in slots {
                let volts = [slot.mean_v, slot.low_v, slot.high_v].map(|v| format!("{v:.3}"));
                let [mean, low, high] = &volts;
                rows.write_record([of, loading, kind, &slot.at, mean, low, high, &slot.count.to_string()])?;
            }
        }
        Ok::<(), csv::Error>(())
    };
    write("mains", "", &profile.mains)?;
    for rail in &profile.rails {
        write(&format!("{}.{}", rail.amplifier, rail.node), rail.loading.word(), &rail.day)?;
    }
    rows.flush()?;
    Ok(())
}
