//! The `thornmap` program: everything it does is in the library's `cli` stage.

fn main() -> std::process::ExitCode {
    thornmap::cli::run()
}
