//! The `railtide` command: reads its arguments, calls the library, maps the result to an exit code.

use std::process::ExitCode;

fn main() -> ExitCode {
    railtide::cli::main()
}
