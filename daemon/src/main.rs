//! The `tarecup` program. See `tarecup help`.

fn main() -> std::process::ExitCode {
    tarecup::command::main()
}
