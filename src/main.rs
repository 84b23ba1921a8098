//! The door of the house: everything behind it is in the library.

use std::process::ExitCode;

fn main() -> ExitCode {
    fallowband::command::main()
}
