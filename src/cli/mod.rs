//! The command line: one file a command, each short: read arguments, call, print.
//!
//! Results go to standard output, everything else to standard error; a failure exits non-zero with one sentence that
//! says what to do.

mod alarm;
mod check;
mod curve;
mod demo;
mod export;
mod fit;
mod import;
mod listen;
mod now;
mod ports;
mod profile;
mod run;
mod simulate;
mod site;
mod stop;
mod stretch;
mod week;

use std::io::{self, Write};
use std::path::PathBuf;
use std::process::ExitCode;

use clap::{Parser, Subcommand, ValueEnum};

/// Watches the household mains, projects a valve amplifier's rails from it, and warns before they pass their limit.
///
/// It warns; it is no protective device.
#[derive(Debug, Parser)]
#[command(name = "railtide", version, arg_required_else_help = true)]
pub struct Arguments {
    /// The config file; without it $RAILTIDE_CONFIG, then ./railtide.toml, then the user's and the system's
    /// configuration folder.
    #[arg(long, global = true, env = "RAILTIDE_CONFIG", value_name = "FILE")]
    config: Option<PathBuf>,
    #[command(subcommand)]
    command: Command,
}

#[derive(Debug, Subcommand)]
enum Command {
    /// Shows the whole job with no hardware: a made-up hall, a live simulated logger, an evening peak, its alarm.
    Demo(demo::Demo),
    /// Runs the daemon: reads the loggers, keeps the record, warns.
    Run,
    /// Reads the config and says back in plain words what it understood, or what is wrong and where.
    Check(check::Check),
    /// Lists the serial ports of this machine and what is known of the device behind each.
    Ports(ports::Ports),
    /// Watches a logger decode, storing nothing.
    Listen(listen::Listen),
    /// Says where mains and rails stand, the headroom, and how old the figures are.
    Now(now::Now),
    /// Mains to rails for each loading, solved from the supply's circuit.
    Curve(curve::Curve),
    /// Fits the supply's model to recorded pairs of mains and rail.
    Fit(fit::FitCommand),
    /// Lists alarms, or acknowledges one.
    Alarm(alarm::Alarm),
    /// Shows the household's day by time of day, time above the limits, and the tide table of the hours to come.
    Profile(profile::Profile),
    /// Gives a week of evidence against the supply rules and the amplifiers' limits.
    Week(week::WeekCommand),
    /// Gives readings, intervals or the alarms' journal out, or a consistent copy of the record.
    Export(export::Export),
    /// Takes another recorder's readings into the record.
    Import(import::Import),
    /// Runs the simulated logger alone, on a pseudo-terminal.
    Simulate(simulate::Simulate),
}

/// How a result is printed.
#[derive(Clone, Copy, Debug, Default, PartialEq, Eq, ValueEnum)]
enum Format {
    /// For people.
    #[default]
    Text,
    /// For programs: SI units in the keys, RFC 3339 times.
    Json,
}

/// Parses the arguments, does the work, and maps the result: 0 done, 1 failed with a sentence on standard error,
/// 2 (by clap) arguments that make no sense.
pub fn main() -> ExitCode {
    let arguments = Arguments::parse();
    let config = arguments.config;
    let result = match arguments.command {
        Command::Demo(demo) => demo.run(),
        Command::Run => run::run(config),
        Command::Check(check) => check.run(config),
        Command::Ports(ports) => ports.run(),
        Command::Listen(listen) => listen.run(config),
        Command::Now(now) => now.run(config),
        Command::Curve(curve) => curve.run(config),
        Command::Fit(fit) => fit.run(config),
        Command::Alarm(alarm) => alarm.run(config),
        Command::Profile(profile) => profile.run(config),
        Command::Week(week) => week.run(config),
        Command::Export(export) => export.run(config),
        Command::Import(import) => import.run(config),
        Command::Simulate(simulate) => simulate.run(),
    };
    match result {
        Ok(()) => ExitCode::SUCCESS,
        // Whoever reads our output had enough (`| head`): nothing failed.
        Err(error) if is_broken_pipe(&error) => ExitCode::SUCCESS,
        Err(error) => {
            let _ = writeln!(io::stderr(), "railtide: {error:#}");
            ExitCode::FAILURE
        }
    }
}

fn is_broken_pipe(error: &anyhow::Error) -> bool {
    error
        .chain()
        .any(|cause| cause.downcast_ref::<io::Error>().is_some_and(|e| e.kind() == io::ErrorKind::BrokenPipe))
}

/// Prints `text` as it is.
fn print(text: &str) -> anyhow::Result<()> {
    let mut out = io::stdout().lock();
    out.write_all(text.as_bytes())?;
    Ok(out.flush()?)
}

/// Says something beside the result, on standard error.
fn remark(line: &str) -> anyhow::Result<()> {
    Ok(writeln!(io::stderr().lock(), "{line}")?)
}

/// Prints `value` as JSON, indented: programs don't mind, people who look are glad.
fn print_json(value: &impl serde::Serialize) -> anyhow::Result<()> {
    print(&(serde_json::to_string_pretty(value)? + "\n"))
}

/// A runtime of two workers: the walk has the main thread, notices and pages the others.
fn runtime() -> anyhow::Result<tokio::runtime::Runtime> {
    Ok(tokio::runtime::Builder::new_multi_thread().worker_threads(2).enable_all().build()?)
}

/// Logs go to standard error, without times when a journal adds its own. `RAILTIDE_LOG` sets what is logged
/// (`info` by default).
fn start_logging() {
    use std::io::IsTerminal;
    let filter = tracing_subscriber::EnvFilter::try_from_env("RAILTIDE_LOG")
        .unwrap_or_else(|_| tracing_subscriber::EnvFilter::new("info"));
    let layer = tracing_subscriber::fmt()
        .with_env_filter(filter)
        .with_writer(io::stderr)
        .with_ansi(io::stderr().is_terminal())
        .with_target(false);
    // A second call (from a test in one process) keeps the first.
    let _ = if std::env::var_os("JOURNAL_STREAM").is_some() {
        layer.without_time().try_init()
    } else {
        layer.try_init()
    };
}
