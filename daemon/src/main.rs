//! The `tarecup` program. See `tarecup help`.
#![forbid(unsafe_code)]

fn main() -> std::process::ExitCode {
    tarecup::command::main()
}
